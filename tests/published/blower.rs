//! Affinity laws on a real machine: a small blower measured at three speeds.
//!
//! Source: repository RespiraWorks/Ventilator, folder manufacturing/internals/blower/characterization-tests/20200505
//! (Apache-2.0); `reference/13_blower_measured.csv` holds medians of twelve equal-count groups per speed, plausible rows
//! only. A quadratic through the groups at 24,000 rev/min is carried to the other two speeds by the core's affinity
//! laws and held against what was measured there. Pressure stands for head: the air is the same.
//!
//! What it shows: over a speed's groups the mean deviation is within about +1 and −3 % of the shut-off pressure, where
//! the uncarried curve is 14 to 18 % off. What it does not show: single groups scatter by 3 to 5 % and reach 12 % at
//! the lowest flows of the slow speed, so these data bear out the laws from 0.9 to 1.1, not finer than that. There is
//! no power in them.

use core::ops::RangeInclusive;
use offcurve_core::{
    affinity::{self, SpeedRatio},
    quantity::{Head, VolumeFlow},
};
use offcurve_tests::published;

const REFERENCE_SPEED: f64 = 24_000.0;

/// A group of readings.
#[derive(Clone, Copy, Debug)]
struct Group {
    /// rev/min.
    speed: f64,
    /// l/min.
    flow: f64,
    /// kPa.
    pressure: f64,
}

fn groups() -> Vec<Group> {
    let path = published::path("13_blower_measured");
    let mut reader = csv::Reader::from_path(path).expect("the reference file is readable");
    reader
        .records()
        .map(|record| {
            let record = record.expect("a row of the reference file");
            let number = |column: usize| record[column].parse().expect("a number");
            Group { speed: number(0), flow: number(1), pressure: number(2) }
        })
        .collect()
}

/// Least squares: `p = a + b·q + c·q²` by Cramer's rule on the normal equations, flow in units of its largest.
struct Quadratic {
    coefficients: [f64; 3],
    unit: f64,
    flows: RangeInclusive<f64>,
}

impl Quadratic {
    fn through(groups: &[Group]) -> Self {
        let (low, high) =
            groups.iter().fold((f64::MAX, f64::MIN), |(low, high), group| (low.min(group.flow), high.max(group.flow)));
        let mut sums = [0.0; 5];
        let mut right = [0.0; 3];
        for group in groups {
            let x = group.flow / high;
            for (power, sum) in sums.iter_mut().enumerate() {
                *sum += x.powi(power as i32);
            }
            for (power, sum) in right.iter_mut().enumerate() {
                *sum += group.pressure * x.powi(power as i32);
            }
        }
        let rows = [0, 1, 2].map(|row| [sums[row], sums[row + 1], sums[row + 2]]);
        let determinant = |m: [[f64; 3]; 3]| {
            m[0][0] * (m[1][1] * m[2][2] - m[1][2] * m[2][1]) - m[0][1] * (m[1][0] * m[2][2] - m[1][2] * m[2][0])
                + m[0][2] * (m[1][0] * m[2][1] - m[1][1] * m[2][0])
        };
        let whole = determinant(rows);
        let coefficients = [0, 1, 2].map(|column| {
            let mut replaced = rows;
            for (row, &value) in replaced.iter_mut().zip(&right) {
                row[column] = value;
            }
            determinant(replaced) / whole
        });
        Self { coefficients, unit: high, flows: low..=high }
    }

    fn at(&self, flow: f64) -> f64 {
        let [a, b, c] = self.coefficients;
        let x = flow / self.unit;
        a + x * (b + x * c)
    }

    /// The curve at another speed, by the core; `None` where the flow, carried back, was not measured at the reference
    /// speed.
    fn carried(&self, speed: f64, flow: f64) -> Option<f64> {
        let (there, back) = (ratio(speed / REFERENCE_SPEED), ratio(REFERENCE_SPEED / speed));
        let flow = affinity::flow(VolumeFlow::from_cubic_metres_per_second(flow as f32), back);
        let flow = f64::from(flow.cubic_metres_per_second());
        let pressure = Head::from_metres(self.at(flow) as f32);
        self.flows.contains(&flow).then(|| f64::from(affinity::head(pressure, there).metres()))
    }
}

fn ratio(ratio: f64) -> SpeedRatio {
    SpeedRatio::new(ratio as f32).expect("the speeds are within the trusted range of each other")
}

/// Mean and root mean square.
fn mean_and_rms(deviations: &[f64]) -> (f64, f64) {
    let n = deviations.len() as f64;
    (deviations.iter().sum::<f64>() / n, (deviations.iter().map(|d| d * d).sum::<f64>() / n).sqrt())
}

#[test]
fn a_curve_at_one_speed_predicts_the_others() {
    let groups = groups();
    assert_eq!(groups.len(), 36, "twelve groups at each of three speeds");
    let (reference, others): (Vec<Group>, Vec<Group>) =
        groups.into_iter().partition(|group| group.speed == REFERENCE_SPEED);
    let curve = Quadratic::through(&reference);
    for speed in [21_818.0, 26_666.0] {
        let measured: Vec<&Group> = others.iter().filter(|group| group.speed == speed).collect();
        assert_eq!(measured.len(), 12);
        // Parts of the shut-off pressure at the speed measured.
        let shut_off = curve.at(0.0) * (speed / REFERENCE_SPEED).powi(2);
        let judged: Vec<(f64, f64)> = measured
            .iter()
            .filter_map(|group| {
                let carried = curve.carried(speed, group.flow)?;
                let part = |expected: f64| 100.0 * (group.pressure - expected) / shut_off;
                Some((part(carried), part(curve.at(group.flow))))
            })
            .collect();
        assert_eq!(judged.len(), 11, "one group per speed lies outside the flows measured at the reference speed");
        let (carried, uncarried): (Vec<f64>, Vec<f64>) = judged.into_iter().unzip();
        let ((mean, rms), (plain_mean, plain_rms)) = (mean_and_rms(&carried), mean_and_rms(&uncarried));
        println!(
            "{speed} rev/min, % of shut-off pressure: carried mean {mean:+.2} rms {rms:.2}, \
             not carried mean {plain_mean:+.2} rms {plain_rms:.2}"
        );
        let allowed = -3.5..=1.5;
        assert!(allowed.contains(&mean), "{speed} rev/min: mean deviation {mean:+.2} %, allowed {allowed:?}");
        assert!(!allowed.contains(&plain_mean), "{speed} rev/min: even without the laws {plain_mean:+.2} %");
        assert!(plain_mean.abs() > 12.0, "{speed} rev/min: {plain_mean:+.2} %, the data no longer tell the laws apart");
        assert!(rms < 0.5 * plain_rms, "{speed} rev/min: rms {rms:.2} % carried, {plain_rms:.2} % not carried");
    }
}
