//! Limits that the controller watches by itself, so that they work with the line cut: advisory flags with deadband, on
//! delay and off delay. A flag informs; no trip or interlock may depend on it.
//!
//! A limit is entered beyond `at` and left `deadband` inside it; between the two, and while its value is missing,
//! nothing changes. Time is an argument.

use crate::{
    conditioning::ConditionedSample,
    estimate::Estimate,
    machine::{Profile, profile::Limit},
    sensing::{Channel, ChannelFault},
};

/// The flags, as bits of a record.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Advisories(u16);

impl Advisories {
    /// Flow below the declared minimum.
    pub const BELOW_MINIMUM_FLOW: Self = Self(1);
    /// Flow beyond the declared run-out.
    pub const RUN_OUT: Self = Self(1 << 1);
    /// Shaft torque above the declared limit.
    pub const OVER_TORQUE: Self = Self(1 << 2);
    /// A fitted sensor has no value.
    pub const SENSOR_FAILED: Self = Self(1 << 3);

    /// No flag.
    pub const NONE: Self = Self(0);

    /// From a record's bits; unknown bits are kept.
    #[must_use]
    pub const fn from_bits(bits: u16) -> Self {
        Self(bits)
    }

    /// A record's bits.
    #[must_use]
    pub const fn bits(self) -> u16 {
        self.0
    }

    /// Whether all flags of `other` are up.
    #[must_use]
    pub const fn contains(self, other: Self) -> bool {
        self.0 & other.0 == other.0
    }

    const fn with(self, flag: Self, up: bool) -> Self {
        Self(if up { self.0 | flag.0 } else { self.0 & !flag.0 })
    }
}

/// One delayed flag.
#[derive(Clone, Copy, Debug, Default)]
struct Flag {
    up: bool,
    /// How long the opposite of `up` has been true, ms.
    waited_ms: u32,
}

/// What a limit's value says now.
#[derive(Clone, Copy, PartialEq)]
enum Finding {
    Beyond,
    /// Within the deadband, or no value: no reason to change anything.
    Between,
    Inside,
}

impl Flag {
    fn step(&mut self, finding: Finding, elapsed_ms: u32, on_delay: f32, off_delay: f32) -> bool {
        let (opposite, delay) = if self.up { (Finding::Inside, off_delay) } else { (Finding::Beyond, on_delay) };
        if finding == opposite {
            self.waited_ms = self.waited_ms.saturating_add(elapsed_ms);
            if self.waited_ms as f32 >= delay * 1000.0 {
                self.up = !self.up;
                self.waited_ms = 0;
            }
        } else {
            self.waited_ms = 0;
        }
        self.up
    }
}

/// The guard of one machine.
#[derive(Clone, Debug, Default)]
pub struct Guard {
    minimum_flow: Flag,
    run_out: Flag,
    torque: Flag,
    sensor: Flag,
}

impl Guard {
    /// Judges one step that lasted `elapsed_ms`.
    pub fn step(
        &mut self,
        sample: &ConditionedSample,
        estimate: &Estimate,
        profile: &Profile,
        elapsed_ms: u32,
    ) -> Advisories {
        let relative_flow = estimate.relative_flow.ok().map(|found| found.value.fraction());
        // The torque limit protects the shaft, so only a torque that is not from the momentum model counts.
        let torque = sample.shaft_torque.ok().map(|reading| reading.value);
        let limits = &profile.limits;
        let failed = Channel::ALL
            .iter()
            .any(|&channel| matches!(sample.channel(channel), Err(fault) if *fault != ChannelFault::NotFitted));
        let sensor = if failed { Finding::Beyond } else { Finding::Inside };
        let delay = limits.sensor_delay;
        Advisories::NONE
            .with(
                Advisories::BELOW_MINIMUM_FLOW,
                low(&mut self.minimum_flow, relative_flow, limits.minimum_flow, elapsed_ms),
            )
            .with(Advisories::RUN_OUT, high(&mut self.run_out, relative_flow, limits.run_out, elapsed_ms))
            .with(Advisories::OVER_TORQUE, high(&mut self.torque, torque, limits.torque, elapsed_ms))
            .with(Advisories::SENSOR_FAILED, self.sensor.step(sensor, elapsed_ms, delay, delay))
    }
}

fn high(flag: &mut Flag, value: Option<f32>, limit: Option<Limit>, elapsed_ms: u32) -> bool {
    let Some(limit) = limit else { return false };
    let finding = match value {
        Some(value) if value > limit.at => Finding::Beyond,
        Some(value) if value < limit.at - limit.deadband => Finding::Inside,
        _ => Finding::Between,
    };
    flag.step(finding, elapsed_ms, limit.on_delay, limit.off_delay)
}

fn low(flag: &mut Flag, value: Option<f32>, limit: Option<Limit>, elapsed_ms: u32) -> bool {
    let mirrored = limit.map(|limit| Limit { at: -limit.at, ..limit });
    high(flag, value.map(|value| -value), mirrored, elapsed_ms)
}

#[cfg(test)]
mod tests {
    use super::*;

    const LIMIT: Limit = Limit { at: 100.0, deadband: 10.0, on_delay: 1.0, off_delay: 2.0 };

    fn run(values: &[(f32, u32)]) -> std::vec::Vec<bool> {
        let mut flag = Flag::default();
        values.iter().map(|&(value, ms)| high(&mut flag, Some(value), Some(LIMIT), ms)).collect()
    }

    #[test]
    fn delays_and_deadband() {
        // Up after 1 s beyond; the deadband holds it; down after 2 s inside.
        assert_eq!(
            run(&[(101.0, 900), (101.0, 100), (95.0, 9000), (89.0, 1900), (89.0, 100)]),
            [false, true, true, true, false]
        );
        // A short visit inside starts the delay again.
        assert_eq!(run(&[(101.0, 900), (99.0, 100), (101.0, 900), (101.0, 99)]), [false; 4]);
        assert_eq!(run(&[(f32::NAN, 60_000)]), [false]);
    }

    #[test]
    fn a_missing_value_changes_nothing() {
        let mut flag = Flag { up: true, waited_ms: 1900 };
        assert!(high(&mut flag, None, Some(LIMIT), 500));
        assert!(high(&mut flag, Some(50.0), Some(LIMIT), 1900), "the off delay starts again");
        assert!(!high(&mut flag, Some(50.0), Some(LIMIT), 100));
    }

    #[test]
    fn low_limits_mirror() {
        let mut flag = Flag::default();
        let limit = Limit { at: 0.3, deadband: 0.05, on_delay: 0.0, off_delay: 0.0 };
        assert!(low(&mut flag, Some(0.29), Some(limit), 100));
        assert!(low(&mut flag, Some(0.34), Some(limit), 100));
        assert!(!low(&mut flag, Some(0.36), Some(limit), 100));
    }
}
