//! `[limits]`, `[controller]` and `[watch]`: what is watched, where, and how often.

use super::{
    curve::or_default,
    reader::{Bounds, Section},
    units::{Dimension, plain},
};
use crate::watch::WatchSettings;
use offcurve_core::machine::profile::{Limit, Limits, Schedule};

/// How long a fitted sensor must fail before the controller's own flag, s, when nothing is declared. Our choice.
const SENSOR_DELAY: f64 = 5.0;
const DAY: f64 = 86_400.0;
/// Advisory limits without delays of their own: raised after 5 s, lowered after 10 s. Our choice.
const ON_DELAY: f64 = 5.0;
const OFF_DELAY: f64 = 10.0;

pub(super) fn limits(section: Option<Section<'_>>) -> Option<Limits> {
    let Some(mut section) = section else {
        return Some(Limits { sensor_delay: SENSOR_DELAY as f32, ..Limits::default() });
    };
    let minimum_flow = limit(&mut section, "minimum_flow", Dimension::Share, Bounds(0.0, 1.0));
    let run_out = limit(&mut section, "run_out", Dimension::Share, Bounds(0.5, 5.0));
    let torque = limit(&mut section, "torque", Dimension::Torque, Bounds(0.0, 1e7));
    let sensor_delay = or_default(&mut section, "sensor_delay", Dimension::Time, Bounds(0.0, DAY), SENSOR_DELAY);
    if let (Some(Some(low)), Some(Some(high))) = (&minimum_flow, &run_out)
        && low.at >= high.at
    {
        section.problem("minimum_flow", "not below run_out");
    }
    section.finish();
    Some(Limits { minimum_flow: minimum_flow?, run_out: run_out?, torque: torque?, sensor_delay: sensor_delay? as f32 })
}

/// `Some(None)`: not declared. `None`: declared wrongly.
fn limit(parent: &mut Section<'_>, key: &'static str, dimension: Dimension, bounds: Bounds) -> Option<Option<Limit>> {
    let there = parent.has(key);
    let Some(mut section) = parent.section(key) else { return (!there).then_some(None) };
    let at = section.require_quantity("at", dimension, bounds);
    let deadband = or_default(&mut section, "deadband", dimension, Bounds(0.0, bounds.1), 0.0);
    let on_delay = or_default(&mut section, "on_delay", Dimension::Time, Bounds(0.0, DAY), ON_DELAY);
    let off_delay = or_default(&mut section, "off_delay", Dimension::Time, Bounds(0.0, DAY), OFF_DELAY);
    section.finish();
    Some(Some(Limit {
        at: at? as f32,
        deadband: deadband? as f32,
        on_delay: on_delay? as f32,
        off_delay: off_delay? as f32,
    }))
}

/// Scans each 1 ms, estimates each 100 ms (whole periods of 50 and 60 Hz), a record each second.
const SCAN: f64 = 0.001;
const ESTIMATE: f64 = 0.1;
const RECORD: f64 = 1.0;

pub(super) fn schedule(section: Option<Section<'_>>, warnings: &mut Vec<String>) -> Option<Schedule> {
    let Some(mut section) = section else {
        return Some(Schedule { scan_ms: 1, scans_per_step: 100, steps_per_record: 10 });
    };
    let scan = or_default(&mut section, "scan_interval", Dimension::Time, Bounds(0.001, 1.0), SCAN);
    let estimate = or_default(&mut section, "estimate_interval", Dimension::Time, Bounds(0.001, 10.0), ESTIMATE);
    let record = or_default(&mut section, "record_interval", Dimension::Time, Bounds(0.001, 3600.0), RECORD);
    let schedule = (|| {
        let (scan, estimate, record) = (scan?, estimate?, record?);
        let scan_ms = whole(&section, "scan_interval", scan, 0.001, "1 ms")?;
        let scans_per_step = whole(&section, "estimate_interval", estimate, scan, "scan_interval")?;
        let steps_per_record = whole(&section, "record_interval", record, estimate, "estimate_interval")?;
        Some(Schedule { scan_ms, scans_per_step, steps_per_record })
    })();
    if let Some(schedule) = schedule
        && schedule.step_ms() % 100 != 0
    {
        warnings.push(format!(
            "controller.estimate_interval: {} ms does not span whole mains periods of both 50 and 60 Hz, as 100 ms \
             does; hum may enter the readings",
            schedule.step_ms()
        ));
    }
    section.finish();
    schedule
}

/// `value` as a whole multiple of `unit`, or a problem.
fn whole(section: &Section<'_>, key: &str, value: f64, unit: f64, of: &str) -> Option<u16> {
    let times = value / unit;
    let rounded = times.round();
    if rounded < 1.0 || rounded > f64::from(u16::MAX) || (times - rounded).abs() > 1e-6 * rounded {
        let message = format!("{} s is not a whole multiple (1 .. 65535) of {of}", plain(value));
        section.problem(key, message);
        return None;
    }
    Some(rounded as u16) // checked above
}

pub(super) fn watch(section: Option<Section<'_>>) -> Option<WatchSettings> {
    let usual = WatchSettings::default();
    let Some(mut section) = section else { return Some(usual) };
    let block = or_default(&mut section, "block", Dimension::Time, Bounds(1.0, 3600.0), usual.block);
    let head_limit = or_default(&mut section, "head_limit", Dimension::Share, Bounds(0.001, 0.9), usual.head_limit);
    let power_limit = or_default(&mut section, "power_limit", Dimension::Share, Bounds(0.001, 0.9), usual.power_limit);
    let deadband = or_default(&mut section, "deadband", Dimension::Share, Bounds(0.0, 0.99), usual.deadband);
    let on_delay = or_default(&mut section, "on_delay", Dimension::Time, Bounds(0.0, 7.0 * DAY), usual.on_delay);
    let off_delay = or_default(&mut section, "off_delay", Dimension::Time, Bounds(0.0, 7.0 * DAY), usual.off_delay);
    let sensor_delay = or_default(&mut section, "sensor_delay", Dimension::Time, Bounds(0.0, DAY), usual.sensor_delay);
    section.finish();
    Some(WatchSettings {
        block: block?,
        head_limit: head_limit?,
        power_limit: power_limit?,
        deadband: deadband?,
        on_delay: on_delay?,
        off_delay: off_delay?,
        sensor_delay: sensor_delay?,
    })
}
