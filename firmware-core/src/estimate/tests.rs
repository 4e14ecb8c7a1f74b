//! The checksum over an estimate, the codes it is made of, and readings at the ends of what numbers can be. Values and
//! uncertainties are held against an f64 reference outside this crate.

use super::*;
use crate::{
    checksum::crc32,
    deviation::Deviation,
    head::Taps,
    machine::{
        Impeller,
        curve::{CurveTable, Knot},
        profile::{ChannelSetup, Limits, Schedule},
    },
    sensing::{ChannelFault, ChannelValue, Reading},
};
use proptest::prelude::*;
use std::{collections::BTreeSet, vec::Vec};

fn profile() -> Profile {
    let knot = |flow, head, power| Knot { flow, head, head_slope: -300.0, power, power_slope: 60_000.0 };
    Profile {
        machine: 1,
        gravity: 9.81,
        density: 998.0,
        density_deviation: 0.5,
        taps: Taps { velocity_head: 488.0, elevation: 0.4 },
        reference_speed: 155.0,
        reference_density: 998.0,
        best_efficiency_flow: 0.024,
        head_curve_deviation: 0.01,
        power_curve_deviation: 0.015,
        curve: CurveTable::new(&[knot(0.0, 38.0, 4000.0), knot(0.02, 33.0, 7000.0), knot(0.036, 24.0, 9000.0)])
            .unwrap(),
        impeller: Some(Impeller {
            outlet_radius: 0.16,
            outlet_area: 0.0125,
            outlet_cotangent: 2.2,
            slip_factor: 0.78,
            inlet_whirl: 0.1,
            volumetric_efficiency: 0.95,
            drag_torque: 3.0,
            recirculation_onset: 0.45,
            model_deviation: 0.1,
        }),
        speed: ChannelSetup::default(),
        flow: ChannelSetup::default(),
        suction_pressure: ChannelSetup::default(),
        discharge_pressure: ChannelSetup::default(),
        shaft_torque: ChannelSetup::default(),
        limits: Limits::default(),
        schedule: Schedule { scan_ms: 1, scans_per_step: 100, steps_per_record: 10 },
    }
}

fn value(value: f32, code: u8) -> Reading {
    Ok(ChannelValue { value, deviation: Deviation::from_code(code), saturated: false, age: 0 })
}

fn sample() -> ConditionedSample {
    ConditionedSample {
        speed: value(150.0, 80),
        flow: value(0.022, 130),
        suction_pressure: value(-12_000.0, 150),
        discharge_pressure: value(310_000.0, 150),
        shaft_torque: value(48.5, 120),
        run: RunState::Running,
        direction: Direction::Forward,
    }
}

/// Ways to change one outcome: value, uncertainty, source, or a reason instead.
fn changed<T: Quantity>(outcome: &Outcome<T>) -> Vec<Outcome<T>> {
    let found = outcome.as_ref().unwrap();
    let next = |value: T| T::from_si(f32::from_bits(value.si().to_bits() ^ 1));
    let source = if found.source == Source::FromCurve { Source::Measured } else { Source::FromCurve };
    std::vec![
        Ok(Estimated { value: next(found.value), ..*found }),
        Ok(Estimated { value: T::from_si(-found.value.si()), ..*found }),
        Ok(Estimated { deviation: next(found.deviation), ..*found }),
        Ok(Estimated { source, ..*found }),
        Err(Missing::NotRunning),
        Err(Missing::Channel(Channel::Speed)),
    ]
}

macro_rules! each_change {
    ($base:expr, $($field:ident),+) => {{
        let base: Estimate = $base;
        let mut all = Vec::new();
        $(for outcome in changed(&base.$field) { all.push(Estimate { $field: outcome, ..base }); })+
        all
    }};
}

#[test]
fn every_bit_of_an_estimate_is_in_its_checksum() {
    let base = estimate(&sample(), &profile());
    let all = each_change!(
        base,
        head,
        hydraulic_power,
        momentum_torque,
        shaft_torque,
        shaft_power,
        efficiency,
        relative_flow,
        expected_head,
        expected_power,
        head_residual,
        power_residual
    );
    assert_eq!(all.len(), 11 * 6);
    let mut sums: BTreeSet<u32> = all.iter().map(Estimate::checksum).collect();
    sums.insert(base.checksum());
    assert_eq!(sums.len(), 11 * 6 + 1, "two different estimates share a checksum");
}

/// The order and width of what is summed, written down once more: per value its source, value and uncertainty, per
/// reason one byte. Version 0, not frozen.
#[test]
fn checksum_byte_for_byte() {
    let mut half_known = sample();
    half_known.shaft_torque = Err(ChannelFault::NotFitted);
    let found = estimate(&half_known, &Profile { impeller: None, ..profile() });
    let mut bytes = Vec::new();
    let mut put = |source: u8, value: f32, deviation: f32| {
        bytes.push(source);
        bytes.extend_from_slice(&value.to_le_bytes());
        bytes.extend_from_slice(&deviation.to_le_bytes());
    };
    let (head, power) = (found.head.unwrap(), found.hydraulic_power.unwrap());
    put(1, head.value.metres(), head.deviation.metres());
    put(1, power.value.watts(), power.deviation.watts());
    bytes.push(0x47); // momentum torque: no impeller
    bytes.extend_from_slice(&[0x84; 3]); // shaft torque, shaft power, efficiency: no torque channel
    let mut put = |source: u8, value: f32, deviation: f32| {
        bytes.push(source);
        bytes.extend_from_slice(&value.to_le_bytes());
        bytes.extend_from_slice(&deviation.to_le_bytes());
    };
    let relative = found.relative_flow.unwrap();
    put(1, relative.value.fraction(), relative.deviation.fraction());
    let (head, power) = (found.expected_head.unwrap(), found.expected_power.unwrap());
    put(4, head.value.metres(), head.deviation.metres());
    put(4, power.value.watts(), power.deviation.watts());
    let residual = found.head_residual.unwrap();
    put(1, residual.value.metres(), residual.deviation.metres());
    bytes.push(0x84); // power residual
    assert_eq!(found.checksum(), crc32(&bytes));
}

#[test]
fn every_not_a_number_counts_as_one_pattern() {
    let base = estimate(&sample(), &profile());
    let with = |bits: u32| {
        let value = Head::from_metres(f32::from_bits(bits));
        Estimate { head: Ok(Estimated { value, ..base.head.unwrap() }), ..base }.checksum()
    };
    assert_eq!(with(0x7fc0_0000), with(0xffc0_1234));
    assert_ne!(with(0x7fc0_0000), with(0x7f80_0000), "infinity is another value");
}

#[test]
fn every_reason_and_source_has_its_own_code_and_name() {
    let reasons: Vec<Missing> = Channel::ALL
        .into_iter()
        .map(Missing::Channel)
        .chain([
            Missing::NotRunning,
            Missing::ReverseRotation,
            Missing::SpeedOutOfRange,
            Missing::FlowNotPositive,
            Missing::HeadNotPositive,
            Missing::PowerNotPositive,
            Missing::OutsideCurve,
            Missing::NoImpeller,
            Missing::Recirculation,
            Missing::TorqueNotMeasured,
        ])
        .collect();
    let sources = [Source::Measured, Source::FromDrive, Source::FromMomentum, Source::FromCurve];
    let codes: BTreeSet<u8> =
        reasons.iter().map(|reason| reason.code()).chain(sources.iter().map(|source| source.code())).collect();
    let names: BTreeSet<&str> =
        reasons.iter().map(|reason| reason.name()).chain(sources.iter().map(|source| source.name())).collect();
    assert_eq!(codes.len(), 15 + 4);
    assert_eq!(names.len(), 15 + 4);
    assert!(names.iter().all(|name| !name.is_empty()));
}

#[test]
fn residuals_are_differences_of_what_is_reported() {
    let found = estimate(&sample(), &profile());
    let head = found.head.unwrap().value.metres() - found.expected_head.unwrap().value.metres();
    let power = found.shaft_power.unwrap().value.watts() - found.expected_power.unwrap().value.watts();
    assert_eq!(found.head_residual.unwrap().value.metres(), head);
    assert_eq!(found.power_residual.unwrap().value.watts(), power);
}

fn outcomes(found: &Estimate) -> Vec<Result<(f32, f32), Missing>> {
    fn plain<T: Quantity>(outcome: &Outcome<T>) -> Result<(f32, f32), Missing> {
        outcome.map(|found| (found.value.si(), found.deviation.si()))
    }
    std::vec![
        plain(&found.head),
        plain(&found.hydraulic_power),
        plain(&found.momentum_torque),
        plain(&found.shaft_torque),
        plain(&found.shaft_power),
        plain(&found.efficiency),
        plain(&found.relative_flow),
        plain(&found.expected_head),
        plain(&found.expected_power),
        plain(&found.head_residual),
        plain(&found.power_residual),
    ]
}

fn any_reading() -> impl Strategy<Value = Reading> {
    prop_oneof![
        8 => (any::<u32>(), any::<u8>()).prop_map(|(bits, code)| value(f32::from_bits(bits), code)),
        1 => Just(Err(ChannelFault::FailureLow)),
    ]
}

/// A reading anywhere up to `largest` either way, with any uncertainty that can be coded.
fn wide_reading(largest: f32) -> impl Strategy<Value = Reading> {
    (-largest..largest, any::<u8>()).prop_map(|(number, code)| value(number, code))
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(2000))]

    /// Any bits in any reading: no panic, and the same estimate each time.
    #[test]
    fn any_readings_do_not_panic(readings in prop::array::uniform5(any_reading()), run in 0_u8..3, direction in 0_u8..3) {
        let [speed, flow, suction_pressure, discharge_pressure, shaft_torque] = readings;
        let run = [RunState::Unknown, RunState::Running, RunState::Stopped][usize::from(run)];
        let direction = [Direction::Unknown, Direction::Forward, Direction::Reverse][usize::from(direction)];
        let sample =
            ConditionedSample { speed, flow, suction_pressure, discharge_pressure, shaft_torque, run, direction };
        let profile = profile();
        prop_assert_eq!(estimate(&sample, &profile).checksum(), estimate(&sample, &profile).checksum());
    }

    /// Far beyond any machine (10 kPa to 1 GPa, 100 m³/s, 1 MN·m), and with any uncertainty: what is given out is finite,
    /// with an uncertainty that is finite and not negative, and an efficiency is positive.
    #[test]
    fn values_given_out_are_numbers(
        speed in wide_reading(400.0),
        flow in wide_reading(100.0),
        suction_pressure in wide_reading(1e9),
        discharge_pressure in wide_reading(1e9),
        shaft_torque in wide_reading(1e6),
    ) {
        let sample =
            ConditionedSample { speed, flow, suction_pressure, discharge_pressure, shaft_torque, ..sample() };
        let found = estimate(&sample, &profile());
        for (place, outcome) in outcomes(&found).into_iter().enumerate() {
            if let Ok((value, deviation)) = outcome {
                prop_assert!(value.is_finite() && deviation.is_finite() && deviation >= 0.0, "{place}: {value} ± {deviation}");
            }
        }
        if let Ok(efficiency) = found.efficiency {
            prop_assert!(efficiency.value.fraction() > 0.0, "{:?}", efficiency);
        }
    }
}
