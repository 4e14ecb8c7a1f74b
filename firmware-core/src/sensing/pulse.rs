//! Shaft speed from pulses, by period: edges since the last step over the time between the first and last of them.
//!
//! `ω = 2π·Δcount·f_clk/(Δticks·N)`. One tick of resolution, so it is good at low speed too. When no edge comes, the
//! shaft cannot be faster than one edge in the time waited: after two expected periods the speed is that bound, and
//! after [`STOP_SECONDS`] it is zero.

use super::{Channel, ChannelFault, ChannelValue, LARGEST_AGE, Reading};
use crate::{board::PulseSnapshot, deviation::Deviation, machine::profile::ChannelSetup};

/// Without an edge for this long the shaft stands still, s.
pub const STOP_SECONDS: f32 = 2.0;

/// Remembers the last edge between steps.
#[derive(Clone, Copy, Debug, Default)]
pub(crate) struct SpeedMeter {
    last: Option<PulseSnapshot>,
    /// Last speed found, rad/s.
    speed: f32,
    resolution: f32,
    /// Standing still: stays so until an edge comes, whatever the wrapping timer says meanwhile.
    still: bool,
}

impl SpeedMeter {
    /// Speed at this snapshot; `ticks_per_second` of the capture timer, edges `per_revolution` of the wheel.
    pub(crate) fn step(
        &mut self,
        now: &PulseSnapshot,
        ticks_per_second: u32,
        per_revolution: u16,
        setup: &ChannelSetup,
    ) -> Reading {
        let Some(before) = self.last else {
            self.last = Some(*now);
            return Err(ChannelFault::NoReading);
        };
        let edges = now.count.wrapping_sub(before.count);
        let clock = ticks_per_second as f32;
        // Angle between two edges, rad.
        let pitch = core::f32::consts::TAU / f32::from(per_revolution.max(1));
        let mut waited_seconds = 0.0;
        if edges > 0 {
            let ticks = now.last_edge.wrapping_sub(before.last_edge);
            self.last = Some(*now);
            if ticks == 0 {
                return Err(ChannelFault::ImplausiblePulses);
            }
            if core::mem::take(&mut self.still) {
                // The time since the edge before the standstill says nothing about the speed now.
                return Err(ChannelFault::NoReading);
            }
            self.speed = pitch * edges as f32 * (clock / ticks as f32);
            self.resolution = self.speed / ticks as f32;
        } else if !self.still {
            waited_seconds = now.now.wrapping_sub(before.last_edge) as f32 / clock;
            if waited_seconds > STOP_SECONDS {
                self.still = true;
                self.speed = 0.0;
                self.resolution = pitch / STOP_SECONDS;
            } else if waited_seconds * self.speed > 2.0 * pitch {
                let bound = pitch / waited_seconds;
                self.speed = bound;
                self.resolution = bound;
            }
        }
        let relative = setup.relative_deviation * self.speed;
        let variance = setup.deviation * setup.deviation + relative * relative + self.resolution * self.resolution;
        Ok(ChannelValue {
            value: self.speed,
            deviation: Deviation::at_least_root(variance, Channel::Speed.deviation_base()),
            saturated: false,
            age: ((waited_seconds * 10.0) as u8).min(LARGEST_AGE),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{board::Direction, machine::profile::Source};

    const SETUP: ChannelSetup =
        ChannelSetup { source: Source::NotFitted, deviation: 0.0, relative_deviation: 0.001, from_drive: false };

    fn at(count: u32, last_edge: u32, now: u32) -> PulseSnapshot {
        PulseSnapshot { count, last_edge, now, direction: Direction::Unknown }
    }

    fn rpm(reading: Reading) -> f32 {
        reading.unwrap().value * 30.0 / core::f32::consts::PI
    }

    #[test]
    fn period_between_edges_gives_the_speed() {
        let mut meter = SpeedMeter::default();
        assert_eq!(meter.step(&at(0, 0, 10), 1_000_000, 60, &SETUP), Err(ChannelFault::NoReading));
        // 148 edges of a 60-tooth wheel in 100,000 ticks of 1 MHz: 1,480 rev/min.
        assert!((rpm(meter.step(&at(148, 100_000, 100_300), 1_000_000, 60, &SETUP)) - 1480.0).abs() < 0.01);
    }

    #[test]
    fn counters_wrap() {
        let mut meter = SpeedMeter::default();
        let start = u32::MAX - 10;
        let _ = meter.step(&at(start, start, start), 1_000_000, 60, &SETUP);
        let wrapped = at(start.wrapping_add(148), start.wrapping_add(100_000), start.wrapping_add(100_001));
        assert!((rpm(meter.step(&wrapped, 1_000_000, 60, &SETUP)) - 1480.0).abs() < 0.01);
    }

    #[test]
    fn a_stopping_shaft_is_bounded_then_still() {
        let mut meter = SpeedMeter::default();
        let _ = meter.step(&at(0, 0, 0), 1_000_000, 1, &SETUP);
        assert!((rpm(meter.step(&at(1, 100_000, 100_000), 1_000_000, 1, &SETUP)) - 600.0).abs() < 0.01);
        // Within two periods the old speed holds.
        assert!((rpm(meter.step(&at(1, 100_000, 250_000), 1_000_000, 1, &SETUP)) - 600.0).abs() < 0.01);
        // No edge for 0.5 s: at most one turn in 0.5 s.
        let bound = meter.step(&at(1, 100_000, 600_000), 1_000_000, 1, &SETUP).unwrap();
        assert!((bound.value - core::f32::consts::TAU / 0.5).abs() < 1e-3);
        assert_eq!(bound.age, 5);
        let still = meter.step(&at(1, 100_000, 2_200_001), 1_000_000, 1, &SETUP).unwrap();
        assert_eq!(still.value, 0.0);
        // The timer wraps while the shaft stands: still zero.
        assert_eq!(meter.step(&at(1, 100_000, 100_050), 1_000_000, 1, &SETUP).unwrap().value, 0.0);
        // The first edge after it only starts the clock; the next gives a speed again.
        assert_eq!(meter.step(&at(2, 300_000, 300_050), 1_000_000, 1, &SETUP), Err(ChannelFault::NoReading));
        assert!((rpm(meter.step(&at(3, 400_000, 400_050), 1_000_000, 1, &SETUP)) - 600.0).abs() < 0.01);
    }

    #[test]
    fn edges_without_time_are_refused() {
        let mut meter = SpeedMeter::default();
        let _ = meter.step(&at(0, 50, 60), 1_000_000, 60, &SETUP);
        assert_eq!(meter.step(&at(3, 50, 70), 1_000_000, 60, &SETUP), Err(ChannelFault::ImplausiblePulses));
    }
}
