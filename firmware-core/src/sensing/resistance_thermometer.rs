//! Platinum resistance thermometers (Pt100, IEC 60751): resistance to temperature, with the tolerance of the element
//! and the error of its leads.
//!
//! `R = R0·(1 + A·t + B·t² + C·(t − 100)·t³)`, the last term below 0 °C only; coefficients of IEC 60751:2008 for
//! −200 to 850 °C. At and above 0 °C the inverse is `t = 2x/(A + √(A² + 4Bx))`, `x = R/R0 − 1`: the usual form with the
//! difference of two nearly equal numbers loses ten times as much in f32. Below 0 °C: three Newton steps from there.
//! Not modelled: self-heating, thermal voltages, immersion error, ageing.

use super::Measured;
use crate::{math, quantity::Temperature};

/// Resistance at 0 °C, ohm.
pub const R0: f32 = 100.0;
const A: f32 = 3.9083e-3;
const B: f32 = -5.775e-7;
const C: f32 = -4.183e-12;

/// Temperatures the standard's formula holds for, °C.
pub const RANGE: core::ops::RangeInclusive<f32> = -200.0..=850.0;

/// At or below: the element or its cable is shorted, ohm. The standard's range ends at 18.5 ohm; the margin is ours.
pub const SHORT_OHMS: f32 = 10.0;

/// At or above: the element or its cable is open, ohm. The standard's range ends at 390.5 ohm; the margin is ours.
pub const OPEN_OHMS: f32 = 450.0;

/// Newton steps below 0 °C; fixed, so that the time does not depend on the data. Two leave 2.5 mK at −200 °C, three nothing that f32 sees.
const NEWTON_STEPS: usize = 3;

/// Tolerance classes of IEC 60751:2008 (figures from memory): what the maker promises of a new element.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ToleranceClass {
    /// ±(0.1 + 0.0017·|t|) K.
    AA,
    /// ±(0.15 + 0.002·|t|) K.
    A,
    /// ±(0.3 + 0.005·|t|) K.
    B,
    /// ±(0.6 + 0.01·|t|) K.
    C,
}

impl ToleranceClass {
    /// Half-width of the tolerance at a temperature in °C, K.
    #[must_use]
    pub fn tolerance(self, celsius: f32) -> f32 {
        let (constant, per_kelvin) = match self {
            Self::AA => (0.1, 0.0017),
            Self::A => (0.15, 0.002),
            Self::B => (0.3, 0.005),
            Self::C => (0.6, 0.01),
        };
        constant + per_kelvin * celsius.abs()
    }

    /// Standard uncertainty of an element of this class, K: the half-width over √3, as every value within the tolerance
    /// is equally likely (JCGM 100, 4.3.7).
    #[must_use]
    pub fn deviation(self, celsius: f32) -> f32 {
        const INVERSE_ROOT_OF_3: f32 = 0.577_350_3;
        self.tolerance(celsius) * INVERSE_ROOT_OF_3
    }

    /// Temperatures at which an element may claim the class, °C (wire-wound; from memory). Outside it the promise does
    /// not hold, though the element works.
    #[must_use]
    pub const fn range(self) -> core::ops::RangeInclusive<f32> {
        match self {
            Self::AA => -50.0..=250.0,
            Self::A => -100.0..=450.0,
            Self::B | Self::C => -196.0..=600.0,
        }
    }
}

/// How the element is wired. Copper leads in series read as temperature: 2.6 K per ohm.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Wiring {
    /// Two wires: the resistance of both leads is in the reading. There is no default for it.
    Two {
        /// Resistance of both leads together, ohm, as measured or worked out; taken off the reading.
        leads: f32,
        /// Its standard uncertainty, ohm: copper alone changes by 0.4 % per kelvin.
        leads_deviation: f32,
    },
    /// Three wires: what is left is the difference of two leads.
    Three {
        /// Standard uncertainty from that difference, ohm.
        imbalance: f32,
    },
    /// Four wires: leads do not enter.
    Four,
}

/// Why there is no temperature.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ThermometerFault {
    /// At or above [`OPEN_OHMS`], infinity included: element or cable broken.
    Open,
    /// At or below [`SHORT_OHMS`], negative readings included: element or cable shorted.
    Short,
    /// The reading is no number: the converter failed.
    NotANumber,
}

/// How far a temperature can be trusted.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Standing {
    /// Within the range of the element's tolerance class.
    Within,
    /// Outside the range of its tolerance class, within that of the standard: the uncertainty stated may be too small.
    OutsideClass,
    /// Outside the standard's range (−200 to 850 °C): an extrapolation, an indication at best.
    OutsideStandard,
}

/// A temperature and what to think of it.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct TemperatureReading {
    /// Temperature and standard uncertainty (K).
    pub temperature: Measured<Temperature>,
    /// Its standing.
    pub standing: Standing,
}

/// One thermometer: element and wiring.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Pt100 {
    /// Tolerance class of the element.
    pub class: ToleranceClass,
    /// How it is wired.
    pub wiring: Wiring,
}

impl Pt100 {
    /// Temperature from the resistance at the terminals in ohm and the standard uncertainty of its measurement, ohm.
    ///
    /// # Errors
    /// [`ThermometerFault`]: open, shorted, or no number.
    ///
    /// # Examples
    /// ```
    /// use offcurve_core::sensing::resistance_thermometer::{Pt100, ToleranceClass, Wiring};
    ///
    /// let winding = Pt100 { class: ToleranceClass::B, wiring: Wiring::Two { leads: 0.8, leads_deviation: 0.05 } };
    /// let found = winding.read(139.31, 0.02)?;
    /// assert!((found.temperature.value.degrees_celsius() - 100.0).abs() < 0.02);
    /// assert!((found.temperature.deviation - 0.485).abs() < 0.005); // 0.8 K/√3, leads 0.13 K, converter 0.05 K
    /// # Ok::<(), offcurve_core::sensing::resistance_thermometer::ThermometerFault>(())
    /// ```
    pub fn read(&self, ohms: f32, deviation: f32) -> Result<TemperatureReading, ThermometerFault> {
        let (leads, leads_deviation) = match self.wiring {
            Wiring::Two { leads, leads_deviation } => (leads, leads_deviation),
            Wiring::Three { imbalance } => (0.0, imbalance),
            Wiring::Four => (0.0, 0.0),
        };
        let element = ohms - leads;
        if element.is_nan() {
            return Err(ThermometerFault::NotANumber);
        }
        if element >= OPEN_OHMS {
            return Err(ThermometerFault::Open);
        }
        if element <= SHORT_OHMS {
            return Err(ThermometerFault::Short);
        }
        let celsius = celsius(element);
        let kelvins_per_ohm = 1.0 / (R0 * slope(celsius));
        let deviation = math::root_sum_square([
            self.class.deviation(celsius),
            deviation * kelvins_per_ohm,
            leads_deviation * kelvins_per_ohm,
        ]);
        let standing = if !RANGE.contains(&celsius) {
            Standing::OutsideStandard
        } else if !self.class.range().contains(&celsius) {
            Standing::OutsideClass
        } else {
            Standing::Within
        };
        Ok(TemperatureReading {
            temperature: Measured { value: Temperature::from_degrees_celsius(celsius), deviation },
            standing,
        })
    }
}

/// Resistance of an ideal Pt100 at a temperature in °C, ohm. Outside [`RANGE`] it goes on, without a claim.
#[must_use]
pub fn resistance(celsius: f32) -> f32 {
    R0 * ratio(celsius)
}

/// Temperature in °C of an ideal Pt100 from its resistance in ohm, between [`SHORT_OHMS`] and [`OPEN_OHMS`].
///
/// Against exact arithmetic within 6e-5 K to 200 °C and 2.5e-4 K over the whole range (rounding of the resistance
/// itself included); no check of its own, NaN gives NaN.
#[must_use]
pub fn celsius(ohms: f32) -> f32 {
    let x = (ohms - R0) / R0; // exact difference near R0, where R/R0 − 1 would round twice
    let mut t = 2.0 * x / (A + math::sqrt(A * A + 4.0 * B * x));
    if x < 0.0 {
        for _ in 0..NEWTON_STEPS {
            t -= (excess(t) - x) / slope(t);
        }
    }
    t
}

/// R/R0 − 1.
fn excess(t: f32) -> f32 {
    let cold = if t < 0.0 { C * (t - 100.0) * t * t } else { 0.0 };
    t * (A + B * t + cold)
}

fn ratio(t: f32) -> f32 {
    1.0 + excess(t)
}

/// d(R/R0)/dt, 1/K.
fn slope(t: f32) -> f32 {
    let cold = if t < 0.0 { C * t * t * (4.0 * t - 300.0) } else { 0.0 };
    A + 2.0 * B * t + cold
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The standard's formula in f64, with its own coefficients written out again.
    fn exact_resistance(t: f64) -> f64 {
        let cold = if t < 0.0 { -4.183e-12 * (t - 100.0) * t.powi(3) } else { 0.0 };
        100.0 * (1.0 + 3.9083e-3 * t - 5.775e-7 * t * t + cold)
    }

    #[test]
    fn inverse_holds_its_bounds_over_the_range() {
        let (mut near, mut anywhere) = (0.0_f64, 0.0_f64);
        for step in 0..=105_000 {
            let t = -200.0 + 0.01 * f64::from(step);
            let off = (f64::from(celsius(exact_resistance(t) as f32)) - t).abs();
            anywhere = anywhere.max(off);
            if t.abs() <= 200.0 {
                near = near.max(off);
            }
        }
        assert!(near < 6e-5 && anywhere < 2.5e-4, "{near:e} K to 200 °C, {anywhere:e} K in all");
        assert!(anywhere > 2e-5, "a bound this loose would hide a change: {anywhere:e}");
    }

    #[test]
    fn sensitivity_is_the_slope() {
        for t in [-180.0_f32, -50.0, -1.0, 1.0, 100.0, 800.0] {
            let (t64, step) = (f64::from(t), 1e-3);
            let numeric = (exact_resistance(t64 + step) - exact_resistance(t64 - step)) / (2.0 * step) / 100.0;
            assert!((f64::from(slope(t)) / numeric - 1.0).abs() < 1e-5, "{t}");
        }
    }

    #[test]
    fn two_wire_leads_are_declared_and_taken_off() {
        let bare = Pt100 { class: ToleranceClass::A, wiring: Wiring::Four };
        let wired = Pt100 { wiring: Wiring::Two { leads: 1.0, leads_deviation: 0.1 }, ..bare };
        let (truth, wrong) = (bare.read(100.0, 0.0).unwrap(), bare.read(101.0, 0.0).unwrap());
        assert!((wrong.temperature.value.degrees_celsius() - 2.56).abs() < 0.01, "2.6 K per ohm of lead");
        let corrected = wired.read(101.0, 0.0).unwrap();
        assert_eq!(corrected.temperature.value, truth.temperature.value);
        assert!((truth.temperature.deviation - 0.15 / 3_f32.sqrt()).abs() < 1e-6);
        // 0.1 ohm of lead at 2.5586 K/ohm beside the element's 0.0866 K.
        assert!((corrected.temperature.deviation - (0.0866_f32.powi(2) + 0.25586_f32.powi(2)).sqrt()).abs() < 1e-4);
        let three = Pt100 { wiring: Wiring::Three { imbalance: 0.1 }, ..bare };
        assert_eq!(three.read(100.0, 0.0).unwrap().temperature, corrected.temperature);
    }

    #[test]
    fn open_short_and_range_are_told_apart() {
        let element = Pt100 { class: ToleranceClass::B, wiring: Wiring::Four };
        for open in [450.0, 1e6, f32::INFINITY] {
            assert_eq!(element.read(open, 0.1), Err(ThermometerFault::Open));
        }
        for short in [10.0, 0.0, -0.0, -3.0, f32::NEG_INFINITY] {
            assert_eq!(element.read(short, 0.1), Err(ThermometerFault::Short));
        }
        assert_eq!(element.read(f32::NAN, 0.1), Err(ThermometerFault::NotANumber));
        let standing = |t| element.read(resistance(t), 0.1).map(|found| found.standing);
        assert_eq!(standing(-205.0), Ok(Standing::OutsideStandard));
        assert_eq!(standing(-199.0), Ok(Standing::OutsideClass));
        assert_eq!(standing(20.0), Ok(Standing::Within));
        assert_eq!(standing(700.0), Ok(Standing::OutsideClass));
        assert_eq!(standing(870.0), Ok(Standing::OutsideStandard));
        // A two-wire lead larger than the reading is a short, not a temperature.
        let wired = Pt100 { wiring: Wiring::Two { leads: 100.0, leads_deviation: 0.1 }, ..element };
        assert_eq!(wired.read(100.0, 0.1), Err(ThermometerFault::Short));
    }

    #[test]
    fn an_unknown_uncertainty_stays_unknown() {
        let element = Pt100 { class: ToleranceClass::B, wiring: Wiring::Four };
        assert!(element.read(110.0, f32::NAN).unwrap().temperature.deviation.is_nan());
    }
}
