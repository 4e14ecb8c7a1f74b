//! Likely causes of a deviation: each hypothesis predicts, through the machine's own curve, what it would do to head and
//! power at the measured speed and flow; severities are fitted and the hypotheses ranked by how well they explain what
//! was measured.
//!
//! Causes that these sensors cannot tell apart stand together as one. With head and power at one operating point there
//! are two numbers to explain, so the ranking separates directions (head down with power up, head down alone, ...), not
//! details. "None of these" competes with a fixed score.

use super::block::Deviation;
use crate::alarm::RankedCause;
use offcurve_core::{
    machine::Profile,
    quantity::{Quantity, VolumeFlow},
};

/// Signatures are inexact: this share of the predicted change is added to the uncertainty.
const SIGNATURE_ERROR: f64 = 0.1;
/// Score of "none of these": a fit this bad is no explanation (about three standard deviations in both residuals).
const NONE_FITS: f64 = 12.0;
/// Severities tried per hypothesis, evenly spaced in the logarithm between its bounds.
const SEVERITIES: u32 = 60;

/// Where the machine runs.
#[derive(Clone, Copy, Debug)]
pub(crate) struct OperatingPoint {
    pub(crate) speed_ratio: f64,
    /// m³/s.
    pub(crate) flow: f64,
}

/// A cause with its words.
#[derive(Debug)]
pub(crate) struct Hypothesis {
    pub(crate) name: &'static str,
    /// What tells it from its neighbours, and what to do first.
    pub(crate) check: &'static str,
    /// Least and largest severity.
    bounds: (f64, f64),
    /// Head and power as they would be measured, relative to the promise, minus one.
    predict: fn(&Curve<'_>, OperatingPoint, f64) -> Option<(f64, f64)>,
}

/// The expected curve in f64, carried to a speed.
pub(crate) struct Curve<'a>(&'a Profile);

impl Curve<'_> {
    /// Head (m) and shaft power (W) the curve promises.
    fn at(&self, point: OperatingPoint) -> Option<(f64, f64)> {
        let ratio = point.speed_ratio;
        let at_reference = VolumeFlow::from_si((point.flow / ratio) as f32);
        let found = self.0.curve.at(at_reference)?;
        let density = f64::from(self.0.density / self.0.reference_density);
        let head = f64::from(found.head.metres()) * ratio.powi(2);
        Some((head, f64::from(found.power.watts()) * ratio.powi(3) * density))
    }

    /// Both promises at another flow, relative to those at this one, minus one.
    fn shifted(&self, point: OperatingPoint, flow: f64) -> Option<(f64, f64)> {
        let (head, power) = self.at(point)?;
        let (other_head, other_power) = self.at(OperatingPoint { flow, ..point })?;
        Some((other_head / head - 1.0, other_power / power - 1.0))
    }

    fn best_flow(&self, point: OperatingPoint) -> f64 {
        f64::from(self.0.best_efficiency_flow) * point.speed_ratio
    }

    /// Share of the shaft power that goes into the liquid, as promised.
    fn efficiency(&self, point: OperatingPoint) -> Option<f64> {
        let (head, power) = self.at(point)?;
        Some(f64::from(self.0.density * self.0.gravity) * point.flow * head / power)
    }
}

/// Every cause considered. Severity is a share of best-efficiency flow (leakage), of head (impeller) or of the value
/// (readings, drag).
pub(crate) const HYPOTHESES: [Hypothesis; 7] = [
    Hypothesis {
        name: "worn wear rings (internal leakage), or the flow meter reads low",
        check: "take a second flow reading (clamp-on meter or tank filling time); if the meter is right, measure the \
                wear-ring clearance at the next opening",
        bounds: (0.01, 0.6),
        // The wheel passes more than is delivered.
        predict: |curve, point, severity| curve.shifted(point, point.flow + severity * curve.best_flow(point)),
    },
    Hypothesis {
        name: "impeller worn or clogged, gas in the liquid, or the speed reads high",
        check: "check the speed with a strobe, look for gas at the suction, then inspect the impeller",
        bounds: (0.01, 0.6),
        // Less work done on the stream: the power that went into the lost head goes too.
        predict: |curve, point, severity| Some((-severity, -severity * curve.efficiency(point)?)),
    },
    Hypothesis {
        name: "a pressure gauge is off (discharge reads low or suction reads high), or a loss between pump and tap",
        check: "compare both gauges with a test gauge, with the pump stopped they must differ by their heights only",
        bounds: (0.01, 0.6),
        predict: |_, _, severity| Some((-severity, 0.0)),
    },
    Hypothesis {
        name: "a pressure gauge is off (discharge reads high or suction reads low)",
        check: "compare both gauges with a test gauge, with the pump stopped they must differ by their heights only",
        bounds: (0.01, 0.6),
        predict: |_, _, severity| Some((severity, 0.0)),
    },
    Hypothesis {
        name: "more drag on the shaft (bearing, seal or rubbing), or the torque reads high",
        check: "feel and measure bearing and seal temperature, then check the torque reading",
        bounds: (0.01, 1.0),
        predict: |_, _, severity| Some((0.0, severity)),
    },
    Hypothesis {
        name: "the torque reads low",
        check: "check the torque reading against electrical power",
        bounds: (0.01, 0.9),
        predict: |_, _, severity| Some((0.0, -severity)),
    },
    Hypothesis {
        name: "the flow meter reads high",
        check: "take a second flow reading (clamp-on meter or tank filling time)",
        bounds: (0.01, 1.0),
        predict: |curve, point, severity| curve.shifted(point, point.flow / (1.0 + severity)),
    },
];

/// Words for the case that no hypothesis explains the deviation.
pub(crate) const NONE_OF_THESE: &str = "none of the known causes fits";
/// Words for a head deviation without a torque to compare.
pub(crate) const HEAD_ALONE: &str =
    "worn rings, a worn or clogged impeller, gas, or a reading that is off: not to be told apart without shaft torque";
/// What to do then.
pub(crate) const HEAD_ALONE_CHECK: &str = "check flow meter, gauges and speed reading one by one; a torque or power \
                                           reading would separate the causes";

/// Ranks causes for these deviations, most likely first, weights adding up to one.
pub(crate) fn rank(
    profile: &Profile,
    point: OperatingPoint,
    head: Option<Deviation>,
    power: Option<Deviation>,
) -> Vec<RankedCause> {
    let (Some(head), Some(power)) = (head, power) else {
        return vec![RankedCause { cause: HEAD_ALONE, weight: 1.0 }];
    };
    let curve = Curve(profile);
    let mut scores: Vec<(&'static str, f64)> = HYPOTHESES
        .iter()
        .map(|hypothesis| (hypothesis.name, best_score(hypothesis, &curve, point, head, power)))
        .collect();
    scores.push((NONE_OF_THESE, NONE_FITS));
    let best = scores.iter().map(|(_, score)| *score).fold(f64::INFINITY, f64::min);
    let weights: Vec<f64> = scores.iter().map(|(_, score)| (-0.5 * (score - best)).exp()).collect();
    let total: f64 = weights.iter().sum();
    let mut ranked: Vec<RankedCause> =
        scores.iter().zip(&weights).map(|((cause, _), weight)| RankedCause { cause, weight: weight / total }).collect();
    ranked.sort_by(|a, b| b.weight.total_cmp(&a.weight));
    ranked
}

/// The smallest misfit over all severities: squares in standard deviations.
fn best_score(
    hypothesis: &Hypothesis,
    curve: &Curve<'_>,
    point: OperatingPoint,
    head: Deviation,
    power: Deviation,
) -> f64 {
    let (least, largest) = hypothesis.bounds;
    let step = (largest / least).powf(1.0 / f64::from(SEVERITIES - 1));
    let misfit = |measured: Deviation, predicted: f64| {
        let variance = measured.uncertainty.powi(2) + (SIGNATURE_ERROR * predicted).powi(2);
        (measured.value - predicted).powi(2) / variance
    };
    (0..SEVERITIES)
        .filter_map(|k| {
            let (h, p) = (hypothesis.predict)(curve, point, least * step.powi(k as i32))?;
            Some(misfit(head, h) + misfit(power, p))
        })
        .fold(f64::INFINITY, f64::min)
}

/// The first check of a cause.
pub(crate) fn check_of(cause: &str) -> &'static str {
    if cause == HEAD_ALONE {
        return HEAD_ALONE_CHECK;
    }
    HYPOTHESES
        .iter()
        .find(|hypothesis| hypothesis.name == cause)
        .map_or("compare every reading with a second instrument", |hypothesis| hypothesis.check)
}
