//! Any liquid the user has figures of: up to eight rows of temperature, density, dynamic viscosity, vapour pressure.
//!
//! Between two rows density is linear in T, ln μ linear in T, ln p_v linear in 1/T (Clausius and Clapeyron with a
//! constant heat of evaporation). How far that is off depends on the rows: for water every 10 K it is 1.9e-4, 7.5e-3
//! and 8.0e-4, growing with the square of the spacing, and belongs into the declared [`TableAccuracy`].
//! Outside the first and last row the value is that of the end, flagged, and its uncertainty grows by slope times
//! distance. Not modelled: pressure (the rows hold for the pressure they were taken at), non-Newtonian liquids.

use super::{Coverage, Input, LiquidProperties, NotFinite, Property, clamped};
use crate::{
    math,
    quantity::{AbsolutePressure, Density, DynamicViscosity, Quantity, Temperature},
};

/// The most rows a table holds.
pub const ROWS: usize = 8;
/// Rows lie at least this far apart, K: closer ones are a typing error, and 1/T of them hardly differs in f32.
pub const LEAST_SPACING: f32 = 0.5;

/// One row of a liquid's data.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Row {
    /// Temperature, 50 to 1500 K.
    pub temperature: Temperature,
    /// Density, 50 to 25,000 kg/m³.
    pub density: Density,
    /// Dynamic viscosity, 1e-6 to 1e4 Pa·s.
    pub dynamic_viscosity: DynamicViscosity,
    /// Vapour pressure, 1e-9 to 1e8 Pa; a liquid that does not evaporate still has a small one.
    pub vapour_pressure: AbsolutePressure,
}

/// How good the rows and the interpolation between them are: relative standard uncertainties, 0 to 0.5.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct TableAccuracy {
    /// Of the density.
    pub density: f32,
    /// Of the viscosity.
    pub dynamic_viscosity: f32,
    /// Of the vapour pressure.
    pub vapour_pressure: f32,
}

/// Which figure of a row.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Column {
    /// Temperature.
    Temperature,
    /// Density.
    Density,
    /// Dynamic viscosity.
    DynamicViscosity,
    /// Vapour pressure.
    VapourPressure,
}

/// Why rows do not make a table. Rows count from 0.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum TableError {
    /// A table needs 2 to [`ROWS`] rows.
    RowCount {
        /// How many there were.
        found: usize,
    },
    /// A figure outside the range its field of [`Row`] states, NaN included.
    OutOfRange {
        /// The row.
        row: usize,
        /// The figure.
        column: Column,
        /// What it is.
        found: f32,
    },
    /// A temperature not at least [`LEAST_SPACING`] above that of the row before.
    TemperaturesNotRising {
        /// The row.
        row: usize,
    },
    /// A vapour pressure below that of the row before, which no liquid has.
    VapourPressureFalling {
        /// The row.
        row: usize,
    },
    /// A relative uncertainty outside 0 to 0.5, or NaN.
    Accuracy {
        /// Of which figure.
        column: Column,
        /// What it is.
        found: f32,
    },
}

/// A row as it is interpolated.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
struct Knot {
    kelvins: f32,
    inverse: f32,
    density: f32,
    ln_viscosity: f32,
    ln_vapour_pressure: f32,
}

/// A liquid by its table.
#[derive(Clone, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LiquidTable {
    knots: heapless::Vec<Knot, ROWS>,
    accuracy: TableAccuracy,
}

impl LiquidTable {
    /// A table from rows in rising order of temperature.
    ///
    /// # Errors
    /// [`TableError`], naming the first row that breaks a rule.
    ///
    /// # Examples
    /// ```
    /// use offcurve_core::fluid::table::{Column, LiquidTable, Row, TableAccuracy, TableError};
    /// use offcurve_core::quantity::{AbsolutePressure, Density, DynamicViscosity, Temperature};
    ///
    /// let row = |celsius, density, viscosity| Row {
    ///     temperature: Temperature::from_degrees_celsius(celsius),
    ///     density: Density::from_kilograms_per_cubic_metre(density),
    ///     dynamic_viscosity: DynamicViscosity::from_pascal_seconds(viscosity),
    ///     vapour_pressure: AbsolutePressure::from_pascals(1.0),
    /// };
    /// let accuracy = TableAccuracy { density: 0.002, dynamic_viscosity: 0.05, vapour_pressure: 0.5 };
    /// let oil = LiquidTable::new(&[row(20.0, 880.0, 0.110), row(60.0, 855.0, 0.021)], accuracy)?;
    /// let middle = oil.properties(Temperature::from_degrees_celsius(40.0)).expect("a finite temperature");
    /// assert!((middle.density.value.kilograms_per_cubic_metre() - 867.5).abs() < 1e-3);
    ///
    /// let wrong = LiquidTable::new(&[row(20.0, 880.0, 0.110), row(60.0, 855.0, -1.0)], accuracy);
    /// assert_eq!(wrong, Err(TableError::OutOfRange { row: 1, column: Column::DynamicViscosity, found: -1.0 }));
    /// # Ok::<(), TableError>(())
    /// ```
    pub fn new(rows: &[Row], accuracy: TableAccuracy) -> Result<Self, TableError> {
        for (column, found) in [
            (Column::Density, accuracy.density),
            (Column::DynamicViscosity, accuracy.dynamic_viscosity),
            (Column::VapourPressure, accuracy.vapour_pressure),
        ] {
            if !(0.0..=0.5).contains(&found) {
                return Err(TableError::Accuracy { column, found });
            }
        }
        if rows.len() < 2 {
            return Err(TableError::RowCount { found: rows.len() });
        }
        let mut knots: heapless::Vec<Knot, ROWS> = heapless::Vec::new();
        for (position, row) in rows.iter().enumerate() {
            let knot = knot(position, row)?;
            if let Some(before) = knots.last() {
                if knot.kelvins - before.kelvins < LEAST_SPACING {
                    return Err(TableError::TemperaturesNotRising { row: position });
                }
                if knot.ln_vapour_pressure < before.ln_vapour_pressure {
                    return Err(TableError::VapourPressureFalling { row: position });
                }
            }
            knots.push(knot).map_err(|_| TableError::RowCount { found: rows.len() })?;
        }
        Ok(Self { knots, accuracy })
    }

    /// First and last temperature of the table.
    #[must_use]
    pub fn temperature_range(&self) -> (Temperature, Temperature) {
        let kelvins = |knot: Option<&Knot>| Temperature::from_kelvins(knot.map_or(0.0, |knot| knot.kelvins));
        (kelvins(self.knots.first()), kelvins(self.knots.last()))
    }

    /// Reads the table. Looks at every interval whatever the temperature, so that the time does not depend on it.
    ///
    /// # Errors
    /// [`NotFinite`] for a temperature of NaN or infinity.
    pub fn properties(&self, temperature: Temperature) -> Result<LiquidProperties, NotFinite> {
        let refused = NotFinite { input: Input::Temperature };
        let (first, last) = self.temperature_range();
        let at = clamped(temperature.kelvins(), first.kelvins(), last.kelvins(), Input::Temperature)?;
        let mut found = None;
        for pair in self.knots.windows(2) {
            if let [low, high] = pair
                && at.value >= low.kelvins
                && at.value <= high.kelvins
            {
                found = Some((low, high));
            }
        }
        // A checked table has an interval for every temperature between its ends.
        let (low, high) = found.ok_or(refused)?;
        let width = high.kelvins - low.kelvins;
        let part = (at.value - low.kelvins) / width;
        let between = |low: f32, high: f32, part: f32| low + (high - low) * part;
        let coverage = Coverage { temperature: at.cover, ..Coverage::default() };

        let density = between(low.density, high.density, part);
        let density_slope = (high.density - low.density) / width;
        let viscosity = math::exp(between(low.ln_viscosity, high.ln_viscosity, part));
        let viscosity_slope = viscosity * (high.ln_viscosity - low.ln_viscosity) / width;
        let inverse = 1.0 / at.value;
        let inverse_width = high.inverse - low.inverse;
        let inverse_part = (inverse - low.inverse) / inverse_width;
        let rise = high.ln_vapour_pressure - low.ln_vapour_pressure;
        let vapour_pressure = math::exp(low.ln_vapour_pressure + rise * inverse_part);
        let vapour_slope = vapour_pressure * (rise / inverse_width) * -(inverse * inverse);

        Ok(LiquidProperties {
            density: property(density, density_slope, self.accuracy.density, at.distance, coverage),
            dynamic_viscosity: property(
                viscosity,
                viscosity_slope,
                self.accuracy.dynamic_viscosity,
                at.distance,
                coverage,
            ),
            vapour_pressure: property(
                vapour_pressure,
                vapour_slope,
                self.accuracy.vapour_pressure,
                at.distance,
                coverage,
            ),
        })
    }
}

fn knot(position: usize, row: &Row) -> Result<Knot, TableError> {
    let checked = |column, found: f32, low: f32, high: f32| {
        if (low..=high).contains(&found) {
            Ok(found)
        } else {
            Err(TableError::OutOfRange { row: position, column, found })
        }
    };
    let kelvins = checked(Column::Temperature, row.temperature.kelvins(), 50.0, 1500.0)?;
    let density = checked(Column::Density, row.density.si(), 50.0, 25_000.0)?;
    let viscosity = checked(Column::DynamicViscosity, row.dynamic_viscosity.si(), 1e-6, 1e4)?;
    let vapour_pressure = checked(Column::VapourPressure, row.vapour_pressure.si(), 1e-9, 1e8)?;
    Ok(Knot {
        kelvins,
        inverse: 1.0 / kelvins,
        density,
        ln_viscosity: math::ln(viscosity),
        ln_vapour_pressure: math::ln(vapour_pressure),
    })
}

fn property<T: Quantity>(
    value: f32,
    per_kelvin: f32,
    relative_deviation: f32,
    distance: f32,
    coverage: Coverage,
) -> Property<T> {
    let (own, outside) = (value * relative_deviation, per_kelvin * distance);
    Property {
        value: T::from_si(value),
        model_variance: own * own + outside * outside,
        per_kelvin,
        per_pascal: 0.0,
        per_humidity: 0.0,
        coverage,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::fluid::Cover;
    use proptest::prelude::*;

    const ACCURACY: TableAccuracy = TableAccuracy { density: 0.001, dynamic_viscosity: 0.02, vapour_pressure: 0.1 };

    fn row(kelvins: f32, density: f32, viscosity: f32, vapour_pressure: f32) -> Row {
        Row {
            temperature: Temperature::from_kelvins(kelvins),
            density: Density::from_si(density),
            dynamic_viscosity: DynamicViscosity::from_si(viscosity),
            vapour_pressure: AbsolutePressure::from_si(vapour_pressure),
        }
    }

    /// An invented liquid that follows the interpolation's own forms: the table must give it back.
    fn exact(kelvins: f64) -> [f64; 3] {
        [1200.0 - 0.8 * kelvins, (6.0 - 0.03 * kelvins).exp(), (24.0 - 5000.0 / kelvins).exp()]
    }

    fn table() -> LiquidTable {
        let rows = [280.0_f32, 300.0, 301.0, 340.0, 400.0].map(|kelvins| {
            let [density, viscosity, vapour_pressure] = exact(f64::from(kelvins)).map(|v| v as f32);
            row(kelvins, density, viscosity, vapour_pressure)
        });
        LiquidTable::new(&rows, ACCURACY).unwrap()
    }

    fn values(found: &LiquidProperties) -> [f32; 3] {
        [found.density.value.si(), found.dynamic_viscosity.value.si(), found.vapour_pressure.value.si()]
    }

    /// Tolerance: logarithms up to 12 in f32, 12·6e-8, and the division by a difference of two 1/T.
    #[test]
    fn gives_back_a_liquid_of_its_own_forms() {
        let table = table();
        for step in 0..=240 {
            let kelvins = 280.0 + 0.5 * step as f32;
            let found = table.properties(Temperature::from_kelvins(kelvins)).unwrap();
            assert!(found.density.coverage.is_within());
            let exactly = exact(f64::from(kelvins));
            for (got, exact) in values(&found).into_iter().zip(exactly) {
                assert!((f64::from(got) / exact - 1.0).abs() < 1.2e-5, "{got} for {exact} at {kelvins}");
            }
            let [_, viscosity, vapour_pressure] = exactly;
            let slopes = [-0.8, -0.03 * viscosity, 5000.0 * vapour_pressure / f64::from(kelvins).powi(2)];
            let got = [found.density.per_kelvin, found.dynamic_viscosity.per_kelvin, found.vapour_pressure.per_kelvin];
            for (got, exact) in got.into_iter().zip(slopes) {
                assert!((f64::from(got) / exact - 1.0).abs() < 1e-3, "slope {got} for {exact} at {kelvins}");
            }
        }
    }

    #[test]
    fn own_uncertainty_is_the_declared_one() {
        let found = table().properties(Temperature::from_kelvins(320.0)).unwrap();
        let [density, viscosity, vapour_pressure] = values(&found);
        for (deviation, wanted) in [
            (found.density.model_deviation(), 0.001 * density),
            (found.dynamic_viscosity.model_deviation(), 0.02 * viscosity),
            (found.vapour_pressure.model_deviation(), 0.1 * vapour_pressure),
        ] {
            assert!((deviation / wanted - 1.0).abs() < 1e-5, "{deviation} {wanted}");
        }
    }

    #[test]
    fn outside_is_the_end_flagged_and_less_sure() {
        let table = table();
        let at = |kelvins| table.properties(Temperature::from_kelvins(kelvins)).unwrap();
        for (outside, end, cover) in [(270.0, 280.0, Cover::Below), (430.0, 400.0, Cover::Above)] {
            let (outside, end) = (at(outside), at(end));
            assert_eq!(values(&outside), values(&end));
            assert_eq!(outside.vapour_pressure.coverage.temperature, cover);
            assert!(end.vapour_pressure.coverage.is_within());
            assert!(outside.density.model_deviation() > 7.9, "0.8 kg/m³ per kelvin: {:?}", outside.density);
        }
        for bad in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY] {
            let refused = table.properties(Temperature::from_kelvins(bad));
            assert_eq!(refused, Err(NotFinite { input: Input::Temperature }));
        }
    }

    #[test]
    fn the_row_that_breaks_a_rule_is_named() {
        let good = [row(280.0, 900.0, 0.1, 1.0), row(300.0, 890.0, 0.05, 2.0), row(320.0, 880.0, 0.02, 4.0)];
        let with = |position: usize, row: Row| {
            let mut rows = good;
            rows[position] = row;
            LiquidTable::new(&rows, ACCURACY).unwrap_err()
        };
        let out = |row, column, found| TableError::OutOfRange { row, column, found };
        assert_eq!(with(1, row(300.0, 0.0, 0.05, 2.0)), out(1, Column::Density, 0.0));
        assert_eq!(with(2, row(320.0, 880.0, 2e4, 4.0)), out(2, Column::DynamicViscosity, 2e4));
        assert_eq!(with(0, row(280.0, 900.0, 0.1, 0.0)), out(0, Column::VapourPressure, 0.0));
        assert_eq!(with(0, row(7.0, 900.0, 0.1, 1.0)), out(0, Column::Temperature, 7.0));
        assert!(matches!(
            with(2, row(f32::NAN, 880.0, 0.02, 4.0)),
            TableError::OutOfRange { row: 2, column: Column::Temperature, .. }
        ));
        assert_eq!(with(1, row(280.2, 890.0, 0.05, 2.0)), TableError::TemperaturesNotRising { row: 1 });
        assert_eq!(with(2, row(290.0, 880.0, 0.02, 4.0)), TableError::TemperaturesNotRising { row: 2 });
        assert_eq!(with(2, row(320.0, 880.0, 0.02, 1.9)), TableError::VapourPressureFalling { row: 2 });
        assert_eq!(LiquidTable::new(&good[..1], ACCURACY), Err(TableError::RowCount { found: 1 }));
        assert_eq!(LiquidTable::new(&[], ACCURACY), Err(TableError::RowCount { found: 0 }));
        let many: [Row; 9] = core::array::from_fn(|k| row(280.0 + k as f32, 900.0, 0.1, 1.0));
        assert_eq!(LiquidTable::new(&many, ACCURACY), Err(TableError::RowCount { found: 9 }));
        assert!(LiquidTable::new(&many[..8], ACCURACY).is_ok());
        let vague = TableAccuracy { dynamic_viscosity: 0.6, ..ACCURACY };
        let refused = TableError::Accuracy { column: Column::DynamicViscosity, found: 0.6 };
        assert_eq!(LiquidTable::new(&good, vague), Err(refused));
        let unknown = TableAccuracy { density: f32::NAN, ..ACCURACY };
        assert!(matches!(LiquidTable::new(&good, unknown), Err(TableError::Accuracy { column: Column::Density, .. })));
    }

    proptest! {
        #[test]
        fn any_table_gives_values_between_its_rows(
            rows in prop::collection::vec((0.5_f32..100.0, 50.0_f32..25e3, 1e-6_f32..1e4, 1e-9_f32..1e8), 2..=8),
            kelvins in -1e30_f32..1e30,
        ) {
            let (mut temperature, mut pressures) = (60.0, rows.iter().map(|row| row.3).collect::<std::vec::Vec<_>>());
            pressures.sort_by(f32::total_cmp);
            let rows: std::vec::Vec<Row> = rows.iter().zip(pressures).map(|(&(step, density, viscosity, _), pressure)| {
                temperature += 1.01 * step;
                row(temperature, density, viscosity, pressure)
            }).collect();
            let table = LiquidTable::new(&rows, ACCURACY).unwrap();
            let found = values(&table.properties(Temperature::from_kelvins(kelvins)).unwrap());
            let figures = |row: &Row| [row.density.si(), row.dynamic_viscosity.si(), row.vapour_pressure.si()];
            for (position, got) in found.into_iter().enumerate() {
                let lowest = rows.iter().map(|row| figures(row)[position]).fold(f32::MAX, f32::min);
                let highest = rows.iter().map(|row| figures(row)[position]).fold(0.0, f32::max);
                prop_assert!(got >= lowest * (1.0 - 1e-5) && got <= highest * (1.0 + 1e-5));
            }
        }
    }
}
