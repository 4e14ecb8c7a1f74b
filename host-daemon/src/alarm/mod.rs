//! Alarms: what can be wrong, and the life cycle of one alarm as a pure state machine.
//!
//! State names after IEC 62682 / ISA-18.2 (from memory). Acknowledging and shelving come with a person at a screen; the
//! states that need one are entered and left here only by what the plant does.

use offcurve_core::sensing::Channel;
use std::fmt;

/// What an alarm is about. One machine has at most one alarm of each kind.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum AlarmKind {
    /// Head or shaft power is not what the curve promises.
    OffCurve,
    /// A fitted sensor gives no value.
    SensorFailed(Channel),
    /// Controller and daemon compute different estimates from one sample.
    EstimateMismatch,
}

impl AlarmKind {
    /// Every kind.
    pub const ALL: [Self; 7] = [
        Self::OffCurve,
        Self::SensorFailed(Channel::Speed),
        Self::SensorFailed(Channel::Flow),
        Self::SensorFailed(Channel::SuctionPressure),
        Self::SensorFailed(Channel::DischargePressure),
        Self::SensorFailed(Channel::ShaftTorque),
        Self::EstimateMismatch,
    ];

    /// The name used in files and in the store.
    #[must_use]
    pub const fn id(self) -> &'static str {
        match self {
            Self::OffCurve => "off-curve",
            Self::SensorFailed(Channel::Speed) => "sensor-failed-speed",
            Self::SensorFailed(Channel::Flow) => "sensor-failed-flow",
            Self::SensorFailed(Channel::SuctionPressure) => "sensor-failed-suction-pressure",
            Self::SensorFailed(Channel::DischargePressure) => "sensor-failed-discharge-pressure",
            Self::SensorFailed(Channel::ShaftTorque) => "sensor-failed-shaft-torque",
            Self::EstimateMismatch => "estimate-mismatch",
        }
    }

    /// The kind of an [`id`](Self::id).
    #[must_use]
    pub fn from_id(id: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|kind| kind.id() == id)
    }
}

impl fmt::Display for AlarmKind {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        out.write_str(self.id())
    }
}

/// Where one alarm stands.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum AlarmState {
    /// Nothing wrong.
    #[default]
    Normal,
    /// Wrong, and nobody has said that they know.
    Unacknowledged,
    /// Right again, but nobody has said that they knew.
    ReturnedUnacknowledged,
}

impl AlarmState {
    /// The name used in files and in the store.
    #[must_use]
    pub const fn id(self) -> &'static str {
        match self {
            Self::Normal => "normal",
            Self::Unacknowledged => "unacknowledged",
            Self::ReturnedUnacknowledged => "returned unacknowledged",
        }
    }

    /// The state of an [`id`](Self::id).
    #[must_use]
    pub fn from_id(id: &str) -> Option<Self> {
        [Self::Normal, Self::Unacknowledged, Self::ReturnedUnacknowledged].into_iter().find(|state| state.id() == id)
    }

    /// Whether the plant is wrong in this state.
    #[must_use]
    pub const fn is_active(self) -> bool {
        matches!(self, Self::Unacknowledged)
    }

    /// The next state, once delay and deadband have decided that the plant `deviates` or not.
    #[must_use]
    pub const fn next(self, deviates: bool) -> Self {
        match (self, deviates) {
            (_, true) => Self::Unacknowledged,
            (Self::Unacknowledged | Self::ReturnedUnacknowledged, false) => Self::ReturnedUnacknowledged,
            (Self::Normal, false) => Self::Normal,
        }
    }
}

/// A likely cause with its weight among the causes considered, 0 to 1.
#[derive(Clone, Debug, PartialEq)]
pub struct RankedCause {
    /// The cause, in words; causes that these sensors cannot tell apart stand together in one.
    pub cause: &'static str,
    /// Share of belief, 0 to 1; all causes of one alarm add up to 1.
    pub weight: f64,
}

/// One alarm changed its state.
#[derive(Clone, Debug, PartialEq)]
pub struct AlarmChange {
    /// When, in the time of the samples, s.
    pub at: f64,
    /// Which alarm.
    pub kind: AlarmKind,
    /// Its state from now on.
    pub state: AlarmState,
    /// Likely causes, most likely first; empty where the alarm names its own cause.
    pub causes: Vec<RankedCause>,
    /// For a person: what, how much, how sure, what to check first.
    pub text: String,
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_unique_and_lead_back() {
        for kind in AlarmKind::ALL {
            assert_eq!(AlarmKind::from_id(kind.id()), Some(kind));
        }
        assert_eq!(AlarmKind::from_id("none of these"), None);
    }

    #[test]
    fn life_cycle_without_a_person() {
        let state = AlarmState::Normal;
        assert_eq!(state.next(false), AlarmState::Normal);
        let state = state.next(true);
        assert!(state.is_active());
        let state = state.next(false);
        assert_eq!(state, AlarmState::ReturnedUnacknowledged);
        assert!(!state.is_active());
        assert_eq!(state.next(false), AlarmState::ReturnedUnacknowledged);
        assert_eq!(state.next(true), AlarmState::Unacknowledged);
    }
}
