//! The estimate a second time, in f64, from the formulas and not from the core's code, so that the core is held
//! against physics and not against itself.
//!
//! With ω, Q, p_s, p_d, T measured and ρ declared:
//! `H = (p_d − p_s)/(ρg) + Δz + k·Q²` (k: velocity heads of the taps' bores), `P_h = ρgQH`,
//! `c_m2 = Q_i/A2`, `Q_i = Q/η_v`, `c_u2 = u2 − c_m2·cot β2 − (1 − σ)·u2`,
//! `T_m = ρQ_i·(r2·c_u2 − r1·c_u1) + T_0·(n/n0)²·ρ/ρ0`, `P = ωT`, `η = P_h/P`, `H_e = (n/n0)²·H0(Q·n0/n)`,
//! `P_e = (n/n0)³·(ρ/ρ0)·P0(Q·n0/n)`. H0 and P0 are cubic Hermite pieces through the profile's knots.
//!
//! Uncertainties by numeric differentiation of these functions, `u² = Σ(∂f/∂x·u(x))²` over independent inputs, each
//! model's own uncertainty being one more input (a factor with mean 1). Central differences with a step of 1e-5: good
//! to about 1e-9 where the function is smooth; at a knot the second derivative jumps, which costs about 1e-5.
//! First order only, as the core's.

use offcurve_core::{
    board::{Direction, RunState},
    conditioning::ConditionedSample,
    estimate::{Estimate, Missing, Outcome, Source},
    machine::Profile,
    quantity::Quantity,
    sensing::Channel,
};

/// What the estimates are called, in the order of [`Estimate`]'s fields.
pub const NAMES: [&str; 11] = [
    "head",
    "hydraulic power",
    "momentum torque",
    "shaft torque",
    "shaft power",
    "efficiency",
    "relative flow",
    "expected head",
    "expected power",
    "head residual",
    "power residual",
];

/// One estimate in f64.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Value {
    /// The value, SI.
    pub value: f64,
    /// Its standard uncertainty, same unit.
    pub deviation: f64,
    /// What it rests on.
    pub source: Source,
    /// What rounding is to be measured by: the magnitude of the terms that make up the value. A small difference of
    /// two large terms cannot be better than their rounding.
    pub scale: f64,
}

/// All estimates, in the order of [`NAMES`].
pub type Values = [Result<Value, Missing>; 11];

/// Places of the independent inputs in a vector.
const SPEED: usize = 0;
const FLOW: usize = 1;
const SUCTION: usize = 2;
const DISCHARGE: usize = 3;
const TORQUE: usize = 4;
const DENSITY: usize = 5;
const HEAD_CURVE: usize = 6;
const POWER_CURVE: usize = 7;
const MOMENTUM: usize = 8;

/// Independent inputs: five measured, the density, and one factor of mean 1 per model.
pub type Inputs = [f64; 9];

/// Least relative uncertainty of a momentum torque without calibration.
const LEAST_MOMENTUM_DEVIATION: f64 = 0.08;
/// A shaft slower than this part of its reference speed stands still, unless the drive says otherwise.
const STANDSTILL: f64 = 0.02;
/// Speed ratios the affinity laws are trusted in.
const TRUSTED: core::ops::RangeInclusive<f64> = 0.2..=1.2;

/// The inputs of a sample with a profile: value and standard uncertainty, and which channels have one.
#[derive(Clone, Copy, Debug)]
pub struct Given {
    /// Values.
    pub value: Inputs,
    /// Standard uncertainties.
    pub deviation: Inputs,
    present: [bool; 5],
}

impl Given {
    /// Reads a sample; a channel without a finite value is not present.
    #[must_use]
    pub fn new(sample: &ConditionedSample, profile: &Profile) -> Self {
        let (mut value, mut deviation, mut present) = ([0.0; 9], [0.0; 9], [false; 5]);
        for (place, channel) in Channel::ALL.into_iter().enumerate() {
            if let Ok(reading) = sample.channel(channel)
                && reading.value.is_finite()
            {
                value[place] = f64::from(reading.value);
                let octaves = f64::from(channel.deviation_base()) + f64::from(reading.deviation.code()) / 8.0;
                deviation[place] = octaves.exp2();
                present[place] = true;
            }
        }
        value[DENSITY] = f64::from(profile.density);
        deviation[DENSITY] = f64::from(profile.density_deviation);
        for (place, relative) in [
            (HEAD_CURVE, f64::from(profile.head_curve_deviation)),
            (POWER_CURVE, f64::from(profile.power_curve_deviation)),
            (
                MOMENTUM,
                profile.impeller.map_or(0.0, |wheel| f64::from(wheel.model_deviation).max(LEAST_MOMENTUM_DEVIATION)),
            ),
        ] {
            value[place] = 1.0;
            deviation[place] = relative;
        }
        Self { value, deviation, present }
    }

    fn lacks(&self, channel: Channel) -> Option<Missing> {
        let place = Channel::ALL.iter().position(|&each| each == channel)?;
        (!self.present[place]).then_some(Missing::Channel(channel))
    }
}

/// Total head between the taps, m.
#[must_use]
pub fn head(p: &Profile, x: &Inputs) -> f64 {
    (x[DISCHARGE] - x[SUCTION]) / (x[DENSITY] * f64::from(p.gravity))
        + f64::from(p.taps.elevation)
        + f64::from(p.taps.velocity_head) * x[FLOW].powi(2)
}

/// Power put into the liquid, W.
#[must_use]
pub fn hydraulic_power(p: &Profile, x: &Inputs) -> f64 {
    x[DENSITY] * f64::from(p.gravity) * x[FLOW] * head(p, x)
}

/// Shaft torque by moment of momentum, N·m; 0 without an impeller.
#[must_use]
pub fn momentum_torque(p: &Profile, x: &Inputs) -> f64 {
    let Some(wheel) = p.impeller else { return 0.0 };
    let r2 = f64::from(wheel.outlet_radius);
    let u2 = x[SPEED] * r2;
    let through = x[FLOW] / f64::from(wheel.volumetric_efficiency);
    let meridional = through / f64::from(wheel.outlet_area);
    let without_slip = u2 - meridional * f64::from(wheel.outlet_cotangent);
    let whirl = without_slip - (1.0 - f64::from(wheel.slip_factor)) * u2;
    let brought_in = f64::from(wheel.inlet_whirl) * x[SPEED] * r2.powi(2);
    let stream = x[DENSITY] * through * (r2 * whirl - brought_in);
    let drag = f64::from(wheel.drag_torque) * speed_ratio(p, x).powi(2) * x[DENSITY] / f64::from(p.reference_density);
    (stream + drag) * x[MOMENTUM]
}

/// Speed over reference speed.
#[must_use]
pub fn speed_ratio(p: &Profile, x: &Inputs) -> f64 {
    x[SPEED] / f64::from(p.reference_speed)
}

/// Flow over the flow of best efficiency at this speed.
#[must_use]
pub fn relative_flow(p: &Profile, x: &Inputs) -> f64 {
    x[FLOW] / speed_ratio(p, x) / f64::from(p.best_efficiency_flow)
}

/// Head the curve promises at this speed and flow, m.
#[must_use]
pub fn expected_head(p: &Profile, x: &Inputs) -> f64 {
    let n = speed_ratio(p, x);
    x[HEAD_CURVE] * n.powi(2) * read_curve(p, x[FLOW] / n, Of::Head)
}

/// Shaft power the curve promises at this speed, flow and density, W.
#[must_use]
pub fn expected_power(p: &Profile, x: &Inputs) -> f64 {
    let n = speed_ratio(p, x);
    let denser = x[DENSITY] / f64::from(p.reference_density);
    x[POWER_CURVE] * n.powi(3) * denser * read_curve(p, x[FLOW] / n, Of::Power)
}

#[derive(Clone, Copy)]
enum Of {
    Head,
    Power,
}

/// The curve at a flow, by Hermite's four basis polynomials; the end pieces go on beyond the knots, so that derivatives
/// exist there.
fn read_curve(p: &Profile, flow: f64, of: Of) -> f64 {
    let knots = p.curve.knots();
    let last = knots.len() - 2;
    let piece = (0..=last).find(|&k| flow <= f64::from(knots[k + 1].flow)).unwrap_or(last);
    let (a, b) = (&knots[piece], &knots[piece + 1]);
    let ((ya, sa), (yb, sb)) = match of {
        Of::Head => ((a.head, a.head_slope), (b.head, b.head_slope)),
        Of::Power => ((a.power, a.power_slope), (b.power, b.power_slope)),
    };
    let width = f64::from(b.flow) - f64::from(a.flow);
    let t = (flow - f64::from(a.flow)) / width;
    let s = 1.0 - t;
    f64::from(ya) * s * s * (1.0 + 2.0 * t)
        + f64::from(yb) * t * t * (1.0 + 2.0 * s)
        + width * (f64::from(sa) * t * s * s - f64::from(sb) * s * t * t)
}

/// Value, uncertainty and scale of a law at the given inputs.
fn evaluate(given: &Given, source: Source, terms: f64, law: impl Fn(&Inputs) -> f64) -> Value {
    let value = law(&given.value);
    let (mut variance, mut scale) = (0.0, value.abs() + terms);
    for place in 0..given.value.len() {
        let step = 1e-5 * given.value[place].abs().max(given.deviation[place]);
        if step == 0.0 {
            continue;
        }
        let at = |sign: f64| {
            let mut moved = given.value;
            moved[place] += sign * step;
            law(&moved)
        };
        let slope = (at(1.0) - at(-1.0)) / (2.0 * step);
        variance += (slope * given.deviation[place]).powi(2);
        scale += (slope * given.value[place]).abs();
    }
    Value { value, deviation: variance.sqrt(), source, scale }
}

/// All estimates of a sample, with the reason where there is none.
///
/// Where several things are missing, the reason is the first in the order in which a law names its inputs: head before
/// flow in ρgQH, torque before speed in ωT, speed before flow on the curve. Signs are judged last.
pub fn values(sample: &ConditionedSample, p: &Profile) -> Values {
    let given = Given::new(sample, p);
    let x = &given.value;
    let sign = |value: f64, missing| (value <= 0.0).then_some(missing);

    let flow_lacks = given.lacks(Channel::Flow);
    let head_lacks = given
        .lacks(Channel::SuctionPressure)
        .or(given.lacks(Channel::DischargePressure))
        .or(if p.taps.velocity_head == 0.0 { None } else { flow_lacks });
    let hydraulic_lacks = head_lacks.or(flow_lacks);

    let still = sample.run == RunState::Stopped || speed_ratio(p, x) < STANDSTILL;
    let speed_lacks = given
        .lacks(Channel::Speed)
        .or(still.then_some(Missing::NotRunning))
        .or((sample.direction == Direction::Reverse).then_some(Missing::ReverseRotation));
    let ratio_lacks = speed_lacks.or((!TRUSTED.contains(&speed_ratio(p, x))).then_some(Missing::SpeedOutOfRange));
    let relative_lacks = ratio_lacks.or(flow_lacks);

    let onset = p.impeller.map_or(0.0, |wheel| f64::from(wheel.recirculation_onset));
    let momentum_lacks = p
        .impeller
        .is_none()
        .then_some(Missing::NoImpeller)
        .or(relative_lacks)
        .or(sign(x[FLOW], Missing::FlowNotPositive))
        .or_else(|| (relative_flow(p, x) < onset).then_some(Missing::Recirculation));

    let measured_lacks = given.lacks(Channel::ShaftTorque);
    let (torque_source, torque_lacks) = match (measured_lacks, momentum_lacks) {
        (None, _) if p.shaft_torque.from_drive => (Source::FromDrive, None),
        (None, _) => (Source::Measured, None),
        (Some(_), None) => (Source::FromMomentum, None),
        (Some(missing), Some(_)) => (Source::Measured, Some(missing)),
    };
    let by_model = torque_source == Source::FromMomentum;
    let torque = |x: &Inputs| if by_model { momentum_torque(p, x) } else { x[TORQUE] };
    let power = |x: &Inputs| x[SPEED] * torque(x);
    let power_lacks = torque_lacks.or(speed_lacks);

    let efficiency_lacks = hydraulic_lacks
        .or(power_lacks)
        .or(sign(x[FLOW], Missing::FlowNotPositive))
        .or_else(|| sign(head(p, x), Missing::HeadNotPositive))
        .or_else(|| sign(power(x), Missing::PowerNotPositive));

    let knots = p.curve.knots();
    let (first, last) = (f64::from(knots[0].flow), f64::from(knots[knots.len() - 1].flow));
    let expected_lacks = relative_lacks.or_else(|| {
        let at_reference = x[FLOW] / speed_ratio(p, x);
        (!(first..=last).contains(&at_reference)).then_some(Missing::OutsideCurve)
    });
    let head_residual_lacks = head_lacks.or(expected_lacks);
    let power_residual_lacks = if by_model { Some(Missing::TorqueNotMeasured) } else { power_lacks.or(expected_lacks) };

    // The largest knot stands for the polynomial's terms, which may cancel between knots.
    let largest = |y: fn(&offcurve_core::machine::curve::Knot) -> f32| {
        knots.iter().map(|knot| f64::from(y(knot)).abs()).fold(0.0, f64::max)
    };
    let n = speed_ratio(p, x);
    let head_terms = n.powi(2) * largest(|knot| knot.head);
    let power_terms = n.powi(3) * x[DENSITY] / f64::from(p.reference_density) * largest(|knot| knot.power);

    let or = |missing: Option<Missing>, source, terms, law: &dyn Fn(&Inputs) -> f64| match missing {
        Some(missing) => Err(missing),
        None => Ok(evaluate(&given, source, terms, law)),
    };
    [
        or(head_lacks, Source::Measured, f64::from(p.taps.elevation).abs(), &|x| head(p, x)),
        or(hydraulic_lacks, Source::Measured, 0.0, &|x| hydraulic_power(p, x)),
        or(momentum_lacks, Source::FromMomentum, 0.0, &|x| momentum_torque(p, x)),
        or(torque_lacks, torque_source, 0.0, &torque),
        or(power_lacks, torque_source, 0.0, &power),
        or(efficiency_lacks, torque_source, 0.0, &|x| hydraulic_power(p, x) / power(x)),
        or(relative_lacks, Source::Measured, 0.0, &|x| relative_flow(p, x)),
        or(expected_lacks, Source::FromCurve, head_terms, &|x| expected_head(p, x)),
        or(expected_lacks, Source::FromCurve, power_terms, &|x| expected_power(p, x)),
        or(head_residual_lacks, Source::Measured, head_terms, &|x| head(p, x) - expected_head(p, x)),
        or(power_residual_lacks, torque_source, power_terms, &|x| power(x) - expected_power(p, x)),
    ]
}

/// The core's estimate as a list in the order of [`NAMES`]: value, standard uncertainty and source, or the reason.
pub fn listed(estimate: &Estimate) -> [Result<(f64, f64, Source), Missing>; 11] {
    fn plain<T: Quantity>(outcome: &Outcome<T>) -> Result<(f64, f64, Source), Missing> {
        outcome.map(|found| (f64::from(found.value.si()), f64::from(found.deviation.si()), found.source))
    }
    [
        plain(&estimate.head),
        plain(&estimate.hydraulic_power),
        plain(&estimate.momentum_torque),
        plain(&estimate.shaft_torque),
        plain(&estimate.shaft_power),
        plain(&estimate.efficiency),
        plain(&estimate.relative_flow),
        plain(&estimate.expected_head),
        plain(&estimate.expected_power),
        plain(&estimate.head_residual),
        plain(&estimate.power_residual),
    ]
}
