//! Units: values against definitions of the units, both ways, and the property that no text makes the readers panic.

use offcurve::config::{
    Machine, PlantConfig,
    units::{self, Dimension, UnitError},
};
use proptest::prelude::*;
use std::path::Path;

const ALL: [Dimension; 13] = [
    Dimension::Speed,
    Dimension::Flow,
    Dimension::Head,
    Dimension::Length,
    Dimension::Pressure,
    Dimension::Power,
    Dimension::Torque,
    Dimension::Time,
    Dimension::Density,
    Dimension::Acceleration,
    Dimension::Angle,
    Dimension::Share,
    Dimension::SymbolRate,
];

fn close(got: f64, want: f64, relative: f64) -> bool {
    (got - want).abs() <= relative * want.abs()
}

#[test]
fn values_are_those_of_the_units_definitions() {
    use std::f64::consts::{PI, TAU};
    // Inch, foot, pound and US gallon by definition: 25.4 mm, 304.8 mm, 0.45359237 kg, 231 in³; standard gravity in lbf.
    let (foot, pound_force, gallon) = (0.3048, 0.453_592_37 * 9.806_65, 231.0 * 0.0254 * 0.0254 * 0.0254);
    for (dimension, text, si, tolerance) in [
        (Dimension::Flow, "45 m3/h", 0.0125, 1e-15),
        (Dimension::Flow, "45 m³/h", 0.0125, 1e-15),
        (Dimension::Flow, "12.5 l/s", 0.0125, 1e-15),
        (Dimension::Flow, "750 l/min", 0.0125, 1e-12),
        (Dimension::Flow, "100 gpm", 100.0 * gallon / 60.0, 1e-6),
        (Dimension::Head, "32 m", 32.0, 0.0),
        (Dimension::Head, "100 ft", 100.0 * foot, 1e-15),
        (Dimension::Length, "0.25 mm", 0.25e-3, 1e-15),
        (Dimension::Length, "4 in", 0.1016, 1e-12),
        (Dimension::Pressure, "2.1 bar", 2.1e5, 1e-15),
        (Dimension::Pressure, "-1 bar", -1e5, 1e-15),
        (Dimension::Pressure, "250 kPa", 2.5e5, 1e-15),
        (Dimension::Pressure, "30 psi", 30.0 * pound_force / (0.0254 * 0.0254), 1e-6),
        (Dimension::Power, "12.5 kW", 12_500.0, 1e-15),
        (Dimension::Power, "10 hp", 10.0 * 550.0 * foot * pound_force, 1e-6),
        (Dimension::Speed, "1480 rpm", 1480.0 * TAU / 60.0, 1e-12),
        (Dimension::Speed, "25 rev/s", 25.0 * TAU, 1e-12),
        (Dimension::Torque, "62 N m", 62.0, 1e-15),
        (Dimension::Torque, "62Nm", 62.0, 1e-15),
        (Dimension::Torque, "50 lbf ft", 50.0 * foot * pound_force, 1e-6),
        (Dimension::Time, "60 s", 60.0, 0.0),
        (Dimension::Time, "1.5 h", 5400.0, 1e-15),
        (Dimension::Density, "998.2 kg/m3", 998.2, 0.0),
        (Dimension::Density, "0.9982 g/cm3", 998.2, 1e-12),
        (Dimension::Angle, "23 deg", 23.0 * PI / 180.0, 1e-12),
        (Dimension::Share, "0.25 %", 0.0025, 1e-15),
        (Dimension::Share, "1e1%", 0.1, 1e-15),
        (Dimension::SymbolRate, "115200 Bd", 115_200.0, 0.0),
    ] {
        let got = units::value(dimension, text).unwrap_or_else(|error| panic!("{error}")).si;
        assert!(close(got, si, tolerance), "{text}: {got} instead of {si}");
    }
}

#[test]
fn the_examples_in_messages_are_right_themselves() {
    for dimension in ALL {
        units::value(dimension, dimension.example()).unwrap();
        units::list(dimension, &format!("0, 20, {}", dimension.example())).unwrap();
        for unit in dimension.units() {
            assert!(dimension.allowed().contains(unit.name()));
        }
    }
}

#[test]
fn forms_that_are_not_values_are_refused() {
    for text in [
        "",
        " ",
        "m3/h",
        "45",
        "45 m3",
        "45 m3/h 2",
        "4 5 m3/h",
        "nan m3/h",
        "inf m3/h",
        "1e999 m3/h",
        "0x10 m3/h",
        "--4 m3/h",
        "45 μm",
    ] {
        assert!(units::value(Dimension::Flow, text).is_err(), "{text:?}");
    }
    assert!(matches!(units::value(Dimension::Flow, "45"), Err(UnitError::NoUnit { .. })));
    assert!(matches!(units::value(Dimension::Flow, "45 bar"), Err(UnitError::WrongUnit { .. })));
    assert!(matches!(units::value(Dimension::Flow, "4,5 m3/h"), Err(UnitError::Comma { .. })));
    for text in ["", "1 m", "1 ..", ".. 2 m3/h", "1 .. 2 .. 3 m3/h", "1 m3/h .. 2 m3/h", "2 .. 2 m3/h", "1...2 m3/h"] {
        assert!(units::range(Dimension::Flow, text).is_err(), "{text:?}");
    }
    for text in ["", "1, 2", "1,,2 m3/h", "1, 2 m3/h,", "1 m3/h, 2 m3/h"] {
        assert!(units::list(Dimension::Flow, text).is_err(), "{text:?}");
    }
    for text in ["-1 %", "1 % + 2 %", "1 bar + 1 mbar", "1 % +", "%", "1 m"] {
        assert!(units::uncertainty(Dimension::Pressure, text).is_err(), "{text:?}");
    }
}

#[test]
fn uncertainties_have_either_part_or_both() {
    let parse = |text| units::uncertainty(Dimension::Pressure, text).unwrap();
    let both = parse("0.5 % + 2 mbar");
    assert!(close(both.relative, 0.005, 1e-12) && close(both.constant, 200.0, 1e-12));
    assert_eq!(parse("2 mbar + 0.5 %"), both);
    assert_eq!((parse("0.5 %").constant, parse("2 mbar").relative), (0.0, 0.0));
}

#[test]
fn numbers_for_people_are_short() {
    for (value, text) in [
        (0.0, "0"),
        (45.0, "45"),
        (0.1 + 0.2, "0.3"),
        (-1.5, "-1.5"),
        (998.2, "998.2"),
        (3_600_000.0, "3600000"),
        (1e-7, "1.000e-7"),
    ] {
        assert_eq!(units::plain(value), text);
    }
}

/// Lines like those of a machine file, right ones and broken ones.
fn toml_like() -> impl Strategy<Value = String> {
    let key = prop::sample::select(vec![
        "machine",
        "tag",
        "kind",
        "density",
        "speed",
        "flow",
        "head",
        "power",
        "range",
        "uncertainty",
        "column",
        "loop_input",
        "column_unit",
        "at",
        "store",
        "name",
        "port",
        "baud",
        "\"\"",
        "a.b",
        "slip",
        "blades",
        "time_format",
    ]);
    let value = prop_oneof![
        prop::sample::select(vec![
            "\"45 m3/h\"",
            "\"0 .. 160 m3/h\"",
            "\"0, 1e3, 2 m\"",
            "45",
            "-1",
            "1.5e300",
            "true",
            "[1, 2]",
            "{ at = \"1 %\" }",
            "nan",
            "\"\"",
            "\"0.5 % + 1 bar\"",
            "1979-05-27",
            "\"1 rpm",
            "'x'",
            "0xff",
            "\"wiesner\"",
            "[[]]",
            "\"é kW\"",
        ])
        .prop_map(str::to_owned),
        "\"[ -~é°³]{0,12}\"",
    ];
    let header = prop::sample::select(vec![
        "[curve]",
        "[fluid]",
        "[taps]",
        "[site]",
        "[impeller]",
        "[sensors.flow]",
        "[sensors]",
        "[limits]",
        "[limits.torque]",
        "[controller]",
        "[watch]",
        "[replay]",
        "[[controller]]",
        "[",
        "[[sensors]]",
        "[sensors.flow.range]",
    ]);
    let line = prop_oneof![
        4 => (key, value).prop_map(|(key, value)| format!("{key} = {value}")),
        1 => header.prop_map(str::to_owned),
        1 => "[ -~\n\"]{0,20}",
    ];
    prop::collection::vec(line, 0..25).prop_map(|lines| lines.join("\n"))
}

proptest! {
    #[test]
    fn every_unit_leads_back(si in -1e6_f64..1e6) {
        for dimension in ALL {
            for unit in dimension.units() {
                let back = unit.to_si(unit.from_si(si));
                prop_assert!((back - si).abs() <= 1e-12 * si.abs(), "{} {}: {} became {}", dimension.name(), unit.name(), si, back);
                let text = format!("{} {}", unit.from_si(si), unit.name());
                let read = units::value(dimension, &text).map(|value| value.si);
                prop_assert!(read.is_ok_and(|read| (read - si).abs() <= 1e-12 * si.abs()), "{}", text);
            }
        }
    }

    #[test]
    fn no_text_makes_a_value_reader_panic(text in "[0-9eE+\\-., %m3/hbar°é]{0,20}|\\PC{0,20}") {
        for dimension in ALL {
            let _ = units::value(dimension, &text);
            let _ = units::list(dimension, &text);
            let _ = units::range(dimension, &text);
            let _ = units::uncertainty(dimension, &text);
        }
    }

    #[test]
    fn no_file_makes_a_file_reader_panic(text in toml_like()) {
        if let Err(error) = Machine::parse(&text, Path::new("m.toml")) {
            prop_assert!(!error.to_string().contains("cannot be used"), "{}", error);
        }
        if let Err(error) = PlantConfig::parse(&text, Path::new("p.toml")) {
            prop_assert!(!error.to_string().contains("cannot be used"), "{}", error);
        }
    }

    #[test]
    fn a_damaged_file_is_refused_or_understood(place in 0_usize..4000, byte in any::<u8>()) {
        let mut bytes = include_bytes!("../demo/well-pump-2.toml").to_vec();
        let place = place % bytes.len();
        bytes[place] = byte;
        if let Ok(text) = String::from_utf8(bytes) {
            match Machine::parse(&text, Path::new("m.toml")) {
                Ok(machine) => prop_assert!(machine.profile.check().is_ok()),
                Err(error) => prop_assert!(!error.to_string().contains("cannot be used"), "{}", error),
            }
        }
    }
}
