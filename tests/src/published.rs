//! Rows of `reference/*.csv`: one published or recomputed figure each, with the tolerance it is good for.
//!
//! `expected` is the figure as printed (rounded), `recomputed` the unrounded one. A result must meet both: `expected`
//! within `tol_abs`, which is the rounding of the print or the reading of a graph, and `recomputed` within a relative
//! tolerance, which is the rounding of our own arithmetic. Either alone would let a wrong result pass: the first is
//! wide, the second says nothing of what was published. Rows recalled from memory say so in their `source`.

use std::path::{Path, PathBuf};

/// How precisely the code under test computes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Arithmetic {
    /// f32, as on a controller: the row's `tol_rel_f32`.
    Single,
    /// f64, design-time functions: the row's `tol_rel_f64`, but never finer than [`F64_ROUNDING`].
    Double,
}

/// Where a row asks for 0 in f64 it means "equal but for rounding": a handful of operations and one `powf` or `exp`,
/// whose last bit differs between maths libraries.
pub const F64_ROUNDING: f64 = 1e-14;

/// One row.
#[derive(Clone, Debug, PartialEq)]
pub struct Row {
    /// Its name, file and number.
    pub id: String,
    /// Inputs, in words.
    pub given: String,
    /// What is asked for.
    pub quantity: String,
    /// The figures as printed; several where the quantity is several (`;` between them).
    pub expected: Vec<f64>,
    /// Unit of `expected`.
    pub unit: String,
    /// Tolerance on `expected`, in `unit`.
    pub tol_abs: f64,
    /// Relative tolerance on `recomputed` for f64 arithmetic.
    pub tol_rel_f64: f64,
    /// Relative tolerance on `recomputed` for f32 arithmetic.
    pub tol_rel_f32: f64,
    /// The unrounded figure, where there is one.
    pub recomputed: Option<f64>,
    /// Where the figure is from.
    pub source: String,
}

/// Why a reference file could not be read.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum RowError {
    /// The file is missing or no CSV.
    #[error("cannot read the reference file {}", path.display())]
    Read {
        /// The file.
        path: PathBuf,
        /// What the reader said.
        #[source]
        source: csv::Error,
    },
    /// A row lacks a column or holds something else than a number in one.
    #[error("{} row {row}: column {column} holds {found:?}, expected {allowed}", path.display())]
    BadColumn {
        /// The file.
        path: PathBuf,
        /// The row's name.
        row: String,
        /// The column, from 1.
        column: usize,
        /// What it holds.
        found: String,
        /// What may stand there.
        allowed: &'static str,
    },
}

/// Reads `reference/<file>.csv`.
///
/// # Errors
/// [`RowError`], naming file, row and column.
pub fn rows(file: &str) -> Result<Vec<Row>, RowError> {
    let path = path(file);
    let fail = |source| RowError::Read { path: path.clone(), source };
    let mut reader = csv::Reader::from_path(&path).map_err(fail)?;
    reader.records().map(|record| row(&path, &record.map_err(fail)?)).collect()
}

/// Where `reference/<file>.csv` lies.
#[must_use]
pub fn path(file: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("reference").join(file).with_extension("csv")
}

fn row(path: &Path, record: &csv::StringRecord) -> Result<Row, RowError> {
    let text = |column: usize| record.get(column - 1).unwrap_or("").trim();
    let bad = |column: usize, allowed| RowError::BadColumn {
        path: path.to_owned(),
        row: text(1).to_owned(),
        column,
        found: text(column).to_owned(),
        allowed,
    };
    let number = |column: usize| text(column).parse::<f64>().map_err(|_| bad(column, "a number"));
    if text(9) != "ok" {
        return Err(bad(9, "ok: the other kinds of row have no check yet"));
    }
    Ok(Row {
        id: text(1).to_owned(),
        given: text(2).to_owned(),
        quantity: text(3).to_owned(),
        expected: text(4)
            .split(';')
            .map(|part| part.parse().map_err(|_| bad(4, "numbers with ; between them")))
            .collect::<Result<_, _>>()?,
        unit: text(5).to_owned(),
        tol_abs: number(6)?,
        tol_rel_f64: number(7)?,
        tol_rel_f32: number(8)?,
        recomputed: if text(11).is_empty() { None } else { Some(number(11)?) },
        source: text(12).to_owned(),
    })
}

impl Row {
    /// Holds a result against the row, both ways and from both sides.
    ///
    /// # Errors
    /// A sentence that names the row, the source, the result and the tolerance it missed.
    pub fn check(&self, got: &[f64], arithmetic: Arithmetic) -> Result<(), String> {
        let Self { id, quantity, unit, source, .. } = self;
        let miss = |what: &str| Err(format!("{id} ({quantity}, {source}): {what}"));
        if got.len() != self.expected.len() {
            return miss(&format!("{} results for {} figures", got.len(), self.expected.len()));
        }
        let relative = match arithmetic {
            Arithmetic::Single => self.tol_rel_f32,
            Arithmetic::Double => self.tol_rel_f64.max(F64_ROUNDING),
        };
        for (&got, &expected) in got.iter().zip(&self.expected) {
            let exact = self.recomputed.unwrap_or(expected);
            let off = (got - exact).abs();
            // NaN is off by NaN, which no tolerance admits.
            if off.is_nan() || off > relative * exact.abs() {
                return miss(&format!(
                    "{got} {unit}, recomputed {exact}: {:.1e} apart, allowed {relative:.1e}",
                    off / exact.abs()
                ));
            }
            let off = (got - expected).abs();
            if off > self.tol_abs.max(relative * expected.abs()) {
                return miss(&format!("{got} {unit}, published {expected}: {off} apart, allowed {}", self.tol_abs));
            }
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn example() -> Row {
        Row {
            id: "row-1".to_owned(),
            given: String::new(),
            quantity: "head".to_owned(),
            expected: vec![11.23],
            unit: "m".to_owned(),
            tol_abs: 0.006,
            tol_rel_f64: 0.0,
            tol_rel_f32: 2e-6,
            recomputed: Some(11.228_024_834_226_913),
            source: "a book".to_owned(),
        }
    }

    #[test]
    fn both_sides_of_both_tolerances_bite() {
        let row = example();
        let exact = 11.228_024_834_226_913;
        for (factor, arithmetic, good) in [
            (1.0, Arithmetic::Single, true),
            (1.0 + 1.9e-6, Arithmetic::Single, true),
            (1.0 - 1.9e-6, Arithmetic::Single, true),
            (1.0 + 2.1e-6, Arithmetic::Single, false),
            (1.0 - 2.1e-6, Arithmetic::Single, false),
            (1.0 + 1e-12, Arithmetic::Double, false),
            (1.0 - 1e-12, Arithmetic::Double, false),
            (f64::NAN, Arithmetic::Single, false),
        ] {
            assert_eq!(row.check(&[exact * factor], arithmetic).is_ok(), good, "{factor} {arithmetic:?}");
        }
        // The print disagrees with the recomputation: no result can satisfy both, so the row is reported.
        let torn = Row { expected: vec![11.25], ..example() };
        let said = torn.check(&[exact], Arithmetic::Single).unwrap_err();
        assert!(said.contains("row-1") && said.contains("published 11.25"), "{said}");
        assert!(row.check(&[], Arithmetic::Single).is_err());
    }

    #[test]
    fn a_damaged_row_is_named() {
        let record = csv::StringRecord::from(vec!["row-7", "", "H", "1;x", "m", "0.1", "0", "2e-6", "ok", "", "", ""]);
        let said = row(Path::new("some.csv"), &record).unwrap_err().to_string();
        assert_eq!(said, "some.csv row row-7: column 4 holds \"1;x\", expected numbers with ; between them");
    }
}
