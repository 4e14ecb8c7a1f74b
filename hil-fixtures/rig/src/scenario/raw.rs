//! The keys of a scenario file exactly as written; nothing here is checked beyond its name.
//!
//! Values stay TOML values so that a bare `1480` where `"1480 rpm"` is meant gets our own message.

use serde::Deserialize;
use toml::Value;

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Scenario {
    #[serde(default)]
    pub(super) title: String,
    pub(super) seed: Value,
    pub(super) duration: Option<Value>,
    #[serde(default)]
    pub(super) plant: Plant,
    #[serde(default)]
    pub(super) sensors: Sensors,
    #[serde(default)]
    pub(super) pulses: Pulses,
    #[serde(default)]
    pub(super) pattern: Vec<Step>,
    #[serde(default)]
    pub(super) event: Vec<Event>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Plant {
    pub(super) density: Option<Value>,
    pub(super) speed: Option<Value>,
    pub(super) max_speed: Option<Value>,
    pub(super) valve: Option<Value>,
    pub(super) run: Option<Value>,
    pub(super) wear_ring_clearance: Option<Value>,
    pub(super) static_lift: Option<Value>,
    pub(super) rated_flow: Option<Value>,
    pub(super) pipe_loss: Option<Value>,
    pub(super) valve_loss: Option<Value>,
    pub(super) suction_level: Option<Value>,
    pub(super) level_swing: Option<Value>,
    pub(super) level_period: Option<Value>,
    pub(super) demand_noise: Option<Value>,
    pub(super) demand_correlation: Option<Value>,
    pub(super) level_noise: Option<Value>,
    pub(super) level_correlation: Option<Value>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Sensors {
    #[serde(default)]
    pub(super) flow: Instrument,
    #[serde(default)]
    pub(super) suction: Instrument,
    #[serde(default)]
    pub(super) discharge: Instrument,
    #[serde(default)]
    pub(super) torque: Instrument,
}

#[derive(Debug, Default, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Instrument {
    pub(super) range: Option<Value>,
    pub(super) lag: Option<Value>,
    pub(super) noise_of_reading: Option<Value>,
    pub(super) noise_of_span: Option<Value>,
    pub(super) ripple_of_span: Option<Value>,
}

#[derive(Debug, Default, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Pulses {
    pub(super) per_revolution: Option<Value>,
    pub(super) direction: Option<Value>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Step {
    #[serde(rename = "for")]
    pub(super) lasts: Value,
    pub(super) speed: Value,
    pub(super) valve: Option<Value>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Event {
    pub(super) at: Value,
    pub(super) speed: Option<Value>,
    pub(super) valve: Option<Value>,
    pub(super) suction_level: Option<Value>,
    pub(super) run: Option<Value>,
    pub(super) wear_ring_clearance: Option<Value>,
    pub(super) over: Option<Value>,
    pub(super) sensor: Option<Value>,
    pub(super) fault: Option<Value>,
    pub(super) amount: Option<Value>,
    pub(super) converter: Option<Value>,
}
