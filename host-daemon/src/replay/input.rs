//! From a row of a recorded file to a conditioned sample.
//!
//! The uncertainty of a value is that of the machine file, `u² = constant² + (relative·value)²`, as the controller
//! takes it; the scatter within a step is not in a recording. Values beyond a 4–20 mA range are judged as the
//! controller judges the current that would give them (bands of [`current_loop`]): a little outside is saturated, far
//! outside is a failed sensor.

use super::{ColumnProblem, Findings, ReplayError, lines};
use crate::config::{Machine, TimeFormat};
use lines::Lines;
use offcurve_core::{
    board::{Direction, RunState},
    conditioning::ConditionedSample,
    deviation::Deviation,
    machine::{
        Profile,
        profile::{ChannelSetup, Source},
    },
    math,
    sensing::{Channel, ChannelFault, ChannelValue, Reading, current_loop},
};
use std::{io::Read, path::Path};

/// Where the columns are.
pub(super) struct Layout {
    names: Vec<String>,
    separator: u8,
    time: usize,
    run: Option<usize>,
    channels: [Option<Place>; 5],
}

#[derive(Clone, Copy)]
struct Place {
    column: usize,
    /// The column's unit in SI.
    to_si: f64,
}

impl Layout {
    /// Reads the header line and finds the columns that the machine file names.
    pub(super) fn from_header<R: Read>(
        source: &mut Lines<R>,
        machine: &Machine,
        input: &Path,
    ) -> Result<Self, ReplayError> {
        let columns = &machine.columns;
        if columns.channels.iter().all(Option::is_none) {
            return Err(ReplayError::NoColumns { machine: machine.file.clone() });
        }
        let Some((_, header)) = source.next(input)? else {
            return Err(ReplayError::Empty { file: input.to_owned() });
        };
        let mut places = Vec::new();
        lines::split(header, columns.separator, &mut places);
        let names: Vec<String> =
            places.iter().map(|&(from, to)| String::from_utf8_lossy(&header[from..to]).into_owned()).collect();
        let find = |key: &str, name: &str| {
            let mut matching = names.iter().enumerate().filter(|(_, candidate)| candidate.as_str() == name.trim());
            match (matching.next(), matching.count()) {
                (Some((place, _)), 0) => Ok(place),
                (first, more) => Err(ReplayError::Column(Box::new(ColumnProblem {
                    input: input.to_owned(),
                    machine: machine.file.clone(),
                    key: key.to_owned(),
                    column: name.to_owned(),
                    times: more + usize::from(first.is_some()),
                    found: names.clone(),
                }))),
            }
        };
        let time = find("replay.time_column", &columns.time)?;
        let run = columns.run.as_deref().map(|name| find("replay.run_column", name)).transpose()?;
        let mut channels = [None; 5];
        for (channel, (place, column)) in Channel::ALL.into_iter().zip(channels.iter_mut().zip(&columns.channels)) {
            if let Some(column) = column {
                let key = format!("sensors.{}.column", crate::config::channel_key(channel));
                *place = Some(Place { column: find(&key, &column.name)?, to_si: column.unit.to_si(1.0) });
            }
        }
        Ok(Self { names, separator: columns.separator, time, run, channels })
    }

    pub(super) fn time_name(&self) -> &str {
        &self.names[self.time]
    }
}

/// One row.
pub(super) struct Row<'l> {
    /// The time as the file writes it; empty where the row has none.
    pub(super) time: &'l [u8],
    /// The time, s; `None` where it cannot be read.
    pub(super) at: Option<f64>,
    pub(super) sample: ConditionedSample,
}

/// Reads rows.
pub(super) struct RowReader<'p> {
    layout: Layout,
    profile: &'p Profile,
    format: TimeFormat,
    fields: Vec<(usize, usize)>,
    /// What a channel without a column gives.
    empty: ConditionedSample,
}

impl<'p> RowReader<'p> {
    pub(super) fn new(layout: Layout, profile: &'p Profile, format: TimeFormat) -> Self {
        let mut empty = ConditionedSample::EMPTY;
        for (channel, place) in Channel::ALL.into_iter().zip(&layout.channels) {
            if place.is_none() {
                *empty.channel_mut(channel) = Err(ChannelFault::NotFitted);
            }
        }
        Self { layout, profile, format, fields: Vec::new(), empty }
    }

    pub(super) fn read<'l>(&mut self, number: u64, line: &'l [u8], findings: &mut Findings) -> Row<'l> {
        let Layout { names, separator, time, run, channels } = &self.layout;
        lines::split(line, *separator, &mut self.fields);
        let field = |column: usize| self.fields.get(column).map_or(&b""[..], |&(from, to)| &line[from..to]);
        let mut row = Row { time: field(*time), at: None, sample: self.empty };
        if self.fields.len() != names.len() {
            findings.wrong_field_count(number, self.fields.len(), names.len());
            return row;
        }
        row.at = match seconds(row.time, self.format) {
            Some(Time { at, no_offset }) => {
                if no_offset {
                    findings.no_offset(number, row.time);
                }
                Some(at)
            }
            None => {
                findings.unreadable_time(number, &names[*time], row.time, self.format);
                return row;
            }
        };
        if let Some(column) = *run {
            row.sample.run = run_state(field(column)).unwrap_or_else(|| {
                findings.unreadable_run(number, &names[column], field(column));
                RunState::Unknown
            });
        }
        for (channel, place) in Channel::ALL.into_iter().zip(channels) {
            let Some(Place { column, to_si }) = *place else { continue };
            let text = field(column);
            let value = match number_of(text) {
                Some(value) if value.is_finite() => (value * to_si) as f32,
                Some(_) => {
                    findings.not_finite(number, &names[column], text);
                    continue;
                }
                None if text.is_empty() => {
                    findings.empty_field(number, &names[column]);
                    continue;
                }
                None => {
                    findings.not_a_number(number, &names[column], text);
                    continue;
                }
            };
            if channel == Channel::Speed && value < 0.0 {
                row.sample.direction = Direction::Reverse;
            }
            let value = if channel == Channel::Speed { value.abs() } else { value };
            let reading = reading(channel, self.profile.channel(channel), value);
            if matches!(reading, Err(ChannelFault::FailureLow | ChannelFault::FailureHigh)) {
                findings.beyond_range(number, &names[column], text);
            }
            *row.sample.channel_mut(channel) = reading;
        }
        row
    }
}

fn number_of(field: &[u8]) -> Option<f64> {
    std::str::from_utf8(field).ok()?.parse().ok()
}

/// The reading a controller would make of this value.
fn reading(channel: Channel, setup: &ChannelSetup, value: f32) -> Reading {
    if !value.is_finite() {
        return Err(ChannelFault::NoReading); // beyond what f32 holds
    }
    let mut saturated = false;
    if let Source::Loop { low, high, .. } = setup.source {
        let milliamperes = 4.0 + 16.0 * (value - low) / (high - low);
        if milliamperes <= current_loop::FAILURE_LOW {
            return Err(ChannelFault::FailureLow);
        }
        if milliamperes >= current_loop::FAILURE_HIGH {
            return Err(ChannelFault::FailureHigh);
        }
        saturated = !(current_loop::RANGE_LOW..=current_loop::RANGE_HIGH).contains(&milliamperes);
    }
    let deviation = math::root_sum_square([setup.deviation, setup.relative_deviation * value]);
    Ok(ChannelValue { value, deviation: Deviation::at_least(deviation, channel.deviation_base()), saturated, age: 0 })
}

/// A time field understood.
struct Time {
    /// s, from any origin or from 1970.
    at: f64,
    /// It had no offset from UTC, though RFC 3339 asks for one.
    no_offset: bool,
}

fn seconds(field: &[u8], format: TimeFormat) -> Option<Time> {
    let text = std::str::from_utf8(field).ok()?;
    let exact = |instant: jiff::Timestamp| instant.as_second() as f64 + f64::from(instant.subsec_nanosecond()) * 1e-9;
    match format {
        TimeFormat::Seconds => {
            text.parse().ok().filter(|at: &f64| at.is_finite()).map(|at| Time { at, no_offset: false })
        }
        TimeFormat::Rfc3339 => match text.parse::<jiff::Timestamp>() {
            Ok(instant) => Some(Time { at: exact(instant), no_offset: false }),
            // Many historians leave the offset out. The order of rows is still known, so the row is not lost. A date
            // alone is no time of a row.
            Err(_) if text.len() > "2031-05-04".len() => {
                let civil: jiff::civil::DateTime = text.parse().ok()?;
                let instant = jiff::tz::TimeZone::UTC.to_timestamp(civil).ok()?;
                Some(Time { at: exact(instant), no_offset: true })
            }
            Err(_) => None,
        },
    }
}

fn run_state(field: &[u8]) -> Option<RunState> {
    let is = |words: &[&str]| words.iter().any(|word| field.eq_ignore_ascii_case(word.as_bytes()));
    if is(&["1", "1.0", "true", "on", "run", "running", "yes"]) {
        Some(RunState::Running)
    } else if is(&["0", "0.0", "false", "off", "stop", "stopped", "no"]) {
        Some(RunState::Stopped)
    } else {
        None
    }
}

/// A time in the form of the file: that of the row itself where it is the row's time.
pub(super) fn time_text(wanted: f64, row_at: f64, row_time: &[u8], format: TimeFormat) -> String {
    if wanted == row_at {
        return String::from_utf8_lossy(row_time).into_owned();
    }
    let instant = match format {
        TimeFormat::Seconds => None,
        // Microseconds: f64 holds no more of a time in this century.
        TimeFormat::Rfc3339 => jiff::Timestamp::from_microsecond((wanted * 1e6).round() as i64).ok(),
    };
    instant.map_or_else(|| wanted.to_string(), |instant| instant.to_string())
}
