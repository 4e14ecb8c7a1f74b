//! Scenario files: what is read, and that each refusal names file, key, what was found and what is allowed.

use super::*;

fn refusal(text: &str) -> String {
    Scenario::parse(text, "plant.toml").expect_err(text).to_string()
}

/// A file with one event of these lines.
fn event(lines: &str) -> String {
    format!("seed = 1\n[[event]]\nat = \"1 min\"\n{lines}\n")
}

#[test]
fn the_scenarios_of_the_rig_are_sound() {
    for (name, _) in BUILT_IN {
        let scenario = Scenario::built_in(name).unwrap();
        assert_eq!(scenario.duration_us, None, "{name} must run for ever");
        assert_eq!(scenario.pattern.iter().map(|step| step.for_us).sum::<u64>(), 12 * 3_600_000_000);
        let minutes = |step: &Step| step.for_us / 60_000_000;
        assert!(scenario.pattern.iter().all(|step| (20..=40).contains(&minutes(step))));
        assert!(scenario.pattern.iter().all(|step| (1036.0..=1480.0).contains(&step.speed_rpm)));
        assert_eq!(scenario.pulses_per_revolution, 60);
        let ranges = scenario.sensors.clone().map(|spec| (spec.lo, spec.hi));
        assert_eq!(ranges, [(0.0, 160.0 / 3600.0), (-1e5, 1.5e5), (0.0, 6e5), (0.0, 120.0)]);
    }
    assert!(Scenario::built_in("waterworks-healthy").unwrap().events.is_empty());
    let worn = Scenario::built_in("waterworks-wear").unwrap().events;
    let action = Action::RingClearance { to_m: 0.001, over_us: 180_000_000 };
    assert_eq!(worn, [Event { at_us: 1_200_000_000, action }]);
}

#[test]
fn every_key_reaches_its_place() {
    let text = r#"
        title = "all"
        seed = 9
        duration = "2 h"
        [plant]
        density = "998 kg/m3"
        speed = "1200 rpm"
        max_speed = "1500 rpm"
        valve = "90 %"
        run = false
        wear_ring_clearance = "0.3 mm"
        static_lift = "10 m"
        rated_flow = "20 l/s"
        pipe_loss = "11 m"
        valve_loss = "7 m"
        suction_level = "3 m"
        level_swing = "20 cm"
        level_period = "6 h"
        demand_noise = "5 %"
        demand_correlation = "35 s"
        level_noise = "4 cm"
        level_correlation = "25 s"
        [sensors.flow]
        range = ["0 l/s", "40 l/s"]
        lag = "2 s"
        noise_of_reading = "1 %"
        noise_of_span = "0.3 %"
        ripple_of_span = "0 %"
        [pulses]
        per_revolution = 1
        direction = true
        [[pattern]]
        for = "10 min"
        speed = "900 rpm"
        valve = "50 %"
        [[event]]
        at = "2 min"
        suction_level = "1 m"
        [[event]]
        at = "1 min"
        run = true
        [[event]]
        at = "1 min"
        speed = "1000 rpm"
        [[event]]
        at = "3 min"
        sensor = "torque"
        fault = "gain"
        amount = "-5 %"
        [[event]]
        at = "4 min"
        sensor = "suction"
        fault = "offset"
        amount = "-20 mbar"
        [[event]]
        at = "5 min"
        converter = "bit 11 low"
        [[event]]
        at = "6 min"
        valve = "10 %"
    "#;
    let scenario = Scenario::parse(text, "all.toml").unwrap();
    let plant = &scenario.plant;
    let system = &plant.system;
    assert_eq!((scenario.title.as_str(), scenario.seed, scenario.duration_us), ("all", 9, Some(7_200_000_000)));
    assert_eq!((plant.density, plant.speed_rpm, plant.drive.max_speed_rpm), (998.0, 1200.0, 1500.0));
    assert_eq!((plant.valve_opening, plant.run, plant.pump.ring_clearance_m), (0.9, false, 0.3e-3));
    assert_eq!(
        (system.static_lift_m, system.rated_flow_m3s, system.pipe_loss_m, system.valve_loss_m),
        (10.0, 0.02, 11.0, 7.0)
    );
    assert_eq!((system.suction_level_m, system.level_swing_m, system.level_period_s), (3.0, 0.2, 21_600.0));
    assert_eq!((system.demand_noise, system.demand_correlation_s), (0.05, 35.0));
    assert_eq!((system.level_noise_m, system.level_correlation_s), (0.04, 25.0));
    let flow = &scenario.sensors[0];
    assert_eq!((flow.lo, flow.hi, flow.lag_s, flow.ripple_of_span), (0.0, 0.04, 2.0, 0.0));
    assert_eq!((flow.noise_of_reading, flow.noise_of_span), (0.01, 0.003));
    assert_eq!((scenario.pulses_per_revolution, scenario.direction_input), (1, true));
    assert_eq!(scenario.pattern, [Step { for_us: 600_000_000, speed_rpm: 900.0, valve: Some(0.5) }]);
    let minute = 60_000_000;
    let expected = [
        (1, Action::Run(true)), // in order of time, of one moment in order of the file
        (1, Action::Speed(1000.0)),
        (2, Action::SuctionLevel(1.0)),
        (3, Action::Sensor(Sensor::Torque, SensorFault::Gain(0.95))),
        (4, Action::Sensor(Sensor::Suction, SensorFault::Offset(-2000.0))),
        (5, Action::Converter(ConverterFault::StuckBit { bit: 11, high: false })),
        (6, Action::Valve(0.1)),
    ];
    assert_eq!(scenario.events, expected.map(|(at, action)| Event { at_us: at * minute, action }));
}

#[test]
fn a_refusal_names_key_finding_and_allowance() {
    for (text, expected) in [
        ("seed = -1".to_owned(), "plant.toml: seed is -1, allowed is a whole number from 0 to 9223372036854775807"),
        (
            "seed = 1\nduration = 600".to_owned(),
            "plant.toml: duration is 600, allowed is a time such as \"10 min\" (ms, s, min, h, d)",
        ),
        (
            "seed = 1\n[plant]\nspeed = \"1700 rpm\"".to_owned(),
            "plant.toml: plant.speed is \"1700 rpm\", allowed is 0 rpm to max_speed, 1600 rpm",
        ),
        (
            "seed = 1\n[plant]\nwear_ring_clearance = \"0.25 in\"".to_owned(),
            "plant.toml: plant.wear_ring_clearance is \"0.25 in\", allowed is a length such as \"0.25 mm\" (mm, cm, m, km)",
        ),
        (
            "seed = 1\n[sensors.discharge]\nrange = [\"6 bar\", \"0 bar\"]".to_owned(),
            "plant.toml: sensors.discharge.range is [\"6 bar\", \"0 bar\"], allowed is a value at 20 mA above the one at 4 mA",
        ),
        (
            "seed = 1\n[[pattern]]\nfor = \"0 s\"\nspeed = \"1 rpm\"".to_owned(),
            "plant.toml: pattern[1].for is \"0 s\", allowed is a time longer than 0 s",
        ),
        (event("valve = \"120 %\""), "plant.toml: event[1].valve is \"120 %\", allowed is 0 % to 100 %"),
        (
            event("sensor = \"level\"\nfault = \"stuck\""),
            "plant.toml: event[1].sensor is \"level\", allowed is one of flow, suction, discharge, torque",
        ),
        (
            event("sensor = \"flow\""),
            "plant.toml: event[1].fault is not given, allowed is one of \"none\", \"open loop\", \"stuck\", \"gain\", \"offset\"",
        ),
        (
            event("sensor = \"flow\"\nfault = \"offset\"\namount = \"1 bar\""),
            "plant.toml: event[1].amount is \"1 bar\", allowed is a flow such as \"80 m3/h\" (m3/h, m3/s, l/s, l/min)",
        ),
        (
            event("sensor = \"flow\"\nfault = \"stuck\"\namount = \"1 m3/h\""),
            "plant.toml: event[1].amount is \"1 m3/h\", allowed is this key only beside the faults gain and offset",
        ),
        (
            event("run = false\nover = \"1 s\""),
            "plant.toml: event[1].over is \"1 s\", allowed is this key only beside wear_ring_clearance",
        ),
        (
            event(""),
            "plant.toml: event[1] is without an action, allowed is exactly one of speed, valve, suction_level, run, \
             wear_ring_clearance, sensor, converter",
        ),
        (
            event("run = true\nspeed = \"1 rpm\""),
            "plant.toml: event[1] is with several actions (speed, run), allowed is exactly one of speed, valve, \
             suction_level, run, wear_ring_clearance, sensor, converter",
        ),
        (
            event("converter = \"bit 12 high\""),
            "plant.toml: event[1].converter is \"bit 12 high\", allowed is \"healthy\", \"dead\" or a stuck bit such as \
             \"bit 5 high\" (bits 0 to 11, high or low)",
        ),
    ] {
        assert_eq!(refusal(&text), expected);
    }
}

#[test]
fn unknown_and_missing_keys_are_named_with_their_line() {
    let unknown = refusal("seed = 1\n[plant]\nspede = \"1480 rpm\"\n");
    assert!(unknown.contains("plant.toml") && unknown.contains("line 3") && unknown.contains("spede"), "{unknown}");
    assert!(unknown.contains("expected one of") && unknown.contains("`speed`"), "{unknown}");
    assert!(refusal("title = \"x\"").contains("seed"));
    assert!(refusal("seed = ").contains("line 1"));
}

#[test]
fn a_file_that_is_not_there_is_named() {
    let error = Scenario::load(Path::new("no/such/scenario.toml")).unwrap_err();
    assert_eq!(error.to_string(), "cannot read scenario no/such/scenario.toml");
    let error = Scenario::built_in("mine").unwrap_err().to_string();
    assert!(error.contains("\"mine\"") && error.contains("waterworks-wear"), "{error}");
}
