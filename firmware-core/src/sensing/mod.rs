//! From raw electrical readings to values: which channels there are, how a loop current and shaft pulses become one.

pub mod calibration;
pub mod current_loop;
pub mod filter;
pub mod flow_element;
pub mod flow_pulse;
pub mod health;
pub mod lag;
#[cfg(any(feature = "std", test))]
pub mod orifice_design;
pub mod pulse;
pub mod resistance_thermometer;

use crate::{deviation::Deviation, quantity::Quantity};

/// A value with its standard uncertainty, as the sensing laws give it; the conditioned sample codes it into a byte.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Measured<Q: Quantity> {
    /// The value.
    pub value: Q,
    /// Its standard uncertainty, in the SI unit of the value (kelvin for a temperature), not negative; NaN for unknown.
    pub deviation: f32,
}

/// The measured quantities of one machine.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Channel {
    /// Shaft speed, rad/s.
    Speed,
    /// Delivered flow, m³/s.
    Flow,
    /// Suction pressure, Pa gauge.
    SuctionPressure,
    /// Discharge pressure, Pa gauge.
    DischargePressure,
    /// Shaft torque, N·m.
    ShaftTorque,
}

impl Channel {
    /// Every channel, in record order.
    pub const ALL: [Self; 5] =
        [Self::Speed, Self::Flow, Self::SuctionPressure, Self::DischargePressure, Self::ShaftTorque];

    /// Exponent of two that the channel's coded uncertainties start at, in its SI unit; the code spans 32 octaves.
    #[must_use]
    pub const fn deviation_base(self) -> i8 {
        match self {
            Self::Speed | Self::ShaftTorque => -16,
            Self::Flow => -28,
            Self::SuctionPressure | Self::DischargePressure => -8,
        }
    }
}

/// Why a channel has no value.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ChannelFault {
    /// The machine does not have this sensor.
    NotFitted,
    /// Nothing has been read yet.
    NoReading,
    /// The converter or its bus failed.
    ConverterFailed,
    /// Loop current at or below 3.6 mA: open loop or a transmitter signalling failure low (NE 43).
    FailureLow,
    /// Loop current at or above 21.0 mA: short, or a transmitter signalling failure high (NE 43).
    FailureHigh,
    /// Edges without time between them: noise on the pulse input.
    ImplausiblePulses,
}

impl ChannelFault {
    /// The byte a record carries, 1 to 127.
    #[must_use]
    pub const fn code(self) -> u8 {
        match self {
            Self::NotFitted => 1,
            Self::NoReading => 2,
            Self::ConverterFailed => 3,
            Self::FailureLow => 4,
            Self::FailureHigh => 5,
            Self::ImplausiblePulses => 6,
        }
    }

    /// The fault of a record's byte; `None` for a byte that no fault has.
    #[must_use]
    pub const fn from_code(code: u8) -> Option<Self> {
        Some(match code {
            1 => Self::NotFitted,
            2 => Self::NoReading,
            3 => Self::ConverterFailed,
            4 => Self::FailureLow,
            5 => Self::FailureHigh,
            6 => Self::ImplausiblePulses,
            _ => return None,
        })
    }
}

/// A conditioned value.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ChannelValue {
    /// The value, SI, finite.
    pub value: f32,
    /// Its standard uncertainty, coded with the channel's base.
    pub deviation: Deviation,
    /// Outside the loop's measuring range but not a failure (NE 43 between 3.6 and 3.8 or 20.5 and 21.0 mA): a bound
    /// more than a value.
    pub saturated: bool,
    /// Age in steps of 100 ms, 0 to 63; 63 means 6.3 s or more.
    pub age: u8,
}

/// The largest age a record can carry, in steps of 100 ms.
pub const LARGEST_AGE: u8 = 63;

/// A value or the reason there is none.
pub type Reading = Result<ChannelValue, ChannelFault>;
