//! Two serial ports of the board (Arm CMSDK APB UART), driven by interrupts through byte queues.
//!
//! Interrupts, because the receiver is one byte deep: at 115,200 Bd the program would have to look every 87 us.
//! Queues, because the program must never wait for the line: [`Uart::try_write`] takes what fits and says how
//! much, and a byte that arrives at a full queue is dropped: the frame's checksum then fails and the host repeats what
//! it still wants. The baud divider is set for [`BAUD`], but the emulator does not enforce a rate.
//!
//! This is the only file of the image that touches registers. Register layout, interrupt numbers and the 25 MHz
//! clock: Arm application note AN386 and the CMSDK technical reference (from memory), checked by running.

#![allow(unsafe_code)]

use core::cell::RefCell;

use cortex_m::{peripheral::NVIC, singleton};
use critical_section::Mutex;
use heapless::spsc::{Consumer, Producer, Queue};
use offcurve_core::board::Line;

/// Rate both ports are set to, in baud.
pub(crate) const BAUD: u32 = 115_200;
/// Clock of the ports, in hertz.
const CLOCK_HZ: u32 = 25_000_000;

/// Bytes a receive queue holds, plus one (a ring keeps one place free).
const RECEIVE: usize = 257;
/// Bytes a send queue holds, plus one: room for several of the longest frames.
const SEND: usize = 1025;

#[derive(Clone, Copy)]
enum Register {
    Data = 0x00,
    State = 0x04,
    Control = 0x08,
    /// Read: pending interrupts. Write: 1 clears.
    Interrupt = 0x0c,
    BaudDivider = 0x10,
}

const STATE_SEND_FULL: u32 = 1;
const STATE_RECEIVE_FULL: u32 = 1 << 1;
const INTERRUPT_SEND: u32 = 1;
const INTERRUPT_RECEIVE: u32 = 1 << 1;
/// Send and receive enabled (bits 0, 1), their interrupts enabled (bits 2, 3).
const CONTROL_ON: u32 = 0b1111;

/// One of the two ports this image uses.
#[derive(Clone, Copy, PartialEq)]
enum Port {
    Line,
    Tunnel,
}

impl Port {
    fn address(self, register: Register) -> *mut u32 {
        let base: usize = match self {
            Port::Line => 0x4000_4000,
            Port::Tunnel => 0x4000_5000,
        };
        (base | register as usize) as *mut u32
    }

    fn read(self, register: Register) -> u32 {
        // SAFETY: the address is one of the ten registers above (two ports of five), aligned, always mapped on this board, and no Rust
        // object lives there. Reading Data takes the byte, which is what every caller wants.
        unsafe { self.address(register).read_volatile() }
    }

    fn write(self, register: Register, value: u32) {
        // SAFETY: as for `read`. No register of this peripheral makes it touch memory by itself.
        unsafe { self.address(register).write_volatile(value) }
    }

    fn interrupts(self) -> [Irq; 2] {
        match self {
            Port::Line => [Irq(0), Irq(1)],
            Port::Tunnel => [Irq(2), Irq(3)],
        }
    }

    fn shared(self) -> &'static Mutex<RefCell<Option<Interrupted>>> {
        match self {
            Port::Line => &LINE,
            Port::Tunnel => &TUNNEL,
        }
    }
}

/// Number of an interrupt line of this board: 0 and 1 are receive and send of the line, 2 and 3 of the tunnel.
#[derive(Clone, Copy)]
struct Irq(u16);

// SAFETY: the numbers come from `Port::interrupts` alone, are constant and have an entry in `__INTERRUPTS`.
unsafe impl cortex_m::interrupt::InterruptNumber for Irq {
    fn number(self) -> u16 {
        self.0
    }
}

/// The ends of a port's queues that belong to its interrupt handlers.
struct Interrupted {
    received: Producer<'static, u8>,
    to_send: Consumer<'static, u8>,
}

static LINE: Mutex<RefCell<Option<Interrupted>>> = Mutex::new(RefCell::new(None));
static TUNNEL: Mutex<RefCell<Option<Interrupted>>> = Mutex::new(RefCell::new(None));

/// Runs `action` on the handlers' ends. Nobody holds them across an interrupt, so the borrow never fails; if it did,
/// the interrupt would be served later instead of a panic now.
fn with(port: Port, action: impl FnOnce(&mut Interrupted)) {
    critical_section::with(|token| {
        if let Ok(mut shared) = port.shared().borrow(token).try_borrow_mut() {
            shared.as_mut().map(action);
        }
    });
}

fn on_receive(port: Port) {
    with(port, |ends| {
        port.write(Register::Interrupt, INTERRUPT_RECEIVE);
        if port.read(Register::State) & STATE_RECEIVE_FULL != 0 {
            let [byte, ..] = port.read(Register::Data).to_le_bytes();
            // A full queue drops the byte; see the head of this file.
            let _ = ends.received.enqueue(byte);
        }
    });
}

fn on_send(port: Port) {
    with(port, |ends| {
        port.write(Register::Interrupt, INTERRUPT_SEND);
        while port.read(Register::State) & STATE_SEND_FULL == 0 {
            let Some(byte) = ends.to_send.dequeue() else { break };
            port.write(Register::Data, u32::from(byte));
        }
    });
}

extern "C" fn line_receive() {
    on_receive(Port::Line);
}
extern "C" fn line_send() {
    on_send(Port::Line);
}
extern "C" fn tunnel_receive() {
    on_receive(Port::Tunnel);
}
extern "C" fn tunnel_send() {
    on_send(Port::Tunnel);
}

/// The board's part of the vector table; cortex-m-rt places it behind the processor's own exceptions.
/// Interrupts above 3 stay disabled, so the table may end there.
// SAFETY: the name and section are those cortex-m-rt's link.x asks for, and the entries are functions of the type
// the processor calls.
#[unsafe(no_mangle)]
#[unsafe(link_section = ".vector_table.interrupts")]
#[used]
static __INTERRUPTS: [extern "C" fn(); 4] = [line_receive, line_send, tunnel_receive, tunnel_send];

/// The program's side of one port. Neither call waits.
pub(crate) struct Uart {
    port: Port,
    received: Consumer<'static, u8>,
    to_send: Producer<'static, u8>,
}

impl Uart {
    /// The port that carries the controller's line. `None` the second time: there is one.
    pub(crate) fn line() -> Option<Self> {
        let received = singleton!(: Queue<u8, RECEIVE> = Queue::new())?;
        let to_send = singleton!(: Queue<u8, SEND> = Queue::new())?;
        Some(Self::start(Port::Line, received.split(), to_send.split()))
    }

    /// The port that leads to the rig. `None` the second time: there is one.
    pub(crate) fn tunnel() -> Option<Self> {
        let received = singleton!(: Queue<u8, RECEIVE> = Queue::new())?;
        let to_send = singleton!(: Queue<u8, RECEIVE> = Queue::new())?;
        Some(Self::start(Port::Tunnel, received.split(), to_send.split()))
    }

    fn start(
        port: Port,
        (received_in, received_out): (Producer<'static, u8>, Consumer<'static, u8>),
        (send_in, send_out): (Producer<'static, u8>, Consumer<'static, u8>),
    ) -> Self {
        critical_section::with(|token| {
            if let Ok(mut shared) = port.shared().borrow(token).try_borrow_mut() {
                *shared = Some(Interrupted { received: received_in, to_send: send_out });
            }
        });
        port.write(Register::BaudDivider, CLOCK_HZ / BAUD);
        port.write(Register::Control, CONTROL_ON);
        for irq in port.interrupts() {
            // SAFETY: the handlers are in the table and their queues are in place, so the interrupt may come now.
            // No critical section is built on masking single interrupts that this could break.
            unsafe { NVIC::unmask(irq) };
        }
        Self { port, received: received_out, to_send: send_in }
    }

    /// Takes the next received byte, if there is one.
    pub(crate) fn read_byte(&mut self) -> Option<u8> {
        self.received.dequeue()
    }

    /// Sleeps until some interrupt comes, unless a received byte is waiting already.
    pub(crate) fn sleep_until_interrupt(&self) {
        // With interrupts held back, a byte that arrives between the look and the sleep still ends the sleep.
        critical_section::with(|_| {
            if self.received.is_empty() {
                cortex_m::asm::wfi();
            }
        });
    }
}

impl Line for Uart {
    fn try_write(&mut self, bytes: &[u8]) -> usize {
        let mut taken: usize = 0;
        for &byte in bytes {
            if self.to_send.enqueue(byte).is_err() {
                break;
            }
            taken = taken.saturating_add(1);
        }
        if taken > 0 {
            // The send interrupt is raised when the port finishes a byte; an idle port needs this push to begin.
            let [_, send] = self.port.interrupts();
            NVIC::pend(send);
        }
        taken
    }

    fn try_read(&mut self, into: &mut [u8]) -> usize {
        let mut count: usize = 0;
        for place in into {
            let Some(byte) = self.received.dequeue() else { break };
            *place = byte;
            count = count.saturating_add(1);
        }
        count
    }
}
