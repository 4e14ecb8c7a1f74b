//! The watch: decides from samples and estimates when a machine has left its curve, and says so. The daemon and
//! `replay` use this one code.
//!
//! Samples are gathered into blocks (`block`), block means of the head and power deviations run against limits with
//! delays and a deadband (`chart`), and an alarm carries ranked causes (`causes`) and a text for a person
//! (`words`). Time comes with the samples; the clock of the computer is never asked.

mod block;
mod causes;
mod chart;
mod words;

use crate::alarm::{AlarmChange, AlarmKind, AlarmState, RankedCause};
use block::{Block, BlockResult, Deviation};
use chart::{Chart, ChartSettings};
use offcurve_core::{
    conditioning::ConditionedSample,
    estimate::Estimate,
    machine::Profile,
    sensing::{Channel, ChannelFault},
};
use std::collections::{BTreeMap, VecDeque};

/// Alike estimates in a row that end a mismatch alarm.
const ALIKE_TO_CLEAR: u32 = 100;

/// How one machine is watched; from the `[watch]` part of its machine file.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct WatchSettings {
    /// Length of a block, s.
    pub block: f64,
    /// Least relative deviation of head that may alarm, parts of one.
    pub head_limit: f64,
    /// Least relative deviation of shaft power that may alarm, parts of one.
    pub power_limit: f64,
    /// How far back inside its limit a deviation must come before the alarm clears, as a share of the limit, 0 to 1.
    pub deadband: f64,
    /// How long a deviation must last before it alarms, s; whole blocks are counted.
    pub on_delay: f64,
    /// How long it must be back inside before the alarm clears, s; whole blocks are counted.
    pub off_delay: f64,
    /// How long a fitted sensor must fail before it alarms, and be well before that clears, s.
    pub sensor_delay: f64,
}

impl Default for WatchSettings {
    /// Our choice, held against simulated healthy and worn running in the tests.
    fn default() -> Self {
        Self {
            block: 30.0,
            head_limit: 0.04,
            power_limit: 0.06,
            deadband: 0.25,
            on_delay: 120.0,
            off_delay: 300.0,
            sensor_delay: 10.0,
        }
    }
}

impl WatchSettings {
    fn chart(&self, limit: f64) -> ChartSettings {
        let blocks = |delay: f64| (delay / self.block).ceil().max(1.0) as u32;
        ChartSettings {
            limit,
            deadband: self.deadband,
            blocks_on: blocks(self.on_delay),
            blocks_off: blocks(self.off_delay),
        }
    }
}

/// One sensor, waiting for its delay.
#[derive(Clone, Copy, Debug, Default)]
struct SensorTimer {
    /// When the reading began to be other than the alarm says, s.
    opposite_since: Option<f64>,
}

/// The watch over one machine.
#[derive(Debug)]
pub struct Watch {
    profile: Profile,
    settings: WatchSettings,
    block: Option<Block>,
    head: Chart,
    power: Chart,
    /// Judged blocks, newest last, as many as an alarm needs to look back.
    recent: VecDeque<BlockResult>,
    sensors: [SensorTimer; Channel::ALL.len()],
    alike: u32,
    states: BTreeMap<AlarmKind, AlarmState>,
    /// An off-curve alarm was put back, and no block has been judged since.
    restored: bool,
    judged_blocks: u64,
    closed_blocks: u64,
}

impl Watch {
    /// A watch that has seen nothing.
    #[must_use]
    pub fn new(profile: &Profile, settings: WatchSettings) -> Self {
        Self {
            profile: profile.clone(),
            settings,
            block: None,
            head: Chart::default(),
            power: Chart::default(),
            recent: VecDeque::new(),
            sensors: Default::default(),
            alike: 0,
            states: BTreeMap::new(),
            restored: false,
            judged_blocks: 0,
            closed_blocks: 0,
        }
    }

    /// Puts an alarm back as the journal has it, after a restart.
    pub fn restore(&mut self, kind: AlarmKind, state: AlarmState) {
        self.states.insert(kind, state);
        if kind == AlarmKind::OffCurve && state.is_active() {
            // Which of the two was up is not in the journal; either keeps the alarm until the plant is back inside.
            self.head = Chart::standing(f64::NAN);
            self.restored = true;
        }
    }

    /// Takes one sample with its estimate, `at` seconds on a clock that does not go back; changes of alarms follow.
    pub fn push(&mut self, at: f64, sample: &ConditionedSample, estimate: &Estimate) -> Vec<AlarmChange> {
        let mut changes = Vec::new();
        self.watch_sensors(at, sample, &mut changes);
        let index = Block::index_of(at, self.settings.block);
        if self.block.as_ref().is_none_or(|block| block.index() != index) {
            let finished = self.block.replace(Block::starting(at, self.settings.block));
            if let Some(block) = finished {
                self.closed_blocks += 1;
                if let Some(result) = block.close(&self.profile) {
                    self.judge(at, result, &mut changes);
                }
            }
        }
        if let Some(block) = &mut self.block {
            block.add(at, sample, estimate, &self.profile);
        }
        changes
    }

    /// Counts an estimate that the controller computed differently (`true`) or alike (`false`).
    pub fn compare(&mut self, at: f64, differs: bool) -> Option<AlarmChange> {
        self.alike = if differs { 0 } else { self.alike.saturating_add(1) };
        let active = self.state(AlarmKind::EstimateMismatch).is_active();
        let still = differs || (active && self.alike < ALIKE_TO_CLEAR);
        let text = if still {
            "The controller computes other estimates than this daemon from the same readings: its profile or its build \
             differs. Judge nothing by its own flags. Check first: the profile checksum in the log, then flash the \
             controller and this daemon from one build."
        } else {
            "Controller and daemon compute the same estimates again."
        };
        self.change(at, AlarmKind::EstimateMismatch, still, Vec::new, || text.to_owned())
    }

    /// The alarms that are active, in the order of [`AlarmKind::ALL`].
    #[must_use]
    pub fn active(&self) -> Vec<AlarmKind> {
        AlarmKind::ALL.into_iter().filter(|&kind| self.state(kind).is_active()).collect()
    }

    /// Blocks judged and blocks closed so far: the rest was too short, too empty or not steady.
    #[must_use]
    pub const fn judged(&self) -> (u64, u64) {
        (self.judged_blocks, self.closed_blocks)
    }

    fn state(&self, kind: AlarmKind) -> AlarmState {
        self.states.get(&kind).copied().unwrap_or_default()
    }

    /// Moves an alarm on, if the plant's state asks for it.
    fn change(
        &mut self,
        at: f64,
        kind: AlarmKind,
        deviates: bool,
        causes: impl FnOnce() -> Vec<RankedCause>,
        text: impl FnOnce() -> String,
    ) -> Option<AlarmChange> {
        let before = self.state(kind);
        let state = before.next(deviates);
        if state == before {
            return None;
        }
        self.states.insert(kind, state);
        Some(AlarmChange { at, kind, state, causes: causes(), text: text() })
    }

    fn watch_sensors(&mut self, at: f64, sample: &ConditionedSample, changes: &mut Vec<AlarmChange>) {
        for (place, channel) in Channel::ALL.into_iter().enumerate() {
            let kind = AlarmKind::SensorFailed(channel);
            let fault = match sample.channel(channel) {
                // A sensor that was taken off after its alarm: nobody will see it read again.
                Err(ChannelFault::NotFitted) if self.state(kind).is_active() => None,
                Err(ChannelFault::NotFitted) => continue,
                Ok(_) => None,
                Err(fault) => Some(*fault),
            };
            if fault.is_some() == self.state(kind).is_active() {
                self.sensors[place].opposite_since = None;
                continue;
            }
            let since = *self.sensors[place].opposite_since.get_or_insert(at);
            if at - since < self.settings.sensor_delay {
                continue;
            }
            self.sensors[place].opposite_since = None;
            let text = || match sample.channel(channel) {
                Err(ChannelFault::NotFitted) => {
                    format!("The {} sensor is no longer fitted.", words::channel_name(channel))
                }
                Err(fault) => words::sensor_failed(channel, *fault),
                Ok(_) => format!("The {} sensor gives readings again.", words::channel_name(channel)),
            };
            changes.extend(self.change(at, kind, fault.is_some(), Vec::new, text));
        }
    }

    fn judge(&mut self, at: f64, result: BlockResult, changes: &mut Vec<AlarmChange>) {
        self.judged_blocks += 1;
        let (head, power) =
            (self.settings.chart(self.settings.head_limit), self.settings.chart(self.settings.power_limit));
        if std::mem::take(&mut self.restored) && result.head.is_none() {
            // No head to compare here: only the power can have raised the alarm, and only it can end it.
            std::mem::swap(&mut self.head, &mut self.power);
        }
        if let Some(deviation) = result.head {
            self.head.step(result.from, deviation, &head);
        }
        if let Some(deviation) = result.power {
            self.power.step(result.from, deviation, &power);
        }
        self.recent.push_back(result);
        while self.recent.len() > head.blocks_on as usize {
            self.recent.pop_front();
        }
        let deviates = self.head.is_up() || self.power.is_up();
        let before = self.state(AlarmKind::OffCurve);
        if before.next(deviates) == before {
            return;
        }
        let (causes, text) = if deviates {
            self.explain(at)
        } else {
            (Vec::new(), "Head and shaft power are back on the curve.".to_owned())
        };
        changes.extend(self.change(at, AlarmKind::OffCurve, deviates, || causes, || text));
    }

    /// Causes and words for a deviation that has just been decided.
    fn explain(&self, at: f64) -> (Vec<RankedCause>, String) {
        let blocks: Vec<BlockResult> = self.recent.iter().copied().collect();
        let mean = (mean_of(&blocks, |block| block.head), mean_of(&blocks, |block| block.power));
        let since =
            [&self.head, &self.power].into_iter().filter(|chart| chart.is_up()).map(Chart::since).fold(at, f64::min);
        let causes = causes::rank(&self.profile, point_of(&blocks), mean.0, mean.1);
        let text = words::off_curve(&self.profile, &blocks, mean, at - since, &causes);
        (causes, text)
    }
}

/// Mean deviation of these blocks; uncertainties do not shrink, they are mostly systematic.
fn mean_of(blocks: &[BlockResult], part: fn(&BlockResult) -> Option<Deviation>) -> Option<Deviation> {
    let found: Vec<Deviation> = blocks.iter().filter_map(part).collect();
    let count = found.len() as f64;
    (!found.is_empty()).then(|| Deviation {
        value: found.iter().map(|deviation| deviation.value).sum::<f64>() / count,
        uncertainty: found.iter().map(|deviation| deviation.uncertainty).sum::<f64>() / count,
    })
}

fn point_of(blocks: &[BlockResult]) -> causes::OperatingPoint {
    let count = blocks.len().max(1) as f64;
    causes::OperatingPoint {
        speed_ratio: blocks.iter().map(|block| block.speed_ratio).sum::<f64>() / count,
        flow: blocks.iter().map(|block| block.flow).sum::<f64>() / count,
    }
}

#[cfg(test)]
mod tests;
