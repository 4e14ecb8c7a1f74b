//! From raw keys to a checked scenario: units read, ranges tested, contradictions refused.

use offcurve_plant::{PlantConfig, SensorFault, TransmitterSpec};
use toml::Value;

use super::units::Dimension;
use super::{Action, Event, Scenario, ScenarioError, Sensor, Step, raw};
use crate::converter::ConverterFault;

/// Longest time a scenario may name: ten years.
const LONGEST_S: f64 = 10.0 * 365.25 * 86_400.0;

/// Where a value stands, for messages.
struct Place<'a> {
    origin: &'a str,
    key: String,
}

impl Place<'_> {
    fn refuse(&self, found: impl std::fmt::Display, allowed: impl Into<String>) -> ScenarioError {
        ScenarioError::Value {
            origin: self.origin.to_owned(),
            key: self.key.clone(),
            found: found.to_string(),
            allowed: allowed.into(),
        }
    }

    /// A value of a dimension between two bounds (both in the unit kept), `range` being the bounds in words.
    fn number(
        &self,
        value: &Value,
        dimension: Dimension,
        (low, high): (f64, f64),
        range: &str,
    ) -> Result<f64, ScenarioError> {
        let number = value.as_str().and_then(|text| dimension.parse(text));
        let number = number.ok_or_else(|| self.refuse(value, dimension.example()))?;
        if (low..=high).contains(&number) { Ok(number) } else { Err(self.refuse(value, range)) }
    }

    /// Overwrites `target` where the key is there.
    fn number_into(
        &self,
        target: &mut f64,
        value: Option<&Value>,
        dimension: Dimension,
        bounds: (f64, f64),
        range: &str,
    ) -> Result<(), ScenarioError> {
        if let Some(value) = value {
            *target = self.number(value, dimension, bounds, range)?;
        }
        Ok(())
    }

    fn microseconds(&self, value: &Value) -> Result<u64, ScenarioError> {
        let seconds = self.number(value, Dimension::Time, (0.0, LONGEST_S), "0 s to 10 years")?;
        Ok((seconds * 1e6).round() as u64) // at most 3.2e14, exact in f64
    }

    fn truth(&self, value: &Value) -> Result<bool, ScenarioError> {
        value.as_bool().ok_or_else(|| self.refuse(value, "true or false"))
    }

    fn whole(&self, value: &Value, low: u32, high: u32) -> Result<u32, ScenarioError> {
        value
            .as_integer()
            .and_then(|number| u32::try_from(number).ok())
            .filter(|number| (low..=high).contains(number))
            .ok_or_else(|| self.refuse(value, format!("a whole number from {low} to {high}")))
    }

    fn speed(&self, value: &Value, highest: f64) -> Result<f64, ScenarioError> {
        self.number(value, Dimension::Speed, (0.0, highest), &format!("0 rpm to max_speed, {highest} rpm"))
    }

    fn valve(&self, value: &Value) -> Result<f64, ScenarioError> {
        self.number(value, Dimension::Share, (0.0, 1.0), "0 % to 100 %")
    }

    fn clearance(&self, value: &Value) -> Result<f64, ScenarioError> {
        self.number(value, Dimension::Length, (1e-5, 5e-3), "0.01 mm to 5 mm")
    }

    fn suction_level(&self, value: &Value) -> Result<f64, ScenarioError> {
        self.number(value, Dimension::Length, (-10.0, 100.0), "-10 m to 100 m")
    }
}

pub(super) fn scenario(raw: raw::Scenario, origin: &str) -> Result<Scenario, ScenarioError> {
    let at = |key: &str| Place { origin, key: key.to_owned() };
    let seed = raw.seed.as_integer().and_then(|seed| u64::try_from(seed).ok());
    let seed = seed.ok_or_else(|| at("seed").refuse(&raw.seed, "a whole number from 0 to 9223372036854775807"))?;
    let plant = plant(&raw.plant, origin)?;
    let highest = plant.drive.max_speed_rpm;
    let raw::Sensors { flow, suction, discharge, torque } = &raw.sensors;
    let sensors = [
        instrument(flow, Sensor::Flow, origin)?,
        instrument(suction, Sensor::Suction, origin)?,
        instrument(discharge, Sensor::Discharge, origin)?,
        instrument(torque, Sensor::Torque, origin)?,
    ];
    let pattern = raw.pattern.iter().enumerate().map(|(index, step)| {
        let at = |key: &str| Place { origin, key: format!("pattern[{}].{key}", index + 1) };
        let for_us = at("for").microseconds(&step.lasts)?;
        if for_us == 0 {
            return Err(at("for").refuse(&step.lasts, "a time longer than 0 s"));
        }
        Ok(Step {
            for_us,
            speed_rpm: at("speed").speed(&step.speed, highest)?,
            valve: step.valve.as_ref().map(|valve| at("valve").valve(valve)).transpose()?,
        })
    });
    let pattern = pattern.collect::<Result<Vec<_>, _>>()?;
    let events = raw.event.iter().enumerate().map(|(index, raw)| event(raw, index, highest, origin));
    let mut events = events.collect::<Result<Vec<_>, _>>()?;
    events.sort_by_key(|event| event.at_us); // stable: events of one moment keep the order of the file
    Ok(Scenario {
        title: raw.title,
        seed,
        duration_us: raw.duration.as_ref().map(|value| at("duration").microseconds(value)).transpose()?,
        plant,
        sensors,
        pulses_per_revolution: match &raw.pulses.per_revolution {
            Some(value) => at("pulses.per_revolution").whole(value, 1, 10_000)?,
            None => 60,
        },
        direction_input: match &raw.pulses.direction {
            Some(value) => at("pulses.direction").truth(value)?,
            None => false,
        },
        pattern,
        events,
    })
}

fn plant(raw: &raw::Plant, origin: &str) -> Result<PlantConfig, ScenarioError> {
    use Dimension::{Density, Flow, Length, Share, Speed, Time};
    let at = |key: &str| Place { origin, key: format!("plant.{key}") };
    let mut config = PlantConfig::default();
    let system = &mut config.system;
    let lift = (-50.0, 1000.0);
    at("static_lift").number_into(
        &mut system.static_lift_m,
        raw.static_lift.as_ref(),
        Length,
        lift,
        "-50 m to 1 km",
    )?;
    let flow = (1e-5, 50.0);
    at("rated_flow").number_into(
        &mut system.rated_flow_m3s,
        raw.rated_flow.as_ref(),
        Flow,
        flow,
        "0.01 l/s to 50 m3/s",
    )?;
    let loss = (0.0, 1000.0);
    at("pipe_loss").number_into(&mut system.pipe_loss_m, raw.pipe_loss.as_ref(), Length, loss, "0 m to 1 km")?;
    at("valve_loss").number_into(&mut system.valve_loss_m, raw.valve_loss.as_ref(), Length, loss, "0 m to 1 km")?;
    if let Some(value) = &raw.suction_level {
        system.suction_level_m = at("suction_level").suction_level(value)?;
    }
    let metres = (0.0, 10.0);
    at("level_swing").number_into(
        &mut system.level_swing_m,
        raw.level_swing.as_ref(),
        Length,
        metres,
        "0 m to 10 m",
    )?;
    at("level_noise").number_into(
        &mut system.level_noise_m,
        raw.level_noise.as_ref(),
        Length,
        metres,
        "0 m to 10 m",
    )?;
    let period = (1.0, LONGEST_S);
    let period_words = "1 s to 10 years";
    at("level_period").number_into(
        &mut system.level_period_s,
        raw.level_period.as_ref(),
        Time,
        period,
        period_words,
    )?;
    let noise = (0.0, 1.0);
    at("demand_noise").number_into(
        &mut system.demand_noise,
        raw.demand_noise.as_ref(),
        Share,
        noise,
        "0 % to 100 %",
    )?;
    for (key, target, value) in [
        ("demand_correlation", &mut system.demand_correlation_s, &raw.demand_correlation),
        ("level_correlation", &mut system.level_correlation_s, &raw.level_correlation),
    ] {
        at(key).number_into(target, value.as_ref(), Time, (0.1, 1e5), "0.1 s to 1e5 s")?;
    }
    at("density").number_into(
        &mut config.density,
        raw.density.as_ref(),
        Density,
        (300.0, 2000.0),
        "300 to 2000 kg/m3",
    )?;
    let highest = &mut config.drive.max_speed_rpm;
    at("max_speed").number_into(highest, raw.max_speed.as_ref(), Speed, (10.0, 20_000.0), "10 rpm to 20000 rpm")?;
    if let Some(value) = &raw.speed {
        config.speed_rpm = at("speed").speed(value, config.drive.max_speed_rpm)?;
    } else if config.speed_rpm > config.drive.max_speed_rpm {
        return Err(at("speed").refuse("not given", "a speed no higher than max_speed"));
    }
    if let Some(value) = &raw.valve {
        config.valve_opening = at("valve").valve(value)?;
    }
    if let Some(value) = &raw.run {
        config.run = at("run").truth(value)?;
    }
    if let Some(value) = &raw.wear_ring_clearance {
        config.pump.ring_clearance_m = at("wear_ring_clearance").clearance(value)?;
    }
    Ok(config)
}

/// The dimension a sensor measures and the widest range it may declare.
fn measured(sensor: Sensor) -> (Dimension, (f64, f64), &'static str) {
    match sensor {
        Sensor::Flow => (Dimension::Flow, (-50.0, 50.0), "-50 to 50 m3/s"),
        Sensor::Suction | Sensor::Discharge => (Dimension::Pressure, (-1.01e5, 1e8), "-1.01 bar to 1000 bar"),
        Sensor::Torque => (Dimension::Torque, (-1e6, 1e6), "-1000 to 1000 kN m"),
    }
}

fn instrument(raw: &raw::Instrument, sensor: Sensor, origin: &str) -> Result<TransmitterSpec, ScenarioError> {
    let at = |key: &str| Place { origin, key: format!("sensors.{}.{key}", sensor.name()) };
    let mut spec = match sensor {
        Sensor::Flow => TransmitterSpec::flow(0.0, 160.0 / 3600.0),
        Sensor::Suction => TransmitterSpec::pressure(-1e5, 1.5e5),
        Sensor::Discharge => TransmitterSpec::pressure(0.0, 6e5),
        Sensor::Torque => TransmitterSpec::torque(0.0, 120.0),
    };
    if let Some(value) = &raw.range {
        let (dimension, bounds, words) = measured(sensor);
        let place = at("range");
        let Some([low, high]) = value.as_array().map(Vec::as_slice) else {
            return Err(
                place.refuse(value, format!("the values at 4 and 20 mA in brackets, each {}", dimension.example()))
            );
        };
        spec.lo = place.number(low, dimension, bounds, words)?;
        spec.hi = place.number(high, dimension, bounds, words)?;
        if spec.hi <= spec.lo {
            return Err(place.refuse(value, "a value at 20 mA above the one at 4 mA"));
        }
    }
    at("lag").number_into(&mut spec.lag_s, raw.lag.as_ref(), Dimension::Time, (0.0, 60.0), "0 s to 60 s")?;
    for (key, target, value) in [
        ("noise_of_reading", &mut spec.noise_of_reading, &raw.noise_of_reading),
        ("noise_of_span", &mut spec.noise_of_span, &raw.noise_of_span),
        ("ripple_of_span", &mut spec.ripple_of_span, &raw.ripple_of_span),
    ] {
        at(key).number_into(target, value.as_ref(), Dimension::Share, (0.0, 0.5), "0 % to 50 %")?;
    }
    Ok(spec)
}

fn event(raw: &raw::Event, index: usize, highest: f64, origin: &str) -> Result<Event, ScenarioError> {
    let at = |key: &str| Place { origin, key: format!("event[{}].{key}", index + 1) };
    let whole = Place { origin, key: format!("event[{}]", index + 1) };
    let actions = [
        ("speed", &raw.speed),
        ("valve", &raw.valve),
        ("suction_level", &raw.suction_level),
        ("run", &raw.run),
        ("wear_ring_clearance", &raw.wear_ring_clearance),
        ("sensor", &raw.sensor),
        ("converter", &raw.converter),
    ];
    let given: Vec<_> = actions.iter().filter_map(|(key, value)| Some((*key, value.as_ref()?))).collect();
    let [(key, value)] = given[..] else {
        let found = if given.is_empty() {
            "without an action".to_owned()
        } else {
            format!("with several actions ({})", given.iter().map(|(key, _)| *key).collect::<Vec<_>>().join(", "))
        };
        return Err(whole.refuse(found, format!("exactly one of {}", actions.map(|(key, _)| key).join(", "))));
    };
    // Keys that only make sense beside one action.
    for (companion, present, owner) in
        [("over", &raw.over, "wear_ring_clearance"), ("fault", &raw.fault, "sensor"), ("amount", &raw.amount, "sensor")]
    {
        if let Some(found) = present
            && key != owner
        {
            return Err(at(companion).refuse(found, format!("this key only beside {owner}")));
        }
    }
    let place = at(key);
    let action = match key {
        "speed" => Action::Speed(place.speed(value, highest)?),
        "valve" => Action::Valve(place.valve(value)?),
        "suction_level" => Action::SuctionLevel(place.suction_level(value)?),
        "run" => Action::Run(place.truth(value)?),
        "wear_ring_clearance" => Action::RingClearance {
            to_m: place.clearance(value)?,
            over_us: raw.over.as_ref().map(|over| at("over").microseconds(over)).transpose()?.unwrap_or(0),
        },
        "sensor" => {
            let names = Sensor::ALL.map(Sensor::name).join(", ");
            let sensor = Sensor::ALL.into_iter().find(|sensor| value.as_str() == Some(sensor.name()));
            let sensor = sensor.ok_or_else(|| place.refuse(value, format!("one of {names}")))?;
            Action::Sensor(sensor, sensor_fault(raw, sensor, &at("fault"), &at("amount"))?)
        }
        _ => Action::Converter(converter_fault(value, &place)?),
    };
    Ok(Event { at_us: at("at").microseconds(&raw.at)?, action })
}

fn sensor_fault(
    raw: &raw::Event,
    sensor: Sensor,
    fault_place: &Place<'_>,
    amount_place: &Place<'_>,
) -> Result<SensorFault, ScenarioError> {
    const ALLOWED: &str = "one of \"none\", \"open loop\", \"stuck\", \"gain\", \"offset\"";
    let Some(fault) = &raw.fault else { return Err(fault_place.refuse("not given", ALLOWED)) };
    let needs_amount = matches!(fault.as_str(), Some("gain" | "offset"));
    if let (Some(amount), false) = (&raw.amount, needs_amount) {
        return Err(amount_place.refuse(amount, "this key only beside the faults gain and offset"));
    }
    let amount = |dimension: Dimension, bounds, words| match &raw.amount {
        Some(value) => amount_place.number(value, dimension, bounds, words),
        None => Err(amount_place.refuse("not given", dimension.example())),
    };
    match fault.as_str() {
        Some("none") => Ok(SensorFault::None),
        Some("open loop") => Ok(SensorFault::OpenLoop),
        Some("stuck") => Ok(SensorFault::Stuck),
        Some("gain") => Ok(SensorFault::Gain(1.0 + amount(Dimension::Share, (-1.0, 10.0), "-100 % to 1000 %")?)),
        Some("offset") => {
            let (dimension, (_, high), words) = measured(sensor);
            Ok(SensorFault::Offset(amount(dimension, (-high, high), words)?))
        }
        _ => Err(fault_place.refuse(fault, ALLOWED)),
    }
}

fn converter_fault(value: &Value, place: &Place<'_>) -> Result<ConverterFault, ScenarioError> {
    let text = value.as_str().unwrap_or_default();
    let stuck = || {
        let (bit, level) = text.strip_prefix("bit ")?.split_once(' ')?;
        let bit = bit.parse().ok().filter(|bit| *bit < 12)?;
        let high = match level {
            "high" => true,
            "low" => false,
            _ => return None,
        };
        Some(ConverterFault::StuckBit { bit, high })
    };
    match text {
        "healthy" => Ok(ConverterFault::None),
        "dead" => Ok(ConverterFault::Dead),
        _ => stuck().ok_or_else(|| {
            place.refuse(
                value,
                "\"healthy\", \"dead\" or a stuck bit such as \"bit 5 high\" (bits 0 to 11, high or low)",
            )
        }),
    }
}
