//! Slow change, watched on the controller in fixed memory: whether head or power has left the expected curve, little but
//! for long, which no single sample shows.
//!
//! Samples are gathered to blocks, because samples of a process follow one another too closely to be independent. A
//! block counts only if it was steady: while flow or speed moves, pressure and flow readings lag each other, and the
//! error to expect is the rate times that lag,
//! `max(|dQ|/Q_ref, 2·|dn|/n₀)/dt · τ < limit`, from thirds of the block and the last third of the block before.
//! Then per residual `e` (relative to the expected value) Page's two-sided sums, with `z = e/σ`:
//! `up = min(2h, max(0, up + clamp(z − k − band/σ, ±5)))`, `down` the same with `−z`; alarm above `h`, over below `h/2`.
//!
//! Two uncertainties, never mixed: `σ` is noise and averages out over blocks; the misfit of the expected curve does
//! not, so it is a dead `band` and slack to the sums. Most false alarms come from misfit, not from noise. A noisier sensor
//! than declared widens `σ` by itself.
//!
//! Where it stops being true: residuals of neighbouring blocks that still follow one another need `σ` widened by
//! √((1+ρ)/(1−ρ)) or longer blocks ([`ChannelSettings::deviation`]); what happens while stopped or unsteady is not seen; a change
//! that stays within the band is not seen, whatever its duration; wear and a lighter liquid look alike. This is the
//! controller's part: charts with a learning reference, noise charts and causes belong to the host.

use crate::math;

#[cfg(any(feature = "std", test))]
pub mod limits;

/// Half of the shift the sums are quickest for, in σ. Page's reference value.
pub const REFERENCE_VALUE: f32 = 0.5;
/// Largest increment of a sum per block, in σ: one wild block alone is no alarm.
pub const LARGEST_INCREMENT: f32 = 5.0;
/// Default lag between flow and pressure readings, s: damping of a flow meter and water inertia (common practice, no
/// source).
pub const DEFAULT_LAG: f32 = 6.0;
/// Default limit of the predicted lag error, relative.
pub const DEFAULT_STEADY_LIMIT: f32 = 0.003;
/// Fewest samples of a block.
pub const FEWEST_SAMPLES: u16 = 8;
/// Lags after which a fast change has died away (to 0.7 %).
const LAGS_TO_SETTLE: f32 = 5.0;

/// How one residual scatters, from commissioning.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ChannelSettings {
    /// Standard deviation of a block's mean, relative, positive; correlation between blocks included.
    pub deviation: f32,
    /// By how much the scatter of block means exceeds that of independent samples, at least 1 (√((1+ρ)/(1−ρ)) and more).
    pub inflation: f32,
    /// What the curve may be off by, relative, not negative: times the coverage wanted, density tolerance included.
    pub band: f32,
}

/// What the watch of one machine needs to know.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct DriftSettings {
    samples: u16,
    /// Samples before which the first third ends, and from which the last one starts.
    thirds: (u16, u16),
    block_seconds: f32,
    lag: f32,
    steady_limit: f32,
    settle: u8,
    limit: f32,
    head: ChannelSettings,
    power: ChannelSettings,
}

/// Why settings make no watch.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum DriftError {
    /// A block needs [`FEWEST_SAMPLES`] or more.
    TooFewSamples,
    /// Time between samples, lag, steady limit and alarm limit must be positive and finite.
    BadValue,
    /// Deviation positive, inflation at least 1, band not negative, all finite.
    BadChannel,
}

impl DriftSettings {
    /// Settings with [`DEFAULT_LAG`] and [`DEFAULT_STEADY_LIMIT`].
    ///
    /// `samples` per block, `period` between samples in s, alarm limit `limit` (h) in σ: see
    /// `drift::limits::limit_for` on the host.
    ///
    /// # Errors
    /// [`DriftError`].
    pub fn new(
        samples: u16,
        period: f32,
        limit: f32,
        head: ChannelSettings,
        power: ChannelSettings,
    ) -> Result<Self, DriftError> {
        Self { samples, thirds: (0, 0), block_seconds: 0.0, lag: 0.0, steady_limit: 0.0, settle: 0, limit, head, power }
            .with_gate(period, DEFAULT_LAG, DEFAULT_STEADY_LIMIT)
    }

    /// The same settings with another gate: time between samples and lag in s, largest predicted lag error (relative).
    ///
    /// # Errors
    /// [`DriftError`].
    pub fn with_gate(self, period: f32, lag: f32, steady_limit: f32) -> Result<Self, DriftError> {
        if self.samples < FEWEST_SAMPLES {
            return Err(DriftError::TooFewSamples);
        }
        let positive = |value: f32| value.is_finite() && value > 0.0;
        if ![period, lag, steady_limit, self.limit].into_iter().all(positive) {
            return Err(DriftError::BadValue);
        }
        for channel in [self.head, self.power] {
            let ChannelSettings { deviation, inflation, band } = channel;
            let finite = inflation.is_finite() && band.is_finite();
            if !positive(deviation) || !finite || inflation < 1.0 || band < 0.0 {
                return Err(DriftError::BadChannel);
            }
        }
        let third = self.samples / 3;
        let block_seconds = f32::from(self.samples) * period;
        let blocks = LAGS_TO_SETTLE * lag / block_seconds;
        let whole = blocks as u8; // saturates
        let settle = whole.saturating_add(u8::from(blocks > f32::from(whole))).max(1);
        let thirds = (third, self.samples.saturating_sub(third));
        Ok(Self { thirds, block_seconds, lag, steady_limit, settle, ..self })
    }
}

/// One sample for the watch.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct DriftSample {
    /// Whether the machine runs in its design direction.
    pub running: bool,
    /// Flow over that of best efficiency at the REFERENCE speed: the present flow, not carried to another speed.
    pub flow: Option<f32>,
    /// Speed over reference speed.
    pub speed: Option<f32>,
    /// Head less expected head, relative: see [`relative_residual`].
    pub head: Option<f32>,
    /// Shaft power less expected power, relative.
    pub power: Option<f32>,
}

/// A residual relative to what was expected, or to `floor` where that is larger, so that it does not blow up near
/// run-out: a quarter of shut-off head at this speed, a tenth of the largest power. `None` unless it is a number.
#[must_use]
pub fn relative_residual(residual: f32, expected: f32, floor: f32) -> Option<f32> {
    let scale = expected.max(floor);
    let found = residual / scale;
    (scale > 0.0 && found.is_finite()).then_some(found)
}

/// Page's two-sided cumulative sums of one residual.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Sums {
    up: f32,
    down: f32,
    alarm: bool,
}

/// Which way a residual has gone.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Change {
    /// More than the curve promises.
    Above,
    /// Less than the curve promises.
    Below,
}

impl Sums {
    /// Goes on from sums saved before a restart; numbers that no sums can have give sums of zero.
    #[must_use]
    pub fn restored(up: f32, down: f32, alarm: bool) -> Self {
        if up.is_finite() && down.is_finite() && up >= 0.0 && down >= 0.0 {
            Self { up, down, alarm }
        } else {
            Self::default()
        }
    }

    /// Adds one steady block: `residual`, its noise `deviation` and the `band` in the same unit; `limit` (h) in σ.
    ///
    /// Not-a-number anywhere, or a deviation that is not positive, changes nothing.
    pub fn add(&mut self, residual: f32, deviation: f32, band: f32, limit: f32) {
        let (z, slack) = (residual / deviation, REFERENCE_VALUE + band / deviation);
        if z.is_nan() || !slack.is_finite() || deviation <= 0.0 || !limit.is_finite() {
            return;
        }
        let next = |sum: f32, z: f32| {
            let increment = (z - slack).clamp(-LARGEST_INCREMENT, LARGEST_INCREMENT);
            (sum + increment).max(0.0).min(2.0 * limit)
        };
        self.up = next(self.up, z);
        self.down = next(self.down, -z);
        let larger = self.up.max(self.down);
        self.alarm = larger > limit || self.alarm && larger >= 0.5 * limit;
    }

    /// Sums up and down, in σ, 0 to twice the limit.
    #[must_use]
    pub const fn sums(&self) -> (f32, f32) {
        (self.up, self.down)
    }

    /// The change that stands, if any.
    #[must_use]
    pub fn alarm(&self) -> Option<Change> {
        self.alarm.then_some(if self.up >= self.down { Change::Above } else { Change::Below })
    }
}

/// What became of a block.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum BlockFate {
    /// It was steady and went into the sums.
    Used,
    /// Flow or speed was missing in more than half of it.
    TooFewSamples,
    /// The machine did not run all the time.
    NotRunning,
    /// Flow or speed moved too fast.
    Unsteady,
    /// Steady, but too soon after a fast change.
    Settling,
}

/// One residual over one block.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct BlockMean {
    /// Mean, relative.
    pub mean: f32,
    /// Its noise: as declared, or wider if this block was noisier.
    pub deviation: f32,
}

/// A block that has ended.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Block {
    /// What became of it.
    pub fate: BlockFate,
    /// Predicted lag error, relative; `None` where too little was known.
    pub lag_error: Option<f32>,
    /// Head residual, if half of its samples were there.
    pub head: Option<BlockMean>,
    /// Power residual, if half of its samples were there.
    pub power: Option<BlockMean>,
}

/// Sum and count of one channel.
#[derive(Clone, Copy, Debug, Default)]
struct Total {
    sum: f32,
    count: u16,
}

impl Total {
    fn add(&mut self, value: f32) {
        self.sum += value;
        self.count = self.count.saturating_add(1);
    }

    fn mean(&self) -> Option<f32> {
        (self.count > 0).then(|| self.sum / f32::from(self.count))
    }
}

/// A residual over the open block, with what its noise is judged by.
#[derive(Clone, Copy, Debug, Default)]
struct Residual {
    total: Total,
    /// The two samples before, as long as there is no gap.
    before: [Option<f32>; 2],
    /// Squares of second differences: blind to a level and to a ramp.
    curvature: Total,
}

impl Residual {
    fn add(&mut self, value: Option<f32>) {
        let value = value.filter(|value| value.is_finite());
        let [last, older] = self.before;
        if let (Some(value), Some(last), Some(older)) = (value, last, older) {
            let second = value - 2.0 * last + older;
            self.curvature.add(second * second);
        }
        if let Some(value) = value {
            self.total.add(value);
        }
        self.before = [value, last];
    }

    fn finish(&self, samples: u16, settings: &ChannelSettings) -> Option<BlockMean> {
        if self.total.count < samples.div_ceil(2) {
            return None;
        }
        let mean = self.total.mean()?;
        // The variance of a second difference of independent noise is 1 + 4 + 1 times its own.
        let noise = self.curvature.mean().map_or(0.0, |square| square / (6.0 * f32::from(self.total.count)));
        let deviation = settings.deviation.max(settings.inflation * math::sqrt(noise));
        deviation.is_finite().then_some(BlockMean { mean, deviation })
    }
}

/// Flow and speed over a third of a block.
#[derive(Clone, Copy, Debug, Default)]
struct Third {
    flow: Total,
    speed: Total,
}

impl Third {
    fn place(&self) -> Option<(f32, f32)> {
        Some((self.flow.mean()?, self.speed.mean()?))
    }
}

/// The watch of one machine.
#[derive(Clone, Debug, Default)]
pub struct Drift {
    position: u16,
    thirds: [Third; 3],
    stopped: bool,
    head_residual: Residual,
    power_residual: Residual,
    /// Flow and speed at the end of the block before.
    before: Option<(f32, f32)>,
    /// Blocks still to be passed over.
    settling: u8,
    head: Sums,
    power: Sums,
}

impl Drift {
    /// Goes on with sums saved before a restart.
    #[must_use]
    pub fn restored(head: Sums, power: Sums) -> Self {
        Self { head, power, ..Self::default() }
    }

    /// Sums of the head residual.
    #[must_use]
    pub const fn head(&self) -> &Sums {
        &self.head
    }

    /// Sums of the power residual.
    #[must_use]
    pub const fn power(&self) -> &Sums {
        &self.power
    }

    /// Forgets both sums. After a repair, by a person, never by time: a fault that stands must not be learnt.
    pub fn reset(&mut self) {
        (self.head, self.power) = (Sums::default(), Sums::default());
    }

    /// Takes one sample; gives the block that it completes.
    pub fn step(&mut self, sample: &DriftSample, settings: &DriftSettings) -> Option<Block> {
        let number = |value: Option<f32>| value.filter(|value| value.is_finite());
        let (first_ends, last_starts) = settings.thirds;
        let [first, middle, last] = &mut self.thirds;
        let third = if self.position < first_ends {
            first
        } else if self.position < last_starts {
            middle
        } else {
            last
        };
        if let (Some(flow), Some(speed)) = (number(sample.flow), number(sample.speed)) {
            third.flow.add(flow);
            third.speed.add(speed);
        }
        self.stopped |= !sample.running;
        self.head_residual.add(sample.head);
        self.power_residual.add(sample.power);
        self.position = self.position.saturating_add(1);
        if self.position < settings.samples {
            return None;
        }
        let block = self.finish(settings);
        if block.fate == BlockFate::Used {
            for (sums, mean, channel) in
                [(&mut self.head, block.head, &settings.head), (&mut self.power, block.power, &settings.power)]
            {
                if let Some(BlockMean { mean, deviation }) = mean {
                    sums.add(mean, deviation, channel.band, settings.limit);
                }
            }
        }
        Some(block)
    }

    /// Judges the block that is full and opens the next.
    fn finish(&mut self, settings: &DriftSettings) -> Block {
        let [first, middle, last] = &self.thirds;
        let known = [first, middle, last].iter().fold(0_u16, |sum, third| sum.saturating_add(third.flow.count));
        let enough = known >= settings.samples.div_ceil(2);
        let third = settings.block_seconds / 3.0;
        let error = |from: Option<(f32, f32)>, to: Option<(f32, f32)>, seconds: f32| {
            let ((flow, speed), (then_flow, then_speed)) = (from?, to?);
            let moved = (then_flow - flow).abs().max(2.0 * (then_speed - speed).abs());
            Some(moved / seconds * settings.lag)
        };
        let (begin, end) = (first.place(), last.place());
        let inside = error(begin, end, 2.0 * third);
        let across = error(self.before, begin, third); // unknown after a gap: what happened there settles below
        let lag_error = inside.map(|inside| across.map_or(inside, |across| inside.max(across)));
        let fate = if self.stopped {
            BlockFate::NotRunning
        } else {
            match lag_error {
                Some(error) if enough && error >= settings.steady_limit => BlockFate::Unsteady,
                Some(_) if enough && self.settling > 0 => BlockFate::Settling,
                Some(error) if enough && error.is_finite() => BlockFate::Used,
                _ => BlockFate::TooFewSamples,
            }
        };
        self.settling = match fate {
            BlockFate::Used => 0,
            BlockFate::Settling => self.settling.saturating_sub(1),
            // After a gap or a change, what lags has to catch up first.
            BlockFate::TooFewSamples | BlockFate::NotRunning | BlockFate::Unsteady => settings.settle,
        };
        let block = Block {
            fate,
            lag_error,
            head: self.head_residual.finish(settings.samples, &settings.head),
            power: self.power_residual.finish(settings.samples, &settings.power),
        };
        self.before = if enough && !self.stopped { end } else { None };
        self.position = 0;
        self.thirds = Default::default();
        self.stopped = false;
        (self.head_residual, self.power_residual) = Default::default();
        block
    }
}

#[cfg(test)]
mod tests;
