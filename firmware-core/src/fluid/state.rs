//! The fluid in the machine from readings that may be missing: density, viscosity and vapour pressure with all of their
//! uncertainty, and said whether the temperature was measured or only declared.
//!
//! A pump often has no thermometer, a fan no hygrometer. What is missing is taken as the middle of a range that the
//! user declares (site, season) with the standard uncertainty of a rectangle, `(high − low)/√12` (JCGM 100, 4.3.7),
//! and carried through to every property. There is no built-in default: without a declared range there is no state.
//!
//! For a measured temperature the law's slope f' carries the uncertainty (first order). A declared range may be wide, so
//! there the law is read at both ends as well, and a cubic through what is known is spread over the rectangle: the
//! straight part is `0.6·(f(high) − f(low))/√12 + 0.4·f'·(high − low)/√12`, the bend
//! `|f(high) + f(low) − 2f(middle)|·√(1/45 + 1/36)`, which holds the spread of the square and the distance between the
//! middle's value and the mean. Against draws from the range the sum is within 3 % for ranges up to 75 K (measured in
//! this file's tests). Temperature, pressure and humidity are taken as independent of each other; the product of
//! temperature and humidity errors is left out (below 0.1 % of air density for 10 to 35 °C and 20 to 90 %).

use super::{Coverage, Input, LiquidProperties, NotFinite, Property, air, solids::Solids, table::LiquidTable, water};
use crate::{
    math,
    quantity::{
        AbsolutePressure, Density, DynamicViscosity, GaugePressure, KinematicViscosity, Quantity, Ratio, Temperature,
    },
    sensing::Measured,
};

/// 1/√12: from the width of a rectangle to its standard deviation.
const WIDTH_TO_DEVIATION: f32 = 0.288_675_13;
/// 1/45 + 1/36, see the module's text.
const BEND: f32 = 0.05;

/// Why two ends are no range.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum RangeError {
    /// An end is NaN or infinite.
    NotFinite,
    /// The low end is above the high one.
    Reversed {
        /// The low end, in the quantity's SI unit.
        low: f32,
        /// The high end.
        high: f32,
    },
}

/// The range a quantity is declared to lie in, every value as likely as the next. Both ends may be equal.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Declared<T> {
    low: T,
    high: T,
}

impl<T: Quantity> Declared<T> {
    /// A range from its ends.
    ///
    /// # Errors
    /// [`RangeError`] for ends that are not finite or not in order.
    pub fn new(low: T, high: T) -> Result<Self, RangeError> {
        if !low.si().is_finite() || !high.si().is_finite() {
            return Err(RangeError::NotFinite);
        }
        if low.si() > high.si() {
            return Err(RangeError::Reversed { low: low.si(), high: high.si() });
        }
        Ok(Self { low, high })
    }

    /// The low end.
    #[must_use]
    pub const fn low(&self) -> T {
        self.low
    }

    /// The high end.
    #[must_use]
    pub const fn high(&self) -> T {
        self.high
    }

    /// The middle.
    #[must_use]
    pub fn middle(&self) -> T {
        T::from_si(0.5 * self.low.si() + 0.5 * self.high.si())
    }

    /// Standard uncertainty of the middle: (high − low)/√12, in the quantity's SI unit.
    #[must_use]
    pub fn deviation(&self) -> f32 {
        self.high.si() * WIDTH_TO_DEVIATION - self.low.si() * WIDTH_TO_DEVIATION
    }
}

/// Where a value comes from.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Origin {
    /// A reading.
    Measured,
    /// The middle of a declared range.
    Declared,
}

/// A quantity as well as it is known.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Known<T> {
    /// The value.
    pub value: T,
    /// Its standard uncertainty, in the quantity's SI unit.
    pub deviation: f32,
    /// Measured or declared.
    pub origin: Origin,
    ends: Option<(T, T)>,
}

impl<T: Quantity> Known<T> {
    /// The reading where there is a usable one, else the declared range.
    ///
    /// Not usable: a value that is not finite, an uncertainty that is negative, infinite or NaN (unknown).
    ///
    /// # Examples
    /// ```
    /// use offcurve_core::fluid::state::{Declared, Known, Origin};
    /// use offcurve_core::{quantity::Temperature, sensing::Measured};
    ///
    /// let celsius = Temperature::from_degrees_celsius;
    /// let season = Declared::new(celsius(4.0), celsius(22.0)).expect("ends in order");
    /// let blind = Known::resolve(None, &season);
    /// assert_eq!((blind.value, blind.origin), (celsius(13.0), Origin::Declared));
    /// assert!((blind.deviation - 5.196).abs() < 1e-3);
    ///
    /// let read = Known::resolve(Some(Measured { value: celsius(17.5), deviation: 0.2 }), &season);
    /// assert_eq!((read.value, read.deviation, read.origin), (celsius(17.5), 0.2, Origin::Measured));
    /// ```
    #[must_use]
    pub fn resolve(reading: Option<Measured<T>>, declared: &Declared<T>) -> Self {
        match reading {
            Some(Measured { value, deviation })
                if value.si().is_finite() && deviation.is_finite() && deviation >= 0.0 =>
            {
                Self { value, deviation, origin: Origin::Measured, ends: None }
            }
            _ => Self {
                value: declared.middle(),
                deviation: declared.deviation(),
                origin: Origin::Declared,
                ends: Some((declared.low, declared.high)),
            },
        }
    }

    /// The ends of a declared range; a reading twice.
    fn span(&self) -> (T, T) {
        self.ends.unwrap_or((self.value, self.value))
    }
}

impl Known<AbsolutePressure> {
    /// The absolute pressure at a gauge, from its reading and the air pressure; measured only if both are.
    ///
    /// `None` for a reading that is not usable, see [`resolve`](Self::resolve).
    #[must_use]
    pub fn above(gauge: Measured<GaugePressure>, atmosphere: &Self) -> Option<Self> {
        if !gauge.value.pascals().is_finite() || !gauge.deviation.is_finite() || gauge.deviation < 0.0 {
            return None;
        }
        Some(Self {
            value: gauge.value.above(atmosphere.value),
            deviation: math::root_sum_square([gauge.deviation, atmosphere.deviation]),
            origin: atmosphere.origin,
            ends: atmosphere.ends.map(|(low, high)| (gauge.value.above(low), gauge.value.above(high))),
        })
    }
}

/// A property with the parts of its standard uncertainty. The signed parts let a caller that uses two properties of one
/// state keep their correlation (NPSH uses density and vapour pressure, both moved by one temperature error).
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Derived<T> {
    /// The value.
    pub value: T,
    /// What the uncertainty of the temperature moves, ∂value/∂T times u(T), signed, in the value's unit.
    pub by_temperature: f32,
    /// ∂value/∂p times u(p), signed.
    pub by_pressure: f32,
    /// ∂value/∂h times u(h), signed; 0 for liquids.
    pub by_humidity: f32,
    /// Variance of what no input moves: the law's own part, the bend over a declared range, solids.
    pub own_variance: f32,
}

impl<T: Quantity> Derived<T> {
    /// Variance, in the square of the value's SI unit.
    #[must_use]
    pub fn variance(&self) -> f32 {
        self.by_temperature * self.by_temperature
            + self.by_pressure * self.by_pressure
            + self.by_humidity * self.by_humidity
            + self.own_variance
    }

    /// Standard uncertainty, in the value's SI unit.
    #[must_use]
    pub fn deviation(&self) -> f32 {
        math::sqrt(self.variance())
    }

    fn from_property(
        at: &Property<T>,
        ends: Option<(&Property<T>, &Property<T>)>,
        [temperature, pressure, humidity]: [f32; 3],
    ) -> Self {
        let (by_temperature, bend) = match ends {
            None => (at.per_kelvin * temperature, 0.0),
            Some((low, high)) => {
                let (low, middle, high) = (low.value.si(), at.value.si(), high.value.si());
                let straight = 0.6 * WIDTH_TO_DEVIATION * (high - low) + 0.4 * temperature * at.per_kelvin;
                (straight, (high - middle) - (middle - low))
            }
        };
        Self {
            value: at.value,
            by_temperature,
            by_pressure: at.per_pascal * pressure,
            by_humidity: at.per_humidity * humidity,
            own_variance: at.model_variance + bend * bend * BEND,
        }
    }
}

/// ν = μ/ρ: the two move together with temperature, pressure and humidity.
fn kinematic(viscosity: &Derived<DynamicViscosity>, density: &Derived<Density>) -> Derived<KinematicViscosity> {
    let per_viscosity = 1.0 / density.value.si();
    let value = viscosity.value.si() * per_viscosity;
    let per_density = value * per_viscosity;
    let part = |of_viscosity: f32, of_density: f32| of_viscosity * per_viscosity - of_density * per_density;
    Derived {
        value: KinematicViscosity::from_si(value),
        by_temperature: part(viscosity.by_temperature, density.by_temperature),
        by_pressure: part(viscosity.by_pressure, density.by_pressure),
        by_humidity: part(viscosity.by_humidity, density.by_humidity),
        own_variance: viscosity.own_variance * (per_viscosity * per_viscosity)
            + density.own_variance * (per_density * per_density),
    }
}

/// Which liquid.
// A table is larger than nothing, but there is one liquid per machine and no allocator to box it with.
#[allow(clippy::large_enum_variant, reason = "no heap to put the large one on")]
#[derive(Clone, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Liquid {
    /// Clean water.
    Water,
    /// The user's own table.
    Table(LiquidTable),
}

impl Liquid {
    /// Its properties; a table knows nothing of pressure.
    ///
    /// # Errors
    /// [`NotFinite`] for an input of NaN or infinity.
    pub fn properties(
        &self,
        temperature: Temperature,
        pressure: AbsolutePressure,
    ) -> Result<LiquidProperties, NotFinite> {
        match self {
            Self::Water => water::properties(temperature, pressure),
            Self::Table(_) if !pressure.pascals().is_finite() => Err(NotFinite { input: Input::Pressure }),
            Self::Table(table) => table.properties(temperature),
        }
    }
}

/// Why there is no state, or no viscosity in it.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum StateError {
    /// An input of NaN or infinity.
    NotFinite(NotFinite),
    /// Not valid for slurry.
    Slurry,
}

impl From<NotFinite> for StateError {
    fn from(refused: NotFinite) -> Self {
        Self::NotFinite(refused)
    }
}

/// The liquid in a pump.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LiquidState {
    /// The temperature it rests on.
    pub temperature: Known<Temperature>,
    /// Density, solids included.
    pub density: Derived<Density>,
    /// Dynamic viscosity; [`StateError::Slurry`] with solids, whose effect is not modelled.
    pub dynamic_viscosity: Result<Derived<DynamicViscosity>, StateError>,
    /// Kinematic viscosity; missing as the dynamic one.
    pub kinematic_viscosity: Result<Derived<KinematicViscosity>, StateError>,
    /// Vapour pressure of the liquid.
    pub vapour_pressure: Derived<AbsolutePressure>,
    /// What lay outside the law's range, the ends of a declared temperature range included.
    pub coverage: Coverage,
}

impl LiquidState {
    /// The state at a temperature and an absolute pressure (of the place that matters: the inlet for NPSH).
    ///
    /// # Errors
    /// [`StateError::Slurry`] where the solids are unknown; [`StateError::NotFinite`] cannot come from values that
    /// [`Known::resolve`] gave.
    ///
    /// # Examples
    /// ```
    /// use offcurve_core::fluid::{solids::Solids, state::{Declared, Known, Liquid, LiquidState}};
    /// use offcurve_core::quantity::{AbsolutePressure, Temperature};
    ///
    /// let (celsius, pascals) = (Temperature::from_degrees_celsius, AbsolutePressure::from_pascals);
    /// let temperature = Known::resolve(None, &Declared::new(celsius(5.0), celsius(20.0)).expect("in order"));
    /// let pressure = Known::resolve(None, &Declared::new(pascals(98e3), pascals(104e3)).expect("in order"));
    /// let state = LiquidState::new(&Liquid::Water, Solids::None, &temperature, &pressure).expect("clean water");
    /// assert!((state.density.value.kilograms_per_cubic_metre() - 999.4).abs() < 0.1);
    /// assert!((state.density.deviation() - 0.6).abs() < 0.1, "half a part in a thousand for want of a thermometer");
    /// ```
    pub fn new(
        liquid: &Liquid,
        solids: Solids,
        temperature: &Known<Temperature>,
        pressure: &Known<AbsolutePressure>,
    ) -> Result<Self, StateError> {
        if solids == Solids::Unknown {
            return Err(StateError::Slurry);
        }
        let at = liquid.properties(temperature.value, pressure.value)?;
        let mut coverage = at.density.coverage.and(at.vapour_pressure.coverage);
        let ends = match temperature.ends {
            None => None,
            Some((low, high)) => {
                let (low, high) = (liquid.properties(low, pressure.value)?, liquid.properties(high, pressure.value)?);
                coverage = coverage.and(low.density.coverage).and(high.density.coverage);
                Some((low, high))
            }
        };
        let ends = ends.as_ref();
        let deviations = [temperature.deviation, pressure.deviation, 0.0];
        let density =
            Derived::from_property(&at.density, ends.map(|(low, high)| (&low.density, &high.density)), deviations);
        let viscosity = Derived::from_property(
            &at.dynamic_viscosity,
            ends.map(|(low, high)| (&low.dynamic_viscosity, &high.dynamic_viscosity)),
            deviations,
        );
        let vapour_pressure = Derived::from_property(
            &at.vapour_pressure,
            ends.map(|(low, high)| (&low.vapour_pressure, &high.vapour_pressure)),
            deviations,
        );
        let (density, dynamic_viscosity, kinematic_viscosity) = match solids {
            Solids::Declared(slurry) => (slurry.mixed(&density), Err(StateError::Slurry), Err(StateError::Slurry)),
            _ => (density, Ok(viscosity), Ok(kinematic(&viscosity, &density))),
        };
        Ok(Self {
            temperature: *temperature,
            density,
            dynamic_viscosity,
            kinematic_viscosity,
            vapour_pressure,
            coverage,
        })
    }
}

/// The air in a fan.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct AirState {
    /// The temperature it rests on.
    pub temperature: Known<Temperature>,
    /// The relative humidity it rests on.
    pub humidity: Known<Ratio>,
    /// Density.
    pub density: Derived<Density>,
    /// Dynamic viscosity.
    pub dynamic_viscosity: Derived<DynamicViscosity>,
    /// Kinematic viscosity.
    pub kinematic_viscosity: Derived<KinematicViscosity>,
    /// What lay outside the law's range, the ends of declared ranges included.
    pub coverage: Coverage,
}

impl AirState {
    /// The state at a temperature, an absolute pressure and a relative humidity, of the place that matters (the inlet).
    ///
    /// # Errors
    /// [`StateError::NotFinite`], which cannot come from values that [`Known::resolve`] gave.
    pub fn new(
        temperature: &Known<Temperature>,
        pressure: &Known<AbsolutePressure>,
        humidity: &Known<Ratio>,
    ) -> Result<Self, StateError> {
        let at = air::properties(temperature.value, pressure.value, humidity.value)?;
        let mut coverage = at.density.coverage;
        let ends = match temperature.ends {
            None => None,
            Some((low, high)) => Some((
                air::properties(low, pressure.value, humidity.value)?,
                air::properties(high, pressure.value, humidity.value)?,
            )),
        };
        let ends = ends.as_ref();
        // In pressure and humidity the laws are straight. The range is held against two corners, which between them
        // have both ends of every input, and the most vapour for its pressure.
        let (temperatures, pressures, humidities) = (temperature.span(), pressure.span(), humidity.span());
        let corners = [(temperatures.0, pressures.1, humidities.0), (temperatures.1, pressures.0, humidities.1)];
        for (temperature, pressure, humidity) in corners {
            coverage = coverage.and(air::properties(temperature, pressure, humidity)?.density.coverage);
        }
        let deviations = [temperature.deviation, pressure.deviation, humidity.deviation];
        let density =
            Derived::from_property(&at.density, ends.map(|(low, high)| (&low.density, &high.density)), deviations);
        let dynamic_viscosity = Derived::from_property(
            &at.dynamic_viscosity,
            ends.map(|(low, high)| (&low.dynamic_viscosity, &high.dynamic_viscosity)),
            deviations,
        );
        let kinematic_viscosity = kinematic(&dynamic_viscosity, &density);
        Ok(Self {
            temperature: *temperature,
            humidity: *humidity,
            density,
            dynamic_viscosity,
            kinematic_viscosity,
            coverage,
        })
    }
}

#[cfg(test)]
mod tests;
