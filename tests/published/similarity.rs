//! Affinity ratios of speed, at the ratios any text prints and at both ends of the trusted range.

use crate::{Check, OutOfScope};
use offcurve_core::{
    affinity::{self, SpeedRatio},
    quantity::{Head, Power, Torque, VolumeFlow},
};
use offcurve_tests::published::Arithmetic::Single;

/// What flow, head and power of 1 become at a speed ratio.
fn ratios(ratio: f32) -> Vec<f64> {
    let ratio = SpeedRatio::new(ratio).expect("a ratio in the trusted range");
    vec![
        f64::from(affinity::flow(VolumeFlow::from_cubic_metres_per_second(1.0), ratio).cubic_metres_per_second()),
        f64::from(affinity::head(Head::from_metres(1.0), ratio).metres()),
        f64::from(affinity::power(Power::from_watts(1.0), ratio, 1.0).watts()),
    ]
}

pub(crate) const CHECKS: &[Check] = &[
    ("04_similarity-21", Single, || ratios(0.5)),
    ("04_similarity-22", Single, || ratios(0.8)),
    ("04_similarity-23", Single, || ratios(1.2)),
];

pub(crate) const OUT_OF_SCOPE: &[OutOfScope] = &[
    (
        &["04_similarity-02"],
        "row 01 times a factor printed to four digits; the exact factor is row 06, the type number itself row 03",
    ),
    (
        &[
            "04_similarity-07",
            "04_similarity-08",
            "04_similarity-09",
            "04_similarity-10",
            "04_similarity-11",
            "04_similarity-12",
            "04_similarity-13",
            "04_similarity-14",
            "04_similarity-15",
            "04_similarity-16",
            "04_similarity-18",
            "04_similarity-19",
            "04_similarity-20",
        ],
        "geometric similarity between machines of different size: not in the core yet",
    ),
    (&["04_similarity-17"], "efficiency step with size: not in the core yet"),
    (&["04_similarity-24", "04_similarity-25"], "trimmed impellers: not in the core yet"),
];

#[test]
fn published_rows() {
    crate::run("04_similarity", CHECKS);
}

/// Source: affinity laws (any text). Tolerance: f32 rounding of at most four products, 3e-7.
#[test]
fn powers_of_the_ratio_over_the_trusted_range() {
    for step in 0..=100 {
        let ratio = (0.2 + 0.01 * f64::from(step)) as f32;
        let exact = f64::from(ratio);
        let got = ratios(ratio);
        let at = SpeedRatio::new(ratio).expect("in range");
        let torque = f64::from(affinity::torque(Torque::from_newton_metres(1.0), at, 1.25).newton_metres());
        for (got, want) in
            [(got[0], exact), (got[1], exact.powi(2)), (got[2], exact.powi(3)), (torque, 1.25 * exact.powi(2))]
        {
            assert!((got / want - 1.0).abs() < 3e-7, "ratio {ratio}: {got} for {want}");
        }
    }
}
