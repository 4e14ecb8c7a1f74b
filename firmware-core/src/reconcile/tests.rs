//! Least squares against elimination in f64, verdicts against machines worn and sensors shifted by formulas of this
//! file (a parabola for head, one for efficiency), never by the code under test.

use super::*;
use crate::{
    inverse::{FlowFinder, Scale},
    machine::{
        curve::{CurveTable, Knot},
        design::monotone_slopes,
    },
};
use proptest::prelude::*;
use std::{vec, vec::Vec};

fn witness(value: f64, own: f64, speed: f64, density: f64) -> Attributed {
    Attributed { value: value as f32, own: own as f32, speed: speed as f32, density: density as f32 }
}

fn curve_flow(flow: Attributed, elasticity: f32) -> CurveFlow {
    CurveFlow { flow, elasticity }
}

/// Solves `a·x = b` by elimination with pivoting.
fn solve(mut a: Vec<Vec<f64>>, mut b: Vec<f64>) -> Vec<f64> {
    let n = b.len();
    for k in 0..n {
        let pivot = (k..n).max_by(|&i, &j| a[i][k].abs().total_cmp(&a[j][k].abs())).unwrap();
        a.swap(k, pivot);
        b.swap(k, pivot);
        let upper = a[k].clone();
        for i in k + 1..n {
            let factor = a[i][k] / upper[k];
            for (low, high) in a[i].iter_mut().zip(&upper).skip(k) {
                *low -= factor * high;
            }
            b[i] -= factor * b[k];
        }
    }
    for k in (0..n).rev() {
        b[k] = (b[k] - (k + 1..n).map(|j| a[k][j] * b[j]).sum::<f64>()) / a[k][k];
    }
    b
}

/// Mean, variance and χ² of generalised least squares for one unknown, in f64.
fn least_squares(all: &[Attributed]) -> (f64, f64, f64) {
    let n = all.len();
    let f = |value: f32| f64::from(value);
    let covariance: Vec<Vec<f64>> = (0..n)
        .map(|i| {
            (0..n)
                .map(|j| {
                    let shared = f(all[i].speed) * f(all[j].speed) + f(all[i].density) * f(all[j].density);
                    shared + if i == j { f(all[i].own).powi(2) } else { 0.0 }
                })
                .collect()
        })
        .collect();
    let weights = solve(covariance.clone(), vec![1.0; n]);
    let information: f64 = weights.iter().sum();
    let mean = all.iter().zip(&weights).map(|(x, w)| f(x.value) * w).sum::<f64>() / information;
    let residual: Vec<f64> = all.iter().map(|x| f(x.value) - mean).collect();
    let pulled = solve(covariance, residual.clone());
    (mean, 1.0 / information, residual.iter().zip(pulled).map(|(r, p)| r * p).sum())
}

#[test]
fn two_plain_witnesses_are_weighted_by_variance() {
    let found =
        reconcile(Some(witness(10.0, 1.0, 0.0, 0.0)), Some(curve_flow(witness(13.0, 2.0, 0.0, 0.0), -0.5)), None)
            .unwrap();
    // (10/1 + 13/4)/(1 + 1/4), 1/√1.25, (3²)/(1 + 4).
    assert!((found.flow.si() - 10.6).abs() < 1e-6);
    assert!((found.deviation.si() - 0.8_f32.sqrt()).abs() < 1e-6);
    assert!((found.chi_square - 1.8).abs() < 1e-5);
    assert_eq!((found.degrees_of_freedom, found.verdict, found.suspects), (1, Verdict::Consistent, Suspects::NONE));
    let [Some(meter), Some(head), None] = found.misfit else { panic!("{found:?}") };
    assert!((meter + 1.8_f32.sqrt()).abs() < 1e-5 && (head - 1.8_f32.sqrt()).abs() < 1e-5, "{found:?}");
    assert!(matches!(found.source, FlowSource::Reconciled(used) if used.bits() == 0b011));
}

#[test]
fn one_witness_is_passed_on() {
    let only = witness(0.02, 1e-4, 2e-4, 0.0);
    for (found, source) in [
        (reconcile(Some(only), None, None), FlowSource::Meter),
        (reconcile(None, Some(curve_flow(only, -1.0)), None), FlowSource::Head),
        (reconcile(None, None, Some(curve_flow(only, 0.5))), FlowSource::Power),
    ] {
        let found = found.unwrap();
        assert!((found.flow.si() - 0.02).abs() < 1e-9 && (found.deviation.si() - only.deviation()).abs() < 1e-9);
        assert_eq!((found.source, found.chi_square, found.degrees_of_freedom), (source, 0.0, 0));
        assert_eq!((found.misfit, found.verdict), ([None; 3], Verdict::NotRedundant));
    }
}

#[test]
fn what_cannot_be_weighed_is_refused() {
    let good = witness(0.02, 1e-4, 0.0, 0.0);
    assert_eq!(reconcile(None, None, None), Err(Unreconciled::NoWitness));
    for bad in [
        witness(f64::NAN, 1e-4, 0.0, 0.0),
        witness(f64::INFINITY, 1e-4, 0.0, 0.0),
        witness(0.02, 0.0, 0.0, 0.0),
        witness(0.02, f64::NAN, 0.0, 0.0),
        witness(0.02, f64::INFINITY, 0.0, 0.0),
    ] {
        assert_eq!(reconcile(Some(bad), None, None), Err(Unreconciled::BadUncertainty));
        assert_eq!(reconcile(Some(good), None, Some(curve_flow(bad, 1.0))), Err(Unreconciled::BadUncertainty));
    }
    // Nothing but the shared speed: one witness twice.
    let shared = curve_flow(witness(0.02, 1e-7, 1e-3, 0.0), -1.0);
    assert_eq!(reconcile(None, Some(shared), Some(shared)), Err(Unreconciled::NotIndependent));
}

#[test]
fn consumed_residuals_are_marked() {
    let head = Suspects::HEAD;
    let known: Outcome<u8> = Ok(Estimated { value: 3, deviation: 1, source: crate::estimate::Source::Measured });
    assert_eq!(residual(head, FlowSource::Meter, known).map(|found| found.value), Ok(3));
    assert_eq!(residual(head, FlowSource::Power, known).map(|found| found.value), Ok(3));
    assert_eq!(residual(head, FlowSource::Head, known), Err(NoResidual::Consumed));
    let both = FlowSource::Reconciled(Suspects::METER.with(head, true));
    assert_eq!(residual(head, both, known), Err(NoResidual::Consumed));
    assert_eq!(residual(Suspects::POWER, both, known).map(|found| found.value), Ok(3));
    let missing: Outcome<u8> = Err(Missing::NotRunning);
    assert_eq!(residual(head, FlowSource::Meter, missing), Err(NoResidual::Missing(Missing::NotRunning)));
    // A residual that its own reading made is no residual, value or not.
    assert_eq!(residual(head, FlowSource::Head, missing), Err(NoResidual::Consumed));
}

/// A pump by formula: head a parabola, efficiency a parabola with its top at 0.024 m³/s.
fn head(q: f64) -> f64 {
    38.0 - 13_000.0 * q * q
}

fn power(q: f64) -> f64 {
    let efficiency = if q < 1e-9 { return 3300.0 } else { 0.78 * (1.0 - ((q - 0.024) / 0.024).powi(2)) };
    // The parabola of efficiency through 0 leaves a finite power at shut-off: ρgH/(0.78·2/0.024).
    998.0 * 9.81 * q * head(q) / efficiency
}

fn finder() -> FlowFinder {
    let flows: Vec<f64> = (0..16).map(|k| 0.0025 * f64::from(k)).collect();
    let (heads, powers): (Vec<f64>, Vec<f64>) = flows.iter().map(|&q| (head(q), power(q.max(1e-6)))).unzip();
    let (head_slopes, power_slopes) = (monotone_slopes(&flows, &heads), monotone_slopes(&flows, &powers));
    let knots: Vec<Knot> = (0..16)
        .map(|k| Knot {
            flow: flows[k] as f32,
            head: heads[k] as f32,
            head_slope: head_slopes[k] as f32,
            power: powers[k] as f32,
            power_slope: power_slopes[k] as f32,
        })
        .collect();
    FlowFinder::new(&CurveTable::new(&knots).unwrap(), 0.0, 0.005, 0.005).unwrap()
}

/// What the instruments say: flow, head, power, speed ratio.
#[derive(Clone, Copy, Debug)]
struct Readings {
    flow: f64,
    head: f64,
    power: f64,
    ratio: f64,
}

fn sound(q: f64, ratio: f64) -> Readings {
    Readings { flow: q * ratio, head: head(q) * ratio.powi(2), power: power(q) * ratio.powi(3), ratio }
}

/// Reconciled with 0.5 % of flow, 0.3 % of head, 0.4 % of power, 0.05 % of speed; `None` where a curve witness has no
/// answer.
fn judged(finder: &FlowFinder, r: Readings) -> Option<Reconciled> {
    let speed = Scale { ratio: r.ratio as f32, deviation: (5e-4 * r.ratio) as f32 };
    let density = Scale { ratio: 1.0, deviation: 0.0 };
    let part = |value: f64, part: f64| Attributed::own(value as f32, (part * value) as f32);
    let by_head = finder.from_head(&part(r.head, 0.003), &speed).ok()?;
    let by_power = finder.from_power(&part(r.power, 0.004), &speed, &density).ok()?;
    Some(reconcile(Some(part(r.flow, 0.005)), Some(by_head), Some(by_power)).unwrap())
}

fn blames_a_sensor(found: &Reconciled) -> bool {
    matches!(found.verdict, Verdict::Sensor(_))
}

/// Operating points where both curve witnesses have an answer, at reference speed.
fn points() -> Vec<f64> {
    (0..=9).map(|k| 0.020 + 0.001 * f64::from(k)).collect()
}

#[test]
fn a_sound_machine_is_consistent() {
    let finder = finder();
    let mut judged_points = 0;
    for q in points() {
        for ratio in [0.5, 0.8, 1.0] {
            let Some(found) = judged(&finder, sound(q, ratio)) else { continue };
            judged_points += 1;
            assert_eq!(found.verdict, Verdict::Consistent, "{q} {ratio}: {found:?}");
            assert!(found.chi_square < 0.1, "{q} {ratio}: {found:?}");
            assert!((f64::from(found.flow.si()) / (q * ratio) - 1.0).abs() < 2e-3);
        }
    }
    assert!(judged_points >= 24, "{judged_points}");
}

/// Ways a machine declines while every sensor is right; `part` is how far.
type Wear = (&'static str, fn(Readings, f64, f64) -> Readings);

/// Internal leakage: the wheel carries more than is delivered. Worn wheel: less head, and less power by what that head
/// cost. Rough walls: head alone. Drag: power alone. Gas, or a lighter liquid: head, and most of the power.
const WEAR: [Wear; 5] = [
    ("leakage", |r, q, part| {
        let inside = sound(q * (1.0 + part), r.ratio);
        Readings { head: inside.head, power: inside.power, ..r }
    }),
    ("worn wheel", |r, q, part| {
        let lost = 2.3 * part * head(0.0) * r.ratio.powi(2);
        let saved = 998.0 * 9.81 * q * r.ratio * lost + 0.2 * part * 9000.0 * r.ratio.powi(3);
        Readings { head: r.head - lost, power: r.power - saved, ..r }
    }),
    ("rough walls", |r, _, part| Readings { head: r.head * (1.0 - part), ..r }),
    ("drag", |r, _, part| Readings { power: r.power * (1.0 + part), ..r }),
    ("lighter liquid", |r, _, part| Readings { head: r.head * (1.0 - part), power: r.power * (1.0 - 0.9 * part), ..r }),
];

/// No wear at any severity, point or speed, seen by perfect sensors, ends in a sensor's name.
#[test]
fn a_worn_machine_with_perfect_sensors_blames_no_sensor() {
    let finder = finder();
    for (name, wear) in WEAR {
        let (mut judgements, mut noticed, mut machine) = (0, 0, 0);
        for q in points() {
            for ratio in [0.6, 1.0] {
                for step in 1..=60 {
                    let part = 0.0025 * f64::from(step);
                    let Some(found) = judged(&finder, wear(sound(q, ratio), q, part)) else { continue };
                    judgements += 1;
                    assert!(!blames_a_sensor(&found), "{name} {part} at {q}, {ratio}: {found:?}");
                    if found.verdict != Verdict::Consistent {
                        noticed += 1;
                        assert!(found.suspects.contains(Suspects::MACHINE), "{name} {part} at {q}: {found:?}");
                        machine += i32::from(found.verdict == Verdict::Machine);
                    }
                }
            }
        }
        std::println!("{name}: {judgements} judged, {noticed} noticed, {machine} 'machine'");
        assert!(judgements > 80 && noticed > 20, "{name}: {judgements} {noticed}");
    }
}

/// Leakage leaves head and power agreeing with each other against the meter: the pattern that plain statistics would call a
/// bad meter.
#[test]
fn leakage_looks_like_a_low_meter_and_is_left_open() {
    let finder = finder();
    let found = judged(&finder, WEAR[0].1(sound(0.022, 1.0), 0.022, 0.08)).unwrap();
    assert_eq!(found.verdict, Verdict::Ambiguous, "{found:?}");
    assert!(found.suspects.contains(Suspects::METER) && found.suspects.contains(Suspects::MACHINE), "{found:?}");
    assert!(!found.suspects.contains(Suspects::HEAD) && !found.suspects.contains(Suspects::POWER), "{found:?}");
    let [Some(meter), Some(by_head), Some(by_power)] = found.misfit else { panic!("{found:?}") };
    assert!(meter < -4.0 && meter.abs() > by_head.abs().max(by_power.abs()), "{found:?}");
    let low = judged(&finder, Readings { flow: 0.022 / 1.08, ..sound(0.022, 1.0) }).unwrap();
    assert_eq!((low.verdict, low.suspects), (found.verdict, found.suspects), "the same fingerprint");
}

#[test]
fn what_no_machine_can_do_names_the_instrument() {
    let finder = finder();
    let r = sound(0.026, 0.9);
    for (shifted, instrument) in [
        (Readings { flow: r.flow * 1.08, ..r }, Instrument::FlowMeter),
        (Readings { head: r.head * 1.04, ..r }, Instrument::Pressure),
        (Readings { power: r.power * 0.94, ..r }, Instrument::Torque),
    ] {
        let found = judged(&finder, shifted).unwrap();
        assert_eq!(found.verdict, Verdict::Sensor(instrument), "{found:?}");
    }
    // The other way, wear explains it as well.
    for shifted in [
        Readings { flow: r.flow / 1.08, ..r },
        Readings { head: r.head * 0.94, ..r },
        Readings { power: r.power * 1.06, ..r },
    ] {
        let found = judged(&finder, shifted).unwrap();
        assert_eq!(found.verdict, Verdict::Ambiguous, "{found:?}");
        assert!(found.suspects.contains(Suspects::MACHINE), "{found:?}");
    }
    // A wrong speed moves two witnesses at once: never the fault of another instrument alone.
    for factor in [0.97, 0.98, 1.02, 1.03] {
        let found = judged(&finder, Readings { ratio: r.ratio * factor, ..r }).unwrap();
        assert_ne!(found.verdict, Verdict::Consistent);
        assert!(found.suspects.contains(Suspects::SPEED), "{factor}: {found:?}");
    }
}

#[test]
fn two_witnesses_never_name_one() {
    let far = |value: f64| curve_flow(witness(value, 1.0, 0.0, 0.0), -0.5);
    for value in [-40.0, 40.0] {
        for found in [
            reconcile(Some(witness(0.0, 1.0, 0.0, 0.0)), Some(far(value)), None),
            reconcile(None, Some(far(0.0)), Some(curve_flow(far(value).flow, 0.4))),
        ] {
            assert_eq!(found.unwrap().verdict, Verdict::Ambiguous);
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(3000))]

    #[test]
    fn closed_form_matches_elimination(
        values in prop::array::uniform3(0.018_f64..0.022),
        own in prop::array::uniform3(1e-4_f64..2e-3),
        speed in prop::array::uniform3(-1e-3_f64..1e-3),
        density in prop::array::uniform3(-1e-3_f64..1e-3),
        fitted in 1_u8..8,
    ) {
        let all: Vec<Option<Attributed>> = (0..3)
            .map(|k| (fitted & (1 << k) != 0).then(|| witness(values[k], own[k], speed[k], density[k])))
            .collect();
        let present: Vec<Attributed> = all.iter().flatten().copied().collect();
        let found = reconcile(all[0], all[1].map(|w| curve_flow(w, -0.6)), all[2].map(|w| curve_flow(w, 0.5)));
        let Ok(found) = found else {
            prop_assert_eq!(found, Err(Unreconciled::NotIndependent));
            return Ok(())
        };
        let (mean, variance, chi_square) = least_squares(&present);
        prop_assert!((f64::from(found.flow.si()) - mean).abs() < 1e-3 * variance.sqrt() + 1e-8, "{found:?} {mean}");
        prop_assert!((f64::from(found.deviation.si()) / variance.sqrt() - 1.0).abs() < 1e-3);
        prop_assert!((f64::from(found.chi_square) - chi_square).abs() < 2e-3 * (1.0 + chi_square), "{found:?} {chi_square}");
        prop_assert_eq!(usize::from(found.degrees_of_freedom), present.len() - 1);
        // A witness's misfit squared is what χ² loses without it.
        for k in 0..3 {
            let Some(misfit) = found.misfit[k] else { continue };
            let others: Vec<Attributed> = (0..3).filter(|&j| j != k).filter_map(|j| all[j]).collect();
            let (_, _, without) = least_squares(&others);
            let lost = chi_square - without;
            prop_assert!((f64::from(misfit).powi(2) - lost).abs() < 5e-3 * (1.0 + chi_square), "{k}: {misfit} {lost}");
        }
    }

    /// Any bits: numbers, or a reason.
    #[test]
    fn any_bits_give_numbers_or_a_reason(bits in prop::array::uniform14(any::<u32>())) {
        let [a, b, c, d, e, f, g, h, i, j, k, l, m, n] = bits.map(f32::from_bits);
        let one = Attributed { value: a, own: b, speed: c, density: d };
        let two = curve_flow(Attributed { value: e, own: f, speed: g, density: h }, i);
        let three = curve_flow(Attributed { value: j, own: k, speed: l, density: m }, n);
        let all = [
            reconcile(Some(one), Some(two), Some(three)),
            reconcile(Some(one), Some(two), None),
            reconcile(None, Some(two), None),
        ];
        for found in all.into_iter().flatten() {
            let numbers = [found.flow.si(), found.deviation.si(), found.chi_square];
            prop_assert!(numbers.iter().all(|number| number.is_finite()), "{found:?}");
            prop_assert!(found.misfit.iter().flatten().all(|misfit| !misfit.is_nan()), "{found:?}");
        }
    }
}

/// A linear congruential generator (constants of Knuth's MMIX, from memory) and twelve-sum normals: enough for counting.
struct Noise(u64);

impl Noise {
    fn normal(&mut self) -> f64 {
        (0..12)
            .map(|_| {
                self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
                (self.0 >> 11) as f64 / (1_u64 << 53) as f64
            })
            .sum::<f64>()
            - 6.0
    }
}

/// Counts over noisy readings: sound machines called inconsistent, worn ones blamed on a sensor.
#[test]
fn noise_does_not_turn_wear_into_a_sensor_fault() {
    let finder = finder();
    let mut noise = Noise(1);
    let mut noisy = |r: Readings| Readings {
        flow: r.flow * (1.0 + 0.005 * noise.normal()),
        // Instrument and curve together: 0.3 and 0.5 %, 0.4 and 0.5 %.
        head: r.head * (1.0 + 0.00583 * noise.normal()),
        power: r.power * (1.0 + 0.0064 * noise.normal()),
        ratio: r.ratio * (1.0 + 5e-4 * noise.normal()),
    };
    let (mut sound_ones, mut inconsistent) = (0, 0);
    for _ in 0..40_000 {
        let Some(found) = judged(&finder, noisy(sound(0.023, 0.9))) else { continue };
        sound_ones += 1;
        inconsistent += i32::from(found.verdict != Verdict::Consistent);
    }
    let share = f64::from(inconsistent) / f64::from(sound_ones);
    std::println!("sound machines: {inconsistent} of {sound_ones} inconsistent");
    assert!(sound_ones > 35_000 && share < 0.004 && share > 0.0002, "{inconsistent} of {sound_ones}, wanted 0.001");
    for (name, wear) in WEAR {
        let (mut worn, mut noticed, mut blamed) = (0, 0, 0);
        for k in 0..8000 {
            let part = 0.00001 * f64::from(k);
            let Some(found) = judged(&finder, noisy(wear(sound(0.023, 0.9), 0.023, part))) else { continue };
            worn += 1;
            noticed += i32::from(found.verdict != Verdict::Consistent);
            blamed += i32::from(blames_a_sensor(&found));
        }
        std::println!("{name}: {worn} judged, {noticed} noticed, {blamed} blamed on a sensor");
        assert!(f64::from(blamed) < 0.002 * f64::from(worn), "{name}: {blamed} of {worn}");
        assert!(worn > 3000, "{name}: {worn}");
    }
}

/// 95 % intervals of both curve flows and of the reconciled one over draws of instruments, speed, density and curve, at
/// points, speeds and densities drawn evenly: they cover the truth in 90 to 98 %.
#[test]
fn intervals_cover_the_truth() {
    let finder = finder(); // curves good for 0.5 % each
    let mut noise = Noise(7);
    let mut covered = [(0, 0); 3];
    for _ in 0..3000 {
        let between = |noise: &mut Noise, low: f64, high: f64| {
            noise.normal();
            low + (high - low) * (noise.0 >> 11) as f64 / (1_u64 << 53) as f64
        };
        let (q, ratio) = (between(&mut noise, 0.022, 0.031), between(&mut noise, 0.3, 1.1));
        let density = between(&mut noise, 0.9, 1.1);
        let truth = q * ratio;
        let speed_seen = ratio * (1.0 + 0.001 * noise.normal());
        let density_seen = density * (1.0 + 0.002 * noise.normal());
        // The head is pressure over the density assumed, the power torque times the speed seen: errors enter twice.
        let head_seen =
            head(q) * ratio.powi(2) * (1.0 + 0.005 * noise.normal()) * (1.0 + 0.003 * noise.normal()) * density
                / density_seen;
        let torque_seen =
            power(q) * ratio.powi(2) * density * (1.0 + 0.005 * noise.normal()) * (1.0 + 0.004 * noise.normal());
        let flow_seen = truth * (1.0 + 0.005 * noise.normal());

        let part = |value: f64, part: f64| Attributed::own(value as f32, (part * value) as f32);
        let speed = Scale { ratio: speed_seen as f32, deviation: (0.001 * speed_seen) as f32 };
        let density = Scale { ratio: density_seen as f32, deviation: (0.002 * density_seen) as f32 };
        let weight = Attributed::density(density.ratio, density.deviation);
        let pressure = part(head_seen * density_seen, 0.003);
        let by_head = finder.from_head(&pressure.over(&weight), &speed).ok();
        let turning = Attributed::speed(speed.ratio, speed.deviation);
        let by_power = finder.from_power(&part(torque_seen, 0.004).times(&turning), &speed, &density).ok();
        let together = reconcile(Some(part(flow_seen, 0.005)), by_head, by_power).unwrap();
        let curves = [by_head, by_power].map(|found| found.map(|found| (found.flow.value, found.flow.deviation())));
        let [by_head, by_power] = curves;
        for (count, found) in
            covered.iter_mut().zip([by_head, by_power, Some((together.flow.si(), together.deviation.si()))])
        {
            let Some((value, deviation)) = found else { continue };
            count.0 += i32::from((f64::from(value) - truth).abs() <= 1.96 * f64::from(deviation));
            count.1 += 1;
        }
    }
    for (name, (inside, all)) in ["from head", "from power", "reconciled"].into_iter().zip(covered) {
        let share = f64::from(inside) / f64::from(all);
        std::println!("flow {name}: 95 % intervals cover {:.1} % of {all}", 100.0 * share);
        assert!(all >= 1000 && (0.90..=0.98).contains(&share), "{name}: {inside} of {all}");
    }
}
