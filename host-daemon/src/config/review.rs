//! What a file allows but a commissioning engineer should look at: an unstable branch, a sensor that does not reach as
//! far as the curve, a comparison that the present sensors cannot make, dimensions that contradict the curve.

use super::{
    curve::Curve,
    sensors::{Sensors, dimension, key},
    units::plain,
};
use offcurve_core::{
    conditioning::ConditionedSample,
    deviation::Deviation,
    estimate::estimate,
    machine::{Profile, profile::Source},
    momentum::LEAST_DEVIATION,
    sensing::{Channel, ChannelValue, Reading},
};

pub(super) fn review(profile: &Profile, curve: &Curve, sensors: &Sensors, warnings: &mut Vec<String>) {
    shape(curve, warnings);
    missing(profile, sensors, warnings);
    ranges(profile, curve, sensors, warnings);
}

fn flow_text(flow: f64) -> String {
    format!("{} m3/h", plain((flow * 3_600_000.0).round() / 1000.0))
}

fn shape(curve: &Curve, warnings: &mut Vec<String>) {
    let points = &curve.points;
    let mut rising = points.head.windows(2).enumerate().filter(|(_, pair)| pair[1] > pair[0]).map(|(k, _)| k);
    if let Some(first) = rising.next() {
        let last = rising.next_back().unwrap_or(first);
        warnings.push(format!(
            "curve.head: head rises with flow between {} and {}: an unstable branch, where one head belongs to two flows",
            flow_text(points.flow[first]),
            flow_text(points.flow[last + 1])
        ));
    }
    let (low, high) = points.span();
    let reach = high - low;
    if !curve.best.declared && (curve.best.flow - low < 0.001 * reach || high - curve.best.flow < 0.001 * reach) {
        warnings.push(format!(
            "curve: efficiency is still rising at its end, {}; the best efficiency point may lie outside: declare \
             best_efficiency_flow",
            flow_text(curve.best.flow)
        ));
    }
    if curve.best.flow < low + 0.2 * reach && low > 0.0 {
        warnings.push(format!("curve.flow: begins at {}; below it nothing can be compared", flow_text(low)));
    }
}

fn missing(profile: &Profile, sensors: &Sensors, warnings: &mut Vec<String>) {
    let has = |channel: Channel| {
        Channel::ALL.iter().zip(sensors).any(|(candidate, sensor)| *candidate == channel && sensor.declared)
    };
    if !has(Channel::Speed) {
        warnings.push("sensors.speed: none, so nothing can be compared with the curve".to_owned());
    }
    if !has(Channel::Flow) {
        warnings.push(
            "sensors.flow: none, so neither head nor shaft power can be compared with the curve, and efficiency is \
             not known"
                .to_owned(),
        );
    }
    for channel in [Channel::SuctionPressure, Channel::DischargePressure] {
        if !has(channel) {
            warnings.push(format!("sensors.{}: none, so the head is not known and not watched", key(channel)));
        }
    }
    if !has(Channel::ShaftTorque) {
        let instead = match profile.impeller {
            Some(_) => "shaft power comes from the momentum model and is not compared with the curve",
            None => "shaft power and efficiency are not known, and power is not watched",
        };
        warnings.push(format!("sensors.shaft_torque: none; {instead}"));
    }
    for (channel, sensor) in Channel::ALL.into_iter().zip(sensors) {
        if sensor.declared && sensor.setup.source == Source::NotFitted {
            warnings.push(format!(
                "sensors.{}: has a column but no source, so a controller does not read it; only a replay has it",
                key(channel)
            ));
        }
        if sensor.declared && sensor.setup.deviation == 0.0 && sensor.setup.relative_deviation == 0.0 {
            warnings.push(format!("sensors.{}: uncertainty 0; no sensor is that good", key(channel)));
        }
    }
}

fn ranges(profile: &Profile, curve: &Curve, sensors: &Sensors, warnings: &mut Vec<String>) {
    let weight = f64::from(profile.density) * f64::from(profile.gravity);
    let largest = |values: &[f64]| values.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let ratio = f64::from(profile.density) / curve.density;
    let wanted = [
        (Channel::Flow, curve.points.span().1, "the curve's largest flow"),
        (
            Channel::DischargePressure,
            largest(&curve.points.head) * weight,
            "the curve's largest head with no suction pressure",
        ),
        (Channel::ShaftTorque, largest(&curve.points.power) * ratio / curve.speed, "the curve's largest torque"),
    ];
    for (channel, most, what) in wanted {
        let sensor = Channel::ALL.into_iter().zip(sensors).find(|(candidate, _)| *candidate == channel);
        let Some((_, high)) = sensor.and_then(|(_, sensor)| sensor.range) else { continue };
        if high < most {
            let unit = &dimension(channel).units()[0];
            let text = |si: f64| format!("{:.1} {}", unit.from_si(si), unit.name());
            warnings.push(format!(
                "sensors.{}.range: ends at {}, below {what}, {}",
                key(channel),
                text(high),
                text(most)
            ));
        }
    }
}

/// Shaft torque at the point of best efficiency by the momentum model and by the curve, N·m; with a warning if they are
/// further apart than the model's own uncertainty explains.
pub(super) fn torque_at_best(profile: &Profile, curve: &Curve, warnings: &mut Vec<String>) -> Option<(f64, f64)> {
    let wheel = profile.impeller.as_ref()?;
    let exact = |value: f32| -> Reading {
        Ok(ChannelValue { value, deviation: Deviation::from_code(0), saturated: false, age: 0 })
    };
    let sample = ConditionedSample {
        speed: exact(profile.reference_speed),
        flow: exact(profile.best_efficiency_flow),
        ..ConditionedSample::EMPTY
    };
    let found = estimate(&sample, profile);
    let model = f64::from(found.momentum_torque.ok()?.value.newton_metres());
    let promised = f64::from(found.expected_power.ok()?.value.watts()) / curve.speed;
    let apart = model / promised - 1.0;
    if apart.abs() > 2.0 * f64::from(wheel.model_deviation.max(LEAST_DEVIATION)) {
        warnings.push(format!(
            "impeller: at best efficiency the momentum model gives {model:.1} N m, the curve {promised:.1} N m \
             ({:+.0} %); check dimensions, drag_torque and volumetric_efficiency",
            100.0 * apart
        ));
    }
    Some((model, promised))
}
