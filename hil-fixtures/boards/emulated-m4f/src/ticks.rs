//! A coarse clock that only bounds waiting: [`PER_SECOND`] ticks a second from the processor's own timer.
//!
//! The program's time is not this clock but the rig's (see `tunnel.rs`): the plant may run faster or slower than the
//! wall. Here a tick is a tick of the emulator's or the board's wall clock, good for "the other end has not answered
//! for two seconds" and for nothing finer.

use core::sync::atomic::{AtomicU32, Ordering};

use cortex_m::peripheral::{SYST, syst::SystClkSource};

/// Ticks in a second.
pub(crate) const PER_SECOND: u32 = 100;
/// Core clock of the board in hertz.
const CLOCK_HZ: u32 = 25_000_000;

static TICKS: AtomicU32 = AtomicU32::new(0);

/// Starts the clock.
pub(crate) fn start(mut timer: SYST) {
    timer.set_clock_source(SystClkSource::Core);
    timer.set_reload(CLOCK_HZ / PER_SECOND - 1);
    timer.clear_current();
    timer.enable_counter();
    timer.enable_interrupt();
}

/// Ticks since the start; wraps after 497 days, so only differences taken with `wrapping_sub` mean something.
pub(crate) fn now() -> u32 {
    TICKS.load(Ordering::Relaxed)
}

/// Load and store instead of an atomic addition: one writer, and the cores without compare-and-swap can have it too.
#[cortex_m_rt::exception]
fn SysTick() {
    TICKS.store(TICKS.load(Ordering::Relaxed).wrapping_add(1), Ordering::Relaxed);
}
