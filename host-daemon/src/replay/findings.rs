//! What was wrong in a recorded file: counted in full, the first few of each kind located.

use crate::config::TimeFormat;
use std::fmt;

/// How many of each kind are located.
const LOCATED: usize = 5;

/// One kind of thing found.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Finding {
    /// How many there were.
    pub count: u64,
    /// The first few, with line and column.
    pub first: Vec<String>,
}

impl Finding {
    fn add(&mut self, words: impl FnOnce() -> String) {
        self.count += 1;
        if self.first.len() < LOCATED {
            self.first.push(words());
        }
    }
}

/// All that was found.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
#[non_exhaustive]
pub struct Findings {
    /// Rows with more or fewer fields than the header.
    pub wrong_field_count: Finding,
    /// Rows whose time cannot be read.
    pub unreadable_time: Finding,
    /// Times without an offset from UTC, taken as UTC.
    pub no_offset: Finding,
    /// Rows earlier than one before them.
    pub out_of_order: Finding,
    /// Steps longer than five usual ones.
    pub gaps: Finding,
    /// Fields with nothing in them.
    pub empty_fields: Finding,
    /// Fields that are no numbers.
    pub not_numbers: Finding,
    /// NaN or infinite.
    pub not_finite: Finding,
    /// Values so far outside the sensor's range that the controller would call it failed.
    pub beyond_range: Finding,
    /// Run signals that say neither on nor off.
    pub unreadable_run: Finding,
}

/// A field for a message, cut short.
pub(super) fn shown(field: &[u8]) -> String {
    const MOST: usize = 40;
    let text = String::from_utf8_lossy(field);
    let mut cut: String = text.chars().take(MOST).flat_map(char::escape_debug).collect();
    if text.chars().nth(MOST).is_some() {
        cut.push('…');
    }
    cut
}

impl Findings {
    /// Each kind with its name.
    #[must_use]
    pub fn kinds(&self) -> [(&'static str, &Finding); 10] {
        [
            ("rows with a wrong number of fields, taken as rows without any reading", &self.wrong_field_count),
            ("rows without a readable time, taken as rows without any reading", &self.unreadable_time),
            ("times without an offset from UTC, taken as UTC", &self.no_offset),
            ("rows out of order, estimated but not watched", &self.out_of_order),
            ("gaps in time", &self.gaps),
            ("empty fields, taken as no reading", &self.empty_fields),
            ("fields that are not numbers, taken as no reading", &self.not_numbers),
            ("fields that are NaN or infinite, taken as no reading", &self.not_finite),
            ("values far outside the sensor's range, taken as a failed sensor", &self.beyond_range),
            ("run signals that say neither on nor off, taken as unknown", &self.unreadable_run),
        ]
    }

    pub(super) fn wrong_field_count(&mut self, line: u64, found: usize, wanted: usize) {
        self.wrong_field_count.add(|| format!("line {line}: {found} fields, the header has {wanted}"));
    }

    pub(super) fn unreadable_time(&mut self, line: u64, column: &str, field: &[u8], format: TimeFormat) {
        let wanted = match format {
            TimeFormat::Seconds => "a number of seconds",
            TimeFormat::Rfc3339 => "an RFC 3339 time such as 2031-05-04T08:00:00Z",
        };
        self.unreadable_time.add(|| format!("line {line}, column {column}: '{}' is not {wanted}", shown(field)));
    }

    pub(super) fn no_offset(&mut self, line: u64, time: &[u8]) {
        self.no_offset.add(|| format!("line {line}: {}", shown(time)));
    }

    pub(super) fn out_of_order(&mut self, line: u64, time: &[u8]) {
        self.out_of_order.add(|| format!("line {line}: {}", shown(time)));
    }

    pub(super) fn gap(&mut self, line: u64, step: f64, usual: f64) {
        let plain = crate::config::units::plain;
        self.gaps.add(|| {
            format!("line {line}: {} s after the row before it, where {} s is usual", plain(step), plain(usual))
        });
    }

    pub(super) fn empty_field(&mut self, line: u64, column: &str) {
        self.empty_fields.add(|| format!("line {line}, column {column}: empty"));
    }

    pub(super) fn not_a_number(&mut self, line: u64, column: &str, field: &[u8]) {
        self.not_numbers.add(|| format!("line {line}, column {column}: '{}' is not a number", shown(field)));
    }

    pub(super) fn not_finite(&mut self, line: u64, column: &str, field: &[u8]) {
        self.not_finite.add(|| format!("line {line}, column {column}: {}", shown(field)));
    }

    pub(super) fn beyond_range(&mut self, line: u64, column: &str, field: &[u8]) {
        self.beyond_range.add(|| format!("line {line}, column {column}: {}", shown(field)));
    }

    pub(super) fn unreadable_run(&mut self, line: u64, column: &str, field: &[u8]) {
        self.unreadable_run.add(|| {
            format!(
                "line {line}, column {column}: '{}' is neither on (1, true, on) nor off (0, false, off)",
                shown(field)
            )
        });
    }
}

impl fmt::Display for Findings {
    /// Each kind that occurred with its count, its first few below it; nothing when nothing was wrong.
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (name, finding) in self.kinds() {
            if finding.count == 0 {
                continue;
            }
            writeln!(out, "{name}: {}", finding.count)?;
            for place in &finding.first {
                writeln!(out, "  {place}")?;
            }
            if finding.count > finding.first.len() as u64 {
                writeln!(out, "  and {} more", finding.count - finding.first.len() as u64)?;
            }
        }
        Ok(())
    }
}
