//! One controller with its machine, as the daemon knows them: numbers and clocks of its boots, its watch, what it said.
//! Pure but for the log: what was heard goes in, rows for the store come out; what was stored goes in, alarms come out.
//!
//! A number that jumps is a loss and becomes a gap. A hello that names a higher next number shows a loss, too: what is
//! on the line arrives in order. Records of a controller that the store has never seen begin without a gap: what it made
//! before anybody listened is not lost, it was never asked for. Numbers wrap after 13 years at 10 a second; nothing here
//! expects that.

use super::clock::Clock;
use crate::{
    alarm::{AlarmChange, AlarmKind, AlarmState},
    link::{Event, Received, serial::now_us},
    store::{Batch, BootRow, Gap, KnownBoot, Outcome, RecordRow, StandingAlarm},
    watch::{Watch, WatchSettings},
};
use offcurve_core::{
    estimate::{Estimate, estimate},
    link::{Hello, LAYOUT, Record, WIRE_VERSION},
    machine::Profile,
};
use std::{
    collections::VecDeque,
    sync::Arc,
    time::{Duration, Instant},
};
use tracing::{error, info, warn};

/// Boots kept in mind. A controller that restarts more often than this between two records of one boot loses its place.
const BOOTS: usize = 256;
/// Least time between two warnings about gaps of one controller.
const GAPS_EVERY: Duration = Duration::from_secs(10);

/// Numbers for the summary.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub(crate) struct Tally {
    pub(crate) received: u64,
    pub(crate) stored: u64,
    pub(crate) duplicates: u64,
    pub(crate) conflicts: u64,
    pub(crate) lost: u64,
    pub(crate) mismatches: u64,
    pub(crate) alarms: u64,
}

/// A record on its way through the store.
#[derive(Debug)]
pub(crate) struct Pending {
    pub(crate) station: usize,
    record: Record,
    at_us: i64,
    /// It came in order, from the configured machine.
    to_judge: bool,
}

/// What the store's answer means for a record.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Standing {
    /// It may be acknowledged.
    pub(crate) durable: bool,
    /// It is new and goes before the watch.
    pub(crate) to_judge: bool,
}

/// A judged record.
pub(crate) struct Judged {
    pub(crate) at_us: i64,
    pub(crate) estimate: Estimate,
    pub(crate) changes: Vec<AlarmChange>,
}

#[derive(Clone, Copy, Debug)]
struct Boot {
    boot: u64,
    clock: Clock,
    /// The number that comes next; `None` until the first record or hello of a controller never seen before.
    next: Option<u64>,
    /// Frames the controller dropped, as of its last hello.
    dropped: u32,
    /// Its records are of another machine than the configured one.
    foreign: bool,
}

/// See the module.
#[derive(Debug)]
pub(crate) struct Station {
    pub(crate) name: Arc<str>,
    pub(crate) machine: String,
    profile: Profile,
    checksum: u32,
    watch: Watch,
    boots: VecDeque<Boot>,
    known: bool,
    /// Newest time of any record, µs since 1970 UTC.
    newest_us: Option<i64>,
    /// Newest time the watch was given.
    judged_us: i64,
    conflict_said: bool,
    gaps_said: Option<Instant>,
    gaps_unsaid: u64,
    pub(crate) tally: Tally,
}

impl Station {
    /// A station as the store left it.
    pub(crate) fn new(
        (name, machine): (&str, &str),
        profile: &Profile,
        settings: WatchSettings,
        known: &[KnownBoot],
        standing: &[StandingAlarm],
    ) -> Self {
        let mut boots: Vec<Boot> = known
            .iter()
            .map(|known| Boot {
                boot: known.boot,
                clock: Clock::known(known.anchor_us, known.last),
                next: Some(known.next_number),
                dropped: 0,
                foreign: false,
            })
            .collect();
        boots.sort_by_key(|boot| boot.clock.anchor_us());
        let newest_us =
            known.iter().filter_map(|known| Some(known.anchor_us.saturating_add(known.last?.0 * 1000))).max();
        let mut watch = Watch::new(profile, settings);
        for alarm in standing {
            match (AlarmKind::from_id(&alarm.kind), AlarmState::from_id(&alarm.state)) {
                (Some(kind), Some(state)) => watch.restore(kind, state),
                _ => {
                    warn!(machine, kind = %alarm.kind, state = %alarm.state, "the journal has an alarm this build does not know")
                }
            }
        }
        let skip = boots.len().saturating_sub(BOOTS);
        Self {
            name: name.into(),
            machine: machine.to_owned(),
            profile: profile.clone(),
            checksum: profile.checksum(),
            watch,
            boots: boots.into_iter().skip(skip).collect(),
            known: !known.is_empty(),
            newest_us,
            judged_us: newest_us.unwrap_or(i64::MIN),
            conflict_said: false,
            gaps_said: None,
            gaps_unsaid: 0,
            tally: Tally::default(),
        }
    }

    /// The alarms that are active.
    pub(crate) fn active(&self) -> Vec<AlarmKind> {
        self.watch.active()
    }

    /// Takes one event of the line; what is to be stored is added to `batch` and `pending`, in step with each other.
    pub(crate) fn take(
        &mut self,
        station: usize,
        received_us: i64,
        event: Event,
        batch: &mut Batch,
        pending: &mut Vec<Pending>,
    ) {
        match event {
            Event::Speaker(hello) => self.speaker(received_us, &hello, batch),
            Event::Record(received) => self.record(station, received_us, &received, batch, pending),
            Event::Upto { boot, next_number, dropped } => self.upto(received_us, boot, next_number, dropped, batch),
            Event::OtherBuild { version, layout } => error!(
                controller = %self.name,
                "controller speaks wire version {version} layout {layout:08x}, this build {WIRE_VERSION} layout \
                 {LAYOUT:08x}: flash and daemon must come from one build while the version is 0. Nothing is stored of it"
            ),
            Event::NoHello => warn!(
                controller = %self.name,
                "records come but no hello that fits them; the oldest are given up. Does the line work both ways?"
            ),
        }
    }

    fn speaker(&mut self, received_us: i64, hello: &Hello, batch: &mut Batch) {
        let Hello { boot, profile_checksum, machine, .. } = *hello;
        info!(
            controller = %self.name, called = %hello.name, boot, machine,
            interval_ms = hello.record_interval_ms, next_number = hello.next_number, "controller speaks"
        );
        let foreign = profile_checksum != 0 && machine != self.profile.machine;
        match self.boots.iter_mut().find(|known| known.boot == boot) {
            Some(known) => known.foreign = foreign,
            None => {
                let clock = Clock::first_seen(hello.at_ms, received_us, self.newest_us);
                let next = self.known.then_some(0);
                if self.boots.len() >= BOOTS {
                    self.boots.pop_front();
                }
                self.boots.push_back(Boot { boot, clock, next, dropped: 0, foreign });
                self.known = true;
                batch.boots.push(BootRow {
                    controller: Arc::clone(&self.name),
                    boot,
                    anchor_us: clock.anchor_us(),
                    seen_us: received_us,
                    name: hello.name.as_str().to_owned(),
                    profile_checksum,
                    layout: hello.layout,
                });
            }
        }
        if profile_checksum == 0 {
            warn!(controller = %self.name, "controller has no machine profile yet and makes no records until it gets one");
        } else if foreign {
            warn!(
                controller = %self.name,
                "controller holds the profile of machine {machine}, the machine file of {} says machine {}: its records \
                 are stored, but not judged. Wrong port, or wrong file?",
                self.machine, self.profile.machine
            );
        } else if profile_checksum != self.checksum {
            warn!(
                controller = %self.name,
                "controller's profile has checksum {profile_checksum:08x}, the machine file of {} gives {:08x}: records \
                 are stored and judged by the file, and estimates will differ. Load the file's profile into the controller",
                self.machine, self.checksum
            );
        }
    }

    fn record(
        &mut self,
        station: usize,
        received_us: i64,
        received: &Received,
        batch: &mut Batch,
        pending: &mut Vec<Pending>,
    ) {
        let record = received.record;
        self.tally.received += 1;
        // The session lets no record through whose boot did not say hello, and a hello makes the boot known.
        let Some(known) = self.boots.iter_mut().rev().find(|known| known.boot == record.boot) else {
            error!(controller = %self.name, boot = record.boot, "a record without a hello was dropped");
            return;
        };
        let number = u64::from(record.number);
        let expected = known.next.unwrap_or(number);
        let at_ms = known.clock.unwrap_ms(record.at_ms, received_us);
        let at_us = known.clock.utc_us(at_ms);
        known.next = Some(expected.max(number + 1));
        let in_order = number >= expected;
        let to_judge = in_order && !known.foreign && record.machine == self.profile.machine;
        if number > expected {
            self.gap(received_us, record.boot, expected, number - 1, batch);
        }
        self.newest_us = self.newest_us.max(Some(at_us));
        batch.records.push(RecordRow {
            controller: Arc::clone(&self.name),
            boot: record.boot,
            number: record.number,
            machine: record.machine,
            received_us,
            at_ms,
            payload: received.payload.clone(),
        });
        pending.push(Pending { station, record, at_us, to_judge });
    }

    fn upto(&mut self, received_us: i64, boot: u64, next_number: u32, dropped: u32, batch: &mut Batch) {
        let Some(known) = self.boots.iter_mut().rev().find(|known| known.boot == boot) else { return };
        let next = u64::from(next_number);
        let expected = known.next.unwrap_or(next);
        known.next = Some(expected.max(next));
        let more = dropped.saturating_sub(known.dropped);
        known.dropped = dropped;
        if more > 0 {
            warn!(controller = %self.name, "controller has dropped {more} frames: the line was slow, or nobody read it");
        }
        if next > expected {
            self.gap(received_us, boot, expected, next - 1, batch);
        }
    }

    fn gap(&mut self, noticed_us: i64, boot: u64, first: u64, last: u64, batch: &mut Batch) {
        // Both come from 32-bit numbers.
        let narrow = |number: u64| u32::try_from(number).unwrap_or(u32::MAX);
        let gap =
            Gap { controller: Arc::clone(&self.name), boot, first: narrow(first), last: narrow(last), noticed_us };
        self.tally.lost += gap.count();
        self.gaps_unsaid += gap.count();
        if self.gaps_said.is_none_or(|at| at.elapsed() >= GAPS_EVERY) {
            warn!(
                controller = %self.name, boot, first, last,
                "{} records never came; their numbers are written down as a gap", self.gaps_unsaid
            );
            self.gaps_said = Some(Instant::now());
            self.gaps_unsaid = 0;
        }
        batch.gaps.push(gap);
    }

    /// Counts what became of a record in the store.
    pub(crate) fn count(&mut self, pending: &Pending, outcome: Outcome) -> Standing {
        let record = &pending.record;
        match outcome {
            Outcome::Stored => self.tally.stored += 1,
            Outcome::FilledGap => {
                self.tally.stored += 1;
                self.tally.lost = self.tally.lost.saturating_sub(1);
            }
            Outcome::Duplicate => {
                self.tally.duplicates += 1;
                return Standing { durable: true, to_judge: false };
            }
            Outcome::Conflict => {
                self.tally.conflicts += 1;
                if !std::mem::replace(&mut self.conflict_said, true) {
                    error!(
                        controller = %self.name, boot = record.boot, number = record.number,
                        "a record of this number with other content is in the store already, and stays; the new one is \
                         refused. Either another controller uses the same boot number on this line: give it a name of \
                         its own in the plant file. Or this one does not count its starts: its board must keep a boot \
                         number that rises"
                    );
                }
                return Standing { durable: false, to_judge: false };
            }
        }
        Standing { durable: true, to_judge: pending.to_judge }
    }

    /// Recomputes a stored record's estimate and puts it before the watch.
    pub(crate) fn judge(&mut self, Pending { record, at_us, .. }: &Pending) -> Judged {
        // A new boot's hello may take a moment longer than the last one's: by so much its first records would go back.
        self.judged_us = self.judged_us.max(*at_us);
        let at = self.judged_us as f64 / 1e6;
        let estimate = estimate(&record.sample, &self.profile);
        let differs = estimate.checksum() != record.estimate_checksum;
        self.tally.mismatches += u64::from(differs);
        let mut changes: Vec<AlarmChange> = self.watch.compare(at, differs).into_iter().collect();
        changes.extend(self.watch.push(at, &record.sample, &estimate));
        self.tally.alarms += changes.iter().filter(|change| change.state.is_active()).count() as u64;
        Judged { at_us: self.judged_us, estimate, changes }
    }

    /// The row of the journal for a change.
    pub(crate) fn journal_row(&self, change: &AlarmChange) -> crate::store::AlarmRow {
        let causes = change.causes.iter().map(|cause| format!("{:.3} {}", cause.weight, cause.cause));
        crate::store::AlarmRow {
            at_us: (change.at * 1e6).round() as i64,
            written_us: now_us(),
            machine: self.machine.clone(),
            kind: change.kind.id().to_owned(),
            state: change.state.id().to_owned(),
            causes: causes.collect::<Vec<_>>().join("\n"),
            text: change.text.clone(),
        }
    }
}

impl Pending {
    /// The record under way.
    pub(crate) const fn record(&self) -> &Record {
        &self.record
    }
}
