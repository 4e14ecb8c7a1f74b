//! Where the machine stands: local gravity and air pressure, both declared, because standard gravity is up to 0.3 % off
//! and standard air pressure 22 % at 2000 m.
//!
//! Altitude to pressure: ISO 2533 below 11 km, `p = 101 325·(1 − 0.0065·h/288.15)^5.255 88` Pa, h in m (geopotential;
//! the difference to metres on the map is below 0.2 % of h). It is a mean over place and season; what the weather adds
//! is declared, never assumed.

use super::state::{Declared, RangeError};
use crate::{
    math,
    quantity::{AbsolutePressure, Quantity},
};

/// Accelerations of free fall accepted, m/s²: the Earth's surface has 9.76 to 9.84.
pub const GRAVITY_RANGE: core::ops::RangeInclusive<f32> = 9.74..=9.86;
/// Altitudes accepted, m.
pub const ALTITUDE_RANGE: core::ops::RangeInclusive<f32> = -500.0..=11_000.0;
/// Swings of the weather accepted, Pa to either side of the mean.
pub const WEATHER_RANGE: core::ops::RangeInclusive<f32> = 0.0..=10_000.0;

/// Why a site is refused.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum SiteError {
    /// Gravity outside [`GRAVITY_RANGE`], or NaN.
    Gravity {
        /// What was given, m/s².
        found: f32,
    },
    /// Altitude outside [`ALTITUDE_RANGE`], or NaN.
    Altitude {
        /// What was given, m.
        found: f32,
    },
    /// Swing of the weather outside [`WEATHER_RANGE`], or NaN.
    Weather {
        /// What was given, Pa.
        found: f32,
    },
    /// Air pressure outside 20 to 110 kPa.
    AirPressure {
        /// What was given, Pa.
        found: f32,
    },
    /// The range of air pressure is none.
    Range(RangeError),
}

/// Local gravity and the range of air pressure.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Site {
    gravity: f32,
    air_pressure: Declared<AbsolutePressure>,
}

impl Site {
    /// A site with a declared range of air pressure.
    ///
    /// # Errors
    /// [`SiteError`] for gravity or an end of the range outside what the Earth offers.
    pub fn new(gravity: f32, air_pressure: Declared<AbsolutePressure>) -> Result<Self, SiteError> {
        if !GRAVITY_RANGE.contains(&gravity) {
            return Err(SiteError::Gravity { found: gravity });
        }
        for found in [air_pressure.low().pascals(), air_pressure.high().pascals()] {
            if !(2e4..=1.1e5).contains(&found) {
                return Err(SiteError::AirPressure { found });
            }
        }
        Ok(Self { gravity, air_pressure })
    }

    /// A site at an altitude, m, where the weather moves the air pressure by up to `weather` Pa to either side
    /// (3 kPa holds for most of the year in temperate climates; common practice, no source).
    ///
    /// # Errors
    /// [`SiteError`], naming what is out of range.
    pub fn at_altitude(gravity: f32, altitude: f32, weather: f32) -> Result<Self, SiteError> {
        let mean = standard_pressure(altitude)?.pascals();
        if !WEATHER_RANGE.contains(&weather) {
            return Err(SiteError::Weather { found: weather });
        }
        let end = AbsolutePressure::from_pascals;
        let air_pressure = Declared::new(end(mean - weather), end(mean + weather)).map_err(SiteError::Range)?;
        Self::new(gravity, air_pressure)
    }

    /// Acceleration of free fall, m/s².
    #[must_use]
    pub const fn gravity(&self) -> f32 {
        self.gravity
    }

    /// The declared range of air pressure.
    #[must_use]
    pub const fn air_pressure(&self) -> &Declared<AbsolutePressure> {
        &self.air_pressure
    }
}

/// Mean air pressure at an altitude in m; within 1e-6 of ISO 2533's formula (measured in `tests/published`).
///
/// # Errors
/// [`SiteError::Altitude`] outside [`ALTITUDE_RANGE`], NaN included.
pub fn standard_pressure(altitude: f32) -> Result<AbsolutePressure, SiteError> {
    if !ALTITUDE_RANGE.contains(&altitude) {
        return Err(SiteError::Altitude { found: altitude });
    }
    let colder = 1.0 - altitude * (0.0065 / 288.15);
    Ok(AbsolutePressure::from_si(101_325.0 * math::exp(5.255_88 * math::ln(colder))))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn altitude_and_weather_make_a_range() {
        let site = Site::at_altitude(9.806, 1000.0, 3000.0).unwrap();
        assert_eq!(site.gravity(), 9.806);
        let range = site.air_pressure();
        assert!((range.low().pascals() - 86_874.6).abs() < 0.2 && (range.high().pascals() - 92_874.6).abs() < 0.2);
        assert!(Site::at_altitude(9.78, 0.0, 0.0).is_ok(), "no weather at all may be declared");
    }

    #[test]
    fn what_is_out_of_range_is_named() {
        assert_eq!(Site::at_altitude(9.5, 0.0, 0.0), Err(SiteError::Gravity { found: 9.5 }));
        assert_eq!(Site::at_altitude(9.81, 12_000.0, 0.0), Err(SiteError::Altitude { found: 12_000.0 }));
        assert_eq!(Site::at_altitude(9.81, 0.0, -1.0), Err(SiteError::Weather { found: -1.0 }));
        assert!(matches!(Site::at_altitude(f32::NAN, 0.0, 0.0), Err(SiteError::Gravity { .. })));
        assert!(matches!(Site::at_altitude(9.81, f32::NAN, 0.0), Err(SiteError::Altitude { .. })));
        assert!(matches!(Site::at_altitude(9.81, 0.0, f32::NAN), Err(SiteError::Weather { .. })));
        let end = AbsolutePressure::from_pascals;
        let range = |low, high| Declared::new(end(low), end(high)).unwrap();
        assert_eq!(Site::new(9.81, range(1013.0, 1030.0)), Err(SiteError::AirPressure { found: 1013.0 }));
        assert_eq!(Site::new(9.81, range(9e4, 1.2e5)), Err(SiteError::AirPressure { found: 1.2e5 }));
    }
}
