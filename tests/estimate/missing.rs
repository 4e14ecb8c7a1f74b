//! Why values are missing: every combination of missing sensors, states of the drive, signs, unbounded readings and
//! places off the curve, each with the reason written down, not only the absence of a panic.

use offcurve_core::{
    board::{Direction, RunState},
    conditioning::ConditionedSample,
    estimate::{Estimate, Missing, Source, estimate},
    machine::Profile,
    sensing::{Channel, ChannelFault},
};
use offcurve_tests::{
    fixtures::{self, Shape},
    reference_estimate::{NAMES, listed, values},
};

/// Every run state with every direction.
pub(crate) fn states() -> [(RunState, Direction); 9] {
    let runs = [RunState::Unknown, RunState::Running, RunState::Stopped];
    let directions = [Direction::Unknown, Direction::Forward, Direction::Reverse];
    core::array::from_fn(|k| (runs[k / 3], directions[k % 3]))
}

const RELATIVE: [f64; 5] = [0.001, 0.01, 0.005, 0.005, 0.01];

/// The waterworks pump at 0.9 of its speed and best flow, every sensor well.
fn readings() -> [Option<(f64, f64)>; 5] {
    fixtures::on_curve(&Shape::WATERWORKS, (0.9, 1.0), (1.0, 1.0), 20_000.0, RELATIVE).map(Some)
}

fn at(speed_ratio: f64, relative_flow: f64) -> ConditionedSample {
    fixtures::sample(
        fixtures::on_curve(&Shape::WATERWORKS, (speed_ratio, relative_flow), (1.0, 1.0), 20_000.0, RELATIVE).map(Some),
    )
}

fn with(channel: Channel, value: f64) -> ConditionedSample {
    let mut sample = fixtures::sample(readings());
    *sample.channel_mut(channel) = fixtures::reading(channel, value, 1e-4);
    sample
}

fn without_impeller() -> Profile {
    Shape { impeller: false, ..Shape::WATERWORKS }.profile()
}

/// Reasons in the order of [`NAMES`]; `None`: there is a value.
fn reasons(estimate: &Estimate) -> [Option<Missing>; 11] {
    listed(estimate).map(Result::err)
}

/// Holds reasons against those wanted, by name; estimates not named must have a value.
fn assert_reasons(what: &str, estimate: &Estimate, wanted: &[(&str, Missing)]) {
    for (name, _) in wanted {
        assert!(NAMES.contains(name), "{name} is no estimate");
    }
    for (name, got) in NAMES.iter().zip(reasons(estimate)) {
        let want = wanted.iter().find(|(wanted, _)| wanted == name).map(|(_, missing)| *missing);
        assert_eq!(got, want, "{what}: {name}");
    }
}

const SPEED: Missing = Missing::Channel(Channel::Speed);
const FLOW: Missing = Missing::Channel(Channel::Flow);
const SUCTION: Missing = Missing::Channel(Channel::SuctionPressure);
const DISCHARGE: Missing = Missing::Channel(Channel::DischargePressure);
const TORQUE: Missing = Missing::Channel(Channel::ShaftTorque);

#[test]
fn a_well_instrumented_machine_has_every_value() {
    let found = estimate(&fixtures::sample(readings()), &Shape::WATERWORKS.profile());
    assert_reasons("all sensors", &found, &[]);
    assert_eq!(found.efficiency.map(|value| value.source), Ok(Source::Measured));
}

#[test]
fn each_missing_sensor_takes_what_needs_it() {
    let profile = Shape::WATERWORKS.profile();
    let lacking = |channel: Channel| {
        let mut sample = fixtures::sample(readings());
        *sample.channel_mut(channel) = Err(ChannelFault::FailureLow);
        estimate(&sample, &profile)
    };
    assert_reasons(
        "no speed",
        &lacking(Channel::Speed),
        &[
            ("momentum torque", SPEED),
            ("shaft power", SPEED),
            ("efficiency", SPEED),
            ("relative flow", SPEED),
            ("expected head", SPEED),
            ("expected power", SPEED),
            ("head residual", SPEED),
            ("power residual", SPEED),
        ],
    );
    // Unequal bores: the head needs the flow for its velocity heads.
    assert_reasons(
        "no flow",
        &lacking(Channel::Flow),
        &[
            ("head", FLOW),
            ("hydraulic power", FLOW),
            ("momentum torque", FLOW),
            ("efficiency", FLOW),
            ("relative flow", FLOW),
            ("expected head", FLOW),
            ("expected power", FLOW),
            ("head residual", FLOW),
            ("power residual", FLOW),
        ],
    );
    for (channel, reason) in [(Channel::SuctionPressure, SUCTION), (Channel::DischargePressure, DISCHARGE)] {
        assert_reasons(
            "a gauge",
            &lacking(channel),
            &[("head", reason), ("hydraulic power", reason), ("efficiency", reason), ("head residual", reason)],
        );
    }
    // The momentum model stands in for the torque, but nothing is compared with the curve through it.
    let no_torque = lacking(Channel::ShaftTorque);
    assert_reasons("no torque", &no_torque, &[("power residual", Missing::TorqueNotMeasured)]);
    assert_eq!(no_torque.shaft_torque.map(|value| value.source), Ok(Source::FromMomentum));
    assert_eq!(no_torque.shaft_power.map(|value| value.source), Ok(Source::FromMomentum));
    assert_eq!(no_torque.efficiency.map(|value| value.source), Ok(Source::FromMomentum));
}

#[test]
fn equal_bores_give_a_head_without_flow() {
    let profile = Shape { discharge_bore: Shape::WATERWORKS.suction_bore, ..Shape::WATERWORKS }.profile();
    let mut sample = fixtures::sample(readings());
    sample.flow = Err(ChannelFault::NotFitted);
    let found = reasons(&estimate(&sample, &profile));
    assert_eq!((found[0], found[1]), (None, Some(FLOW)));
}

#[test]
fn without_impeller_and_torque_there_is_no_shaft_power() {
    let mut sample = fixtures::sample(readings());
    sample.shaft_torque = Err(ChannelFault::NotFitted);
    assert_reasons(
        "neither",
        &estimate(&sample, &without_impeller()),
        &[
            ("momentum torque", Missing::NoImpeller),
            ("shaft torque", TORQUE),
            ("shaft power", TORQUE),
            ("efficiency", TORQUE),
            ("power residual", TORQUE),
        ],
    );
}

#[test]
fn a_torque_of_the_drive_is_called_so() {
    let mut profile = Shape::WATERWORKS.profile();
    profile.shaft_torque.from_drive = true;
    let found = estimate(&fixtures::sample(readings()), &profile);
    assert_eq!(found.shaft_torque.map(|value| value.source), Ok(Source::FromDrive));
    assert_eq!(found.power_residual.map(|value| value.source), Ok(Source::FromDrive));
}

/// 2⁵ combinations of sensors × 9 states × impeller known or not × bores equal or not × torque from the drive or not.
#[test]
fn every_combination_of_missing_sensors_has_the_stated_reasons() {
    let mut combinations = 0;
    for missing in 0_u32..32 {
        for (run, direction) in states() {
            for variant in 0_u32..8 {
                let equal_bores = variant & 1 == 1;
                let shape = Shape {
                    impeller: variant & 2 == 2,
                    suction_bore: if equal_bores { 0.1 } else { 0.125 },
                    ..Shape::WATERWORKS
                };
                let mut profile = shape.profile();
                profile.shaft_torque.from_drive = variant & 4 == 4;
                let mut sample = ConditionedSample { run, direction, ..fixtures::sample(readings()) };
                for (place, channel) in Channel::ALL.into_iter().enumerate() {
                    if missing >> place & 1 == 1 {
                        *sample.channel_mut(channel) = Err(ChannelFault::NoReading);
                    }
                }
                let wanted = values(&sample, &profile).map(Result::err);
                assert_eq!(
                    reasons(&estimate(&sample, &profile)),
                    wanted,
                    "sensors missing {missing:05b}, {run:?}, {direction:?}, variant {variant:03b}"
                );
                combinations += 1;
            }
        }
    }
    assert_eq!(combinations, 32 * 9 * 8);
}

/// Everything that needs a running machine, with one reason.
fn needs_speed(reason: Missing) -> [(&'static str, Missing); 8] {
    [
        "momentum torque",
        "shaft power",
        "efficiency",
        "relative flow",
        "expected head",
        "expected power",
        "head residual",
        "power residual",
    ]
    .map(|name| (name, reason))
}

#[test]
fn a_stopped_or_reversed_machine_says_so() {
    let profile = Shape::WATERWORKS.profile();
    let state = |run, direction| estimate(&ConditionedSample { run, direction, ..at(0.9, 1.0) }, &profile);
    let stopped = state(RunState::Stopped, Direction::Forward);
    assert_reasons("stopped", &stopped, &needs_speed(Missing::NotRunning));
    let both = state(RunState::Stopped, Direction::Reverse);
    assert_reasons("stopped, turned backwards", &both, &needs_speed(Missing::NotRunning));
    for run in [RunState::Running, RunState::Unknown] {
        let reverse = state(run, Direction::Reverse);
        assert_reasons("reverse", &reverse, &needs_speed(Missing::ReverseRotation));
        assert_reasons("direction unknown", &state(run, Direction::Unknown), &[]);
    }
    // No run signal: a shaft below 2 % of its reference speed stands still.
    let crawl = |ratio: f64| {
        let sample = with(Channel::Speed, ratio * Shape::WATERWORKS.reference_speed);
        estimate(&ConditionedSample { run: RunState::Unknown, ..sample }, &profile)
    };
    for ratio in [0.0, 0.0199] {
        assert_reasons("standstill", &crawl(ratio), &needs_speed(Missing::NotRunning));
    }
    assert!(crawl(0.0201).shaft_power.is_ok(), "torque and speed are known, so is their product");
}

#[test]
fn outside_the_trusted_speeds_there_is_no_comparison() {
    let profile = Shape::WATERWORKS.profile();
    for ratio in [0.1, 0.1999, 1.2001, 2.0] {
        let found = estimate(&at(ratio, 1.0), &profile);
        let refused =
            ["momentum torque", "relative flow", "expected head", "expected power", "head residual", "power residual"];
        assert_reasons(&format!("ratio {ratio}"), &found, &refused.map(|name| (name, Missing::SpeedOutOfRange)));
    }
    for ratio in [0.2001, 1.1999] {
        assert_reasons(&format!("ratio {ratio}"), &estimate(&at(ratio, 1.0), &profile), &[]);
    }
}

#[test]
fn efficiency_is_undefined_without_flow_head_or_power() {
    let profile = Shape::WATERWORKS.profile();
    for flow in [0.0, -0.0, -0.002] {
        let found = estimate(&with(Channel::Flow, flow), &profile);
        let (reason, outside) = (Missing::FlowNotPositive, Missing::OutsideCurve);
        let mut wanted = vec![("momentum torque", reason), ("efficiency", reason)];
        if flow < 0.0 {
            wanted.extend(["expected head", "expected power", "head residual", "power residual"].map(|n| (n, outside)));
        }
        assert_reasons(&format!("flow {flow}"), &found, &wanted);
        // The law itself has no trouble with the sign: power flows out of the liquid.
        let power = found.hydraulic_power.expect("defined").value.watts();
        assert!(power <= 0.0 && (power < 0.0) == (flow < 0.0), "{power} W at {flow} m³/s");
    }
    let sucking = estimate(&with(Channel::DischargePressure, -50_000.0), &profile);
    assert_reasons("head below zero", &sucking, &[("efficiency", Missing::HeadNotPositive)]);
    assert!(sucking.head.expect("defined").value.metres() < 0.0);
    for torque in [0.0, -5.0] {
        let driven = estimate(&with(Channel::ShaftTorque, torque), &profile);
        assert_reasons("torque not positive", &driven, &[("efficiency", Missing::PowerNotPositive)]);
    }
}

#[test]
fn a_head_of_exactly_zero_has_no_efficiency() {
    // Equal bores, gauges at one level reading the same: head 0, not nearly 0.
    let shape = Shape { suction_bore: 0.1, elevation: 0.0, ..Shape::WATERWORKS };
    let mut sample = fixtures::sample(readings());
    sample.discharge_pressure = sample.suction_pressure;
    let found = estimate(&sample, &shape.profile());
    assert_eq!(found.head.map(|head| head.value.metres()), Ok(0.0));
    assert_eq!(found.efficiency, Err(Missing::HeadNotPositive));
}

#[test]
fn a_reading_that_is_no_number_is_a_missing_reading() {
    let profile = Shape::WATERWORKS.profile();
    for channel in Channel::ALL {
        let mut absent = fixtures::sample(readings());
        *absent.channel_mut(channel) = Err(ChannelFault::ConverterFailed);
        let wanted = estimate(&absent, &profile);
        for value in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
            assert_eq!(estimate(&with(channel, value), &profile), wanted, "{channel:?} {value}");
        }
    }
}

#[test]
fn outside_the_knots_nothing_is_promised() {
    let profile = Shape::WATERWORKS.profile();
    let outside = ["expected head", "expected power", "head residual", "power residual"];
    let beyond = estimate(&at(0.9, 1.501), &profile);
    assert_reasons("beyond the last knot", &beyond, &outside.map(|name| (name, Missing::OutsideCurve)));
    assert_reasons("at the end of the curve", &estimate(&at(0.9, 1.499), &profile), &[]);
    // Below the first knot of a curve that does not start at zero flow; above the onset of recirculation.
    let mut late = profile.clone();
    late.curve = offcurve_core::machine::curve::CurveTable::new(&profile.curve.knots()[5..]).unwrap();
    let first = f64::from(late.curve.knots()[0].flow) / Shape::WATERWORKS.best_flow;
    let before = estimate(&at(0.9, first - 0.001), &late);
    assert_reasons("before the first knot", &before, &outside.map(|name| (name, Missing::OutsideCurve)));
    assert_reasons("at the start of the curve", &estimate(&at(0.9, first + 0.001), &late), &[]);
}

#[test]
fn below_the_onset_of_recirculation_the_model_says_nothing() {
    let profile = Shape::WATERWORKS.profile();
    let below = estimate(&at(0.9, 0.449), &profile);
    assert_reasons("below the onset", &below, &[("momentum torque", Missing::Recirculation)]);
    assert_reasons("above the onset", &estimate(&at(0.9, 0.451), &profile), &[]);
    // With no measured torque either, the reason is the sensor: that is what can be mended.
    let mut no_torque = at(0.9, 0.449);
    no_torque.shaft_torque = Err(ChannelFault::FailureHigh);
    assert_reasons(
        "below the onset, no torque",
        &estimate(&no_torque, &profile),
        &[
            ("momentum torque", Missing::Recirculation),
            ("shaft torque", TORQUE),
            ("shaft power", TORQUE),
            ("efficiency", TORQUE),
            ("power residual", TORQUE),
        ],
    );
}
