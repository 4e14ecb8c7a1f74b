//! The watch on made-up samples: a machine exactly on its curve, then off it in known ways.

use super::*;
use offcurve_core::{
    board::{Direction, RunState},
    deviation::Deviation as Coded,
    estimate::estimate,
    head::Taps,
    machine::{
        CurveTable,
        curve::Knot,
        design,
        profile::{ChannelSetup, Limits, Schedule, Source},
    },
    quantity::VolumeFlow,
    sensing::ChannelValue,
};

const REFERENCE_SPEED: f32 = 155.0;
const BEST_FLOW: f32 = 0.022;

/// A falling head and a rising power: 40 m shut-off, 31 m and 9 kW at best efficiency.
fn profile() -> Profile {
    let flow = [0.0, 0.006, 0.012, 0.018, 0.022, 0.027, 0.032];
    let head = flow.map(|q: f64| 40.0 - 9.0 * (q / 0.022).powi(2));
    let power = flow.map(|q: f64| 4000.0 + 5000.0 * (q / 0.022));
    let (head_slopes, power_slopes) = (design::monotone_slopes(&flow, &head), design::monotone_slopes(&flow, &power));
    let knots: Vec<Knot> = (0..flow.len())
        .map(|k| Knot {
            flow: flow[k] as f32,
            head: head[k] as f32,
            head_slope: head_slopes[k] as f32,
            power: power[k] as f32,
            power_slope: power_slopes[k] as f32,
        })
        .collect();
    let fitted = ChannelSetup {
        source: Source::Loop { input: 0, low: 0.0, high: 1.0 },
        deviation: 0.0,
        relative_deviation: 0.0,
        from_drive: false,
    };
    Profile {
        machine: 1,
        gravity: 9.81,
        density: 998.2,
        density_deviation: 1.0,
        taps: Taps { velocity_head: 0.0, elevation: 0.0 },
        reference_speed: REFERENCE_SPEED,
        reference_density: 998.2,
        best_efficiency_flow: BEST_FLOW,
        head_curve_deviation: 0.01,
        power_curve_deviation: 0.01,
        curve: CurveTable::new(&knots).unwrap(),
        impeller: None,
        speed: ChannelSetup { source: Source::Pulses { per_revolution: 60 }, ..fitted },
        flow: fitted,
        suction_pressure: fitted,
        discharge_pressure: fitted,
        shaft_torque: fitted,
        limits: Limits::default(),
        schedule: Schedule { scan_ms: 1, scans_per_step: 100, steps_per_record: 10 },
    }
}

/// What the machine does at one instant.
#[derive(Clone, Copy)]
struct Running {
    ratio: f32,
    /// Flow that is delivered, of the best flow at this speed.
    place: f32,
    /// Extra flow through the wheel, of the best flow at this speed.
    leakage: f32,
    head_factor: f32,
    power_factor: f32,
    flow_reads: f32,
}

const HEALTHY: Running =
    Running { ratio: 0.95, place: 0.9, leakage: 0.0, head_factor: 1.0, power_factor: 1.0, flow_reads: 1.0 };

fn sample(profile: &Profile, running: Running) -> ConditionedSample {
    let Running { ratio, place, leakage, head_factor, power_factor, flow_reads } = running;
    let through = VolumeFlow::from_cubic_metres_per_second(BEST_FLOW * (place + leakage));
    let point = profile.curve.at(through).unwrap();
    let head = point.head.metres() * ratio * ratio * head_factor;
    let power = point.power.watts() * ratio.powi(3) * power_factor;
    let speed = ratio * REFERENCE_SPEED;
    let value = |value: f32, deviation: f32, channel: Channel| {
        Ok(ChannelValue {
            value,
            deviation: Coded::at_least(deviation, channel.deviation_base()),
            saturated: false,
            age: 0,
        })
    };
    ConditionedSample {
        speed: value(speed, 0.05, Channel::Speed),
        flow: value(BEST_FLOW * place * ratio * flow_reads, 1e-4, Channel::Flow),
        suction_pressure: value(0.0, 500.0, Channel::SuctionPressure),
        discharge_pressure: value(998.2 * 9.81 * head, 1500.0, Channel::DischargePressure),
        shaft_torque: value(power / speed, 0.4, Channel::ShaftTorque),
        run: RunState::Running,
        direction: Direction::Unknown,
    }
}

/// Runs for `seconds` at one sample a second from `*at`; changes of alarms with their times.
fn run(watch: &mut Watch, at: &mut f64, seconds: u32, running: impl Fn(f64) -> Running) -> Vec<AlarmChange> {
    let profile = profile();
    let mut changes = Vec::new();
    for _ in 0..seconds {
        let sample = sample(&profile, running(*at));
        changes.extend(watch.push(*at, &sample, &estimate(&sample, &profile)));
        *at += 1.0;
    }
    changes
}

fn first_cause(change: &AlarmChange) -> &str {
    change.causes.first().map_or("", |cause| cause.cause)
}

fn alarm_for(running: Running) -> AlarmChange {
    let mut watch = Watch::new(&profile(), WatchSettings::default());
    let mut at = 990.0; // what changes then changes at the start of a block, so that no block holds some of both
    assert_eq!(run(&mut watch, &mut at, 600, |_| HEALTHY), []);
    let changes = run(&mut watch, &mut at, 600, |_| running);
    assert_eq!(changes.len(), 1, "{changes:?}");
    assert_eq!(changes[0].kind, AlarmKind::OffCurve);
    assert_eq!(changes[0].state, AlarmState::Unacknowledged);
    assert!((1.0 - changes[0].causes.iter().map(|cause| cause.weight).sum::<f64>()).abs() < 1e-9);
    changes.into_iter().next().unwrap()
}

#[test]
fn a_healthy_machine_at_many_speeds_and_flows_is_quiet_and_judged() {
    let mut watch = Watch::new(&profile(), WatchSettings::default());
    let mut at = 0.0;
    let slow_day = |at: f64| {
        let phase = (at / 1800.0) as f32;
        Running { ratio: 0.85 + 0.12 * phase.sin(), place: 0.8 + 0.3 * (1.7 * phase).cos(), ..HEALTHY }
    };
    assert_eq!(run(&mut watch, &mut at, 4 * 3600, slow_day), []);
    let (judged, closed) = watch.judged();
    assert!(judged as f64 > 0.9 * closed as f64 && closed > 470, "{judged} of {closed} blocks judged");
}

#[test]
fn ring_wear_alarms_after_the_delay_names_its_cause_and_clears_after_repair() {
    let mut watch = Watch::new(&profile(), WatchSettings::default());
    let mut at = 0.0;
    run(&mut watch, &mut at, 900, |_| HEALTHY);
    let worn = Running { leakage: 0.2, ..HEALTHY };
    let raised = run(&mut watch, &mut at, 600, |_| worn);
    assert_eq!(raised.len(), 1);
    let delay = raised[0].at - 900.0;
    assert!((120.0..=180.0).contains(&delay), "raised {delay} s after the wear");
    assert!(first_cause(&raised[0]).starts_with("worn wear rings"), "{:?}", raised[0].causes);
    for part in ["below the curve", "rev/min", "m3/h", "more than the same work needs", "clearance", "lock out"] {
        assert!(raised[0].text.contains(part), "no {part:?} in: {}", raised[0].text);
    }
    assert_eq!(watch.active(), [AlarmKind::OffCurve]);
    let cleared = run(&mut watch, &mut at, 900, |_| HEALTHY);
    assert_eq!(cleared.len(), 1);
    assert_eq!(cleared[0].state, AlarmState::ReturnedUnacknowledged);
    let delay = cleared[0].at - 1500.0;
    assert!((300.0..=360.0).contains(&delay), "cleared {delay} s after the repair");
    assert_eq!(watch.active(), []);
}

#[test]
fn each_direction_gets_its_own_cause() {
    let cases: [(Running, &str); 6] = [
        (Running { leakage: 0.25, ..HEALTHY }, "worn wear rings"),
        (Running { head_factor: 0.88, power_factor: 0.88 + 0.12 * 0.33, ..HEALTHY }, "impeller worn"),
        (Running { head_factor: 0.9, ..HEALTHY }, "a pressure gauge is off (discharge reads low"),
        (Running { head_factor: 1.1, ..HEALTHY }, "a pressure gauge is off (discharge reads high"),
        (Running { power_factor: 1.15, ..HEALTHY }, "more drag"),
        (Running { flow_reads: 1.25, ..HEALTHY }, "the flow meter reads high"),
    ];
    for (running, start) in cases {
        let alarm = alarm_for(running);
        assert!(first_cause(&alarm).starts_with(start), "wanted {start:?}, got {:?}", alarm.causes);
    }
}

#[test]
fn an_odd_deviation_is_not_blamed_on_anything() {
    let alarm = alarm_for(Running { head_factor: 1.3, power_factor: 1.3, ..HEALTHY });
    assert_eq!(first_cause(&alarm), causes::NONE_OF_THESE, "{:?}", alarm.causes);
}

#[test]
fn a_deviation_while_everything_moves_is_not_judged() {
    let mut watch = Watch::new(&profile(), WatchSettings::default());
    let mut at = 0.0;
    // 0.5 % of best flow a second for a minute, back again: between two steady blocks of nothing wrong.
    let hunting = |at: f64| {
        let saw = ((at / 60.0) % 2.0 - 1.0).abs() as f32;
        Running { place: 0.8 + 0.3 * saw, head_factor: 0.9, ..HEALTHY }
    };
    assert_eq!(run(&mut watch, &mut at, 3600, hunting), []);
    assert_eq!(watch.judged().0, 0);
}

#[test]
fn a_failed_sensor_alarms_and_returns() {
    let profile = profile();
    let mut watch = Watch::new(&profile, WatchSettings::default());
    let mut changes = Vec::new();
    for second in 0..120 {
        let mut sample = sample(&profile, HEALTHY);
        if (20..60).contains(&second) {
            sample.flow = Err(ChannelFault::FailureLow);
        }
        changes.extend(watch.push(f64::from(second), &sample, &estimate(&sample, &profile)));
    }
    let seen: Vec<_> = changes.iter().map(|change| (change.at, change.kind, change.state)).collect();
    let kind = AlarmKind::SensorFailed(Channel::Flow);
    assert_eq!(seen, [(30.0, kind, AlarmState::Unacknowledged), (70.0, kind, AlarmState::ReturnedUnacknowledged)]);
    assert!(changes[0].text.contains("loop open"), "{}", changes[0].text);
}

#[test]
fn a_sensor_that_is_not_fitted_never_alarms() {
    let mut profile = profile();
    profile.shaft_torque.source = Source::NotFitted;
    let mut watch = Watch::new(&profile, WatchSettings::default());
    for second in 0..600 {
        let mut sample = sample(&profile, Running { leakage: 0.3, ..HEALTHY });
        sample.shaft_torque = Err(ChannelFault::NotFitted);
        for change in watch.push(f64::from(second), &sample, &estimate(&sample, &profile)) {
            assert_eq!(change.kind, AlarmKind::OffCurve);
            assert_eq!(first_cause(&change), causes::HEAD_ALONE, "without a torque no cause is named");
        }
    }
    assert_eq!(watch.active(), [AlarmKind::OffCurve]);
}

#[test]
fn different_estimates_alarm_until_a_hundred_are_alike() {
    let mut watch = Watch::new(&profile(), WatchSettings::default());
    assert_eq!(watch.compare(0.0, false), None);
    let raised = watch.compare(1.0, true).unwrap();
    assert_eq!((raised.kind, raised.state), (AlarmKind::EstimateMismatch, AlarmState::Unacknowledged));
    for second in 2..101 {
        assert_eq!(watch.compare(f64::from(second), false), None);
    }
    assert_eq!(watch.compare(101.0, false).unwrap().state, AlarmState::ReturnedUnacknowledged);
}

#[test]
fn a_restored_alarm_stands_until_the_plant_is_back() {
    let mut watch = Watch::new(&profile(), WatchSettings::default());
    watch.restore(AlarmKind::OffCurve, AlarmState::Unacknowledged);
    assert_eq!(watch.active(), [AlarmKind::OffCurve]);
    let mut at = 0.0;
    let worn = Running { leakage: 0.2, ..HEALTHY };
    assert_eq!(run(&mut watch, &mut at, 900, |_| worn), [], "no second alarm for the same thing");
    let changes = run(&mut watch, &mut at, 900, |_| HEALTHY);
    assert_eq!(changes.len(), 1);
    assert_eq!(changes[0].state, AlarmState::ReturnedUnacknowledged);
}

/// A machine whose head cannot be compared (no suction gauge) alarms by its power; after a restart only power can tell
/// that it is back.
#[test]
fn a_restored_alarm_of_a_machine_without_a_head_ends_by_its_power() {
    let mut profile = profile();
    profile.suction_pressure.source = Source::NotFitted;
    let run = |watch: &mut Watch, at: &mut f64, seconds: u32, running: Running| {
        let mut changes = Vec::new();
        for _ in 0..seconds {
            let mut sample = sample(&profile, running);
            sample.suction_pressure = Err(ChannelFault::NotFitted);
            changes.extend(watch.push(*at, &sample, &estimate(&sample, &profile)));
            *at += 1.0;
        }
        changes
    };
    let mut watch = Watch::new(&profile, WatchSettings::default());
    watch.restore(AlarmKind::OffCurve, AlarmState::Unacknowledged);
    let mut at = 0.0;
    let dragging = Running { power_factor: 1.15, ..HEALTHY };
    assert_eq!(run(&mut watch, &mut at, 900, dragging), [], "no second alarm for the same thing");
    let changes = run(&mut watch, &mut at, 900, HEALTHY);
    assert_eq!(changes.len(), 1, "it must not stand for ever");
    assert_eq!((changes[0].kind, changes[0].state), (AlarmKind::OffCurve, AlarmState::ReturnedUnacknowledged));
    assert_eq!(watch.active(), []);
}

/// The remedy for a sensor that failed may be to do without it.
#[test]
fn the_alarm_of_a_sensor_that_was_taken_off_ends() {
    let profile = profile();
    let mut watch = Watch::new(&profile, WatchSettings::default());
    let kind = AlarmKind::SensorFailed(Channel::ShaftTorque);
    watch.restore(kind, AlarmState::Unacknowledged);
    let mut changes = Vec::new();
    for second in 0..30 {
        let mut sample = sample(&profile, HEALTHY);
        sample.shaft_torque = Err(ChannelFault::NotFitted);
        changes.extend(watch.push(f64::from(second), &sample, &estimate(&sample, &profile)));
    }
    assert_eq!(watch.active(), []);
    assert_eq!((changes.len(), changes[0].kind, changes[0].at), (1, kind, 10.0));
    assert_eq!(changes[0].text, "The shaft torque sensor is no longer fitted.");
}

/// Every number of the text against the numbers put in: a pump that gives 10 % less head and takes 15 % more power.
#[test]
fn the_numbers_of_the_text_are_those_of_the_machine() {
    let alarm = alarm_for(Running { head_factor: 0.9, power_factor: 1.15, ..HEALTHY });
    let number = |before: &str| -> f64 {
        let (_, rest) = alarm.text.split_once(before).unwrap_or_else(|| panic!("no {before:?} in: {}", alarm.text));
        let digits = rest.split(|c: char| !(c.is_ascii_digit() || c == '.')).next().unwrap_or_default();
        digits.parse().unwrap_or_else(|_| panic!("no number after {before:?} in: {}", alarm.text))
    };
    assert!((number("Head is ") - 10.0).abs() < 0.11, "{}", alarm.text);
    assert!((number("shaft power ") - 15.0).abs() < 0.11, "{}", alarm.text);

    // By hand, in f64: what the curve promises at the measured flow, and what the machine takes.
    let profile = profile();
    let point = profile.curve.at(VolumeFlow::from_cubic_metres_per_second(BEST_FLOW * HEALTHY.place)).unwrap();
    let (ratio, flow) = (f64::from(HEALTHY.ratio), f64::from(BEST_FLOW * HEALTHY.place * HEALTHY.ratio));
    let promised_power = f64::from(point.power.watts()) * ratio.powi(3);
    let promised_head = f64::from(point.head.metres()) * ratio * ratio;
    let weight = f64::from(profile.density * profile.gravity);
    let promised = weight * flow * promised_head / promised_power;
    let efficiency = promised * 0.9 / 1.15;
    // The same hydraulic work at the promised efficiency would take 90 % of the promised power.
    let extra = (1.15 - 0.9) * promised_power / 1000.0;
    assert!((number("Efficiency ") - 100.0 * efficiency).abs() < 1.0, "{efficiency} in: {}", alarm.text);
    assert!((number("the curve promises ") - 100.0 * promised).abs() < 1.0, "{promised} in: {}", alarm.text);
    assert!((number("about ") - extra).abs() < 0.06, "{extra} kW in: {}", alarm.text);
    let speed = ratio * f64::from(REFERENCE_SPEED) * 30.0 / std::f64::consts::PI;
    assert!((number(" at ") - speed).abs() < 1.0, "{speed} rev/min in: {}", alarm.text);
    assert!((number(" rev/min and ") - 3600.0 * flow).abs() < 1.0, "{} m3/h in: {}", 3600.0 * flow, alarm.text);
    assert!(!alarm.text.contains(" to "), "one speed and one flow are no range: {}", alarm.text);
}

/// An expanded uncertainty is twice the standard one, which the estimates of a steady sample carry.
#[test]
fn the_uncertainty_of_the_text_is_that_of_ninety_five_per_cent() {
    let running = Running { head_factor: 0.9, ..HEALTHY };
    let alarm = alarm_for(running);
    let profile = profile();
    let found = estimate(&sample(&profile, running), &profile);
    let (residual, expected) = (found.head_residual.unwrap(), found.expected_head.unwrap());
    let expanded = 200.0 * residual.deviation.metres() / expected.value.metres();
    let wanted = format!("Head is 10.0 % (±{expanded:.1} %) below the curve");
    assert!(alarm.text.starts_with(&wanted), "{wanted:?} wanted: {}", alarm.text);
}
