//! Regions, their deadband and their totals. Published figures are held against this module in the published tests.

use super::*;
use proptest::prelude::*;
use std::vec::Vec;

const ALLOWABLE: Span = Span { low: 0.4, high: 1.4 };

fn regions() -> Regions {
    Regions::new(PREFERRED_LOW_SPEED, Some(ALLOWABLE), 0.05).unwrap()
}

fn walk(regions: &Regions, flows: &[f32]) -> Vec<Region> {
    let mut clock = RegionClock::default();
    flows.iter().map(|&flow| clock.step(regions, true, Some(flow), 100)).collect()
}

#[test]
fn limits_are_passed_outwards_at_once_and_inwards_behind_a_deadband() {
    use Region::{AboveAllowable, BelowAllowable, High, Low, Preferred, Unknown};
    assert_eq!(
        walk(&regions(), &[0.70, 0.699, 0.749, 0.751, 0.701, 0.39, 0.449, 0.451, 0.749, 0.76]),
        [Preferred, Low, Low, Preferred, Preferred, BelowAllowable, BelowAllowable, Low, Low, Preferred]
    );
    assert_eq!(
        walk(&regions(), &[1.20, 1.201, 1.151, 1.149, 1.199, 1.41, 1.351, 1.349, 1.16, 1.14]),
        [Preferred, High, High, Preferred, Preferred, AboveAllowable, AboveAllowable, High, High, Preferred]
    );
    // From one end to the other in one step, and numbers that are none.
    assert_eq!(
        walk(&regions(), &[0.1, 1.5, 0.0, -0.2, f32::NAN, 1.0, f32::INFINITY]),
        [BelowAllowable, AboveAllowable, BelowAllowable, BelowAllowable, Unknown, Preferred, Unknown]
    );
}

#[test]
fn without_the_makers_limits_nothing_is_out_of_the_allowable_region() {
    let regions = Regions::new(PREFERRED_HIGH_SPEED, None, 0.02).unwrap();
    assert_eq!(walk(&regions, &[0.0, 0.9, 9.0]), [Region::Low, Region::Preferred, Region::High]);
}

#[test]
fn a_deadband_wider_than_an_outer_part_stays_out_of_the_preferred_region() {
    // Allowable from 0.68, deadband 0.1: back in the allowable region means back at 0.78, but 0.85 is preferred.
    let regions = Regions::new(PREFERRED_LOW_SPEED, Some(Span { low: 0.68, high: 1.2 }), 0.1).unwrap();
    assert_eq!(walk(&regions, &[0.6, 0.77, 0.85]), [Region::BelowAllowable, Region::BelowAllowable, Region::Preferred]);
}

#[test]
fn bad_limits_are_refused() {
    let span = |low, high| Span { low, high };
    for (preferred, allowable) in [
        (span(1.2, 0.7), None),
        (span(0.7, 0.7), None),
        (span(f32::NAN, 1.2), None),
        (span(0.7, f32::INFINITY), None),
        (span(0.7, 1.2), Some(span(0.8, 1.4))),
        (span(0.7, 1.2), Some(span(0.4, 1.1))),
        (span(0.7, 1.2), Some(span(f32::NEG_INFINITY, 1.4))),
    ] {
        assert_eq!(Regions::new(preferred, allowable, 0.0), Err(RegionError::NotRising), "{preferred:?} {allowable:?}");
    }
    for deadband in [-0.01, 0.26, f32::NAN] {
        assert_eq!(Regions::new(span(0.7, 1.2), None, deadband), Err(RegionError::BadDeadband), "{deadband}");
    }
}

#[test]
fn time_is_counted_to_the_millisecond_for_decades() {
    let regions = regions();
    let mut saved = [0; Region::COUNT];
    saved[Region::Preferred as usize] = 50 * 365 * 24 * 3_600_000; // fifty years: an f32 would swallow hours
    let mut clock = RegionClock::from_milliseconds(saved);
    for _ in 0..1000 {
        clock.step(&regions, true, Some(1.0), 1);
    }
    assert_eq!(clock.milliseconds()[Region::Preferred as usize], 50 * 365 * 24 * 3_600_000 + 1000);
    assert_eq!(clock.hours(Region::Preferred), 50 * 365 * 24);
    clock.step(&regions, false, Some(1.0), 7_200_000);
    clock.step(&regions, true, None, 3_599_999);
    assert_eq!((clock.hours(Region::Stopped), clock.hours(Region::Unknown)), (2, 0));
    clock.step(&regions, true, None, 1);
    assert_eq!(clock.hours(Region::Unknown), 1);
    let mut full = RegionClock::from_milliseconds([u64::MAX; Region::COUNT]);
    full.step(&regions, true, Some(1.0), 5);
    assert_eq!(full.milliseconds(), [u64::MAX; Region::COUNT]);
}

#[test]
fn a_stop_or_a_gap_does_not_forget_the_side_of_the_deadband() {
    let regions = regions();
    let mut clock = RegionClock::default();
    clock.step(&regions, true, Some(0.6), 1);
    clock.step(&regions, false, None, 1);
    clock.step(&regions, true, None, 1);
    assert_eq!(clock.step(&regions, true, Some(0.72), 1), Region::Low);
}

#[test]
fn what_has_no_specific_speed_or_rise_is_none() {
    for bad in [0.0, -1.0, f32::NAN, f32::INFINITY] {
        assert_eq!(specific_speed(bad, 1.0, 1.0), None);
        assert_eq!(specific_speed(1.0, bad, 1.0), None);
        assert_eq!(specific_speed(1.0, 1.0, bad), None);
        assert_eq!(type_number(1.0, 1.0, 1.0, bad), None);
        assert_eq!(temperature_rise(50.0, bad, 4186.0, 9.81), None);
        assert_eq!(minimum_thermal_flow(1e4, 998.0, 4186.0, bad), None);
    }
    assert_eq!(temperature_rise(50.0, 1.01, 4186.0, 9.81), None);
    assert_eq!(temperature_rise(50.0, 1.0, 4186.0, 9.81), Some(0.0));
    assert_eq!(minimum_thermal_flow(f32::MAX, 1e-3, 1e-3, 1e-3), None);
}

#[test]
fn margins_take_the_greater() {
    let margin = SuctionMargin { ratio: 1.1, metres: 0.6 };
    assert!((margin.available_needed(3.0) - 3.6).abs() < 1e-6);
    assert!((margin.available_needed(10.0) - 11.0).abs() < 1e-5);
    assert!((margin.available_needed(6.0) - 6.6).abs() < 1e-5);
}

proptest! {
    /// f64 form of the same formulas over the range of machines, and the fixed ratio between the two specific speeds.
    #[test]
    fn specific_speeds_match_f64(n in 100.0_f32..20_000.0, q in 1e-4_f32..20.0, h in 0.5_f32..3000.0) {
        let (n64, q64, h64) = (f64::from(n), f64::from(q), f64::from(h));
        let exact = n64 * q64.sqrt() / h64.powf(0.75);
        let n_q = specific_speed(n, q, h).unwrap();
        prop_assert!((f64::from(n_q) / exact - 1.0).abs() < 1e-6);
        let omega = n * core::f32::consts::PI / 30.0;
        let omega_s = f64::from(type_number(omega, q, h, 9.80665).unwrap());
        let factor = 30.0 / core::f64::consts::PI * 9.80665_f64.powf(0.75); // 52.92
        prop_assert!((f64::from(n_q) / omega_s / factor - 1.0).abs() < 2e-6);
    }

    /// Every millisecond goes to exactly one region.
    #[test]
    fn no_time_is_lost(flows in prop::collection::vec(prop::option::of(-1.0_f32..3.0), 1..200), ms in 0_u32..100_000) {
        let mut clock = RegionClock::default();
        for flow in &flows {
            clock.step(&regions(), true, *flow, ms);
        }
        prop_assert_eq!(clock.milliseconds().iter().sum::<u64>(), flows.len() as u64 * u64::from(ms));
    }
}
