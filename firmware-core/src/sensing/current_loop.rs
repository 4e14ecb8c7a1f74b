//! 4–20 mA loops: the mean of the scans of one step, its scatter, and what a current outside 4–20 mA means.
//!
//! `value = low + (i − 4)/16·(high − low)`. Bands after NAMUR NE 43 (from memory): 3.8–20.5 mA measures, at or below
//! 3.6 or at or above 21.0 mA the transmitter or the wire has failed, between them the transmitter is saturated.
//! The scans of a step span whole mains periods, so hum averages out; the band decides on the mean, not on one scan.

use super::{Channel, ChannelFault, ChannelValue, Reading};
use crate::{board::LoopCurrent, deviation::Deviation, machine::profile::ChannelSetup};

/// At or below: failed low, mA.
pub const FAILURE_LOW: f32 = 3.6;
/// Below: saturated, mA.
pub const RANGE_LOW: f32 = 3.8;
/// Above: saturated, mA.
pub const RANGE_HIGH: f32 = 20.5;
/// At or above: failed high, mA.
pub const FAILURE_HIGH: f32 = 21.0;

/// Sums of the currents of one input over one step.
#[derive(Clone, Copy, Debug, Default)]
pub(crate) struct Accumulator {
    first: f32,
    sum: f32,
    squares: f32,
    count: u16,
}

impl Accumulator {
    pub(crate) fn add(&mut self, current: LoopCurrent) {
        let milliamperes = current.milliamperes();
        if self.count == 0 {
            self.first = milliamperes;
        }
        // Sums of differences from the first scan: squares of the full current would lose the scatter in f32.
        let from_first = milliamperes - self.first;
        self.sum += from_first;
        self.squares += from_first * from_first;
        self.count = self.count.saturating_add(1);
    }

    /// The channel's reading over the step; the accumulator starts afresh.
    pub(crate) fn take(&mut self, channel: Channel, setup: &ChannelSetup, low: f32, high: f32) -> Reading {
        let Self { first, sum, squares, count } = core::mem::take(self);
        if count == 0 {
            return Err(ChannelFault::ConverterFailed);
        }
        let n = f32::from(count);
        let offset = sum / n;
        let mean = first + offset;
        if !mean.is_finite() {
            return Err(ChannelFault::ConverterFailed);
        }
        if mean <= FAILURE_LOW {
            return Err(ChannelFault::FailureLow);
        }
        if mean >= FAILURE_HIGH {
            return Err(ChannelFault::FailureHigh);
        }
        let per_milliampere = (high - low) / 16.0;
        let value = low + (mean - 4.0) * per_milliampere;
        let variance = if count > 1 { ((squares - n * offset * offset) / (n - 1.0)).max(0.0) } else { 0.0 };
        let of_mean = variance / n * (per_milliampere * per_milliampere);
        let relative = setup.relative_deviation * value;
        let total = setup.deviation * setup.deviation + relative * relative + of_mean;
        Ok(ChannelValue {
            value,
            deviation: Deviation::at_least_root(total, channel.deviation_base()),
            saturated: !(RANGE_LOW..=RANGE_HIGH).contains(&mean),
            age: 0,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SETUP: ChannelSetup = ChannelSetup {
        source: crate::machine::profile::Source::NotFitted,
        deviation: 0.5,
        relative_deviation: 0.0,
        from_drive: false,
    };

    fn reading(currents: &[f32]) -> Reading {
        let mut sums = Accumulator::default();
        for &current in currents {
            sums.add(LoopCurrent::from_milliamperes(current));
        }
        sums.take(Channel::ShaftTorque, &SETUP, 0.0, 160.0)
    }

    #[test]
    fn bands_decide_not_clamping() {
        assert_eq!(reading(&[3.6]), Err(ChannelFault::FailureLow));
        assert_eq!(reading(&[0.0]), Err(ChannelFault::FailureLow));
        assert_eq!(reading(&[21.0]), Err(ChannelFault::FailureHigh));
        assert_eq!(reading(&[]), Err(ChannelFault::ConverterFailed));
        assert_eq!(reading(&[f32::NAN]), Err(ChannelFault::ConverterFailed));
        for (current, saturated) in
            [(3.61, true), (3.79, true), (3.81, false), (20.49, false), (20.6, true), (20.99, true)]
        {
            let got = reading(&[current]).unwrap();
            assert_eq!(got.saturated, saturated, "{current} mA");
            assert!((got.value - (current - 4.0) * 10.0).abs() < 1e-4, "{current} mA keeps its value");
        }
    }

    #[test]
    fn mean_and_scatter_over_the_step() {
        // Alternating 11.9 and 12.1 mA, 100 scans: mean 12 mA → 80; scatter of the mean 0.1005 mA·10/√100 = 0.1005.
        let currents: [f32; 100] = core::array::from_fn(|k| if k % 2 == 0 { 11.9 } else { 12.1 });
        let got = reading(&currents).unwrap();
        assert!((got.value - 80.0).abs() < 1e-4, "{got:?}");
        let expected = (0.5_f32 * 0.5 + 0.1005 * 0.1005).sqrt();
        let coded = got.deviation.value(Channel::ShaftTorque.deviation_base());
        assert!(coded >= expected * 0.9999 && coded <= expected * 1.0907, "{coded} for {expected}");
    }

    #[test]
    fn hum_over_whole_periods_averages_out() {
        // 0.5 mA of 50 Hz over 100 scans of 1 ms: five whole periods.
        let currents: [f32; 100] =
            core::array::from_fn(|k| 12.0 + 0.5 * (core::f32::consts::TAU * 0.05 * k as f32).sin());
        assert!((reading(&currents).unwrap().value - 80.0).abs() < 1e-3);
    }
}
