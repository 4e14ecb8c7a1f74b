//! Reconciles the witnesses of one flow: the meter, the flow read off the head curve and the flow read off the power
//! curve. Best value, whether they agree, and what can be the matter if they do not (the idea of VDI 2048 and of the
//! measurement tests of process data reconciliation).
//!
//! With values `x`, covariance `V` and `1 = (1, 1, 1)`: `Q̂ = 1ᵀV⁻¹x / 1ᵀV⁻¹1`, `u²(Q̂) = 1/(1ᵀV⁻¹1)`,
//! `χ² = (x − Q̂)ᵀV⁻¹(x − Q̂)` with one degree of freedom less than witnesses. `V` is full where witnesses share the
//! speed reading or the density. A cause that moves the witnesses along `d` (one of them alone, or all that rest on the
//! speed) is rejected when what remains after it, `(cᵀx)²/(cᵀVc)` with `c = 1 × d`, is too large by chance.
//!
//! A witness that disagrees is not a faulty sensor: head and power witness also rest on the machine following its
//! curve. Therefore the machine is always among the suspects unless it is ruled out, and it is ruled out only by what
//! wear and gas cannot do at one point: raise the head above the curve, or raise the efficiency above that of the
//! curve. A machine worn inside, with perfect sensors, shows as the meter against the other two; a meter that reads low
//! shows the same. At one operating point nothing tells them apart, and the verdict says so.
//!
//! Where it stops being true: uncertainties that are stated too small make agreement a disagreement; errors common to
//! all witnesses show nowhere; first order, so signs stay right and sizes do not when the witnesses are far apart.

use crate::{
    estimate::{Estimated, Missing, Outcome},
    inverse::{Attributed, CurveFlow},
    math,
    quantity::{Quantity, VolumeFlow},
};

/// χ² beyond which witnesses disagree, for 1 and 2 degrees of freedom: 99.9 %. Systematic errors are drawn once per
/// machine, not once per second, so this is about one sound machine in a thousand.
const DISAGREE: [f32; 2] = [10.828, 13.816];

/// χ² with one degree of freedom beyond which one explanation is rejected: 99 %.
const REJECT: f32 = 6.635;

/// Smallest determinant of the correlation matrix that is still inverted: f32 leaves about 1e-3 of the result there.
const SMALLEST_DETERMINANT: f32 = 1e-3;

/// What a flow rests on.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum FlowSource {
    /// The flow meter.
    Meter,
    /// Head and speed, through the expected curve.
    Head,
    /// Shaft power and speed, through the expected curve.
    Power,
    /// Several of these, weighted.
    Reconciled(Suspects),
}

/// A set of things that can be at fault, or of witnesses that were used.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Suspects(u8);

impl Suspects {
    /// Nothing.
    pub const NONE: Self = Self(0);
    /// The flow meter.
    pub const METER: Self = Self(1);
    /// The pressure gauges.
    pub const HEAD: Self = Self(1 << 1);
    /// The torque or power reading.
    pub const POWER: Self = Self(1 << 2);
    /// The speed reading.
    pub const SPEED: Self = Self(1 << 3);
    /// The machine (wear, gas, a liquid other than assumed): it does not follow its curve.
    pub const MACHINE: Self = Self(1 << 4);

    /// The three witnesses, in the order of every array here.
    const WITNESSES: [Self; 3] = [Self::METER, Self::HEAD, Self::POWER];

    /// The bits, for records.
    #[must_use]
    pub const fn bits(self) -> u8 {
        self.0
    }

    /// Whether all of `other` are in the set.
    #[must_use]
    pub const fn contains(self, other: Self) -> bool {
        self.0 & other.0 == other.0
    }

    const fn with(self, other: Self, there: bool) -> Self {
        if there { Self(self.0 | other.0) } else { self }
    }
}

/// What the witnesses say together.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Verdict {
    /// One witness: nothing to compare.
    NotRedundant,
    /// They agree within their uncertainties.
    Consistent,
    /// They disagree, and of all that was considered only this instrument explains it.
    Sensor(Instrument),
    /// They disagree, and no single instrument explains it, but a machine below its curve does.
    Machine,
    /// They disagree, and several things explain it ([`Reconciled::suspects`]), or none alone.
    Ambiguous,
}

/// An instrument that a verdict can name.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Instrument {
    /// The flow meter.
    FlowMeter,
    /// The pressure gauges.
    Pressure,
    /// The torque or power reading.
    Torque,
    /// The speed reading.
    Speed,
}

/// Why there is no reconciled flow.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Unreconciled {
    /// No witness at all.
    NoWitness,
    /// A value is not finite, or a witness claims to have no uncertainty.
    BadUncertainty,
    /// The witnesses share so much that they are one.
    NotIndependent,
}

/// The reconciled flow.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Reconciled {
    /// Best flow by least squares. When the verdict is not [`Verdict::Consistent`] it is an average over a contradiction.
    pub flow: VolumeFlow,
    /// Its standard uncertainty, as if the witnesses agreed.
    pub deviation: VolumeFlow,
    /// Where it came from.
    pub source: FlowSource,
    /// Misfit over all witnesses, χ²; 0 with one witness.
    pub chi_square: f32,
    /// Degrees of freedom of `chi_square`: witnesses less one.
    pub degrees_of_freedom: u8,
    /// How far meter, head and power witness lie from what the others say, in standard deviations, positive when above;
    /// `None` without the witness or without others. With two witnesses both have the same magnitude.
    pub misfit: [Option<f32>; 3],
    /// What the witnesses say together.
    pub verdict: Verdict,
    /// When they disagree: what alone would explain it.
    pub suspects: Suspects,
}

/// Symmetric 3 × 3 matrix: the diagonal, then the elements (1,2), (0,2), (0,1), each opposite its diagonal.
#[derive(Clone, Copy)]
struct Symmetric {
    diagonal: [f32; 3],
    off: [f32; 3],
}

impl Symmetric {
    fn times(&self, v: [f32; 3]) -> [f32; 3] {
        let ([a, b, c], [f, e, d]) = (self.diagonal, self.off);
        let [x, y, z] = v;
        [a * x + d * y + e * z, d * x + b * y + f * z, e * x + f * y + c * z]
    }

    /// `vᵀ·self·v`
    fn form(&self, v: [f32; 3]) -> f32 {
        dot(v, self.times(v))
    }

    /// Determinant and adjugate, in closed form.
    fn adjugate(&self) -> (f32, Self) {
        let ([a, b, c], [f, e, d]) = (self.diagonal, self.off);
        let diagonal = [b * c - f * f, a * c - e * e, a * b - d * d];
        let off = [d * e - a * f, d * f - b * e, e * f - c * d];
        let ([first, ..], [_, third, second]) = (diagonal, off);
        (a * first + d * second + e * third, Self { diagonal, off })
    }
}

fn variance(witness: &Attributed) -> f32 {
    witness.own * witness.own + witness.speed * witness.speed + witness.density * witness.density
}

fn dot(a: [f32; 3], b: [f32; 3]) -> f32 {
    let ([a, b, c], [x, y, z]) = (a, b);
    a * x + b * y + c * z
}

fn products(a: [f32; 3], b: [f32; 3]) -> [f32; 3] {
    let ([a, b, c], [x, y, z]) = (a, b);
    [a * x, b * y, c * z]
}

/// Reconciles up to three witnesses of one flow (m³/s). A witness that has no value is left out.
///
/// # Errors
/// [`Unreconciled`].
pub fn reconcile(
    meter: Option<Attributed>,
    head: Option<CurveFlow>,
    power: Option<CurveFlow>,
) -> Result<Reconciled, Unreconciled> {
    let given = [meter, head.map(|found| found.flow), power.map(|found| found.flow)];
    let mut used = Suspects::NONE;
    let mut count = 0_u8;
    for (witness, name) in given.iter().zip(Suspects::WITNESSES) {
        used = used.with(name, witness.is_some());
        count = count.wrapping_add(u8::from(witness.is_some()));
    }
    // Values count from the first witness, so that no digits are lost in differences.
    let first = given.iter().flatten().next().ok_or(Unreconciled::NoWitness)?;
    let (origin, unit) = (first.value, variance(first));
    let usable = |witness: &Attributed| {
        let variance = variance(witness);
        witness.value.is_finite() && variance.is_finite() && variance >= f32::MIN_POSITIVE
    };
    if !given.iter().flatten().all(usable) {
        return Err(Unreconciled::BadUncertainty);
    }
    // Covariances in units of the first variance, so that their products stay within f32. A witness left out is 0 in
    // every sum, and has nothing in common with others.
    let there = given.map(|witness| if witness.is_some() { 1.0 } else { 0.0 });
    let x = given.map(|witness| witness.map_or(0.0, |witness| witness.value - origin));
    let [m, h, p] = given.map(Option::unwrap_or_default);
    let per_unit = 1.0 / unit;
    let covariance = Symmetric {
        diagonal: given.map(|witness| witness.map_or(1.0, |witness| variance(&witness) * per_unit)),
        off: [h.covariance(&p) * per_unit, m.covariance(&p) * per_unit, m.covariance(&h) * per_unit],
    };
    let (determinant, adjugate) = covariance.adjugate();
    let [a, b, c] = covariance.diagonal;
    let independence = determinant / (a * b * c); // determinant of the correlation matrix
    if independence.is_nan() || independence < SMALLEST_DETERMINANT {
        return Err(Unreconciled::NotIndependent);
    }
    // Everything below with the adjugate in place of the inverse; the determinant comes in at the end.
    let weight = products(there, adjugate.times(there));
    let information = dot(there, weight);
    let sums = adjugate.times(x);
    let mean = dot(there, sums) / information;
    let [pulled_m, pulled_h, pulled_p] = sums;
    let [wm, wh, wp] = weight;
    let pulled = [pulled_m - mean * wm, pulled_h - mean * wh, pulled_p - mean * wp];
    let residual = products(there, x.map(|value| value - mean));
    let chi_square = if count > 1 { dot(residual, pulled) / determinant * per_unit } else { 0.0 };

    let mut misfit = [None; 3];
    let parts = misfit.iter_mut().zip(given).zip(pulled.iter().zip(adjugate.diagonal).zip(weight));
    for ((misfit, witness), ((pulled, own), weight)) in parts {
        let variance = (own - weight * weight / information) * determinant * unit;
        if witness.is_some() && count > 1 && variance > 0.0 {
            // Not finite where the variances lie tens of orders apart: then nothing is known of this witness.
            *misfit = Some(pulled / math::sqrt(variance)).filter(|misfit| misfit.is_finite());
        }
    }
    let covariance = Symmetric {
        diagonal: covariance.diagonal.map(|element| element * unit),
        off: covariance.off.map(|element| element * unit),
    };
    let limit = if count == 3 { DISAGREE[1] } else { DISAGREE[0] };
    let (verdict, suspects) = if count < 2 {
        (Verdict::NotRedundant, Suspects::NONE)
    } else if chi_square <= limit {
        (Verdict::Consistent, Suspects::NONE)
    } else {
        let elasticity = [head, power].map(|found| found.map(|found| found.elasticity));
        let machine = machine_possible(meter.is_some(), elasticity, x, &covariance);
        let suspects = if count == 3 { explanations(x, &covariance, [m.speed, h.speed, p.speed]) } else { used };
        // Two witnesses cannot say more than that they disagree: the speed reading moves at least one of them.
        let suspects = suspects.with(Suspects::SPEED, count == 2).with(Suspects::MACHINE, machine);
        (verdict(suspects, count), suspects)
    };
    let flow = origin + mean;
    let deviation = math::sqrt(determinant / information * unit);
    if !flow.is_finite() || !deviation.is_finite() || !chi_square.is_finite() {
        return Err(Unreconciled::BadUncertainty);
    }
    let source = match used {
        Suspects::METER => FlowSource::Meter,
        Suspects::HEAD => FlowSource::Head,
        Suspects::POWER => FlowSource::Power,
        several => FlowSource::Reconciled(several),
    };
    Ok(Reconciled {
        flow: VolumeFlow::from_si(flow),
        deviation: VolumeFlow::from_si(deviation),
        source,
        chi_square,
        degrees_of_freedom: count.saturating_sub(1),
        misfit,
        verdict,
        suspects,
    })
}

fn verdict(suspects: Suspects, count: u8) -> Verdict {
    match suspects {
        _ if count < 3 => Verdict::Ambiguous,
        Suspects::METER => Verdict::Sensor(Instrument::FlowMeter),
        Suspects::HEAD => Verdict::Sensor(Instrument::Pressure),
        Suspects::POWER => Verdict::Sensor(Instrument::Torque),
        Suspects::SPEED => Verdict::Sensor(Instrument::Speed),
        Suspects::MACHINE => Verdict::Machine,
        _ => Verdict::Ambiguous,
    }
}

/// Which instruments, each alone, would explain three witnesses that disagree.
fn explanations(x: [f32; 3], covariance: &Symmetric, speed: [f32; 3]) -> Suspects {
    let explains = |direction: [f32; 3]| {
        let [a, b, c] = direction;
        let across = [c - b, a - c, b - a]; // 1 × d: blind to the flow and to a move along d
        let off = dot(across, x);
        let variance = covariance.form(across);
        variance > 0.0 && off * off <= REJECT * variance
    };
    let [m, h, p] = speed;
    // Moved all alike, or not at all, nothing is explained.
    let speed_differs = m != h || h != p;
    Suspects::NONE
        .with(Suspects::METER, explains([1.0, 0.0, 0.0]))
        .with(Suspects::HEAD, explains([0.0, 1.0, 0.0]))
        .with(Suspects::POWER, explains([0.0, 0.0, 1.0]))
        .with(Suspects::SPEED, speed_differs && explains(speed))
}

/// Whether a machine that has fallen below its curve could show like this, the meter being right: head not above the
/// curve, efficiency not above that of the curve, beyond doubt. `δH/H = e_H·(Q_H − Q_m)/Q` and so for power; the
/// efficiency's is their difference. Without a meter, or with no curve witness, nothing rules it out.
fn machine_possible(metered: bool, elasticity: [Option<f32>; 2], x: [f32; 3], covariance: &Symmetric) -> bool {
    // A weighted sum of the witnesses that is above zero beyond doubt.
    let positive = |weights: [f32; 3]| {
        let sum = dot(weights, x);
        sum > 0.0 && sum * sum > REJECT * covariance.form(weights)
    };
    if !metered {
        return true;
    }
    let head_above = elasticity[0].is_some_and(|e| positive([-e, e, 0.0]));
    let efficiency_above = match elasticity {
        [Some(head), Some(power)] => positive([power - head, head, -power]),
        _ => false,
    };
    !head_above && !efficiency_above
}

/// Why there is no residual.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum NoResidual {
    /// It has no value.
    Missing(Missing),
    /// Its reading was used to find the flow, so it is zero, or too small, by construction. What the reading has to say is in
    /// [`Reconciled::misfit`].
    Consumed,
}

/// A residual against the curve, unless its own reading was used to find the flow it was taken at.
///
/// `reading` is what the residual compares with the curve: [`Suspects::HEAD`] or [`Suspects::POWER`].
///
/// # Errors
/// [`NoResidual`].
pub fn residual<T>(reading: Suspects, flow: FlowSource, residual: Outcome<T>) -> Result<Estimated<T>, NoResidual> {
    let used = match flow {
        FlowSource::Meter => Suspects::METER,
        FlowSource::Head => Suspects::HEAD,
        FlowSource::Power => Suspects::POWER,
        FlowSource::Reconciled(several) => several,
    };
    if used.contains(reading) { Err(NoResidual::Consumed) } else { residual.map_err(NoResidual::Missing) }
}

#[cfg(test)]
mod tests;
