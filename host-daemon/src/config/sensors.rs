//! `[sensors.*]` and `[replay]`: where each channel's value comes from, on the controller and in a recorded file, and
//! how well its 100 ms mean is known.

use super::{
    reader::{Bounds, Section},
    units::{Dimension, Unit},
};
use offcurve_core::{
    board::LOOP_INPUTS,
    machine::profile::{ChannelSetup, Source},
    sensing::Channel,
};

/// How the time column of a recorded file is written.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum TimeFormat {
    /// Seconds from any origin.
    #[default]
    Seconds,
    /// RFC 3339, as `2031-05-04T08:00:00.5Z`.
    Rfc3339,
}

/// The column of a recorded file that holds one channel.
#[derive(Clone, Debug)]
pub struct ChannelColumn {
    /// Its name in the header line.
    pub name: String,
    /// The unit its numbers are in.
    pub unit: &'static Unit,
}

/// How a recorded file is read.
#[derive(Clone, Debug)]
pub struct Columns {
    /// The column with the time.
    pub time: String,
    /// How it is written.
    pub time_format: TimeFormat,
    /// The byte between two fields.
    pub separator: u8,
    /// The column that says whether the driver is on, if there is one.
    pub run: Option<String>,
    /// The channels' columns, in the order of [`Channel::ALL`]; `None` where the file has none.
    pub channels: [Option<ChannelColumn>; 5],
}

/// What `[sensors]` says of one channel.
#[derive(Default)]
pub(super) struct Sensor {
    pub(super) setup: ChannelSetup,
    pub(super) column: Option<ChannelColumn>,
    /// SI, low before high; also known of a sensor that only a recorded file has.
    pub(super) range: Option<(f64, f64)>,
    /// There is such a table.
    pub(super) declared: bool,
}

/// The sensors, in the order of [`Channel::ALL`].
pub(super) type Sensors = [Sensor; 5];

/// The key of a channel's table.
pub(super) const fn key(channel: Channel) -> &'static str {
    match channel {
        Channel::Speed => "speed",
        Channel::Flow => "flow",
        Channel::SuctionPressure => "suction_pressure",
        Channel::DischargePressure => "discharge_pressure",
        Channel::ShaftTorque => "shaft_torque",
    }
}

pub(super) const fn dimension(channel: Channel) -> Dimension {
    match channel {
        Channel::Speed => Dimension::Speed,
        Channel::Flow => Dimension::Flow,
        Channel::SuctionPressure | Channel::DischargePressure => Dimension::Pressure,
        Channel::ShaftTorque => Dimension::Torque,
    }
}

/// Widest range of a channel's sensor, SI. Our choice: beyond it a unit is wrong.
const fn bounds(channel: Channel) -> Bounds {
    match channel {
        Channel::Speed => Bounds(0.0, 10_000.0),
        Channel::Flow => Bounds(-1000.0, 1000.0),
        Channel::SuctionPressure | Channel::DischargePressure => Bounds(-101_325.0, 1e8),
        Channel::ShaftTorque => Bounds(-1e7, 1e7),
    }
}

/// `None` when a sensor is declared wrongly.
pub(super) fn sensors(section: Option<Section<'_>>) -> Option<Sensors> {
    let Some(mut parent) = section else { return Some(Sensors::default()) };
    // Two channels on one converter input would read each other's value without any sign of it.
    let mut inputs: [Option<Channel>; LOOP_INPUTS] = [None; LOOP_INPUTS];
    let read = Channel::ALL.map(|channel| {
        let there = parent.has(key(channel));
        match parent.section(key(channel)) {
            Some(section) => sensor(section, channel, &mut inputs),
            None => (!there).then(Sensor::default),
        }
    });
    parent.finish();
    let mut sensors = Sensors::default();
    for (place, sensor) in sensors.iter_mut().zip(read) {
        *place = sensor?;
    }
    Some(sensors)
}

fn sensor(mut section: Section<'_>, channel: Channel, inputs: &mut [Option<Channel>; LOOP_INPUTS]) -> Option<Sensor> {
    let dimension = dimension(channel);
    let source = if channel == Channel::Speed { pulses(&mut section) } else { current_loop(&mut section) };
    if let Some(Plan::Loop(input)) = source
        && let Some(place) = inputs.get_mut(usize::from(input))
        && let Some(other) = place.replace(channel)
    {
        section.problem("loop_input", format!("input {input} is also that of {}", key(other)));
    }
    let range_there = section.has("range");
    let range = if channel == Channel::Speed { None } else { section.range("range", dimension, bounds(channel)) };
    let uncertainty_there = section.has("uncertainty");
    let uncertainty = section.uncertainty("uncertainty", dimension);
    if !uncertainty_there {
        let unit = dimension.units()[0].name();
        section.problem("uncertainty", format!("missing; write e.g. uncertainty = \"0.5 % + 0.4 {unit}\""));
    }
    let from_drive = section.boolean("from_drive");
    if from_drive == Some(true) && channel != Channel::ShaftTorque {
        section.problem("from_drive", "only shaft_torque can be the drive's own value");
    }
    let column = column(&mut section, dimension);
    let source = source.and_then(|source| match (source, range) {
        (Plan::None, _) => Some(Source::NotFitted),
        (Plan::Pulses(per_revolution), _) => Some(Source::Pulses { per_revolution }),
        (Plan::Loop(input), Some((low, high))) => Some(Source::Loop { input, low: low as f32, high: high as f32 }),
        (Plan::Loop(_), None) => {
            if !range_there {
                let example = if dimension == Dimension::Pressure {
                    "-1 .. 1.5 bar".to_owned()
                } else {
                    format!("0 .. {}", dimension.example())
                };
                section.problem("range", format!("missing; write the values at 4 and 20 mA, e.g. range = {example:?}"));
            }
            None
        }
    });
    if matches!(source, Some(Source::NotFitted)) && matches!(column, Some(None)) {
        let wanted = if channel == Channel::Speed { "pulses_per_revolution" } else { "loop_input" };
        section.problem_here(format!("no source: give {wanted} for a controller, or column for a recorded file"));
    }
    section.finish();
    let (source, uncertainty, column) = (source?, uncertainty?, column?);
    if range_there && range.is_none() {
        return None;
    }
    let setup = ChannelSetup {
        source,
        deviation: uncertainty.constant as f32,
        relative_deviation: uncertainty.relative as f32,
        from_drive: from_drive.unwrap_or(false),
    };
    Some(Sensor { setup, column, range, declared: true })
}

enum Plan {
    None,
    Pulses(u16),
    Loop(u8),
}

fn pulses(section: &mut Section<'_>) -> Option<Plan> {
    let there = section.has("pulses_per_revolution");
    match section.integer("pulses_per_revolution", 1..=u32::from(u16::MAX)) {
        Some(count) => u16::try_from(count).ok().map(Plan::Pulses),
        None => (!there).then_some(Plan::None),
    }
}

fn current_loop(section: &mut Section<'_>) -> Option<Plan> {
    let there = section.has("loop_input");
    match section.integer("loop_input", 0..=LOOP_INPUTS as u32 - 1) {
        Some(input) => u8::try_from(input).ok().map(Plan::Loop),
        None => (!there).then_some(Plan::None),
    }
}

/// `Some(None)`: a recorded file does not have this channel.
fn column(section: &mut Section<'_>, dimension: Dimension) -> Option<Option<ChannelColumn>> {
    let (name_there, unit_there) = (section.has("column"), section.has("column_unit"));
    let name = section.text("column");
    let unit = section.text("column_unit");
    match (name_there, unit_there) {
        (false, false) => return Some(None),
        (true, false) => {
            let unit = dimension.units()[0].name();
            section.problem("column_unit", format!("missing beside column; write e.g. column_unit = \"{unit}\""));
        }
        (false, true) => section.problem("column", "missing beside column_unit; write the column's name in the header"),
        (true, true) => {}
    }
    let (name, unit_name) = (name?, unit?);
    match dimension.unit(unit_name.trim()) {
        Some(unit) => Some(Some(ChannelColumn { name: name.to_owned(), unit })),
        None => {
            let message = format!("{unit_name:?} is no unit of {} ({} allowed)", dimension.name(), dimension.allowed());
            section.problem("column_unit", message);
            None
        }
    }
}

pub(super) fn replay(section: Option<Section<'_>>, sensors: Option<&mut Sensors>) -> Option<Columns> {
    let mut columns = Columns {
        time: "time".to_owned(),
        time_format: TimeFormat::Seconds,
        separator: b',',
        run: None,
        channels: Default::default(),
    };
    let mut good = true;
    if let Some(mut section) = section {
        if let Some(time) = section.text("time_column") {
            columns.time = time.to_owned();
        }
        let format = section.word("time_format", &[("seconds", TimeFormat::Seconds), ("rfc3339", TimeFormat::Rfc3339)]);
        let separator = section.word("separator", &[(",", b','), (";", b';'), ("tab", b'\t')]);
        columns.run = section.text("run_column").map(str::to_owned);
        section.finish();
        match (format, separator) {
            (Some(format), Some(separator)) => (columns.time_format, columns.separator) = (format, separator),
            _ => good = false,
        }
    }
    for (place, sensor) in columns.channels.iter_mut().zip(sensors?) {
        *place = sensor.column.take();
    }
    good.then_some(columns)
}
