//! The test bench: plant, instruments, converter chip and speed pick-up in one virtual time.
//!
//! Time moves only when the controller scans: each converter transaction first advances the plant by the scan
//! interval, then converts what the instruments send at that moment. A run is thus a function of the scenario and of
//! the controller's transactions, however fast or slow the machine is that runs both. Inside, the plant is integrated
//! in sub-steps of at most 20 ms that never straddle an event.
//!
//! Not modelled: conversion takes no time, and all inputs of one transaction are converted at one moment.

use std::sync::{Arc, Mutex};

use embedded_hal::spi::{self, Operation, SpiDevice};
use offcurve_plant::{Plant, PlantError, PulseWheel, Transmitter, Truth};

use crate::converter::{Converter, INPUTS};
use crate::scenario::{Action, Scenario, Sensor};

/// Longest integration step, microseconds.
pub const LONGEST_STEP_US: u64 = 20_000;
/// Clock of the capture unit, 1/s.
pub const TICKS_PER_SECOND: u32 = 1_000_000;
/// Scan interval after start, ms.
pub const DEFAULT_SCAN_INTERVAL_MS: u32 = 1;

/// What the capture unit and the drive's run contact show. Counters wrap, as hardware counters do.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Capture {
    /// Edges since the start, modulo 2³².
    pub count: u32,
    /// Ticks at the last edge, modulo 2³²; 0 before the first edge.
    pub last_edge: u32,
    /// Ticks now, modulo 2³².
    pub now: u32,
    /// Rate of the tick counter, 1/s.
    pub ticks_per_second: u32,
    /// Direction of rotation where the scenario has a second pick-up; the plant only runs forward.
    pub forward: Option<bool>,
    /// The drive's run state.
    pub running: bool,
    /// Controller clock, ms, modulo 2³².
    pub now_ms: u32,
}

/// Clearance on its way from one value to another.
#[derive(Debug, Clone, Copy)]
struct Opening {
    from_m: f64,
    to_m: f64,
    start_us: u64,
    over_us: u64,
}

/// The bench.
#[derive(Debug)]
pub struct Bench {
    scenario: Scenario,
    plant: Plant,
    sensors: [Transmitter; 4],
    converter: Converter,
    wheel: PulseWheel,
    currents: [f64; INPUTS],
    time_us: u64,
    scan_interval_us: u64,
    next_event: usize,
    pattern_step: usize,
    pattern_due_us: Option<u64>,
    opening: Option<Opening>,
}

impl Bench {
    /// A bench at plant time 0, instruments settled.
    ///
    /// # Errors
    /// [`PlantError`] where the plant's settings contradict each other; a scenario read from a file is mostly checked.
    pub fn new(scenario: &Scenario) -> Result<Self, PlantError> {
        let plant = Plant::new(&scenario.plant, scenario.seed)?;
        // Streams below 20 are left to the plant's own unrest; instrument k takes streams 2k and 2k + 1.
        let mut stream = 10;
        let sensors = scenario.sensors.clone().map(|spec| {
            stream += 1;
            Transmitter::new(spec, scenario.seed, stream)
        });
        let mut bench = Self {
            plant,
            sensors,
            converter: Converter::new(),
            wheel: PulseWheel::new(scenario.pulses_per_revolution, scenario.seed, 20),
            currents: [0.0; INPUTS],
            time_us: 0,
            scan_interval_us: u64::from(DEFAULT_SCAN_INTERVAL_MS) * 1000,
            next_event: 0,
            pattern_step: 0,
            pattern_due_us: (!scenario.pattern.is_empty()).then_some(0),
            opening: None,
            scenario: scenario.clone(),
        };
        bench.sense(0.0);
        Ok(bench)
    }

    /// Time that each transaction of the converter stands for, ms; 0 counts as 1.
    pub fn set_scan_interval(&mut self, ms: u32) {
        self.scan_interval_us = u64::from(ms.max(1)) * 1000;
    }

    /// One selection of the converter chip: advances virtual time by the scan interval, then exchanges the bytes
    /// as [`Converter::transfer`] does.
    pub fn scan_spi(&mut self, mosi: &[u8], miso: &mut [u8]) {
        self.advance(self.scan_interval_us);
        self.converter.transfer(mosi, miso, &self.currents);
    }

    /// What the capture unit shows now; time does not move.
    pub fn capture(&mut self) -> Capture {
        let last_edge_us = self.wheel.last_edge_s().map_or(0, |seconds| (seconds * 1e6) as u64);
        // The three casts keep the low 32 bits: that is the wrapping the field documentation promises.
        Capture {
            count: self.wheel.count() as u32,
            last_edge: last_edge_us.min(self.time_us) as u32,
            now: self.time_us as u32,
            ticks_per_second: TICKS_PER_SECOND,
            forward: self.scenario.direction_input.then_some(true),
            running: self.plant.truth().running,
            now_ms: (self.time_us / 1000) as u32,
        }
    }

    /// The plant as it really is.
    pub fn truth(&self) -> Truth {
        self.plant.truth()
    }

    /// Loop currents at the converter's inputs, mA.
    pub fn currents(&self) -> [f64; INPUTS] {
        self.currents
    }

    /// The instruments in the order of [`Sensor::ALL`].
    pub fn sensors(&self) -> &[Transmitter; 4] {
        &self.sensors
    }

    /// The scenario that is being run.
    pub fn scenario(&self) -> &Scenario {
        &self.scenario
    }

    /// Plant time, s.
    pub fn time_s(&self) -> f64 {
        self.time_us as f64 * 1e-6
    }

    /// Whether the scenario's duration is over; never for one without.
    pub fn finished(&self) -> bool {
        self.scenario.duration_us.is_some_and(|duration| self.time_us >= duration)
    }

    /// Advances plant time by `us` microseconds without a conversion.
    pub fn advance(&mut self, us: u64) {
        let end = self.time_us.saturating_add(us);
        while self.time_us < end {
            self.apply_due();
            let next_event = self.scenario.events.get(self.next_event).map_or(u64::MAX, |event| event.at_us);
            let stop =
                end.min(self.time_us + LONGEST_STEP_US).min(next_event).min(self.pattern_due_us.unwrap_or(u64::MAX));
            let dt = (stop - self.time_us) as f64 * 1e-6;
            self.time_us = stop;
            self.move_opening();
            self.plant.step(dt);
            self.sense(dt);
        }
        self.apply_due();
    }

    /// Steps the instruments to the present.
    fn sense(&mut self, dt: f64) {
        let truth = self.plant.truth();
        let time_s = self.time_s();
        for (sensor, instrument) in Sensor::ALL.into_iter().zip(&mut self.sensors) {
            let quantity = match sensor {
                Sensor::Flow => truth.flow_m3s,
                Sensor::Suction => truth.suction_pa_gauge,
                Sensor::Discharge => truth.discharge_pa_gauge,
                Sensor::Torque => truth.shaft_torque_nm,
            };
            self.currents[sensor.input()] = instrument.step(quantity, dt, time_s);
        }
        self.wheel.step(truth.revolutions, dt, time_s);
    }

    /// Takes up every event and pattern step that is due.
    fn apply_due(&mut self) {
        while let (Some(due), Some(step)) = (self.pattern_due_us, self.scenario.pattern.get(self.pattern_step)) {
            if due > self.time_us {
                break;
            }
            self.plant.set_speed(step.speed_rpm);
            if let Some(valve) = step.valve {
                self.plant.set_valve(valve);
            }
            self.pattern_due_us = Some(due + step.for_us);
            self.pattern_step = (self.pattern_step + 1) % self.scenario.pattern.len();
        }
        while let Some(event) = self.scenario.events.get(self.next_event).filter(|event| event.at_us <= self.time_us) {
            self.next_event += 1;
            match event.action {
                Action::Speed(rpm) => self.plant.set_speed(rpm),
                Action::Valve(opening) => self.plant.set_valve(opening),
                Action::SuctionLevel(level) => self.plant.set_suction_level(level),
                Action::Run(run) => self.plant.set_run(run),
                Action::RingClearance { to_m, over_us } => {
                    let from_m = self.plant.truth().ring_clearance_m;
                    self.opening = Some(Opening { from_m, to_m, start_us: event.at_us, over_us });
                }
                Action::Sensor(sensor, fault) => {
                    if let Some(instrument) = self.sensors.get_mut(sensor.input()) {
                        instrument.set_fault(fault);
                    }
                }
                Action::Converter(fault) => self.converter.set_fault(fault),
            }
        }
    }

    fn move_opening(&mut self) {
        let Some(opening) = self.opening else { return };
        let gone = self.time_us - opening.start_us;
        if gone >= opening.over_us {
            self.plant.set_ring_clearance(opening.to_m);
            self.opening = None;
        } else {
            let share = gone as f64 / opening.over_us as f64;
            self.plant.set_ring_clearance(opening.from_m + share * (opening.to_m - opening.from_m));
        }
    }
}

/// The converter's SPI port on a shared bench, for a controller built for this computer.
///
/// One SPI transaction is one selection of the chip, whatever its operations; it moves virtual time by one scan
/// interval. A transaction without a byte does not select the chip and moves nothing. `DelayNs` passes no plant time.
#[derive(Debug, Clone)]
pub struct BenchSpi(Arc<Mutex<Bench>>);

impl BenchSpi {
    /// A port on this bench.
    pub fn new(bench: Arc<Mutex<Bench>>) -> Self {
        Self(bench)
    }
}

/// The bench behind a port cannot be used any more: another holder panicked while it had the bench.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("the bench was abandoned in the middle of an operation")]
pub struct BenchGone;

impl spi::Error for BenchGone {
    fn kind(&self) -> spi::ErrorKind {
        spi::ErrorKind::Other
    }
}

impl spi::ErrorType for BenchSpi {
    type Error = BenchGone;
}

impl SpiDevice<u8> for BenchSpi {
    fn transaction(&mut self, operations: &mut [Operation<'_, u8>]) -> Result<(), BenchGone> {
        // The chip sees one unbroken run of clocks, so frames may span operations: join, exchange, share out.
        let mut mosi = Vec::new();
        for operation in operations.iter() {
            match operation {
                Operation::Read(buffer) => mosi.resize(mosi.len() + buffer.len(), 0),
                Operation::Write(bytes) => mosi.extend_from_slice(bytes),
                Operation::TransferInPlace(buffer) => mosi.extend_from_slice(buffer),
                Operation::Transfer(answer, bytes) => {
                    let start = mosi.len();
                    mosi.extend_from_slice(bytes);
                    mosi.resize(start + answer.len().max(bytes.len()), 0);
                }
                Operation::DelayNs(_) => {}
            }
        }
        if mosi.is_empty() {
            return Ok(());
        }
        let mut miso = vec![0; mosi.len()];
        self.0.lock().map_err(|_| BenchGone)?.scan_spi(&mosi, &mut miso);
        let mut rest = miso.as_slice();
        for operation in operations.iter_mut() {
            let (clocked, target): (usize, &mut [u8]) = match operation {
                Operation::Read(buffer) | Operation::TransferInPlace(buffer) => (buffer.len(), buffer),
                Operation::Write(bytes) => (bytes.len(), &mut []),
                Operation::Transfer(answer, bytes) => (answer.len().max(bytes.len()), answer),
                Operation::DelayNs(_) => (0, &mut []),
            };
            let (mine, others) = rest.split_at(clocked);
            target.copy_from_slice(&mine[..target.len()]);
            rest = others;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests;
