//! The expected curve of a machine at its reference speed: head and shaft power over flow, as a shape-preserving
//! piecewise cubic, because a test sheet gives a dozen points and the curve between them must not invent humps.
//!
//! Between knots `k` and `k+1`, with `h = q[k+1] − q[k]` and `t = (q − q[k])/h`, the cubic Hermite form
//! `y = y[k] + t·(h·s[k] + t·(3Δ − h·(2s[k] + s[k+1]) + t·(h·(s[k] + s[k+1]) − 2Δ)))`, `Δ = y[k+1] − y[k]`.
//! The slopes `s` are chosen on the host ([`design::monotone_slopes`](super::design::monotone_slopes)) after
//! Fritsch and Butland (1984), so that each interval is monotone. Outside the first and last knot there is no curve.

use crate::quantity::{Head, Power, VolumeFlow};

/// The most knots a table holds.
pub const KNOTS: usize = 16;

/// One knot: the point and the slopes of both curves there.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Knot {
    /// Flow, m³/s.
    pub flow: f32,
    /// Head, m.
    pub head: f32,
    /// Slope of the head curve, m per m³/s.
    pub head_slope: f32,
    /// Shaft power, W.
    pub power: f32,
    /// Slope of the power curve, W per m³/s.
    pub power_slope: f32,
}

/// Why points do not make a curve.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum CurveError {
    /// A curve needs 2 to [`KNOTS`] knots.
    KnotCount {
        /// How many there were.
        found: usize,
    },
    /// Flows must be finite and rise strictly.
    FlowsNotRising {
        /// Position of the first knot out of order, from 0.
        knot: usize,
    },
    /// Heads and slopes must be finite, shaft powers positive.
    BadKnot {
        /// Position of the knot, from 0.
        knot: usize,
    },
}

/// A point read off the table, with the slopes that uncertainties need.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct CurvePoint {
    /// Head at the reference speed.
    pub head: Head,
    /// dH/dQ at the reference speed, m per m³/s.
    pub head_slope: f32,
    /// Shaft power at the reference speed and density.
    pub power: Power,
    /// dP/dQ at the reference speed and density, W per m³/s.
    pub power_slope: f32,
}

/// Head and shaft power over flow at the reference speed.
#[derive(Clone, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct CurveTable {
    knots: heapless::Vec<Knot, KNOTS>,
}

impl CurveTable {
    /// A table from knots in rising order of flow.
    ///
    /// # Errors
    /// [`CurveError`], naming the first knot that breaks a rule.
    pub fn new(knots: &[Knot]) -> Result<Self, CurveError> {
        if knots.len() < 2 {
            return Err(CurveError::KnotCount { found: knots.len() });
        }
        let mut before: Option<f32> = None;
        for (position, knot) in knots.iter().enumerate() {
            if !knot.flow.is_finite() || before.is_some_and(|flow| flow >= knot.flow) {
                return Err(CurveError::FlowsNotRising { knot: position });
            }
            before = Some(knot.flow);
            let finite = [knot.head, knot.head_slope, knot.power, knot.power_slope].iter().all(|v| v.is_finite());
            if !finite || knot.power <= 0.0 {
                return Err(CurveError::BadKnot { knot: position });
            }
        }
        let knots = heapless::Vec::from_slice(knots).map_err(|_| CurveError::KnotCount { found: knots.len() })?;
        Ok(Self { knots })
    }

    /// The knots, in rising order of flow.
    #[must_use]
    pub fn knots(&self) -> &[Knot] {
        &self.knots
    }

    /// First and last flow of the table.
    #[must_use]
    pub fn flow_range(&self) -> (VolumeFlow, VolumeFlow) {
        let flow = |knot: Option<&Knot>| VolumeFlow::from_cubic_metres_per_second(knot.map_or(0.0, |k| k.flow));
        (flow(self.knots.first()), flow(self.knots.last()))
    }

    /// Reads the table at a flow; `None` outside [`flow_range`](Self::flow_range), NaN included.
    #[must_use]
    pub fn at(&self, flow: VolumeFlow) -> Option<CurvePoint> {
        let q = flow.cubic_metres_per_second();
        // Looks at every interval, whatever the flow, so that the time does not depend on the operating point.
        let mut found = None;
        for pair in self.knots.windows(2) {
            if let [low, high] = pair
                && q >= low.flow
                && q <= high.flow
            {
                found = Some((low, high));
            }
        }
        let (low, high) = found?;
        let width = high.flow - low.flow;
        let t = (q - low.flow) / width;
        let (head, head_slope) = hermite(t, width, (low.head, low.head_slope), (high.head, high.head_slope));
        let (power, power_slope) = hermite(t, width, (low.power, low.power_slope), (high.power, high.power_slope));
        Some(CurvePoint { head: Head::from_metres(head), head_slope, power: Power::from_watts(power), power_slope })
    }
}

/// Value and slope of the cubic through two (value, slope) ends, at the place `t` in 0..=1 of an interval.
fn hermite(t: f32, width: f32, low: (f32, f32), high: (f32, f32)) -> (f32, f32) {
    let rise = high.0 - low.0;
    let (start, end) = (width * low.1, width * high.1);
    let quadratic = 3.0 * rise - 2.0 * start - end;
    let cubic = start + end - 2.0 * rise;
    let value = low.0 + t * (start + t * (quadratic + t * cubic));
    let slope = (start + t * (2.0 * quadratic + t * (3.0 * cubic))) / width;
    (value, slope)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn knot(flow: f32, head: f32, head_slope: f32) -> Knot {
        Knot { flow, head, head_slope, power: 100.0 + flow, power_slope: 1.0 }
    }

    fn at(table: &CurveTable, q: f32) -> Option<CurvePoint> {
        table.at(VolumeFlow::from_cubic_metres_per_second(q))
    }

    #[test]
    fn reproduces_a_cubic_exactly() {
        // y = q³ − 2q² + 3, y' = 3q² − 4q: a cubic Hermite piece must give it back.
        let y = |q: f32| (q * q * q - 2.0 * q * q + 3.0, 3.0 * q * q - 4.0 * q);
        let ends = [0.0_f32, 1.0, 2.5].map(|q| knot(q, y(q).0, y(q).1));
        let table = CurveTable::new(&ends).unwrap();
        for q in [0.0, 0.25, 0.5, 1.0, 1.7, 2.5] {
            let point = at(&table, q).unwrap();
            assert!((point.head.metres() - y(q).0).abs() < 3e-6, "head at {q}");
            assert!((point.head_slope - y(q).1).abs() < 2e-5, "slope at {q}");
            assert!((point.power.watts() - (100.0 + q)).abs() < 1e-4, "power at {q}");
        }
    }

    #[test]
    fn there_is_no_curve_outside_the_knots() {
        let table = CurveTable::new(&[knot(1.0, 10.0, 0.0), knot(2.0, 9.0, -1.0)]).unwrap();
        for q in [0.999, 2.001, f32::NAN, f32::INFINITY, -1.0] {
            assert_eq!(at(&table, q), None, "{q}");
        }
        assert!(at(&table, 1.0).is_some() && at(&table, 2.0).is_some());
    }

    #[test]
    fn bad_knots_are_named() {
        let good = knot(0.0, 10.0, 0.0);
        assert_eq!(CurveTable::new(&[good]), Err(CurveError::KnotCount { found: 1 }));
        assert_eq!(CurveTable::new(&[knot(0.0, 1.0, 0.0); 17]), Err(CurveError::FlowsNotRising { knot: 1 }));
        let many: [Knot; 17] = core::array::from_fn(|k| knot(k as f32, 1.0, 0.0));
        assert_eq!(CurveTable::new(&many), Err(CurveError::KnotCount { found: 17 }));
        assert_eq!(CurveTable::new(&[good, good]), Err(CurveError::FlowsNotRising { knot: 1 }));
        assert_eq!(CurveTable::new(&[good, knot(1.0, f32::NAN, 0.0)]), Err(CurveError::BadKnot { knot: 1 }));
        let no_power = Knot { power: 0.0, ..knot(1.0, 1.0, 0.0) };
        assert_eq!(CurveTable::new(&[good, no_power]), Err(CurveError::BadKnot { knot: 1 }));
    }
}
