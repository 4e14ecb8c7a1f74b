//! The proof that this image cannot panic: the panic handler calls a function that does not exist.
//!
//! If the optimiser can show that no panic is reachable, it removes the handler and the image links. If one is
//! reachable, the linker stops with `undefined symbol: ERROR_this_image_contains_a_reachable_panic`. So a linked
//! image is its own proof; there is no separate check that could be forgotten.
//!
//! Where it stops being true: it needs link-time optimisation and one codegen unit (without them there are false
//! alarms), and it says nothing of endless loops, stack overflow or bus faults. A fault ends in [`hard_fault`].

#![allow(unsafe_code)]

use core::panic::PanicInfo;

unsafe extern "C" {
    #[link_name = "ERROR_this_image_contains_a_reachable_panic"]
    fn reachable_panic() -> !;
}

#[panic_handler]
fn panic(_: &PanicInfo<'_>) -> ! {
    // SAFETY: never executed. The symbol is undefined on purpose, so an image holding this call does not link.
    unsafe { reachable_panic() }
}

/// A bus, usage or memory fault: stop here, with the debugger told if one is attached.
///
/// The image must not restart itself silently (a restart is a new boot number, and the cause would be lost) and
/// must not call the emulator's exit, which does not exist on silicon. Under QEMU without a debugger the breakpoint
/// itself faults, and a fault inside a fault ends QEMU with "Lockup": loud, and noticed by whoever started it.
#[cortex_m_rt::exception]
unsafe fn HardFault(_frame: &cortex_m_rt::ExceptionFrame) -> ! {
    loop {
        cortex_m::asm::bkpt();
    }
}
