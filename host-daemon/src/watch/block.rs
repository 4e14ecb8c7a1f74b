//! Blocks: samples are averaged before they are judged, because seconds of one process are far from independent, and a
//! block taken while flow or speed move is not judged at all.
//!
//! Steady means that the lag between flow and pressure readings cannot disturb the residual: with the change over the
//! block as a rate, `max(|dQ/dt|/Q_BEP, 2·|dn/dt|/n_ref)·τ` stays below a limit. Slow ramps pass. τ and the limit are
//! ours, from trials on simulated plants.

use offcurve_core::{conditioning::ConditionedSample, estimate::Estimate, machine::Profile};

/// Lag of the slowest reading that is compared with a faster one, s.
const LAG: f64 = 6.0;
/// Largest predicted lag error of a steady block, parts of one.
const STEADY_LIMIT: f64 = 0.02;
/// Least share of a block's samples that must carry a residual.
const LEAST_SHARE: f64 = 0.5;

/// A mean that grows.
#[derive(Clone, Copy, Debug, Default)]
struct Mean {
    sum: f64,
    count: u32,
}

impl Mean {
    fn add(&mut self, value: f64) {
        self.sum += value;
        self.count += 1;
    }

    fn get(self) -> Option<f64> {
        (self.count > 0).then(|| self.sum / f64::from(self.count))
    }
}

/// A residual relative to what was expected, with its standard uncertainty; parts of one.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Deviation {
    pub(crate) value: f64,
    pub(crate) uncertainty: f64,
}

/// What one steady block says.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct BlockResult {
    /// Start of the block, s.
    pub(crate) from: f64,
    /// Speed over reference speed.
    pub(crate) speed_ratio: f64,
    /// Delivered flow, m³/s.
    pub(crate) flow: f64,
    /// Head over expected head, minus one.
    pub(crate) head: Option<Deviation>,
    /// Shaft power over expected power, minus one.
    pub(crate) power: Option<Deviation>,
    /// Efficiency, parts of one.
    pub(crate) efficiency: Option<f64>,
    /// Shaft power, W.
    pub(crate) shaft_power: Option<f64>,
}

#[derive(Debug, Default)]
struct Third {
    flow: Mean,
    speed_ratio: Mean,
}

/// A block that is being filled.
#[derive(Debug)]
pub(crate) struct Block {
    index: i64,
    length: f64,
    first_at: f64,
    last_at: f64,
    samples: u32,
    thirds: [Third; 3],
    head: Mean,
    head_uncertainty: Mean,
    power: Mean,
    power_uncertainty: Mean,
    efficiency: Mean,
    shaft_power: Mean,
}

impl Block {
    pub(crate) fn index_of(at: f64, length: f64) -> i64 {
        (at / length).floor() as i64
    }

    pub(crate) fn starting(at: f64, length: f64) -> Self {
        Self {
            index: Self::index_of(at, length),
            length,
            first_at: at,
            last_at: at,
            samples: 0,
            thirds: Default::default(),
            head: Mean::default(),
            head_uncertainty: Mean::default(),
            power: Mean::default(),
            power_uncertainty: Mean::default(),
            efficiency: Mean::default(),
            shaft_power: Mean::default(),
        }
    }

    pub(crate) const fn index(&self) -> i64 {
        self.index
    }

    fn start(&self) -> f64 {
        self.index as f64 * self.length
    }

    pub(crate) fn add(&mut self, at: f64, sample: &ConditionedSample, estimate: &Estimate, profile: &Profile) {
        self.samples += 1;
        self.last_at = at;
        if let (Ok(speed), Ok(flow)) = (&sample.speed, &sample.flow) {
            let place = ((at - self.start()) / self.length * 3.0) as usize;
            let third = &mut self.thirds[place.min(2)];
            third.flow.add(f64::from(flow.value));
            third.speed_ratio.add(f64::from(speed.value / profile.reference_speed));
        }
        // Deviations are relative to the promise; near run-out, where that goes to zero, to a share of what the machine
        // can do at most.
        if let (Ok(residual), Ok(expected)) = (&estimate.head_residual, &estimate.expected_head) {
            let scale = expected.value.metres().max(0.25 * shut_off_head(profile, sample));
            self.head.add(f64::from(residual.value.metres() / scale));
            self.head_uncertainty.add(f64::from(residual.deviation.metres() / scale));
        }
        if let (Ok(residual), Ok(expected)) = (&estimate.power_residual, &estimate.expected_power) {
            let scale = expected.value.watts();
            self.power.add(f64::from(residual.value.watts() / scale));
            self.power_uncertainty.add(f64::from(residual.deviation.watts() / scale));
        }
        if let Ok(efficiency) = &estimate.efficiency {
            self.efficiency.add(f64::from(efficiency.value.fraction()));
        }
        if let Ok(power) = &estimate.shaft_power {
            self.shaft_power.add(f64::from(power.value.watts()));
        }
    }

    /// The block's verdict; `None` when it was too short, too empty or not steady.
    pub(crate) fn close(&self, profile: &Profile) -> Option<BlockResult> {
        if self.last_at - self.first_at < LEAST_SHARE * self.length || !self.is_steady(profile) {
            return None;
        }
        let least = (LEAST_SHARE * f64::from(self.samples)).max(3.0);
        let deviation = |value: Mean, uncertainty: Mean| {
            (f64::from(value.count) >= least)
                .then(|| Some(Deviation { value: value.get()?, uncertainty: uncertainty.get()? }))
                .flatten()
        };
        let head = deviation(self.head, self.head_uncertainty);
        let power = deviation(self.power, self.power_uncertainty);
        if head.is_none() && power.is_none() {
            return None;
        }
        let mean_of = |part: fn(&Third) -> Mean| {
            let all = self
                .thirds
                .iter()
                .map(part)
                .fold(Mean::default(), |all, one| Mean { sum: all.sum + one.sum, count: all.count + one.count });
            all.get()
        };
        Some(BlockResult {
            from: self.start(),
            speed_ratio: mean_of(|third| third.speed_ratio)?,
            flow: mean_of(|third| third.flow)?,
            head,
            power,
            efficiency: self.efficiency.get(),
            shaft_power: self.shaft_power.get(),
        })
    }

    fn is_steady(&self, profile: &Profile) -> bool {
        let [first, _, last] = &self.thirds;
        let change = |part: fn(&Third) -> Mean| Some(part(last).get()? - part(first).get()?);
        let (Some(flow), Some(speed)) = (change(|third| third.flow), change(|third| third.speed_ratio)) else {
            return false;
        };
        // The means of the outer thirds are two thirds of a block apart.
        let per_second = 1.0 / (self.length * 2.0 / 3.0);
        let rate = (flow.abs() / f64::from(profile.best_efficiency_flow)).max(2.0 * speed.abs()) * per_second;
        rate * LAG < STEADY_LIMIT
    }
}

/// Head of the first knot, carried to the sample's speed, m.
fn shut_off_head(profile: &Profile, sample: &ConditionedSample) -> f32 {
    let at_reference = profile.curve.knots().first().map_or(0.0, |knot| knot.head);
    let ratio = sample.speed.map_or(0.0, |speed| speed.value / profile.reference_speed);
    at_reference * ratio * ratio
}
