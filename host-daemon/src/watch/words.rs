//! What an alarm says: how much, for how long, over what running, how sure, likeliest cause and what tells it from the
//! next, what it costs now, what to check first, what is not known.

use super::block::{BlockResult, Deviation};
use crate::alarm::RankedCause;
use offcurve_core::{
    machine::Profile,
    quantity::AngularSpeed,
    sensing::{Channel, ChannelFault},
};

/// "7.1 % (±1.3 %) below the curve".
fn deviation_words(deviation: Deviation) -> String {
    let side = if deviation.value < 0.0 { "below" } else { "above" };
    format!(
        "{:.1} % (±{:.1} %) {side} the curve",
        100.0 * deviation.value.abs(),
        // 95 %: twice the standard uncertainty.
        200.0 * deviation.uncertainty
    )
}

/// The text of an off-curve alarm over the blocks that raised it, oldest first.
pub(crate) fn off_curve(
    profile: &Profile,
    blocks: &[BlockResult],
    mean: (Option<Deviation>, Option<Deviation>),
    lasted: f64,
    causes: &[RankedCause],
) -> String {
    let mut text = String::new();
    match mean {
        (Some(head), Some(power)) => {
            text += &format!("Head is {}, shaft power {}", deviation_words(head), deviation_words(power));
        }
        (Some(head), None) => text += &format!("Head is {}; shaft power is not measured", deviation_words(head)),
        (None, Some(power)) => text += &format!("Shaft power is {}; head is not measured", deviation_words(power)),
        (None, None) => {}
    }
    text += &format!(", for {:.0} min", (lasted / 60.0).max(1.0));
    let reference = AngularSpeed::from_radians_per_second(profile.reference_speed).revolutions_per_minute();
    if let Some((slow, fast)) = span(blocks, |block| block.speed_ratio * f64::from(reference)) {
        text += &format!(" at {} rev/min", range_words(slow, fast));
    }
    if let Some((low, high)) = span(blocks, |block| block.flow * 3600.0) {
        text += &format!(" and {} m3/h", range_words(low, high));
    }
    text += ".";
    if let Some(cost) = cost_words(blocks, mean) {
        text += &cost;
    }
    if let Some(first) = causes.first() {
        text += &format!(" Likely cause: {} (weight {:.2}).", first.cause, first.weight);
        if let Some(next) = causes.get(1).filter(|next| next.weight >= 0.05) {
            text += &format!(" Next: {} ({:.2}).", next.cause, next.weight);
        }
        text += &format!(" Check first: {}.", super::causes::check_of(first.cause));
    }
    text += " Before any work on the machine: lock out, tag out, relieve pressure; local rules apply.";
    text
}

/// "1210 to 1480", or one number where both ends round to it.
fn range_words(low: f64, high: f64) -> String {
    let (low, high) = (format!("{low:.0}"), format!("{high:.0}"));
    if low == high { low } else { format!("{low} to {high}") }
}

/// Power above what the curve needs for the same hydraulic work.
fn cost_words(blocks: &[BlockResult], mean: (Option<Deviation>, Option<Deviation>)) -> Option<String> {
    let (Some(head), Some(power)) = mean else { return None };
    let efficiency = average(blocks, |block| block.efficiency)?;
    let shaft_power = average(blocks, |block| block.shaft_power)?;
    // η/η_expected = (1 + e_H)/(1 + e_P): flow and density are common to both.
    let share = (1.0 + head.value) / (1.0 + power.value);
    let expected = efficiency / share;
    let extra = shaft_power * (1.0 - share);
    let uncertainty = shaft_power * head.uncertainty.hypot(power.uncertainty);
    (extra > 0.0).then(|| {
        format!(
            " Efficiency {:.0} % where the curve promises {:.0} %: about {:.1} kW (±{:.1} kW) more than the same work \
             needs, if the readings are right.",
            100.0 * efficiency,
            100.0 * expected,
            extra / 1000.0,
            2.0 * uncertainty / 1000.0
        )
    })
}

fn average(blocks: &[BlockResult], part: fn(&BlockResult) -> Option<f64>) -> Option<f64> {
    let values: Vec<f64> = blocks.iter().filter_map(part).collect();
    (!values.is_empty()).then(|| values.iter().sum::<f64>() / values.len() as f64)
}

fn span(blocks: &[BlockResult], part: impl Fn(&BlockResult) -> f64) -> Option<(f64, f64)> {
    blocks.iter().map(part).fold(None, |span, value| {
        Some(span.map_or((value, value), |(low, high): (f64, f64)| (low.min(value), high.max(value))))
    })
}

/// A channel for people.
pub(crate) const fn channel_name(channel: Channel) -> &'static str {
    match channel {
        Channel::Speed => "speed",
        Channel::Flow => "flow",
        Channel::SuctionPressure => "suction pressure",
        Channel::DischargePressure => "discharge pressure",
        Channel::ShaftTorque => "shaft torque",
    }
}

/// The text of a sensor alarm.
pub(crate) fn sensor_failed(channel: Channel, fault: ChannelFault) -> String {
    let name = channel_name(channel);
    let why = match fault {
        ChannelFault::NotFitted => "is not fitted",
        ChannelFault::NoReading => "gives no reading",
        ChannelFault::ConverterFailed => "cannot be read: the converter or its bus failed",
        ChannelFault::FailureLow => "signals failure low (3.6 mA or less): loop open, or transmitter failed",
        ChannelFault::FailureHigh => "signals failure high (21 mA or more): loop shorted, or transmitter failed",
        ChannelFault::ImplausiblePulses => "gives pulses without time between them: noise on the pulse input",
        _ => "has failed",
    };
    let check = match fault {
        ChannelFault::FailureLow | ChannelFault::FailureHigh => "the loop's wiring and supply, then the transmitter",
        ChannelFault::ConverterFailed => "the controller's converter board",
        ChannelFault::ImplausiblePulses => "the pickup's gap, screen and supply",
        _ => "the sensor and its wiring",
    };
    format!(
        "The {name} sensor {why}. What needs it is not watched until it is back. Check first: {check}. Before any work \
         on the machine: lock out, tag out; local rules apply."
    )
}
