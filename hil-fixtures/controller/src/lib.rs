//! The controller program, the same source for every board and for the host: loop currents, pulses and the run signal
//! go in, framed records come out. A board owns the clock and the interrupts and calls [`Controller`]; this crate owns
//! the order of work.
//!
//! A board's loop, at the rates of the profile's schedule:
//! ```text
//! every scan_ms:              controller.scan(&mut converter)
//! every scans_per_step scans: controller.step(now_ms, &pulses, ticks_per_second, run)
//! whenever there is time:     controller.exchange(&mut line)
//! ```
//! Nothing here waits: a line that takes no bytes costs records (counted), never time.
#![no_std]
#![forbid(unsafe_code)]
#![deny(missing_docs)]
#![cfg_attr(
    not(test),
    deny(
        clippy::indexing_slicing,
        clippy::arithmetic_side_effects,
        clippy::unwrap_used,
        clippy::expect_used,
        clippy::panic
    )
)]

#[cfg(test)]
extern crate std;

pub mod converter;
pub mod outbox;
mod program;

pub use converter::Converter;
pub use outbox::Outbox;
pub use program::Controller;
