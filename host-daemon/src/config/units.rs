//! Values with their units as people write them: `"45 m3/h"`, `"0 .. 160 m3/h"`, `"0, 20, 40 m3/h"`, `"0.5 % + 0.4 m3/h"`.
//!
//! A number, optional blanks, a unit of the dimension asked for; the result is SI. A number without a unit is refused:
//! guessing is how wrong curves are born. Lists and ranges carry one unit, at the end. Conversions are those of `uom`;
//! all units here are proportional to the SI unit (pressures are differences or gauge values, so no offset enters).

use std::fmt;
use uom::si;

/// What a value measures.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
pub enum Dimension {
    /// Shaft speed, SI unit rad/s.
    Speed,
    /// Volume flow, m³/s.
    Flow,
    /// Head, m of the pumped liquid.
    Head,
    /// A length, m.
    Length,
    /// Gauge pressure, Pa.
    Pressure,
    /// Power, W.
    Power,
    /// Torque, N·m.
    Torque,
    /// A duration, s.
    Time,
    /// Density, kg/m³.
    Density,
    /// Acceleration, m/s².
    Acceleration,
    /// Angle, rad.
    Angle,
    /// A share, parts of one.
    Share,
    /// Symbol rate of a serial line, Bd.
    SymbolRate,
}

/// A unit as written in a file.
pub struct Unit {
    /// Spellings; the first is the one shown.
    names: &'static [&'static str],
    to_si: fn(f64) -> f64,
    from_si: fn(f64) -> f64,
}

impl Unit {
    /// The spelling shown to people.
    #[must_use]
    pub fn name(&self) -> &'static str {
        self.names[0]
    }

    /// A value in this unit, in SI.
    #[must_use]
    pub fn to_si(&self, value: f64) -> f64 {
        (self.to_si)(value)
    }

    /// An SI value, in this unit.
    #[must_use]
    pub fn from_si(&self, value: f64) -> f64 {
        (self.from_si)(value)
    }
}

impl fmt::Debug for Unit {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        out.write_str(self.name())
    }
}

macro_rules! units {
    ($quantity:ident, $module:ident, $si:ident: $($unit:ident $names:expr),+ $(,)?) => {{
        const UNITS: &[Unit] = &[$(Unit {
            names: &$names,
            to_si: |value| si::f64::$quantity::new::<si::$module::$unit>(value).get::<si::$module::$si>(),
            from_si: |value| si::f64::$quantity::new::<si::$module::$si>(value).get::<si::$module::$unit>(),
        }),+];
        UNITS
    }};
}

impl Dimension {
    /// The units allowed, the usual one first.
    #[must_use]
    pub fn units(self) -> &'static [Unit] {
        match self {
            Self::Speed => units!(AngularVelocity, angular_velocity, radian_per_second:
                revolution_per_minute ["rpm", "1/min", "rev/min"],
                revolution_per_second ["rev/s"],
                radian_per_second ["rad/s"]),
            Self::Flow => units!(VolumeRate, volume_rate, cubic_meter_per_second:
                cubic_meter_per_hour ["m3/h", "m³/h"],
                cubic_meter_per_second ["m3/s", "m³/s"],
                liter_per_second ["l/s", "L/s"],
                liter_per_minute ["l/min", "L/min"],
                gallon_per_minute ["gpm"]), // the US gallon
            Self::Head => units!(Length, length, meter: meter ["m"], foot ["ft"]),
            Self::Length => units!(Length, length, meter:
                millimeter ["mm"], centimeter ["cm"], meter ["m"], inch ["in"], foot ["ft"]),
            Self::Pressure => units!(Pressure, pressure, pascal:
                bar ["bar"], millibar ["mbar"], kilopascal ["kPa"], megapascal ["MPa"], pascal ["Pa"],
                pound_force_per_square_inch ["psi"]),
            Self::Power => units!(Power, power, watt:
                kilowatt ["kW"], watt ["W"], megawatt ["MW"], horsepower ["hp"]), // 550 ft·lbf/s
            Self::Torque => units!(Torque, torque, newton_meter:
                newton_meter ["N m", "Nm", "N·m"],
                kilonewton_meter ["kN m", "kNm", "kN·m"],
                pound_force_foot ["lbf ft", "ft lbf"]),
            Self::Time => units!(Time, time, second:
                second ["s"], millisecond ["ms"], minute ["min"], hour ["h"]),
            Self::Density => units!(MassDensity, mass_density, kilogram_per_cubic_meter:
                kilogram_per_cubic_meter ["kg/m3", "kg/m³"],
                gram_per_cubic_centimeter ["g/cm3", "g/cm³", "kg/l"],
                pound_per_cubic_foot ["lb/ft3", "lb/ft³"]),
            Self::Acceleration => units!(Acceleration, acceleration, meter_per_second_squared:
                meter_per_second_squared ["m/s2", "m/s²"]),
            Self::Angle => units!(Angle, angle, radian: degree ["deg", "°"], radian ["rad"]),
            Self::Share => units!(Ratio, ratio, ratio: percent ["%"]),
            Self::SymbolRate => {
                const UNITS: &[Unit] = &[Unit { names: &["Bd"], to_si: |value| value, from_si: |value| value }];
                UNITS
            }
        }
    }

    /// What it is called in a message.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::Speed => "shaft speed",
            Self::Flow => "flow",
            Self::Head => "head",
            Self::Length => "length",
            Self::Pressure => "pressure",
            Self::Power => "power",
            Self::Torque => "torque",
            Self::Time => "time",
            Self::Density => "density",
            Self::Acceleration => "acceleration",
            Self::Angle => "angle",
            Self::Share => "share",
            Self::SymbolRate => "symbol rate",
        }
    }

    /// A value as it may be written, without quotes.
    #[must_use]
    pub const fn example(self) -> &'static str {
        match self {
            Self::Speed => "1480 rpm",
            Self::Flow => "45 m3/h",
            Self::Head => "32 m",
            Self::Length => "150 mm",
            Self::Pressure => "2.1 bar",
            Self::Power => "12.5 kW",
            Self::Torque => "62 N m",
            Self::Time => "60 s",
            Self::Density => "998.2 kg/m3",
            Self::Acceleration => "9.81 m/s2",
            Self::Angle => "23 deg",
            Self::Share => "0.25 %",
            Self::SymbolRate => "115200 Bd",
        }
    }

    /// The unit of one of its spellings.
    #[must_use]
    pub fn unit(self, name: &str) -> Option<&'static Unit> {
        self.units().iter().find(|unit| unit.names.contains(&name))
    }

    /// The allowed units, for a message: `m3/h, m3/s, l/s`.
    #[must_use]
    pub fn allowed(self) -> String {
        self.units().iter().map(Unit::name).collect::<Vec<_>>().join(", ")
    }
}

/// An SI value and the unit it was written in.
#[derive(Clone, Copy, Debug)]
pub struct Value {
    /// The value, SI.
    pub si: f64,
    /// The unit the person used.
    pub unit: &'static Unit,
}

/// Values written with one unit, SI, in the order given.
#[derive(Clone, Debug)]
pub struct Values {
    /// The values, SI.
    pub si: Vec<f64>,
    /// The unit the person used.
    pub unit: &'static Unit,
}

/// A standard uncertainty: a part proportional to the value and a constant part.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Uncertainty {
    /// Parts of one of the value.
    pub relative: f64,
    /// SI unit of the dimension.
    pub constant: f64,
}

/// Why a text is not a value. The text is not repeated here where the message would only grow by it.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum UnitError {
    /// A number, or numbers, without a unit.
    #[error("{text} has no unit; write e.g. \"{example}\" ({allowed} allowed)")]
    NoUnit {
        /// What was found, with quotes if it had them.
        text: String,
        /// A right form, as near as possible to what was found.
        example: String,
        /// The allowed units.
        allowed: String,
    },
    /// A unit that is not one of the dimension.
    #[error("{text:?}: \"{unit}\" is no unit of {dimension} ({allowed} allowed)")]
    WrongUnit {
        /// What was found.
        text: String,
        /// The part taken for a unit.
        unit: String,
        /// What was asked for.
        dimension: &'static str,
        /// The allowed units.
        allowed: String,
    },
    /// A comma where a number has its decimals.
    #[error("{text:?} has a comma; write decimals with a point, as \"{example}\"")]
    Comma {
        /// What was found.
        text: String,
        /// A right form.
        example: &'static str,
    },
    /// No number where one belongs.
    #[error("{text:?} is not {wanted}; write e.g. \"{example}\" ({allowed} allowed)")]
    NotAValue {
        /// What was found.
        text: String,
        /// What was asked for: `a flow`, `a range of flow`, `a list of flow`.
        wanted: String,
        /// A right form.
        example: String,
        /// The allowed units.
        allowed: String,
    },
}

/// Cuts a text into a number and what follows it. An `e` belongs to the number only before a digit or a sign.
fn cut(text: &str) -> (&str, &str) {
    let bytes = text.as_bytes();
    let end = (0..bytes.len())
        .find(|&at| match bytes[at] {
            b'0'..=b'9' | b'.' => false,
            b'+' | b'-' => at > 0 && !matches!(bytes[at - 1], b'e' | b'E'),
            b'e' | b'E' => at == 0 || !bytes.get(at + 1).is_some_and(|next| matches!(next, b'0'..=b'9' | b'+' | b'-')),
            _ => true,
        })
        .unwrap_or(bytes.len());
    let (number, rest) = text.split_at(end); // `end` is at an ASCII character or the end
    (number, rest.trim())
}

fn number(text: &str) -> Option<f64> {
    text.parse().ok().filter(|value: &f64| value.is_finite())
}

/// Finite in SI too: `1e308 kW` is not.
fn si_of(unit: &'static Unit, value: f64) -> Option<f64> {
    Some(unit.to_si(value)).filter(|value| value.is_finite())
}

/// Reads one value, as `45 m3/h`.
///
/// # Errors
/// [`UnitError`], saying what was found and what is allowed.
pub fn value(dimension: Dimension, text: &str) -> Result<Value, UnitError> {
    let trimmed = text.trim();
    let (digits, rest) = cut(trimmed);
    let not_a_value = || UnitError::NotAValue {
        text: text.to_owned(),
        wanted: format!("a {}", dimension.name()),
        example: dimension.example().to_owned(),
        allowed: dimension.allowed(),
    };
    if rest.starts_with(',') {
        return Err(UnitError::Comma { text: text.to_owned(), example: dimension.example() });
    }
    let found = number(digits).ok_or_else(not_a_value)?;
    let unit = unit_of(dimension, text, trimmed, rest)?;
    si_of(unit, found).map(|si| Value { si, unit }).ok_or_else(not_a_value)
}

/// Reads a list with one unit at its end, as `0, 20, 40 m3/h`.
///
/// # Errors
/// [`UnitError`].
pub fn list(dimension: Dimension, text: &str) -> Result<Values, UnitError> {
    several(dimension, text, "list", ",", example_of_list(dimension), |_| true)
}

/// Reads a range with one unit at its end, as `0 .. 160 m3/h`; the first value is below the second.
///
/// # Errors
/// [`UnitError`].
pub fn range(dimension: Dimension, text: &str) -> Result<(Value, Value), UnitError> {
    let example = match dimension {
        Dimension::Pressure => "-1 .. 1.5 bar".to_owned(),
        _ => format!("0 .. {}", dimension.example()),
    };
    let values = several(dimension, text, "range", "..", example, |si| matches!(si, [low, high] if low < high))?;
    let end = |position: usize| Value { si: values.si.get(position).copied().unwrap_or(f64::NAN), unit: values.unit };
    Ok((end(0), end(1)))
}

fn example_of_list(dimension: Dimension) -> String {
    format!("0, 20, {}", dimension.example())
}

fn several(
    dimension: Dimension,
    text: &str,
    form: &str,
    separator: &str,
    example: String,
    accept: impl Fn(&[f64]) -> bool,
) -> Result<Values, UnitError> {
    let wanted = match form {
        "range" => format!("a range of {} from low to high", dimension.name()),
        _ => format!("a list of {} with one unit at its end", dimension.name()),
    };
    let not_several = || UnitError::NotAValue { text: text.to_owned(), wanted, example, allowed: dimension.allowed() };
    let trimmed = text.trim();
    let parts: Vec<&str> = trimmed.split(separator).map(str::trim).collect();
    let Some((last, before)) = parts.split_last() else { return Err(not_several()) };
    let (last_number, rest) = cut(last);
    let numbers: Option<Vec<f64>> = before.iter().chain([&last_number]).map(|part| number(part)).collect();
    let Some(numbers) = numbers else { return Err(not_several()) };
    let unit = unit_of(dimension, text, trimmed, rest)?;
    let si: Option<Vec<f64>> = numbers.iter().map(|&value| si_of(unit, value)).collect();
    match si {
        Some(si) if accept(&si) => Ok(Values { si, unit }),
        _ => Err(not_several()),
    }
}

fn unit_of(dimension: Dimension, text: &str, trimmed: &str, rest: &str) -> Result<&'static Unit, UnitError> {
    if rest.is_empty() {
        return Err(UnitError::NoUnit {
            text: format!("{text:?}"),
            example: format!("{trimmed} {}", dimension.units()[0].name()),
            allowed: dimension.allowed(),
        });
    }
    dimension.unit(rest).ok_or_else(|| UnitError::WrongUnit {
        text: text.to_owned(),
        unit: rest.to_owned(),
        dimension: dimension.name(),
        allowed: dimension.allowed(),
    })
}

/// Reads a standard uncertainty: `0.5 %`, `0.4 m3/h`, or both joined by `+`, neither twice.
///
/// # Errors
/// [`UnitError`].
pub fn uncertainty(dimension: Dimension, text: &str) -> Result<Uncertainty, UnitError> {
    let unit = dimension.units()[0].name();
    let wanted = || UnitError::NotAValue {
        text: text.to_owned(),
        wanted: "an uncertainty (a share of the value, a constant part, or both joined by +)".to_owned(),
        example: format!("0.5 % + 0.4 {unit}"),
        allowed: format!("%, {}", dimension.allowed()),
    };
    let (mut relative, mut constant) = (None, None);
    for part in text.split(" + ") {
        let part = part.trim();
        let slot = if part.ends_with('%') { &mut relative } else { &mut constant };
        let found = match value(if part.ends_with('%') { Dimension::Share } else { dimension }, part) {
            Ok(found) => found.si,
            Err(UnitError::NoUnit { .. }) => {
                return Err(UnitError::NoUnit {
                    text: format!("{text:?}"),
                    example: format!("{part} % or {part} {unit}"),
                    allowed: format!("%, {}", dimension.allowed()),
                });
            }
            Err(UnitError::NotAValue { .. }) => return Err(wanted()),
            Err(other) => return Err(other),
        };
        if found < 0.0 || slot.replace(found).is_some() {
            return Err(wanted());
        }
    }
    Ok(Uncertainty { relative: relative.unwrap_or(0.0), constant: constant.unwrap_or(0.0) })
}

/// A number for people: up to six significant digits, no trailing zeros.
#[must_use]
pub fn plain(value: f64) -> String {
    if value == 0.0 || !value.is_finite() {
        return format!("{}", if value == 0.0 { 0.0 } else { value });
    }
    let magnitude = value.abs().log10().floor() as i32;
    if !(-5..9).contains(&magnitude) {
        return format!("{value:.3e}");
    }
    let decimals = usize::try_from(5 - magnitude).unwrap_or(0);
    let text = format!("{value:.decimals$}");
    if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
}
