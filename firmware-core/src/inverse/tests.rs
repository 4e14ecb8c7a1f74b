//! Roots against bisection in f64 on the same knots, uncertainties against differences, refusals at their borders.

use super::*;
use crate::machine::design::monotone_slopes;
use proptest::prelude::*;
use std::{vec, vec::Vec};

/// A table with the slopes the design code chooses.
fn table(flows: &[f64], heads: &[f64], powers: &[f64]) -> CurveTable {
    let (head_slopes, power_slopes) = (monotone_slopes(flows, heads), monotone_slopes(flows, powers));
    let knots: Vec<Knot> = (0..flows.len())
        .map(|k| Knot {
            flow: flows[k] as f32,
            head: heads[k] as f32,
            head_slope: head_slopes[k] as f32,
            power: powers[k] as f32,
            power_slope: power_slopes[k] as f32,
        })
        .collect();
    CurveTable::new(&knots).unwrap()
}

const FLOWS: [f64; 7] = [0.0, 0.006, 0.012, 0.018, 0.024, 0.030, 0.036];
const HEADS: [f64; 7] = [38.0, 37.8, 36.9, 35.0, 32.0, 27.5, 21.0];
const POWERS: [f64; 7] = [3600.0, 4900.0, 6200.0, 7400.0, 8500.0, 9300.0, 9800.0];

fn pump() -> CurveTable {
    table(&FLOWS, &HEADS, &POWERS)
}

fn finder() -> FlowFinder {
    FlowFinder::new(&pump(), 0.0, 0.01, 0.015).unwrap()
}

fn exact(value: f32) -> Attributed {
    Attributed::own(value, 0.0)
}

fn at(ratio: f32) -> Scale {
    Scale { ratio, deviation: 0.0 }
}

#[test]
fn gives_back_the_flow_the_curve_was_read_at() {
    let (table, finder) = (pump(), finder());
    let mut worst = 0.0_f32;
    for step in 0..=2000 {
        let q = 0.0365 * step as f32 / 2000.0;
        let Some(point) = table.at(VolumeFlow::from_cubic_metres_per_second(q)) else { continue };
        for r in [0.2_f32, 0.6, 1.0, 1.2] {
            let head = exact(point.head.metres() * r * r);
            let power = exact(point.power.watts() * r * r * r * 1.02);
            for (found, slope, value) in [
                (finder.from_head(&head, &at(r)), point.head_slope, point.head.metres()),
                (finder.from_power(&power, &at(r), &at(1.02)), point.power_slope, point.power.watts()),
            ] {
                let elasticity = slope * q / value;
                match found {
                    Ok(found) => {
                        assert!(elasticity.abs() > FLATTEST - 1e-3);
                        assert!(
                            (found.elasticity - elasticity).abs() < 1e-3,
                            "at {q}: {} {elasticity}",
                            found.elasticity
                        );
                        worst = worst.max((found.flow.value / (q * r) - 1.0).abs());
                    }
                    Err(NoFlow::TooFlat { .. }) => assert!(elasticity.abs() < FLATTEST + 1e-3, "at {q}: {elasticity}"),
                    // The ends of the table, missed by rounding.
                    Err(NoFlow::AboveCurve | NoFlow::BelowCurve) => assert!(!(1e-5..=0.03599).contains(&q), "at {q}"),
                    Err(other) => panic!("at {q}: {other:?}"),
                }
            }
        }
    }
    // Rounding of the reading (a few 6e-8) over the smallest elasticity.
    assert!(worst < 3e-6, "largest relative error {worst:e}");
}

/// Root of a monotone cubic in f64, on the coefficients the code under test has.
fn bisected(piece: &Piece, target: f32) -> f64 {
    let [a, b, c, d] = piece.cubic.map(f64::from);
    let at = |t: f64| a + t * (b + t * (c + t * d));
    let rising = at(1.0) > at(0.0);
    let (mut low, mut high) = (0.0, 1.0);
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if (at(middle) > f64::from(target)) == rising { high = middle } else { low = middle }
    }
    0.5 * (low + high)
}

/// The number of steps is enough: over every shape a monotone interval can have (end slopes up to three times its
/// chord, both ways), the value at the place found is within the rounding of the value there.
#[test]
fn the_steps_are_enough_for_every_monotone_shape() {
    let mut worst = 0.0_f64;
    for level in [0.0_f32, 10.0] {
        for first in 0..=24 {
            for last in 0..=24 {
                for sign in [1.0_f32, -1.0] {
                    let (b, end) = (sign * first as f32 / 8.0, sign * last as f32 / 8.0);
                    let cubic = [level, b, 3.0 * sign - 2.0 * b - end, b + end - 2.0 * sign];
                    let piece = Piece { flow: 0.0, width: 1.0, cubic };
                    assert!(piece.is_monotone(), "{cubic:?}");
                    for part in 0..=64 {
                        let target = level + sign * part as f32 / 64.0;
                        let place = piece.root::<STEPS>(target);
                        assert!((0.0..=1.0).contains(&place));
                        let [a, b, c, d] = cubic.map(f64::from);
                        let t = f64::from(place);
                        let value = a + t * (b + t * (c + t * d));
                        // Off in value as a part of the interval's rise, or off in place where the curve is steep.
                        let off = (value - f64::from(target)).abs();
                        let placed = (t - bisected(&piece, target)).abs();
                        worst = worst.max(off.min(placed) / f64::from(level.max(1.0)));
                    }
                }
            }
        }
    }
    assert!(worst < 1.5e-6, "worst {worst:e}");
}

#[test]
fn readings_beyond_the_curve_are_named() {
    let finder = finder();
    let one = at(1.0);
    assert_eq!(finder.from_head(&exact(38.1), &one), Err(NoFlow::AboveCurve));
    assert_eq!(finder.from_head(&exact(20.9), &one), Err(NoFlow::BelowCurve));
    assert_eq!(finder.from_head(&exact(-5.0), &one), Err(NoFlow::BelowCurve));
    assert_eq!(finder.from_power(&exact(9900.0), &one, &one), Err(NoFlow::AboveCurve));
    assert_eq!(finder.from_power(&exact(3500.0), &one, &one), Err(NoFlow::BelowCurve));
    assert_eq!(finder.from_power(&exact(0.0), &one, &one), Err(NoFlow::BelowCurve));
    // The ends themselves belong to the curve.
    assert!((finder.from_head(&exact(21.0), &one).unwrap().flow.value - 0.036).abs() < 1e-7);
    assert!(matches!(finder.from_head(&exact(38.0), &one), Err(NoFlow::TooFlat { .. })));
    assert!(matches!(finder.from_power(&exact(3600.0), &one, &one), Err(NoFlow::TooFlat { .. })));
    assert!(
        (finder.from_head(&exact(27.5), &one).unwrap().flow.value - 0.030).abs() < 1e-7,
        "an inner knot counts once"
    );
}

#[test]
fn inputs_that_are_no_numbers_are_named() {
    let finder = finder();
    for bad in [f32::NAN, f32::INFINITY, f32::NEG_INFINITY] {
        assert_eq!(finder.from_head(&exact(bad), &at(1.0)), Err(NoFlow::NotANumber));
        assert_eq!(finder.from_head(&exact(30.0), &at(bad)), Err(NoFlow::NotANumber));
        assert_eq!(finder.from_power(&exact(8000.0), &at(1.0), &at(bad)), Err(NoFlow::NotANumber));
    }
    assert_eq!(finder.from_head(&Attributed::own(30.0, -1.0), &at(1.0)), Err(NoFlow::NotANumber));
    for bad in [0.0, -1.0, 0.19, 1.21] {
        assert_eq!(finder.from_head(&exact(30.0), &at(bad)), Err(NoFlow::SpeedOutOfRange));
        assert_eq!(finder.from_power(&exact(8000.0), &at(bad), &at(1.0)), Err(NoFlow::SpeedOutOfRange));
    }
    for bad in [0.0, -0.0, -1.0] {
        assert_eq!(finder.from_power(&exact(8000.0), &at(1.0), &at(bad)), Err(NoFlow::DensityNotPositive));
    }
}

#[test]
fn a_hump_is_ambiguous_and_near_it_so_is_a_vague_reading() {
    let heads = [36.0, 37.5, 37.9, 36.0, 32.0, 27.5, 21.0];
    let finder = FlowFinder::new(&table(&FLOWS, &heads, &POWERS), 0.0, 0.0, 0.0).unwrap();
    let Err(NoFlow::Ambiguous(two)) = finder.from_head(&exact(37.0), &at(1.0)) else { panic!() };
    assert_eq!((two.found(), two.flows().len()), (2, 2));
    assert!(two.flows()[0] < two.flows()[1]);
    // At another speed the candidates are flows at that speed.
    let Err(NoFlow::Ambiguous(slow)) = finder.from_head(&exact(37.0 * 0.25), &at(0.5)) else { panic!() };
    for (slow, fast) in slow.flows().iter().zip(two.flows()) {
        assert!((slow.cubic_metres_per_second() / fast.cubic_metres_per_second() - 0.5).abs() < 1e-6);
    }
    // 35 m has one flow; with an uncertainty of 0.6 m the rising branch, from 36 m, is within reach.
    assert!(finder.from_head(&Attributed::own(35.0, 0.4), &at(1.0)).is_ok());
    let Err(NoFlow::Ambiguous(near)) = finder.from_head(&Attributed::own(35.0, 0.6), &at(1.0)) else { panic!() };
    assert_eq!((near.found(), near.flows().len()), (1, 1));
}

#[test]
fn more_crossings_than_can_be_named_are_counted() {
    let heads = [30.0, 20.0, 30.0, 20.0, 30.0, 20.0, 30.0];
    let finder = FlowFinder::new(&table(&FLOWS, &heads, &POWERS), 0.0, 0.0, 0.0).unwrap();
    let Err(NoFlow::Ambiguous(all)) = finder.from_head(&exact(25.0), &at(1.0)) else { panic!() };
    assert_eq!((all.found(), all.flows().len()), (6, CANDIDATES));
    for (k, flow) in all.flows().iter().enumerate() {
        // Inner pieces are level at both ends, so symmetric; the first one starts steeply.
        let middle = 0.003 + 0.006 * k as f32;
        let off = flow.cubic_metres_per_second() - middle;
        assert!(if k == 0 { off < -0.001 && off > -0.003 } else { off.abs() < 1e-8 }, "{all:?}");
    }
}

#[test]
fn an_interval_that_turns_inside_is_refused() {
    let knot = |flow, head, head_slope, power_slope| Knot { flow, head, head_slope, power: 100.0 + flow, power_slope };
    let turning = CurveTable::new(&[knot(0.0, 10.0, -1.0, 1.0), knot(1.0, 9.0, 1.0, 1.0)]).unwrap();
    let refused = FlowFinder::new(&turning, 0.0, 0.0, 0.0);
    assert_eq!(refused, Err(NotInvertible::TurnsBetweenKnots { curve: Curve::Head, knot: 0 }));
    // Slopes of one sign that still overshoot: 2 and 8 times the chord.
    let wavy = [knot(0.0, 10.0, -1.0, 1.0), knot(1.0, 9.0, -1.0, 2.0), knot(2.0, 8.0, -1.0, 8.0)];
    let refused = FlowFinder::new(&CurveTable::new(&wavy).unwrap(), 0.0, 0.0, 0.0);
    assert_eq!(refused, Err(NotInvertible::TurnsBetweenKnots { curve: Curve::Power, knot: 1 }));
    // A falling curve turns where much velocity head is added back.
    let falling = CurveTable::new(&[knot(0.0, 10.0, -1.0, 1.0), knot(1.0, 9.0, -1.0, 1.0)]).unwrap();
    assert!(FlowFinder::new(&falling, 0.0, 0.0, 0.0).is_ok());
    assert!(FlowFinder::new(&falling, 3.0, 0.0, 0.0).is_ok());
    assert!(FlowFinder::new(&falling, -3.0, 0.0, 0.0).is_err());
    assert_eq!(FlowFinder::new(&falling, f32::NAN, 0.0, 0.0), Err(NotInvertible::NotANumber));
    assert_eq!(FlowFinder::new(&falling, 0.0, -0.1, 0.0), Err(NotInvertible::NotANumber));
}

#[test]
fn velocity_head_between_unequal_bores_needs_no_flow_reading() {
    let (table, coefficient) = (pump(), 488.0_f32);
    let finder = FlowFinder::new(&table, coefficient, 0.0, 0.0).unwrap();
    for q in [0.022_f32, 0.027, 0.033] {
        for r in [0.5_f32, 1.0] {
            let head = table.at(VolumeFlow::from_cubic_metres_per_second(q)).unwrap().head.metres() * r * r;
            let without = head - coefficient * (q * r) * (q * r);
            let found = finder.from_head(&exact(without), &at(r)).unwrap();
            assert!((found.flow.value / (q * r) - 1.0).abs() < 2e-6, "{q} {r}: {found:?}");
        }
    }
}

/// First-order uncertainties against differences of the answer itself, each input alone, and against the closed forms
/// of the module's head.
#[test]
fn uncertainty_follows_each_input() {
    let finder = FlowFinder::new(&pump(), 0.0, 0.0, 0.0).unwrap();
    let (ratio, step) = (0.8_f32, 1e-3_f32);
    let head = |h: f32, r: f32| finder.from_head(&exact(h), &at(r)).unwrap().flow.value;
    let power = |p: f32, r: f32, d: f32| finder.from_power(&exact(p), &at(r), &at(d)).unwrap().flow.value;
    let (h, p) = (30.0 * 0.64, 8000.0 * 0.512);
    let near = |got: f32, want: f32| assert!((got / want - 1.0).abs() < 5e-3, "{got} {want}");

    let by_head = finder.from_head(&Attributed::own(h, step * h), &Scale { ratio, deviation: step * ratio }).unwrap();
    near(by_head.flow.own, (head(h * (1.0 - step), ratio) - head(h * (1.0 + step), ratio)) / 2.0);
    near(by_head.flow.speed, (head(h, ratio * (1.0 + step)) - head(h, ratio * (1.0 - step))) / 2.0);
    near(by_head.flow.speed, by_head.flow.value * step * (1.0 - 2.0 / by_head.elasticity));

    let by_power = finder
        .from_power(
            &Attributed::own(p, step * p),
            &Scale { ratio, deviation: step * ratio },
            &Scale { ratio: 1.0, deviation: step },
        )
        .unwrap();
    near(by_power.flow.own, (power(p * (1.0 + step), ratio, 1.0) - power(p * (1.0 - step), ratio, 1.0)) / 2.0);
    near(by_power.flow.speed, (power(p, ratio * (1.0 + step), 1.0) - power(p, ratio * (1.0 - step), 1.0)) / 2.0);
    near(by_power.flow.density, (power(p, ratio, 1.0 + step) - power(p, ratio, 1.0 - step)) / 2.0);
    near(by_power.flow.speed, by_power.flow.value * step * (1.0 - 3.0 / by_power.elasticity));
    // Torque times speed instead: the speed error of the power joins that of the ratio.
    let from_torque = Attributed::own(p, 0.0).times(&Attributed::speed(1.0, step));
    let by_torque = finder.from_power(&from_torque, &Scale { ratio, deviation: step * ratio }, &at(1.0)).unwrap();
    near(by_torque.flow.speed, by_torque.flow.value * step * (1.0 - 2.0 / by_torque.elasticity));

    // The curve's own uncertainty, 1 % of head over the elasticity.
    let vague = FlowFinder::new(&pump(), 0.0, 0.01, 0.0).unwrap().from_head(&exact(h), &at(ratio)).unwrap();
    near(vague.flow.own, vague.flow.value * 0.01 / vague.elasticity.abs());
    assert_eq!((vague.flow.speed, vague.flow.density), (0.0, 0.0));
}

#[test]
fn attributed_parts_keep_what_is_shared() {
    let speed = Attributed::speed(150.0, 0.3);
    let square = speed.times(&speed);
    assert!((square.deviation() - 2.0 * 150.0 * 0.3).abs() < 1e-3);
    assert_eq!(speed.over(&speed).deviation(), 0.0);
    let (a, b) = (Attributed::own(2.0, 0.1).times(&speed), Attributed::own(3.0, 0.2).over(&speed));
    assert!((a.covariance(&b) - (2.0 * 0.3) * (-3.0 / (150.0 * 150.0) * 0.3)).abs() < 1e-7);
    assert!(
        (Attributed::own(4.0, 0.3).times(&Attributed::own(5.0, 0.4)).own - (1.5_f32.powi(2) + 1.6_f32.powi(2)).sqrt())
            .abs()
            < 1e-5
    );
}

#[test]
fn reasons_have_names_of_their_own() {
    let none = Candidates { flows: Default::default(), found: 2 };
    let all = [
        NoFlow::NotANumber,
        NoFlow::SpeedOutOfRange,
        NoFlow::DensityNotPositive,
        NoFlow::AboveCurve,
        NoFlow::BelowCurve,
        NoFlow::Ambiguous(none),
        NoFlow::TooFlat { elasticity: 0.1 },
    ];
    let names: std::collections::BTreeSet<&str> = all.iter().map(|reason| reason.name()).collect();
    assert_eq!(names.len(), all.len());
}

/// Halving finds what the look at every interval finds, for tables of every size, on knots, between and beyond.
#[test]
fn halving_and_looking_agree() {
    for count in 2..=KNOTS {
        for sign in [1.0, -1.0] {
            let flows: Vec<f64> = (0..count).map(|k| 0.001 * k as f64).collect();
            // Every third step is level.
            let heads: Vec<f64> = (0..count).map(|k| 100.0 + sign * (k - k / 3) as f64).collect();
            let finder = FlowFinder::new(&table(&flows, &heads, &vec![50.0; count]), 0.0, 0.0, 0.0).unwrap();
            assert_eq!(finder.one_way, [true, true]);
            for quarter in -80..=80 {
                let target = 100.0 + 0.25 * quarter as f32;
                let (one, all) =
                    (finder.only_crossing(Curve::Head, target), finder.all_crossings(Curve::Head, target, 0.0));
                assert_eq!(one.found, all.found, "{count} knots, {target}");
                assert_eq!((one.pieces[0].flow, one.pieces[0].cubic), (all.pieces[0].flow, all.pieces[0].cubic));
            }
        }
    }
    let humped = table(&FLOWS, &[36.0, 37.5, 37.9, 36.0, 32.0, 27.5, 21.0], &POWERS);
    assert_eq!(FlowFinder::new(&humped, 0.0, 0.0, 0.0).unwrap().one_way, [false, true]);
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(2000))]

    /// Any curve of points: the crossings counted and named are those that a fine walk along the table finds.
    #[test]
    fn every_crossing_is_found(heads in prop::collection::vec(10.0_f64..40.0, 2..=16), target in 10.0_f32..40.0) {
        // A walk cannot see that a curve touches the target at a knot.
        prop_assume!(heads.iter().all(|&h| h as f32 != target));
        let flows: Vec<f64> = (0..heads.len()).map(|k| 0.001 * k as f64).collect();
        let powers = vec![100.0; heads.len()];
        let curve = table(&flows, &heads, &powers);
        let finder = FlowFinder::new(&curve, 0.0, 0.0, 0.0).unwrap();
        let walked: Vec<f32> = {
            let steps = 4096;
            let last = *flows.last().unwrap() as f32;
            let at = |step: i32| {
                let q = (last * step as f32 / steps as f32).min(last);
                (q, curve.at(VolumeFlow::from_cubic_metres_per_second(q)).unwrap().head.metres() - target)
            };
            (0..steps).filter(|&s| (at(s).1 < 0.0) != (at(s + 1).1 < 0.0)).map(|s| at(s).0).collect()
        };
        let found: Vec<f32> = match finder.from_head(&exact(target), &at(1.0)) {
            Ok(found) => vec![found.flow.value],
            Err(NoFlow::Ambiguous(all)) => {
                prop_assert_eq!(usize::from(all.found()), walked.len());
                all.flows().iter().map(|flow| flow.cubic_metres_per_second()).collect()
            }
            Err(NoFlow::TooFlat { .. }) => { prop_assert_eq!(walked.len(), 1); return Ok(()) }
            Err(NoFlow::AboveCurve) => { prop_assert!(heads.iter().all(|&h| h < f64::from(target))); vec![] }
            Err(NoFlow::BelowCurve) => { prop_assert!(heads.iter().all(|&h| h > f64::from(target))); vec![] }
            Err(other) => panic!("{other:?}"),
        };
        prop_assert_eq!(found.len(), walked.len().min(CANDIDATES));
        let near = 2.0 * *flows.last().unwrap() as f32 / 4096.0;
        for (&found, walked) in found.iter().zip(&walked) {
            // Candidates are near, not exact: in place, or in head by 2 % of what one interval can rise.
            let there = curve.at(VolumeFlow::from_cubic_metres_per_second(found)).unwrap().head.metres();
            prop_assert!((found - walked).abs() < near || (there - target).abs() < 0.02 * 30.0, "{} {}", found, walked);
        }
    }

    /// Any bits: an answer that is a number, or a reason.
    #[test]
    fn any_bits_give_a_number_or_a_reason(bits in prop::array::uniform8(any::<u32>())) {
        let [a, b, c, d, e, f, g, h] = bits.map(f32::from_bits);
        let finder = finder();
        let reading = Attributed { value: a, own: b, speed: c, density: d };
        for speed in [Scale { ratio: e, deviation: f }, Scale { ratio: 0.9, deviation: 0.01 }] {
            let density = Scale { ratio: g, deviation: h };
            let both = [finder.from_head(&reading, &speed), finder.from_power(&reading, &speed, &density)];
            for found in both.into_iter().flatten() {
                prop_assert!(found.flow.is_number() && found.elasticity.abs() >= FLATTEST);
            }
        }
    }
}
