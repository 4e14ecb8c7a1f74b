//! The controller program on an emulated Cortex-M4F board (QEMU's mps2-an386).
//!
//! This file is the board: it owns interrupts and time, and calls the board-independent
//! [`Controller`](offcurve_controller::Controller) in the order its documentation asks for. The line to the host is the
//! first serial port; the converter and the speed input live in the rig, behind the second (see `tunnel.rs`).
//!
//! Time is the rig's: it comes with every capture of the speed input, in ticks of 1 MHz, and milliseconds since boot are
//! `(sum of tick differences) / 1000`. So the image runs unchanged in real time, in fast time, and as fast as it goes.
//!
//! Where it stops being true: while the rig does not answer, time stands still and no records are made; that is silence
//! on the line, which the host notices. And nothing here is known about execution time: the emulator counts no cycles.
#![no_std]
#![no_main]

mod panic;
mod slots;
mod ticks;
mod tunnel;
mod uart;

use offcurve_controller::{Controller, Converter};
use offcurve_core::board::{Direction, PulseSnapshot, RunState};

use crate::{
    tunnel::{Capture, Tunnel, TunnelledSpi},
    uart::Uart,
};

/// Name in the hello of a controller that has none stored.
const UNNAMED: &str = "emulated-m4f";
/// Records and hellos that wait for a slow line: at 1 Hz a minute of records.
const OUTBOX: usize = 64;
/// Loop current that gives the highest count: the rig's shunt and reference.
const MILLIAMPERES_AT_FULL_SCALE: f32 = 24.0;
/// Ticks of the capture timer in a second.
const CAPTURE_TICKS_PER_SECOND: u32 = 1_000_000;
/// Pause between two turns while there is no profile, in coarse ticks: 0.1 s.
const IDLE_TICKS: u32 = ticks::PER_SECOND / 10;

#[cortex_m_rt::entry]
fn main() -> ! {
    // Each of these exists once and is taken here once, so the pattern always matches.
    if let (Some(core), Some(line), Some(second)) = (cortex_m::Peripherals::take(), Uart::line(), Uart::tunnel()) {
        ticks::start(core.SYST);
        run(line, second);
    }
    loop {
        cortex_m::asm::wfi();
    }
}

fn run(mut line: Uart, second: Uart) {
    let tunnel = Tunnel::new(second);
    let mut converter = Converter::new(TunnelledSpi(&tunnel), MILLIAMPERES_AT_FULL_SCALE);
    // Static, so that the linker counts it and the stack's depth is that of the calls. Boot number 0 says "not stored
    // here". The name is taken once, so it is there to be taken.
    let Some(controller) = cortex_m::singleton!(: Controller<OUTBOX> =
        Controller::new(slots::name().unwrap_or(UNNAMED), slots::boot().unwrap_or(0)))
    else {
        return;
    };
    if let Some(profile) = slots::profile() {
        // A profile that is not accepted leaves the controller without one, and its hello says so.
        let _ = controller.load_profile(profile);
    }
    let mut clock = Clock::default();
    loop {
        match controller.profile().map(|profile| profile.schedule.scans_per_step) {
            Some(scans) => {
                for _ in 0..scans {
                    controller.scan(&mut converter);
                    controller.exchange(&mut line);
                }
            }
            None => idle(controller, &mut line),
        }
        if let Ok(capture) = tunnel::capture(&tunnel) {
            let (pulses, run) = read(&capture);
            controller.step(clock.milliseconds(capture.now_ticks), &pulses, CAPTURE_TICKS_PER_SECOND, run);
        }
        controller.exchange(&mut line);
        #[cfg(feature = "provoke-panic")]
        assert!(controller.records_made() != u32::MAX, "provoked");
    }
}

/// A tenth of a second without a profile: the line is served, nothing is measured.
fn idle(controller: &mut Controller<OUTBOX>, line: &mut Uart) {
    let begun = ticks::now();
    while ticks::now().wrapping_sub(begun) < IDLE_TICKS {
        controller.exchange(line);
        line.sleep_until_interrupt();
    }
}

fn read(capture: &Capture) -> (PulseSnapshot, RunState) {
    let pulses = PulseSnapshot {
        count: capture.count,
        last_edge: capture.last_edge_ticks,
        now: capture.now_ticks,
        direction: match capture.forward {
            None => Direction::Unknown,
            Some(true) => Direction::Forward,
            Some(false) => Direction::Reverse,
        },
    };
    let run = match capture.running {
        None => RunState::Unknown,
        Some(true) => RunState::Running,
        Some(false) => RunState::Stopped,
    };
    (pulses, run)
}

/// Milliseconds since boot from the wrapping tick counter of the captures.
#[derive(Default)]
struct Clock {
    last_ticks: Option<u32>,
    /// Microseconds short of a whole millisecond.
    rest: u32,
    milliseconds: u32,
}

impl Clock {
    /// Time at a capture; two captures must be less than 71 minutes apart. Wraps after 49.7 days.
    fn milliseconds(&mut self, now_ticks: u32) -> u32 {
        let passed = now_ticks.wrapping_sub(self.last_ticks.replace(now_ticks).unwrap_or(now_ticks));
        self.rest += passed % 1000;
        self.milliseconds = self.milliseconds.wrapping_add(passed / 1000 + self.rest / 1000);
        self.rest %= 1000;
        self.milliseconds
    }
}
