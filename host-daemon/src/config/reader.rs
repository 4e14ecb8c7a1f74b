//! Reads a TOML file key by key, remembers what was asked for, and collects every problem with its line.
//!
//! A reader of our own instead of derived structs: a derived one stops at the first mistake, and knows neither the
//! range of a value nor the unit its writer used.

use super::{
    error::{ConfigError, Problem},
    units::{self, Dimension, Uncertainty, UnitError, Value, Values},
};
use std::{cell::RefCell, path::Path};
use toml::{
    Spanned,
    de::{DeTable, DeValue},
};

/// What kind of file the top-level keys make it.
pub(super) enum Kind {
    Machine,
    Plant,
}

/// `None` when neither can be told. A file with broken syntax is told by what can still be read of it.
pub(super) fn top_level_kind(text: &str) -> Option<Kind> {
    let (table, errors) = DeTable::parse_recoverable(text);
    let table = table.get_ref();
    // A machine file has a table of that name, too: [controller], where a plant has [[controller]].
    let controllers = table.get("controller").is_some_and(|value| matches!(value.get_ref(), DeValue::Array(_)));
    let has = |key: &&str| table.contains_key(*key);
    if controllers && !table.contains_key("machine") {
        Some(Kind::Plant)
    } else if ["machine", "curve", "taps", "fluid", "sensors"].iter().any(has) || !errors.is_empty() {
        Some(Kind::Machine)
    } else if ["store", "controller"].iter().any(has) {
        Some(Kind::Plant)
    } else {
        None
    }
}

/// How many problems of syntax are reported.
const SYNTAX_PROBLEMS: usize = 5;

/// One file being read.
pub(super) struct Document<'t> {
    text: &'t str,
    file: &'t Path,
    root: Spanned<DeTable<'t>>,
    problems: RefCell<Vec<Problem>>,
}

/// Lowest and highest value allowed, SI, both included.
#[derive(Clone, Copy, Debug)]
pub(super) struct Bounds(pub(super) f64, pub(super) f64);

impl<'t> Document<'t> {
    /// Parses the syntax.
    pub(super) fn parse(text: &'t str, file: &'t Path) -> Result<Self, ConfigError> {
        let (root, errors) = DeTable::parse_recoverable(text);
        if errors.is_empty() {
            return Ok(Self { text, file, root, problems: RefCell::default() });
        }
        // One slip of syntax can bring many messages; the first tell enough.
        let problems = errors.iter().take(SYNTAX_PROBLEMS).map(|error| Problem {
            file: file.to_owned(),
            line: error.span().map(|span| line_of(text, span.start)),
            key: String::new(),
            message: error.message().to_owned(),
        });
        Err(ConfigError::Invalid { problems: problems.collect() })
    }

    pub(super) fn root(&self) -> Section<'_> {
        Section { document: self, path: String::new(), line: None, table: self.root.get_ref(), asked: Vec::new() }
    }

    pub(super) fn problem(&self, line: Option<usize>, key: &str, message: impl Into<String>) {
        let problem = Problem { file: self.file.to_owned(), line, key: key.to_owned(), message: message.into() };
        self.problems.borrow_mut().push(problem);
    }

    /// Takes over the problems of a file that this one names.
    pub(super) fn adopt(&self, problems: Vec<Problem>) {
        self.problems.borrow_mut().extend(problems);
    }

    /// Nothing wrong so far.
    pub(super) fn is_clean(&self) -> bool {
        self.problems.borrow().is_empty()
    }

    /// `Ok` when nothing is wrong.
    pub(super) fn finish(self) -> Result<(), ConfigError> {
        let mut problems = self.problems.into_inner();
        if problems.is_empty() {
            return Ok(());
        }
        // Problems of another file keep their place after those of this one.
        problems.sort_by_key(|problem| (problem.file != self.file, problem.line));
        Err(ConfigError::Invalid { problems })
    }
}

fn line_of(text: &str, offset: usize) -> usize {
    1 + text.bytes().take(offset).filter(|&byte| byte == b'\n').count()
}

/// One table of the file. Ask for its keys, then call [`Section::finish`], which refuses the others.
pub(super) struct Section<'d> {
    document: &'d Document<'d>,
    path: String,
    line: Option<usize>,
    table: &'d DeTable<'d>,
    asked: Vec<&'static str>,
}

/// A key found.
#[derive(Clone, Copy)]
struct Found<'d> {
    line: usize,
    value: &'d DeValue<'d>,
}

impl<'d> Section<'d> {
    /// Full path of a key of this section.
    pub(super) fn path_of(&self, key: &str) -> String {
        if self.path.is_empty() { key.to_owned() } else { format!("{}.{key}", self.path) }
    }

    /// Reports a problem with one key of this section, at its line if it is there.
    pub(super) fn problem(&self, key: &str, message: impl Into<String>) {
        let line = self.line_of_key(key).or(self.line);
        self.document.problem(line, &self.path_of(key), message);
    }

    /// Reports a problem with the section as a whole.
    pub(super) fn problem_here(&self, message: impl Into<String>) {
        self.document.problem(self.line, &self.path, message);
    }

    pub(super) fn has(&self, key: &str) -> bool {
        self.table.contains_key(key)
    }

    fn line_of_key(&self, key: &str) -> Option<usize> {
        let (found, _) = self.table.get_key_value(key)?;
        Some(line_of(self.document.text, found.span().start))
    }

    fn ask(&mut self, key: &'static str) -> Option<Found<'d>> {
        self.asked.push(key);
        let (found, value) = self.table.get_key_value(key)?;
        Some(Found { line: line_of(self.document.text, found.span().start), value: value.get_ref() })
    }

    fn missing(&self, key: &str, example: &str) {
        self.document.problem(self.line, &self.path_of(key), format!("missing; write e.g. {key} = {example}"));
    }

    /// A text that carries a value, or a problem saying how one is written.
    fn value_text(&mut self, key: &'static str, dimension: Dimension, example: &str) -> Option<(Found<'d>, &'d str)> {
        let found = self.ask(key)?;
        let complain = |text: String| self.document.problem(Some(found.line), &self.path_of(key), text);
        let bare = |text: &str| {
            complain(
                UnitError::NoUnit {
                    text: text.to_owned(),
                    example: format!("{text} {}", dimension.units()[0].name()),
                    allowed: dimension.allowed(),
                }
                .to_string(),
            );
        };
        match found.value {
            DeValue::String(text) => return Some((found, text.as_ref())),
            DeValue::Integer(number) => bare(number.as_str()),
            DeValue::Float(number) => bare(number.as_str()),
            other => complain(format!(
                "{} cannot carry a unit; write one text, e.g. \"{example}\" ({} allowed)",
                described(other),
                dimension.allowed()
            )),
        }
        None
    }

    fn parsed<T>(
        &mut self,
        key: &'static str,
        dimension: Dimension,
        example: &str,
        parse: impl FnOnce(&str) -> Result<T, UnitError>,
    ) -> Option<(Found<'d>, &'d str, T)> {
        let (found, text) = self.value_text(key, dimension, example)?;
        match parse(text) {
            Ok(value) => Some((found, text, value)),
            Err(error) => {
                self.document.problem(Some(found.line), &self.path_of(key), error.to_string());
                None
            }
        }
    }

    fn check(&self, key: &str, found: Found<'_>, text: &str, value: Value, bounds: Bounds) -> Option<f64> {
        let Bounds(low, high) = bounds;
        if value.si >= low && value.si <= high {
            return Some(value.si);
        }
        // A last digit may be lost on the way through the unit: the bound itself, as written, is inside.
        let slack = 1e-9 * low.abs().max(high.abs());
        if value.si >= low - slack && value.si <= high + slack {
            return Some(value.si.clamp(low, high));
        }
        let unit = value.unit;
        let message = format!(
            "{text:?} is outside {} .. {} {}",
            units::plain(unit.from_si(low)),
            units::plain(unit.from_si(high)),
            unit.name()
        );
        self.document.problem(Some(found.line), &self.path_of(key), message);
        None
    }

    /// An optional value with its unit, SI.
    pub(super) fn quantity(&mut self, key: &'static str, dimension: Dimension, bounds: Bounds) -> Option<f64> {
        let (found, text, value) = self.parsed(key, dimension, dimension.example(), |t| units::value(dimension, t))?;
        self.check(key, found, text, value, bounds)
    }

    /// A value that must be there.
    pub(super) fn require_quantity(&mut self, key: &'static str, dimension: Dimension, bounds: Bounds) -> Option<f64> {
        if !self.has(key) {
            self.asked.push(key);
            self.missing(key, &format!("{:?}", dimension.example()));
            return None;
        }
        self.quantity(key, dimension, bounds)
    }

    /// A list that must be there, each value within the bounds.
    pub(super) fn require_list(&mut self, key: &'static str, dimension: Dimension, bounds: Bounds) -> Option<Values> {
        let example = format!("0, 20, {}", dimension.example());
        if !self.has(key) {
            self.asked.push(key);
            self.missing(key, &format!("{example:?}"));
            return None;
        }
        let (found, text, values) = self.parsed(key, dimension, &example, |t| units::list(dimension, t))?;
        for &si in &values.si {
            self.check(key, found, text, Value { si, unit: values.unit }, bounds)?;
        }
        Some(values)
    }

    /// An optional range, SI, low before high.
    pub(super) fn range(&mut self, key: &'static str, dimension: Dimension, bounds: Bounds) -> Option<(f64, f64)> {
        let example = format!("0 .. {}", dimension.example());
        let (found, text, (low, high)) = self.parsed(key, dimension, &example, |t| units::range(dimension, t))?;
        let low = self.check(key, found, text, low, bounds)?;
        Some((low, self.check(key, found, text, high, bounds)?))
    }

    /// An optional standard uncertainty.
    pub(super) fn uncertainty(&mut self, key: &'static str, dimension: Dimension) -> Option<Uncertainty> {
        let example = format!("0.5 % + 0.4 {}", dimension.units()[0].name());
        self.parsed(key, dimension, &example, |t| units::uncertainty(dimension, t)).map(|(_, _, value)| value)
    }

    /// An optional whole number.
    pub(super) fn integer(&mut self, key: &'static str, allowed: std::ops::RangeInclusive<u32>) -> Option<u32> {
        let found = self.ask(key)?;
        let number = match found.value {
            DeValue::Integer(number) => u32::from_str_radix(number.as_str(), number.radix()).ok(),
            _ => None,
        };
        let inside = number.filter(|number| allowed.contains(number));
        if inside.is_none() {
            let message =
                format!("{} is not a whole number {} .. {}", described(found.value), allowed.start(), allowed.end());
            self.document.problem(Some(found.line), &self.path_of(key), message);
        }
        inside
    }

    /// A whole number that must be there.
    pub(super) fn require_integer(&mut self, key: &'static str, allowed: std::ops::RangeInclusive<u32>) -> Option<u32> {
        if !self.has(key) {
            self.asked.push(key);
            self.missing(key, &format!("{} ({} .. {})", allowed.start(), allowed.start(), allowed.end()));
            return None;
        }
        self.integer(key, allowed)
    }

    /// An optional yes or no.
    pub(super) fn boolean(&mut self, key: &'static str) -> Option<bool> {
        let found = self.ask(key)?;
        match found.value {
            DeValue::Boolean(value) => Some(*value),
            other => {
                let message = format!("{} is neither true nor false", described(other));
                self.document.problem(Some(found.line), &self.path_of(key), message);
                None
            }
        }
    }

    /// An optional text, not empty.
    pub(super) fn text(&mut self, key: &'static str) -> Option<&'d str> {
        let found = self.ask(key)?;
        let message = match found.value {
            DeValue::String(text) if !text.trim().is_empty() => return Some(text.as_ref()),
            DeValue::String(_) => "empty text".to_owned(),
            other => format!("{} is not a text in quotes", described(other)),
        };
        self.document.problem(Some(found.line), &self.path_of(key), message);
        None
    }

    /// A text that must be there.
    pub(super) fn require_text(&mut self, key: &'static str, example: &str) -> Option<&'d str> {
        if !self.has(key) {
            self.asked.push(key);
            self.missing(key, &format!("{example:?}"));
            return None;
        }
        self.text(key)
    }

    /// One of a few words; a missing key gives the first.
    pub(super) fn word<T: Copy>(&mut self, key: &'static str, words: &[(&str, T)]) -> Option<T> {
        if !self.has(key) {
            self.asked.push(key);
            return words.first().map(|(_, value)| *value);
        }
        let text = self.text(key)?;
        let chosen = words.iter().find(|(word, _)| *word == text);
        if chosen.is_none() {
            let allowed: Vec<String> = words.iter().map(|(word, _)| format!("{word:?}")).collect();
            self.problem(key, format!("{text:?} is not known here; allowed: {}", allowed.join(", ")));
        }
        chosen.map(|(_, value)| *value)
    }

    /// A number or a text: the number as f64, or the text.
    pub(super) fn number_or_text(&mut self, key: &'static str) -> Option<Result<f64, &'d str>> {
        let found = self.ask(key)?;
        let number = match found.value {
            DeValue::Float(number) => number.as_str().parse().ok(),
            DeValue::Integer(number) => {
                i64::from_str_radix(number.as_str(), number.radix()).ok().map(|whole| whole as f64)
            }
            DeValue::String(text) => return Some(Err(text.as_ref())),
            _ => None,
        };
        if number.is_none() {
            let message = format!("{} is neither a number nor a text", described(found.value));
            self.document.problem(Some(found.line), &self.path_of(key), message);
        }
        number.map(Ok)
    }

    /// An optional table.
    pub(super) fn section(&mut self, key: &'static str) -> Option<Section<'d>> {
        let found = self.ask(key)?;
        let path = self.path_of(key);
        match found.value {
            DeValue::Table(table) => {
                Some(Section { document: self.document, path, line: Some(found.line), table, asked: Vec::new() })
            }
            other => {
                let message = format!("{} where a table [{path}] belongs", described(other));
                self.document.problem(Some(found.line), &path, message);
                None
            }
        }
    }

    /// A table that must be there.
    pub(super) fn require_section(&mut self, key: &'static str) -> Option<Section<'d>> {
        if !self.has(key) {
            self.asked.push(key);
            let path = self.path_of(key);
            self.document.problem(self.line, &path, format!("missing table [{path}]"));
            return None;
        }
        self.section(key)
    }

    /// An array of tables; absent is empty.
    pub(super) fn sections(&mut self, key: &'static str) -> Vec<Section<'d>> {
        let Some(found) = self.ask(key) else { return Vec::new() };
        let path = self.path_of(key);
        let mut tables = Vec::new();
        if let DeValue::Array(array) = found.value {
            for (position, item) in array.iter().enumerate() {
                let line = Some(line_of(self.document.text, item.span().start));
                let path = format!("{path}[{}]", position + 1);
                match item.get_ref() {
                    DeValue::Table(table) => {
                        tables.push(Section { document: self.document, path, line, table, asked: Vec::new() });
                    }
                    other => self.document.problem(
                        line,
                        &path,
                        format!("{} where a table [[{key}]] belongs", described(other)),
                    ),
                }
            }
        } else {
            let message = format!("{} where tables [[{key}]] belong", described(found.value));
            self.document.problem(Some(found.line), &path, message);
        }
        tables
    }

    pub(super) const fn document(&self) -> &'d Document<'d> {
        self.document
    }

    /// Refuses the keys that nobody asked for.
    pub(super) fn finish(self) {
        for key in self.table.keys() {
            let name: &str = key.get_ref();
            if self.asked.contains(&name) {
                continue;
            }
            let nearest = self.asked.iter().map(|known| (distance(known, name), *known)).min();
            let guess = match nearest {
                Some((steps, known)) if steps <= 1 + name.chars().count() / 4 => {
                    format!("unknown key; did you mean {known}?")
                }
                _ => "unknown key;".to_owned(),
            };
            let message = format!("{guess} allowed here: {}", self.asked.join(", "));
            let line = line_of(self.document.text, key.span().start);
            self.document.problem(Some(line), &self.path_of(name), message);
        }
    }
}

/// What a value is, for "... is not ...".
fn described(value: &DeValue<'_>) -> String {
    match value {
        DeValue::String(text) => format!("{text:?}"),
        DeValue::Integer(number) => number.as_str().to_owned(),
        DeValue::Float(number) => number.as_str().to_owned(),
        DeValue::Boolean(value) => value.to_string(),
        DeValue::Datetime(value) => value.to_string(),
        DeValue::Array(_) => "an array".to_owned(),
        DeValue::Table(_) => "a table".to_owned(),
    }
}

/// Letters to insert, delete or replace between two words (Levenshtein's distance).
fn distance(a: &str, b: &str) -> usize {
    let b: Vec<char> = b.chars().collect();
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for (i, letter) in a.chars().enumerate() {
        let mut diagonal = row[0];
        row[0] = i + 1;
        for (j, other) in b.iter().enumerate() {
            let replaced = diagonal + usize::from(letter != *other);
            diagonal = row[j + 1];
            row[j + 1] = replaced.min(row[j] + 1).min(row[j + 1] + 1);
        }
    }
    row[b.len()]
}
