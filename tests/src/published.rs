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
    /// Inputs, in words; where the file has several columns for them, `heading=entry` of each.
    pub given: String,
    /// What is asked for.
    pub quantity: String,
    /// The figures as printed; several where the quantity is several (`;` between them). Empty where the answer is a
    /// word.
    pub expected: Vec<f64>,
    /// The answer where it is a word (a state, a class); empty where it is figures.
    pub word: String,
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
    let headings = reader.headers().map_err(fail)?.clone();
    reader.records().map(|record| row(&path, &headings, &record.map_err(fail)?)).collect()
}

/// Where `reference/<file>.csv` lies.
#[must_use]
pub fn path(file: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("reference").join(file).with_extension("csv")
}

/// How many columns follow the inputs in every file: quantity, expected, unit, tol_abs, tol_rel_f64, tol_rel_f32,
/// status, tol_why, recomputed, source.
const COLUMNS_AFTER_INPUTS: usize = 10;

fn row(path: &Path, headings: &csv::StringRecord, record: &csv::StringRecord) -> Result<Row, RowError> {
    // The name comes first; how many columns of inputs lie between it and the quantity differs from file to file.
    let inputs = headings.len().saturating_sub(COLUMNS_AFTER_INPUTS + 1);
    let text = |column: usize| record.get(column - 1).unwrap_or("").trim();
    let after = |column: usize| column + 1 + inputs;
    let bad = |column: usize, allowed| RowError::BadColumn {
        path: path.to_owned(),
        row: text(1).to_owned(),
        column,
        found: text(column).to_owned(),
        allowed,
    };
    let number = |column: usize| text(column).parse::<f64>().map_err(|_| bad(column, "a number"));
    if text(after(7)) != "ok" {
        return Err(bad(after(7), "ok: the other kinds of row have no check yet"));
    }
    let parts: Vec<_> = text(after(2)).split(';').map(str::parse::<f64>).collect();
    let is_word = !text(after(2)).is_empty() && parts.iter().all(Result::is_err);
    let expected = if is_word {
        Vec::new()
    } else {
        let numbers: Result<_, _> = parts.into_iter().collect();
        numbers.map_err(|_| bad(after(2), "numbers with ; between them"))?
    };
    let given = if inputs == 1 {
        text(2).to_owned()
    } else {
        let heading = |column: usize| headings.get(column - 1).unwrap_or("");
        (2..2 + inputs).map(|column| format!("{}={}", heading(column), text(column))).collect::<Vec<_>>().join("; ")
    };
    Ok(Row {
        id: text(1).to_owned(),
        given,
        quantity: text(after(1)).to_owned(),
        expected,
        word: if is_word { text(after(2)).to_owned() } else { String::new() },
        unit: text(after(3)).to_owned(),
        tol_abs: number(after(4))?,
        tol_rel_f64: number(after(5))?,
        tol_rel_f32: number(after(6))?,
        recomputed: if text(after(9)).is_empty() { None } else { Some(number(after(9))?) },
        source: text(after(10)).to_owned(),
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
            word: String::new(),
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

    const HEADINGS: [&str; 12] = [
        "case_id",
        "given",
        "quantity",
        "expected",
        "unit",
        "tol_abs",
        "tol_rel_f64",
        "tol_rel_f32",
        "status",
        "tol_why",
        "recomputed",
        "source",
    ];

    #[test]
    fn a_damaged_row_is_named() {
        let record = csv::StringRecord::from(vec!["row-7", "", "H", "1;x", "m", "0.1", "0", "2e-6", "ok", "", "", ""]);
        let headings = csv::StringRecord::from(HEADINGS.to_vec());
        let said = row(Path::new("some.csv"), &headings, &record).unwrap_err().to_string();
        assert_eq!(said, "some.csv row row-7: column 4 holds \"1;x\", expected numbers with ; between them");
    }

    #[test]
    fn several_columns_of_inputs_and_a_word_for_an_answer() {
        let mut headings = HEADINGS.to_vec();
        headings.insert(1, "kind");
        let (headings, record) = (
            csv::StringRecord::from(headings),
            csv::StringRecord::from(vec![
                "row-8",
                "loop",
                "3.5 mA",
                "state",
                "failed",
                "-",
                "0",
                "0",
                "2e-6",
                "ok",
                "",
                "",
                "a standard",
            ]),
        );
        let row = row(Path::new("some.csv"), &headings, &record).unwrap();
        assert_eq!((row.given.as_str(), row.word.as_str()), ("kind=loop; given=3.5 mA", "failed"));
        assert_eq!((row.expected.as_slice(), row.source.as_str()), ([].as_slice(), "a standard"));
        assert!(row.check(&[0.0], Arithmetic::Single).is_err(), "a word is no figure");
    }
}
