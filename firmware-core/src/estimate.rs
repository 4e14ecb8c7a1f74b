//! The estimate: what the machine does right now, what its curve promises at this speed and density, and how far the
//! two are apart, each with its standard uncertainty, its source, or the reason it is missing.
//!
//! Pure: the same sample and profile give the same bits on the controller and on the host, which is checked with
//! [`Estimate::checksum`]. Efficiency for zero or negative flow, head or shaft power is undefined and reported so, not
//! clamped. A torque from the momentum model never counts as measured, and nothing is compared with the curve through
//! it.
//! Steady running is assumed: no inertia of rotor or liquid enters (a speed ramp shows in the residuals).

use crate::{
    affinity::SpeedRatio,
    board::{Direction, RunState},
    checksum::Running,
    conditioning::ConditionedSample,
    head,
    machine::Profile,
    momentum,
    quantity::{Head, Power, Quantity, Ratio, Torque},
    sensing::Channel,
    uncertain::{Input, Uncertain},
};

/// What a value rests on.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Source {
    /// Instruments.
    Measured,
    /// The drive's own value for at least one part.
    FromDrive,
    /// The momentum model for at least one part; never to be called measured.
    FromMomentum,
    /// The expected curve.
    FromCurve,
}

impl Source {
    const fn code(self) -> u8 {
        match self {
            Self::Measured => 1,
            Self::FromDrive => 2,
            Self::FromMomentum => 3,
            Self::FromCurve => 4,
        }
    }

    /// One or two words for tables and logs.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::Measured => "measured",
            Self::FromDrive => "from drive",
            Self::FromMomentum => "from momentum",
            Self::FromCurve => "from curve",
        }
    }
}

/// Why a value is missing.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Missing {
    /// A channel it needs has no value; the sample says why.
    Channel(Channel),
    /// The machine is not running.
    NotRunning,
    /// The shaft turns against its design direction.
    ReverseRotation,
    /// Speed outside the range the affinity laws are trusted in.
    SpeedOutOfRange,
    /// Undefined for zero or negative flow.
    FlowNotPositive,
    /// Undefined for zero or negative head.
    HeadNotPositive,
    /// Undefined for zero or negative shaft power.
    PowerNotPositive,
    /// The flow, carried to the reference speed, lies outside the curve's knots.
    OutsideCurve,
    /// The profile has no impeller dimensions.
    NoImpeller,
    /// Below the declared onset of recirculation the momentum model says nothing.
    Recirculation,
    /// Only a measured torque can be compared with the curve.
    TorqueNotMeasured,
}

impl Missing {
    const fn code(self) -> u8 {
        match self {
            Self::Channel(channel) => 0x80 | channel as u8,
            Self::NotRunning => 0x40,
            Self::ReverseRotation => 0x41,
            Self::SpeedOutOfRange => 0x42,
            Self::FlowNotPositive => 0x43,
            Self::HeadNotPositive => 0x44,
            Self::PowerNotPositive => 0x45,
            Self::OutsideCurve => 0x46,
            Self::NoImpeller => 0x47,
            Self::Recirculation => 0x48,
            Self::TorqueNotMeasured => 0x49,
        }
    }

    /// A few words for tables and logs.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::Channel(Channel::Speed) => "no speed",
            Self::Channel(Channel::Flow) => "no flow reading",
            Self::Channel(Channel::SuctionPressure) => "no suction pressure",
            Self::Channel(Channel::DischargePressure) => "no discharge pressure",
            Self::Channel(Channel::ShaftTorque) => "no shaft torque",
            Self::NotRunning => "not running",
            Self::ReverseRotation => "reverse rotation",
            Self::SpeedOutOfRange => "speed out of range",
            Self::FlowNotPositive => "flow not positive",
            Self::HeadNotPositive => "head not positive",
            Self::PowerNotPositive => "power not positive",
            Self::OutsideCurve => "outside the curve",
            Self::NoImpeller => "no impeller data",
            Self::Recirculation => "recirculation",
            Self::TorqueNotMeasured => "torque not measured",
        }
    }
}

/// A value with its standard uncertainty and what it rests on.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Estimated<T> {
    /// The value.
    pub value: T,
    /// Its standard uncertainty (one standard deviation), same unit.
    pub deviation: T,
    /// What it rests on.
    pub source: Source,
}

/// A value, or why there is none.
pub type Outcome<T> = Result<Estimated<T>, Missing>;

/// All estimates of one machine at one instant.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Estimate {
    /// Total head between the taps.
    pub head: Outcome<Head>,
    /// Power put into the liquid.
    pub hydraulic_power: Outcome<Power>,
    /// Shaft torque by the momentum model.
    pub momentum_torque: Outcome<Torque>,
    /// Shaft torque: measured, from the drive, or from the momentum model.
    pub shaft_torque: Outcome<Torque>,
    /// Shaft power.
    pub shaft_power: Outcome<Power>,
    /// Hydraulic over shaft power.
    pub efficiency: Outcome<Ratio>,
    /// Flow relative to that of best efficiency at this speed.
    pub relative_flow: Outcome<Ratio>,
    /// Head the curve promises at this speed and flow.
    pub expected_head: Outcome<Head>,
    /// Shaft power the curve promises at this speed, flow and density.
    pub expected_power: Outcome<Power>,
    /// Head minus expected head.
    pub head_residual: Outcome<Head>,
    /// Shaft power minus expected power, from a measured torque only.
    pub power_residual: Outcome<Power>,
}

/// Speed below which a shaft with an unknown run state counts as not running, relative to the reference speed.
const STANDSTILL: f32 = 0.02;

/// Estimates everything the sample allows.
#[must_use]
pub fn estimate(sample: &ConditionedSample, profile: &Profile) -> Estimate {
    let density = Uncertain::input(Input::Density, profile.density, profile.density_deviation);
    let flow = input(sample, Channel::Flow, Input::Flow);
    let head = head(sample, profile, &flow, &density);
    let speed = running_speed(sample, profile);
    let ratio = speed.and_then(|speed| {
        let ratio = speed.scaled(1.0 / profile.reference_speed);
        SpeedRatio::new(ratio.value).map(|_| ratio).map_err(|_| Missing::SpeedOutOfRange)
    });

    let hydraulic_power = match (&head, &flow) {
        (Ok(head), Ok(flow)) => Ok(head::hydraulic_power(head, flow, &density, profile.gravity)),
        (Err(missing), _) | (_, Err(missing)) => Err(*missing),
    };
    let relative_flow = match (&ratio, &flow) {
        (Ok(ratio), Ok(flow)) => Ok(flow.over(ratio).scaled(1.0 / profile.best_efficiency_flow)),
        (Err(missing), _) | (_, Err(missing)) => Err(*missing),
    };

    let momentum_torque = momentum_torque(profile, &speed, &ratio, &flow, &relative_flow, &density);
    let measured = reading(sample, Channel::ShaftTorque).map(|(torque, deviation)| Uncertain::once(torque, deviation));
    let (shaft_torque, torque_source) = match (measured, &momentum_torque) {
        (Ok(torque), _) if profile.shaft_torque.from_drive => (Ok(torque), Source::FromDrive),
        (Ok(torque), _) => (Ok(torque), Source::Measured),
        (Err(_), Ok(torque)) => (Ok(*torque), Source::FromMomentum),
        (Err(missing), Err(_)) => (Err(missing), Source::Measured),
    };
    let shaft_power = both(&shaft_torque, &speed, Uncertain::times);
    let efficiency = efficiency(&hydraulic_power, &shaft_power, &flow, &head);

    let (expected_head, expected_power) = expected(profile, &ratio, &flow, &density);
    let head_residual = both(&head, &expected_head, Uncertain::minus);
    let power_residual = if torque_source == Source::FromMomentum {
        Err(Missing::TorqueNotMeasured)
    } else {
        both(&shaft_power, &expected_power, Uncertain::minus)
    };

    Estimate {
        head: outcome(head, Source::Measured),
        hydraulic_power: outcome(hydraulic_power, Source::Measured),
        momentum_torque: outcome(momentum_torque, Source::FromMomentum),
        shaft_torque: outcome(shaft_torque, torque_source),
        shaft_power: outcome(shaft_power, torque_source),
        efficiency: outcome(efficiency, torque_source),
        relative_flow: outcome(relative_flow, Source::Measured),
        expected_head: outcome(expected_head, Source::FromCurve),
        expected_power: outcome(expected_power, Source::FromCurve),
        head_residual: outcome(head_residual, Source::Measured),
        power_residual: outcome(power_residual, torque_source),
    }
}

type Step = Result<Uncertain, Missing>;

fn outcome<T: Quantity>(step: Step, source: Source) -> Outcome<T> {
    step.map(|found| Estimated { value: T::from_si(found.value), deviation: T::from_si(found.deviation()), source })
}

fn both(a: &Step, b: &Step, law: fn(&Uncertain, &Uncertain) -> Uncertain) -> Step {
    match (a, b) {
        (Ok(a), Ok(b)) => Ok(law(a, b)),
        (Err(missing), _) | (_, Err(missing)) => Err(*missing),
    }
}

/// Value and standard uncertainty of a channel.
fn reading(sample: &ConditionedSample, channel: Channel) -> Result<(f32, f32), Missing> {
    match sample.channel(channel) {
        Ok(reading) if reading.value.is_finite() => {
            Ok((reading.value, reading.deviation.value(channel.deviation_base())))
        }
        _ => Err(Missing::Channel(channel)),
    }
}

fn input(sample: &ConditionedSample, channel: Channel, input: Input) -> Step {
    reading(sample, channel).map(|(value, deviation)| Uncertain::input(input, value, deviation))
}

fn head(sample: &ConditionedSample, profile: &Profile, flow: &Step, density: &Uncertain) -> Step {
    let (suction, of_suction) = reading(sample, Channel::SuctionPressure)?;
    let (discharge, of_discharge) = reading(sample, Channel::DischargePressure)?;
    // Two gauges, independent errors: they add as variances, so they are one input of their own.
    let deviation = crate::math::root_sum_square([of_suction, of_discharge]);
    let rise = Uncertain::input(Input::PressureRise, discharge - suction, deviation);
    let flow = match flow {
        Ok(flow) => *flow,
        // Equal bores: no velocity head, so the flow is not needed.
        Err(_) if profile.taps.velocity_head == 0.0 => Uncertain::exact(0.0),
        Err(missing) => return Err(*missing),
    };
    Ok(head::total_head(&profile.taps, &rise, &flow, density, profile.gravity))
}

/// Speed of a machine that runs in its design direction, rad/s.
fn running_speed(sample: &ConditionedSample, profile: &Profile) -> Step {
    let speed = input(sample, Channel::Speed, Input::Speed)?;
    if sample.run == RunState::Stopped || speed.value < STANDSTILL * profile.reference_speed {
        return Err(Missing::NotRunning);
    }
    if sample.direction == Direction::Reverse {
        return Err(Missing::ReverseRotation);
    }
    Ok(speed)
}

fn momentum_torque(
    profile: &Profile,
    speed: &Step,
    ratio: &Step,
    flow: &Step,
    relative_flow: &Step,
    density: &Uncertain,
) -> Step {
    let impeller = profile.impeller.as_ref().ok_or(Missing::NoImpeller)?;
    let (speed, ratio, flow, relative_flow) = ((*speed)?, (*ratio)?, (*flow)?, (*relative_flow)?);
    if flow.value <= 0.0 {
        return Err(Missing::FlowNotPositive);
    }
    if relative_flow.value < impeller.recirculation_onset {
        return Err(Missing::Recirculation);
    }
    Ok(momentum::shaft_torque(impeller, &speed, &flow, density, &ratio, profile.reference_density))
}

fn efficiency(hydraulic: &Step, shaft: &Step, flow: &Step, head: &Step) -> Step {
    let (hydraulic, shaft, flow, head) = ((*hydraulic)?, (*shaft)?, (*flow)?, (*head)?);
    if flow.value <= 0.0 {
        return Err(Missing::FlowNotPositive);
    }
    if head.value <= 0.0 {
        return Err(Missing::HeadNotPositive);
    }
    if shaft.value <= 0.0 {
        return Err(Missing::PowerNotPositive);
    }
    Ok(hydraulic.over(&shaft))
}

/// Head and shaft power of the curve, carried to this speed and density.
fn expected(profile: &Profile, ratio: &Step, flow: &Step, density: &Uncertain) -> (Step, Step) {
    let (ratio, flow) = match (ratio, flow) {
        (Ok(ratio), Ok(flow)) => (ratio, flow),
        (Err(missing), _) | (_, Err(missing)) => return (Err(*missing), Err(*missing)),
    };
    let at_reference = flow.over(ratio);
    let Some(point) = profile.curve.at(Quantity::from_si(at_reference.value)) else {
        return (Err(Missing::OutsideCurve), Err(Missing::OutsideCurve));
    };
    let square = ratio.times(ratio);
    let cube = square.times(ratio);
    let head = at_reference.through(point.head.metres(), point.head_slope).times(&square);
    let power = at_reference
        .through(point.power.watts(), point.power_slope)
        .times(&cube)
        .times(&density.scaled(1.0 / profile.reference_density));
    (
        Ok(head.with_own(profile.head_curve_deviation * head.value)),
        Ok(power.with_own(profile.power_curve_deviation * power.value)),
    )
}

impl Estimate {
    /// CRC-32 over the bits of every value, uncertainty, source and reason, in the order of the fields. Equal on two
    /// sides exactly when they hold the same sample and profile and compute the same bits.
    #[must_use]
    pub fn checksum(&self) -> u32 {
        let mut crc = Running::new();
        feed(&mut crc, &self.head);
        feed(&mut crc, &self.hydraulic_power);
        feed(&mut crc, &self.momentum_torque);
        feed(&mut crc, &self.shaft_torque);
        feed(&mut crc, &self.shaft_power);
        feed(&mut crc, &self.efficiency);
        feed(&mut crc, &self.relative_flow);
        feed(&mut crc, &self.expected_head);
        feed(&mut crc, &self.expected_power);
        feed(&mut crc, &self.head_residual);
        feed(&mut crc, &self.power_residual);
        crc.finish()
    }
}

fn feed<T: Quantity>(crc: &mut Running, outcome: &Outcome<T>) {
    match outcome {
        Ok(found) => {
            crc.feed(&[found.source.code()]);
            crc.feed(&bits(found.value.si()).to_le_bytes());
            crc.feed(&bits(found.deviation.si()).to_le_bytes());
        }
        Err(missing) => crc.feed(&[missing.code()]),
    }
}

/// One pattern for every NaN: processors differ in the payload they give it.
fn bits(value: f32) -> u32 {
    if value.is_nan() { f32::NAN.to_bits() } else { value.to_bits() }
}

#[cfg(test)]
mod tests;
