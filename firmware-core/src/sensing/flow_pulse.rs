//! Flow from the pulses of a meter: `Q = f/K`, K in pulses per cubic metre, the rate f timed or counted.
//!
//! By period: n edges in the time between the first and the last of them, `f = n·f_clk/Δticks`, resolution one tick,
//! relative `1/Δticks`. By count: edges in a gate, `f = n/gate`, resolution one edge, `1/gate`. For one period against one
//! gate the period is better below [`switch_rate`], `√(f_clk/gate)`. Where every edge is stamped by hardware, the time
//! over all edges of a gate is never worse than either; where stamping costs an interrupt per edge, a board stops
//! stamping above some rate and only the count is left. So a [`PulseFlowMeter`] times below a declared rate and counts
//! above it, and its uncertainty says what that costs.
//!
//! Two reads of a counter or of a timer differ from the truth by less than one unit, either way, small differences being
//! likelier: a triangle of half-width one unit, standard uncertainty 1/√6 of it (JCGM 100, 4.3.9).
//! Without an edge for two expected periods the flow can be no more than one edge in the time waited, and that bound is
//! given; after a declared time it is zero. Not modelled: how K changes with viscosity and near the meter's least flow.

use super::Measured;
use crate::{board::PulseSnapshot, math, quantity::VolumeFlow};

/// 1/√6, the standard uncertainty of a triangular distribution of half-width 1.
const TRIANGLE: f32 = 0.408_248_3;

/// A count or timing this much past the switch changes the way of measuring, and this much below it changes it back: the
/// rate that lies on the switch must not make it flutter.
const SWITCH_BAND: f32 = 0.1;

/// A pulse rate and its standard uncertainty from resolution alone, pulses per second.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseRate {
    /// Pulses per second.
    pub rate: f32,
    /// Step between two rates that can be told apart, pulses per second.
    pub resolution: f32,
}

impl PulseRate {
    /// Standard uncertainty from the resolution, pulses per second.
    #[must_use]
    pub const fn deviation(&self) -> f32 {
        self.resolution * TRIANGLE
    }
}

/// By period: `edges` between two stamps `ticks` apart on a clock of `ticks_per_second`. `None` without edges or time.
#[must_use]
pub fn by_period(edges: u32, ticks: u32, ticks_per_second: u32) -> Option<PulseRate> {
    if edges == 0 || ticks == 0 || ticks_per_second == 0 {
        return None;
    }
    let rate = edges as f32 * (ticks_per_second as f32 / ticks as f32);
    Some(PulseRate { rate, resolution: rate / ticks as f32 })
}

/// By count: `edges` in a gate of `gate` seconds. No edges is a rate of 0. `None` for a gate that is no positive number.
#[must_use]
pub fn by_count(edges: u32, gate: f32) -> Option<PulseRate> {
    (gate.is_finite() && gate > 0.0).then(|| PulseRate { rate: edges as f32 / gate, resolution: 1.0 / gate })
}

/// The rate at which one timed period and one counted gate resolve equally well: √(f_clk/gate), pulses per second.
#[must_use]
pub fn switch_rate(ticks_per_second: u32, gate: f32) -> f32 {
    math::sqrt(ticks_per_second as f32 / gate)
}

/// A flow meter with a pulse output.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseMeterSetup {
    /// K, pulses per cubic metre.
    pub pulses_per_cubic_metre: f32,
    /// Relative standard uncertainty of K, 0 to 1.
    pub relative_deviation: f32,
    /// Ticks per second of the capture timer.
    pub ticks_per_second: u32,
    /// Time over which edges are counted above the switch, s; at most half the time the timer takes to wrap.
    pub gate: f32,
    /// Above this rate edges are counted, not timed; pulses per second. [`switch_rate`] for a board that times single
    /// periods, infinity for hardware that stamps every edge.
    pub timed_up_to: f32,
    /// Largest flow the meter can see, m³/s; a faster rate is electrical noise.
    pub largest_flow: VolumeFlow,
    /// Without an edge for this long there is no flow, s; at most half the time the timer takes to wrap.
    pub stop_after: f32,
}

/// Why a meter cannot be set up so.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum PulseMeterError {
    /// K, the clock or the largest flow is not a positive number.
    NotPositive,
    /// The relative uncertainty is not within 0 to 1.
    DeviationOutOfRange,
    /// The rate up to which edges are timed is negative or no number.
    TimedUpTo,
    /// Gate or stop time is not positive, or longer than half a wrap of the timer.
    TimeOutOfRange,
}

/// Why there is no flow.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum PulseFault {
    /// The first snapshot, or the first edge after a standstill: a rate needs two.
    NoReading,
    /// Edges without time between them, or a flow above the largest the meter can see: noise on the input.
    ImplausiblePulses,
}

/// How a flow was found.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Method {
    /// From the time between edges.
    Period,
    /// From the edges in a gate.
    Count,
    /// No edge for two expected periods: the flow is at most this.
    Bound,
    /// No edge for the declared time: no flow, or less than one edge in that time.
    Stopped,
}

/// A flow and how it was found.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseFlow {
    /// Flow and standard uncertainty, m³/s.
    pub flow: Measured<VolumeFlow>,
    /// How it was found.
    pub method: Method,
    /// Time since the edge or gate it rests on, s.
    pub age: f32,
}

/// The flow meter's memory between steps.
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct PulseFlowMeter {
    setup: PulseMeterSetup,
    /// Gate in ticks.
    gate_ticks: u32,
    /// Snapshot in which the last edge was seen, with its stamp: the next period starts there.
    edge: Option<PulseSnapshot>,
    /// Whether that stamp is one: at first, and while counting, it is the time of the snapshot instead.
    stamped: bool,
    /// Snapshot the present gate began with.
    gate: Option<PulseSnapshot>,
    /// What the last edges or the last gate gave; holds until there are new ones.
    last: Result<(PulseRate, Method), PulseFault>,
    counting: bool,
    still: bool,
}

impl PulseFlowMeter {
    /// A meter that has seen nothing yet.
    ///
    /// # Errors
    /// [`PulseMeterError`].
    pub fn new(setup: PulseMeterSetup) -> Result<Self, PulseMeterError> {
        let positive = |x: f32| x.is_finite() && x > 0.0;
        let largest = setup.largest_flow.cubic_metres_per_second();
        if !positive(setup.pulses_per_cubic_metre) || !positive(largest) || setup.ticks_per_second == 0 {
            return Err(PulseMeterError::NotPositive);
        }
        if !(0.0..=1.0).contains(&setup.relative_deviation) {
            return Err(PulseMeterError::DeviationOutOfRange);
        }
        if setup.timed_up_to.is_nan() || setup.timed_up_to < 0.0 {
            return Err(PulseMeterError::TimedUpTo);
        }
        let half_wrap = (1_u32 << 31) as f32 / setup.ticks_per_second as f32;
        if ![setup.gate, setup.stop_after].iter().all(|&time| positive(time) && time <= half_wrap) {
            return Err(PulseMeterError::TimeOutOfRange);
        }
        // The nearest tick, so that a gate of a whole number of steps does not wait for one more.
        let gate_ticks = (setup.gate * setup.ticks_per_second as f32 + 0.5) as u32;
        Ok(Self {
            setup,
            gate_ticks,
            edge: None,
            stamped: false,
            gate: None,
            last: Err(PulseFault::NoReading),
            counting: false,
            still: false,
        })
    }

    /// Flow at this snapshot. Steps must come more often than half a wrap of the timer.
    ///
    /// # Errors
    /// [`PulseFault`].
    pub fn step(&mut self, now: &PulseSnapshot) -> Result<PulseFlow, PulseFault> {
        let (Some(edge), Some(gate)) = (self.edge, self.gate) else {
            self.edge = Some(PulseSnapshot { last_edge: now.now, ..*now });
            self.gate = Some(*now);
            return Err(PulseFault::NoReading);
        };
        let clock = self.setup.ticks_per_second as f32;
        let edges = now.count.wrapping_sub(edge.count);
        let since_edge = now.now.wrapping_sub(edge.last_edge);
        if edges > 0 {
            // From the snapshots' own times, so that a board that stopped stamping can still be judged.
            let rate = edges as f32 * (clock / now.now.wrapping_sub(edge.now).max(1) as f32);
            let band = if self.counting { 1.0 - SWITCH_BAND } else { 1.0 + SWITCH_BAND };
            self.counting = rate > self.setup.timed_up_to * band;
            let last_edge = if self.counting { now.now } else { now.last_edge };
            self.edge = Some(PulseSnapshot { last_edge, ..*now });
            let stamped = core::mem::replace(&mut self.stamped, !self.counting);
            if core::mem::take(&mut self.still) {
                // The time since the edge before the standstill says nothing about the rate now.
                self.gate = Some(*now);
                return Err(PulseFault::NoReading);
            }
            if !self.counting {
                self.gate = Some(*now);
                if !stamped {
                    return self.held(now.now.wrapping_sub(edge.now) as f32 / clock);
                }
                let span = now.last_edge.wrapping_sub(edge.last_edge);
                return match by_period(edges, span, self.setup.ticks_per_second) {
                    Some(found) => self.found(found, Method::Period),
                    None => self.implausible(),
                };
            }
        }
        if self.counting {
            let gate_ticks = now.now.wrapping_sub(gate.now);
            if gate_ticks >= self.gate_ticks {
                self.gate = Some(*now);
                let counted = now.count.wrapping_sub(gate.count);
                if counted > 0
                    && let Some(found) = by_count(counted, gate_ticks as f32 / clock)
                {
                    return self.found(found, Method::Count);
                }
                // A whole gate without an edge: the flow has fallen far below the switch.
                self.counting = false;
            } else {
                return self.held(gate_ticks as f32 / clock);
            }
        }
        let waited = since_edge as f32 / clock;
        self.without_edge(waited)
    }

    /// No edge in this step, `waited` seconds since the last.
    fn without_edge(&mut self, waited: f32) -> Result<PulseFlow, PulseFault> {
        if self.still || waited > self.setup.stop_after {
            self.still = true;
            self.last = Err(PulseFault::NoReading);
            let least = 1.0 / self.setup.stop_after;
            // Less than one edge in that time, from none to one equally likely: half-width over √3.
            const INVERSE_ROOT_OF_3: f32 = 0.577_350_3;
            let flow = self.flow(0.0, least * INVERSE_ROOT_OF_3);
            return Ok(PulseFlow { flow, method: Method::Stopped, age: self.setup.stop_after });
        }
        let (last, _) = self.last?;
        if waited * last.rate <= 2.0 {
            return self.held(waited);
        }
        let bound = 1.0 / waited;
        Ok(PulseFlow { flow: self.flow(bound, bound), method: Method::Bound, age: waited })
    }

    fn found(&mut self, rate: PulseRate, method: Method) -> Result<PulseFlow, PulseFault> {
        if rate.rate > self.setup.largest_flow.cubic_metres_per_second() * self.setup.pulses_per_cubic_metre {
            return self.implausible();
        }
        self.last = Ok((rate, method));
        self.held(0.0)
    }

    fn implausible(&mut self) -> Result<PulseFlow, PulseFault> {
        self.last = Err(PulseFault::ImplausiblePulses);
        Err(PulseFault::ImplausiblePulses)
    }

    /// What was found last, `age` seconds ago.
    fn held(&self, age: f32) -> Result<PulseFlow, PulseFault> {
        let (rate, method) = self.last?;
        Ok(PulseFlow { flow: self.flow(rate.rate, rate.deviation()), method, age })
    }

    fn flow(&self, rate: f32, deviation: f32) -> Measured<VolumeFlow> {
        let per_pulse = 1.0 / self.setup.pulses_per_cubic_metre;
        let value = rate * per_pulse;
        Measured {
            value: VolumeFlow::from_cubic_metres_per_second(value),
            deviation: math::root_sum_square([deviation * per_pulse, value * self.setup.relative_deviation]),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::board::Direction;

    const SETUP: PulseMeterSetup = PulseMeterSetup {
        pulses_per_cubic_metre: 10_000.0,
        relative_deviation: 0.0,
        ticks_per_second: 1_000_000,
        gate: 1.0,
        timed_up_to: 1_000.0,
        largest_flow: VolumeFlow::from_cubic_metres_per_second(0.5),
        stop_after: 20.0,
    };

    /// A meter whose edges come at a given rate, read every 0.1 s; ticks and counts begin just before they wrap.
    struct Line {
        meter: PulseFlowMeter,
        time: f64,
        angle: f64,
        edge_time: f64,
        /// The board stops stamping edges above this rate.
        stamps_up_to: f64,
    }

    impl Line {
        fn new(setup: PulseMeterSetup) -> Self {
            Self {
                meter: PulseFlowMeter::new(setup).unwrap(),
                time: 0.0,
                angle: 0.3,
                edge_time: 0.0,
                stamps_up_to: f64::INFINITY,
            }
        }

        fn step(&mut self, rate: f64) -> Result<PulseFlow, PulseFault> {
            let before = self.angle.floor();
            self.time += 0.1;
            self.angle += 0.1 * rate;
            let whole = self.angle.floor();
            if whole > before && rate <= self.stamps_up_to {
                self.edge_time = self.time - (self.angle - whole) / rate;
            }
            let ticks = |time: f64| ((time * 1e6) as u64 as u32).wrapping_sub(150_000);
            self.meter.step(&PulseSnapshot {
                count: (whole as u32).wrapping_sub(3),
                last_edge: ticks(self.edge_time),
                now: ticks(self.time),
                direction: Direction::Unknown,
            })
        }

        fn steps(&mut self, rate: f64, count: usize) -> Result<PulseFlow, PulseFault> {
            (0..count).map(|_| self.step(rate)).last().unwrap()
        }
    }

    fn flow(found: Result<PulseFlow, PulseFault>) -> f64 {
        f64::from(found.unwrap().flow.value.cubic_metres_per_second())
    }

    #[test]
    fn timed_below_the_switch_counted_above_it() {
        let mut line = Line::new(SETUP);
        assert_eq!(line.step(37.3), Err(PulseFault::NoReading));
        let slow = line.steps(37.3, 30);
        assert_eq!(slow.unwrap().method, Method::Period);
        assert!((flow(slow) / 37.3e-4 - 1.0).abs() < 1e-4, "{slow:?}");
        let fast = line.steps(2_517.0, 40);
        assert_eq!(fast.unwrap().method, Method::Count);
        assert!((flow(fast) - 0.2517).abs() <= 1e-4, "one pulse in the gate: {fast:?}");
        // Standard uncertainty of one pulse in the gate of 1 s.
        assert!((fast.unwrap().flow.deviation - 1e-4 / 6_f32.sqrt()).abs() < 1e-9);
        let slow = line.steps(37.3, 30);
        assert_eq!(slow.unwrap().method, Method::Period);
        assert!((flow(slow) / 37.3e-4 - 1.0).abs() < 1e-4, "{slow:?}");
    }

    /// The rate that lies on the switch does not make the method flutter, and neither method is off by more than it says.
    #[test]
    fn errors_stay_within_what_the_resolution_says_through_the_switch() {
        let mut line = Line::new(SETUP);
        let _ = (line.steps(500.0, 5), line.steps(1_000.0, 5));
        let mut changes = 0;
        let mut last = Method::Period;
        for k in 0..2_000 {
            // Around the switch, ±4 %, slowly.
            let rate = 1_000.0 + 40.0 * (f64::from(k) * 1e-3).sin();
            let found = line.step(rate).unwrap();
            changes += usize::from(found.method != last);
            last = found.method;
            let off = (f64::from(found.flow.value.cubic_metres_per_second()) * 10_000.0 - rate).abs();
            let allowed = f64::from(found.flow.deviation) * 10_000.0 * 6_f64.sqrt() + 0.1;
            assert!(off <= allowed, "{off} pulses/s, allowed {allowed}");
        }
        assert_eq!(changes, 0);
        assert_eq!(line.steps(1_150.0, 20).unwrap().method, Method::Count);
        assert_eq!(line.steps(1_000.0, 20).unwrap().method, Method::Count, "the band holds the method");
        assert_eq!(line.steps(850.0, 20).unwrap().method, Method::Period);
    }

    #[test]
    fn at_the_switch_one_period_and_one_gate_resolve_equally() {
        for (clock, gate) in [(1_000_000, 1.0), (84_000_000, 0.1), (10_000, 0.5)] {
            let rate = switch_rate(clock, gate);
            let period = rate / (clock as f32 / rate); // one period, one tick
            let count = by_count(1, gate).unwrap().resolution;
            assert!((period / count - 1.0).abs() < 1e-5, "{clock} {gate}");
        }
    }

    #[test]
    fn no_edge_bounds_then_stops() {
        let mut line = Line::new(SETUP);
        let _ = line.steps(2.0, 60);
        let mut methods = std::vec::Vec::new();
        for k in 1..=250 {
            let found = line.step(0.0).unwrap();
            let (value, waited) = (f64::from(found.flow.value.cubic_metres_per_second()), line.time - line.edge_time);
            match found.method {
                Method::Period => assert!(waited <= 1.01 && (value / 2e-4 - 1.0).abs() < 1e-3, "{k}: {found:?}"),
                Method::Bound => {
                    assert!((value * 10_000.0 * waited - 1.0).abs() < 1e-3, "{k}: {found:?}");
                    assert!((f64::from(found.age) - waited).abs() < 1e-3);
                }
                Method::Stopped => assert!(waited > 19.99 && value == 0.0 && found.flow.deviation > 0.0, "{found:?}"),
                Method::Count => panic!("{found:?}"),
            }
            if methods.last() != Some(&found.method) {
                methods.push(found.method);
            }
        }
        assert_eq!(methods, [Method::Period, Method::Bound, Method::Stopped]);
        // The timer wraps twice (2^32 µs = 4295 s) during a long standstill: still no flow.
        for _ in 0..90_000 {
            assert_eq!(line.step(0.0).unwrap().method, Method::Stopped);
        }
        // One edge starts the clock, the next gives a flow.
        let mut found = line.step(2.0);
        while found.is_ok() {
            assert_eq!(found.unwrap().method, Method::Stopped);
            found = line.step(2.0);
        }
        assert_eq!(found, Err(PulseFault::NoReading));
        assert!((flow(line.steps(2.0, 30)) / 2e-4 - 1.0).abs() < 1e-3);
    }

    /// A board that no longer stamps above the switch: its old stamps must not be taken for new ones.
    #[test]
    fn stamps_that_stop_are_not_trusted() {
        let mut line = Line::new(SETUP);
        line.stamps_up_to = 1_000.0;
        let _ = line.steps(500.0, 10);
        let fast = line.steps(2_000.0, 400);
        assert!((flow(fast) - 0.2).abs() <= 1e-4 && fast.unwrap().method == Method::Count, "{fast:?}");
        for k in 0..20 {
            let found = line.step(500.0).unwrap();
            // The first step only takes a stamp and holds what was counted.
            let (value, method) = if k == 0 { (0.2, Method::Count) } else { (0.05, Method::Period) };
            assert!((flow(Ok(found)) - value).abs() <= 1.1e-4 && found.method == method, "{k} {found:?}");
        }
    }

    /// Powered up beside a flowing line, the stamp of the first snapshot may be of any age.
    #[test]
    fn the_first_edge_only_starts_the_clock() {
        let mut meter = PulseFlowMeter::new(SETUP).unwrap();
        let at = |count, last_edge, now| PulseSnapshot { count, last_edge, now, direction: Direction::Unknown };
        assert_eq!(meter.step(&at(0, 0, 5_000_000)), Err(PulseFault::NoReading));
        assert_eq!(meter.step(&at(1, 5_050_000, 5_100_000)), Err(PulseFault::NoReading));
        assert!((flow(meter.step(&at(2, 5_150_000, 5_200_000))) / 10e-4 - 1.0).abs() < 1e-6);
    }

    #[test]
    fn a_counted_flow_that_stops_is_noticed() {
        let mut line = Line::new(SETUP);
        assert_eq!(line.steps(3_000.0, 40).unwrap().method, Method::Count);
        let mut last = Method::Count;
        for _ in 0..230 {
            let found = line.step(0.0).unwrap();
            assert!(found.method != Method::Period);
            last = found.method;
        }
        assert_eq!(last, Method::Stopped);
    }

    #[test]
    fn noise_on_the_input_is_refused() {
        let mut line = Line::new(SETUP);
        let _ = line.steps(100.0, 10);
        assert_eq!(line.steps(9_000.0, 40), Err(PulseFault::ImplausiblePulses));
        let mut meter = PulseFlowMeter::new(SETUP).unwrap();
        let at = |count, last_edge, now| PulseSnapshot { count, last_edge, now, direction: Direction::Unknown };
        assert_eq!(meter.step(&at(0, 50, 60)), Err(PulseFault::NoReading));
        assert_eq!(meter.step(&at(1, 90, 100_060)), Err(PulseFault::NoReading), "one stamp is no period");
        assert_eq!(meter.step(&at(4, 90, 200_060)), Err(PulseFault::ImplausiblePulses), "edges without time");
        assert_eq!(
            meter.step(&at(4, 90, 300_060)),
            Err(PulseFault::ImplausiblePulses),
            "nothing new, nothing else said"
        );
    }

    #[test]
    fn the_factor_adds_its_uncertainty() {
        let mut line = Line::new(PulseMeterSetup { relative_deviation: 0.005, ..SETUP });
        let found = line.steps(100.0, 20).unwrap();
        assert!((found.flow.deviation / found.flow.value.cubic_metres_per_second() - 0.005).abs() < 1e-5);
    }

    #[test]
    fn impossible_settings_are_refused() {
        let with = |setup| PulseFlowMeter::new(setup).map(|_| ());
        for bad in [0.0, -1.0, f32::NAN, f32::INFINITY] {
            assert_eq!(
                with(PulseMeterSetup { pulses_per_cubic_metre: bad, ..SETUP }),
                Err(PulseMeterError::NotPositive)
            );
            let largest_flow = VolumeFlow::from_cubic_metres_per_second(bad);
            assert_eq!(with(PulseMeterSetup { largest_flow, ..SETUP }), Err(PulseMeterError::NotPositive));
            assert_eq!(with(PulseMeterSetup { gate: bad, ..SETUP }), Err(PulseMeterError::TimeOutOfRange));
            assert_eq!(with(PulseMeterSetup { stop_after: bad, ..SETUP }), Err(PulseMeterError::TimeOutOfRange));
        }
        assert_eq!(with(PulseMeterSetup { ticks_per_second: 0, ..SETUP }), Err(PulseMeterError::NotPositive));
        // 84 MHz wraps in 51 s: half of it is the longest time that can be told.
        let fast = PulseMeterSetup { ticks_per_second: 84_000_000, ..SETUP };
        assert_eq!(with(fast), Ok(()));
        assert_eq!(with(PulseMeterSetup { stop_after: 26.0, ..fast }), Err(PulseMeterError::TimeOutOfRange));
        assert_eq!(
            with(PulseMeterSetup { relative_deviation: 1.1, ..SETUP }),
            Err(PulseMeterError::DeviationOutOfRange)
        );
        assert_eq!(with(PulseMeterSetup { timed_up_to: f32::NAN, ..SETUP }), Err(PulseMeterError::TimedUpTo));
        assert_eq!(with(PulseMeterSetup { timed_up_to: f32::INFINITY, ..SETUP }), Ok(()));
        assert_eq!(
            (by_period(0, 5, 5), by_period(5, 0, 5), by_period(5, 5, 0), by_count(1, 0.0)),
            (None, None, None, None)
        );
    }
}
