//! One deviation against its limit over blocks, with on delay, off delay and deadband, as a pure state machine.
//!
//! The limit is the declared one or twice the deviation's own standard uncertainty, whichever is larger: what the
//! sensors cannot know must not alarm. Blocks that could not be judged change nothing.

use super::block::Deviation;

/// Standard uncertainties that a deviation must exceed at least.
const UNCERTAINTIES: f64 = 2.0;

#[derive(Clone, Copy, Debug)]
pub(crate) struct ChartSettings {
    /// Least deviation that may alarm, parts of one.
    pub(crate) limit: f64,
    /// Share of the limit that the deviation must come back inside.
    pub(crate) deadband: f64,
    /// Blocks beyond the limit, one after the other, before the chart is up.
    pub(crate) blocks_on: u32,
    /// Blocks back inside before it is down.
    pub(crate) blocks_off: u32,
}

#[derive(Debug, Default)]
pub(crate) struct Chart {
    up: bool,
    beyond: u32,
    inside: u32,
    /// Sign of the run of blocks beyond the limit: a deviation that jumps from low to high is not one deviation.
    positive: bool,
    since: f64,
}

impl Chart {
    /// A chart that is up already, since a time not known here.
    pub(crate) fn standing(at: f64) -> Self {
        Self { up: true, since: at, ..Self::default() }
    }

    pub(crate) const fn is_up(&self) -> bool {
        self.up
    }

    /// Start of the first block of the present run beyond the limit, s.
    pub(crate) const fn since(&self) -> f64 {
        self.since
    }

    /// Takes a judged block that began at `from`.
    pub(crate) fn step(&mut self, from: f64, deviation: Deviation, settings: &ChartSettings) {
        let limit = settings.limit.max(UNCERTAINTIES * deviation.uncertainty);
        let positive = deviation.value > 0.0;
        if deviation.value.abs() > limit {
            if self.beyond == 0 || positive != self.positive {
                self.beyond = 0;
                self.positive = positive;
                if !self.up {
                    self.since = from;
                }
            }
            self.beyond += 1;
            self.inside = 0;
            self.up |= self.beyond >= settings.blocks_on;
        } else {
            self.beyond = 0;
            if deviation.value.abs() < limit * (1.0 - settings.deadband) {
                self.inside += 1;
                self.up &= self.inside < settings.blocks_off;
            } else {
                self.inside = 0;
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SETTINGS: ChartSettings = ChartSettings { limit: 0.04, deadband: 0.25, blocks_on: 3, blocks_off: 2 };

    fn run(values: &[f64], uncertainty: f64) -> Vec<bool> {
        let mut chart = Chart::default();
        let step = |(block, &value): (usize, &f64)| {
            chart.step(block as f64 * 30.0, Deviation { value, uncertainty }, &SETTINGS);
            chart.is_up()
        };
        values.iter().enumerate().map(step).collect()
    }

    #[test]
    fn delay_and_deadband() {
        let up = run(&[-0.05, -0.05, -0.05, -0.035, -0.029, -0.029], 0.0);
        assert_eq!(up, [false, false, true, true, true, false]);
        // One block inside starts the delay again; so does a change of sign.
        assert_eq!(run(&[-0.05, -0.05, 0.0, -0.05, -0.05], 0.0), [false; 5]);
        assert_eq!(run(&[-0.05, -0.05, 0.05, 0.05], 0.0), [false; 4]);
    }

    #[test]
    fn what_the_sensors_cannot_know_does_not_alarm() {
        assert_eq!(run(&[-0.05; 5], 0.03), [false; 5]);
        assert!(run(&[-0.07; 5], 0.03).contains(&true));
    }

    #[test]
    fn nan_changes_nothing_but_the_run() {
        assert_eq!(run(&[f64::NAN; 4], 0.0), [false; 4]);
    }

    #[test]
    fn since_is_the_first_block_of_the_run() {
        let mut chart = Chart::default();
        for (block, value) in [0.0, -0.05, 0.0, -0.06, -0.06, -0.06].into_iter().enumerate() {
            chart.step(block as f64 * 30.0, Deviation { value, uncertainty: 0.0 }, &SETTINGS);
        }
        assert!(chart.is_up());
        assert_eq!(chart.since(), 90.0);
    }
}
