//! Flow from what the machine does instead of from a meter: the measured head, or the measured shaft power, is carried
//! to the reference speed and looked up backwards in the expected curve.
//!
//! `Q = r·q` where `H₀(q) − k·q² = (H − k·Q²)/r²` (from head; `k·Q²` is the velocity head between unequal bores, moved
//! to the curve's side because the flow is not known yet), or `P₀(q) = (P/r³)·(ρ₀/ρ)` (from power), with `r = n/n₀`.
//! With the elasticities `e = dln y₀/dln q` the relative error of the answer is
//! `δQ/Q = (δH/H − 2·δn/n)/e_H + δn/n` and `δQ/Q = (δP/P − 3·δn/n − δρ/ρ)/e_P + δn/n`.
//!
//! Where it stops being true: where the curve turns or is nearly level one reading belongs to several flows, or to a
//! wide range of them. Such readings are refused with the reason ([`NoFlow`]); a branch is never guessed. The answer
//! assumes the machine still follows its curve, so a residual taken at this flow says nothing any more about the reading
//! it came from: see [`reconcile::residual`](crate::reconcile::residual). First order: below an elasticity of
//! [`FLATTEST`] the linear error is not believed and nothing is given.
//!
//! Iteration counts are fixed: the interval is found by four halvings where a curve runs one way and by a look at every
//! interval where it does not; one crossing is refined by seven guarded Newton steps, several by four each.

use crate::{
    affinity::RATIO_RANGE,
    machine::curve::{CurveError, CurveTable, KNOTS, Knot},
    math,
    quantity::VolumeFlow,
};

/// Smallest magnitude of `dln y/dln q` at which an answer is given; below it 1 % of reading is more than 3 % of flow.
/// Our choice, after the figure usual for soft-sensing of pump flow (common practice, no source).
pub const FLATTEST: f32 = 0.3;

/// How many flows an ambiguous answer can name. A head curve with a hump has two, a power curve that rises, sags and
/// rises again has three.
pub const CANDIDATES: usize = 3;

/// Guarded Newton steps to a flow, from the chord: 6 leave 9e-5 of the interval's rise for the worst monotone cubic, 7
/// leave rounding (measured over all admissible shapes in this module's tests).
const STEPS: usize = 7;

/// Guarded Newton steps to a candidate: within 2 % of the interval's rise. Nothing is computed from a candidate.
const CANDIDATE_STEPS: usize = 4;

/// Halvings that part [`KNOTS`] knots into single intervals.
const HALVINGS: usize = KNOTS.ilog2() as usize;

/// A second flow within this many standard uncertainties of the reading makes the answer ambiguous (95 %).
const REACH: f32 = 2.0;

/// A value with its standard uncertainty split by cause, so that two values that rest on one speed reading or one
/// density are not taken for independent (JCGM 100, 5.2).
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Attributed {
    /// The value, in the unit of its use.
    pub value: f32,
    /// Standard uncertainty by causes no other value shares, same unit, not negative.
    pub own: f32,
    /// (∂value/∂ω)·u(ω), same unit, signed.
    pub speed: f32,
    /// (∂value/∂ρ)·u(ρ), same unit, signed.
    pub density: f32,
}

impl Attributed {
    /// A reading of an instrument of its own; `deviation` is its standard uncertainty, same unit, not negative.
    #[must_use]
    pub const fn own(value: f32, deviation: f32) -> Self {
        Self { value, own: deviation, speed: 0.0, density: 0.0 }
    }

    /// The speed reading itself.
    #[must_use]
    pub const fn speed(value: f32, deviation: f32) -> Self {
        Self { value, own: 0.0, speed: deviation, density: 0.0 }
    }

    /// The density itself.
    #[must_use]
    pub const fn density(value: f32, deviation: f32) -> Self {
        Self { value, own: 0.0, speed: 0.0, density: deviation }
    }

    /// Product; the `own` parts of the two must be independent.
    #[must_use]
    pub fn times(&self, other: &Self) -> Self {
        self.combine(self.value * other.value, other.value, other, self.value)
    }

    /// Quotient; the `own` parts of the two must be independent, and the divisor is not zero.
    #[must_use]
    pub fn over(&self, other: &Self) -> Self {
        let quotient = self.value / other.value;
        self.combine(quotient, 1.0 / other.value, other, -quotient / other.value)
    }

    /// Standard uncertainty, all causes, in the value's unit.
    #[must_use]
    pub fn deviation(&self) -> f32 {
        math::root_sum_square([self.own, self.speed, self.density])
    }

    /// Covariance with another value, by the causes they share.
    #[must_use]
    pub fn covariance(&self, other: &Self) -> f32 {
        self.speed * other.speed + self.density * other.density
    }

    fn combine(&self, value: f32, mine: f32, other: &Self, theirs: f32) -> Self {
        Self {
            value,
            own: math::root_sum_square([self.own * mine, other.own * theirs]),
            speed: self.speed * mine + other.speed * theirs,
            density: self.density * mine + other.density * theirs,
        }
    }

    fn is_number(&self) -> bool {
        // One comparison: infinite or NaN if any part is.
        self.own >= 0.0 && (self.value.abs() + self.own + self.speed.abs() + self.density.abs()).is_finite()
    }
}

/// Speed or density relative to that of the curve, with its standard uncertainty.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Scale {
    /// n/n₀ or ρ/ρ₀.
    pub ratio: f32,
    /// Standard uncertainty of `ratio`, not negative.
    pub deviation: f32,
}

impl Scale {
    fn is_number(&self) -> bool {
        self.deviation >= 0.0 && (self.ratio.abs() + self.deviation).is_finite()
    }
}

/// A flow read backwards off the curve.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct CurveFlow {
    /// The flow, m³/s, with its uncertainty by cause.
    pub flow: Attributed,
    /// `dln y/dln q` of the curve it came from, at this flow; negative on a falling head curve.
    pub elasticity: f32,
}

/// Flows that one reading could stand for, in rising order.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Candidates {
    flows: [VolumeFlow; CANDIDATES],
    found: u8,
}

impl Candidates {
    /// The flows at the present speed, in rising order, [`CANDIDATES`] at most. A single one means that another lies
    /// within twice the reading's uncertainty.
    #[must_use]
    pub fn flows(&self) -> &[VolumeFlow] {
        self.flows.get(..usize::from(self.found).min(CANDIDATES)).unwrap_or(&self.flows)
    }

    /// How often the curve passes the reading; may exceed [`CANDIDATES`].
    #[must_use]
    pub const fn found(&self) -> u8 {
        self.found
    }
}

/// Why no flow can be told from a reading.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum NoFlow {
    /// A value or an uncertainty is infinite or NaN, or an uncertainty is negative.
    NotANumber,
    /// Speed outside the range the affinity laws are trusted in.
    SpeedOutOfRange,
    /// Density zero or negative.
    DensityNotPositive,
    /// The reading lies above the whole curve: above shut-off head, or more power than the curve has anywhere.
    AboveCurve,
    /// The reading lies below the whole curve: head below that at run-out, or less power than the curve has anywhere.
    BelowCurve,
    /// More than one flow fits.
    Ambiguous(Candidates),
    /// One flow fits, but the curve is so level there that the answer would be noise.
    TooFlat {
        /// `dln y/dln q` there; its magnitude is below [`FLATTEST`].
        elasticity: f32,
    },
}

impl NoFlow {
    /// A few words for tables and logs.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::NotANumber => "not a number",
            Self::SpeedOutOfRange => "speed out of range",
            Self::DensityNotPositive => "density not positive",
            Self::AboveCurve => "above shut-off",
            Self::BelowCurve => "below run-out",
            Self::Ambiguous(_) => "ambiguous",
            Self::TooFlat { .. } => "curve too flat",
        }
    }
}

/// Which of the two curves of a table.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Curve {
    /// Head over flow, the velocity head between the taps taken off.
    Head,
    /// Shaft power over flow.
    Power,
}

/// Why a table cannot be read backwards.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum NotInvertible {
    /// A curve turns between two knots, so its crossings could not be counted: put a knot at the turn.
    TurnsBetweenKnots {
        /// Which curve.
        curve: Curve,
        /// Position of the knot before the turn, from 0.
        knot: usize,
    },
    /// Taking the velocity head off left no valid table.
    Table(CurveError),
    /// Velocity head or a curve uncertainty is not finite, or an uncertainty is negative.
    NotANumber,
}

/// An expected curve made ready to be read backwards: checked once, when a profile is loaded.
#[derive(Clone, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct FlowFinder {
    /// Head with the velocity head between the taps taken off, and shaft power.
    table: CurveTable,
    velocity_head: f32,
    head_deviation: f32,
    power_deviation: f32,
    /// Whether head and power run one way over the whole table: then a reading is crossed once at most.
    one_way: [bool; 2],
}

/// One interval of one curve.
#[derive(Clone, Copy, Debug, Default)]
struct Piece {
    flow: f32,
    width: f32,
    /// Coefficients of the cubic in the place 0..=1 within the interval.
    cubic: [f32; 4],
}

impl Piece {
    fn new(curve: Curve, low: &Knot, high: &Knot) -> Self {
        let width = high.flow - low.flow;
        let ((start, start_slope), (end, end_slope)) = (ordinate(curve, low), ordinate(curve, high));
        let (rise, first, last) = (end - start, width * start_slope, width * end_slope);
        Self {
            flow: low.flow,
            width,
            cubic: [start, first, 3.0 * rise - 2.0 * first - last, first + last - 2.0 * rise],
        }
    }

    fn at(&self, t: f32) -> (f32, f32) {
        let [a, b, c, d] = self.cubic;
        (a + t * (b + t * (c + t * d)), b + t * (2.0 * c + t * (3.0 * d)))
    }

    /// Whether the cubic runs one way over the interval. A turn shallower than rounding is let pass.
    fn is_monotone(&self) -> bool {
        let [_, b, c, d] = self.cubic;
        let (start, middle, end) = (b, b + c, b + 2.0 * c + 3.0 * d); // the slope in Bernstein form
        let slack = 1e-5 * (b.abs() + c.abs() + d.abs());
        let sign = if b + c + d < 0.0 { -1.0 } else { 1.0 };
        if sign * start < -slack || sign * end < -slack {
            return false;
        }
        if sign * middle >= -slack {
            return true; // all three on one side: the slope cannot change sign
        }
        // The slope is level inside at t = -c/3d, if anywhere, and is (3bd − c²)/3d there.
        d == 0.0 || sign * (3.0 * b * d - c * c) / (3.0 * d) >= -slack
    }

    /// Where the cubic passes `target`, if its ends lie on both sides of it, after `N` steps.
    fn root<const N: usize>(&self, target: f32) -> f32 {
        let [start, b, c, d] = self.cubic;
        let rise = b + c + d;
        let (mut low, mut high) = (0.0_f32, 1.0_f32);
        let chord = (target - start) / rise;
        let mut t = if chord.is_finite() { chord.clamp(0.0, 1.0) } else { 0.5 };
        for _ in 0..N {
            let (value, slope) = self.at(t);
            let off = value - target;
            if (off > 0.0) == (rise > 0.0) {
                high = t;
            } else {
                low = t;
            }
            let newton = t - off / slope;
            t = if off == 0.0 {
                t
            } else if newton >= low && newton <= high {
                newton
            } else {
                0.5 * (low + high)
            };
        }
        t
    }
}

const fn ordinate(curve: Curve, knot: &Knot) -> (f32, f32) {
    match curve {
        Curve::Head => (knot.head, knot.head_slope),
        Curve::Power => (knot.power, knot.power_slope),
    }
}

/// What a look over all intervals finds.
#[derive(Default)]
struct Crossings {
    pieces: [Piece; CANDIDATES],
    found: u8,
    /// Whether the reading moved up or down by its uncertainty would cross more than once.
    others_near: bool,
}

impl FlowFinder {
    /// Makes a curve ready.
    ///
    /// `velocity_head` is that of the taps ([`Taps::velocity_head`](crate::head::Taps), m per (m³/s)²) when heads
    /// will be given without the velocity part; 0 when total heads will be given. `head_deviation` and
    /// `power_deviation` are the relative standard uncertainties of the two curves.
    ///
    /// # Errors
    /// [`NotInvertible`], naming the first interval in which a curve turns.
    pub fn new(
        curve: &CurveTable,
        velocity_head: f32,
        head_deviation: f32,
        power_deviation: f32,
    ) -> Result<Self, NotInvertible> {
        let finite = velocity_head.is_finite() && head_deviation.is_finite() && power_deviation.is_finite();
        if !finite || head_deviation < 0.0 || power_deviation < 0.0 {
            return Err(NotInvertible::NotANumber);
        }
        let mut knots: heapless::Vec<Knot, KNOTS> = heapless::Vec::new();
        for knot in curve.knots() {
            // A cubic less a parabola is a cubic: taking it off at the knots takes it off everywhere.
            let without = Knot {
                head: knot.head - velocity_head * knot.flow * knot.flow,
                head_slope: knot.head_slope - 2.0 * velocity_head * knot.flow,
                ..*knot
            };
            let _ = knots.push(without); // a table holds KNOTS at most
        }
        let table = CurveTable::new(&knots).map_err(NotInvertible::Table)?;
        for (knot, pair) in table.knots().windows(2).enumerate() {
            let [low, high] = pair else { continue };
            for curve in [Curve::Head, Curve::Power] {
                if !Piece::new(curve, low, high).is_monotone() {
                    return Err(NotInvertible::TurnsBetweenKnots { curve, knot });
                }
            }
        }
        let one_way = [Curve::Head, Curve::Power].map(|curve| {
            let heights = |pair: &[Knot]| match pair {
                [low, high] => (ordinate(curve, low).0, ordinate(curve, high).0),
                _ => (0.0, 0.0),
            };
            let pairs = || table.knots().windows(2).map(heights);
            pairs().all(|(low, high)| low <= high) || pairs().all(|(low, high)| low >= high)
        });
        Ok(Self { table, velocity_head, head_deviation, power_deviation, one_way })
    }

    /// Flow from head (m, without the velocity part when the finder was made with one) and speed.
    ///
    /// # Errors
    /// [`NoFlow`].
    pub fn from_head(&self, head: &Attributed, speed: &Scale) -> Result<CurveFlow, NoFlow> {
        if !head.is_number() || !speed.is_number() {
            return Err(NoFlow::NotANumber);
        }
        in_range(speed)?;
        let per_ratio = 1.0 / speed.ratio;
        let scale = per_ratio * per_ratio;
        let value = head.value * scale;
        let at_reference = Attributed {
            value,
            own: head.own * scale,
            speed: head.speed * scale - 2.0 * value * per_ratio * speed.deviation,
            density: head.density * scale,
        };
        self.invert(Curve::Head, at_reference, speed)
    }

    /// Flow from shaft power (W), speed and density.
    ///
    /// # Errors
    /// [`NoFlow`].
    pub fn from_power(&self, power: &Attributed, speed: &Scale, density: &Scale) -> Result<CurveFlow, NoFlow> {
        if !power.is_number() || !speed.is_number() || !density.is_number() {
            return Err(NoFlow::NotANumber);
        }
        in_range(speed)?;
        if density.ratio <= 0.0 {
            return Err(NoFlow::DensityNotPositive);
        }
        let (per_ratio, per_density) = (1.0 / speed.ratio, 1.0 / density.ratio);
        let scale = per_ratio * per_ratio * per_ratio * per_density;
        let value = power.value * scale;
        let at_reference = Attributed {
            value,
            own: power.own * scale,
            speed: power.speed * scale - 3.0 * value * per_ratio * speed.deviation,
            density: power.density * scale - value * per_density * density.deviation,
        };
        self.invert(Curve::Power, at_reference, speed)
    }

    /// Flow from a head or power carried to the reference speed and density.
    fn invert(&self, curve: Curve, reading: Attributed, speed: &Scale) -> Result<CurveFlow, NoFlow> {
        if !reading.is_number() {
            return Err(NoFlow::NotANumber);
        }
        let relative = if curve == Curve::Head { self.head_deviation } else { self.power_deviation };
        let parts = [reading.own, reading.speed, reading.density, relative * reading.value];
        let [head_one_way, power_one_way] = self.one_way;
        let one_way = if curve == Curve::Head { head_one_way } else { power_one_way };
        let crossings = if one_way {
            self.only_crossing(curve, reading.value)
        } else {
            self.all_crossings(curve, reading.value, REACH * math::root_sum_square(parts))
        };
        if crossings.found == 0 {
            let above = self.table.knots().first().is_some_and(|knot| reading.value > ordinate(curve, knot).0);
            return Err(if above { NoFlow::AboveCurve } else { NoFlow::BelowCurve });
        }
        if crossings.found > 1 || crossings.others_near {
            let flows = crossings.pieces.map(|piece| {
                let flow = piece.flow + piece.width * piece.root::<CANDIDATE_STEPS>(reading.value);
                VolumeFlow::from_cubic_metres_per_second(flow * speed.ratio)
            });
            return Err(NoFlow::Ambiguous(Candidates { flows, found: crossings.found }));
        }
        let [piece, ..] = crossings.pieces;
        let place = piece.root::<STEPS>(reading.value);
        let (value, per_place) = piece.at(place);
        let flow = piece.flow + piece.width * place;
        let elasticity = per_place * flow / (piece.width * value);
        if elasticity.is_nan() || elasticity.abs() < FLATTEST {
            return Err(NoFlow::TooFlat { elasticity });
        }
        // The curve's own uncertainty is a part of the head or power it promises, velocity head included.
        let promised = if curve == Curve::Head { value + self.velocity_head * flow * flow } else { value };
        let per_value = speed.ratio * piece.width / per_place; // dQ/dy, carried to the present speed
        let flow = Attributed {
            value: flow * speed.ratio,
            own: math::root_sum_square([reading.own, relative * promised]) * per_value.abs(),
            speed: reading.speed * per_value + flow * speed.deviation,
            density: reading.density * per_value,
        };
        if flow.is_number() { Ok(CurveFlow { flow, elasticity }) } else { Err(NoFlow::NotANumber) }
    }

    /// The crossing of a curve that runs one way, by halving: always [`HALVINGS`] of them.
    fn only_crossing(&self, curve: Curve, target: f32) -> Crossings {
        let knots = self.table.knots();
        let mut found = Crossings::default();
        let ([first, ..], [.., last]) = (knots, knots) else { return found }; // a table has two knots at least
        let (start, stop) = (ordinate(curve, first).0, ordinate(curve, last).0);
        let below = start < target;
        let (mut low, mut high) = (0_usize, knots.len().wrapping_sub(1));
        if below != (stop < target) {
            for _ in 0..HALVINGS {
                let middle = low.wrapping_add(high) >> 1;
                let same = knots.get(middle).is_some_and(|knot| (ordinate(curve, knot).0 < target) == below);
                if same {
                    low = middle;
                } else {
                    high = middle;
                }
            }
        } else if start == target {
            low = 0; // as in `all_crossings`, the ends of the table count as passed
        } else if stop == target {
            low = high.wrapping_sub(1);
        } else {
            return found;
        }
        if let Some([start, stop, ..]) = knots.get(low..) {
            let [slot, ..] = &mut found.pieces;
            *slot = Piece::new(curve, start, stop);
            found.found = 1;
        }
        found
    }

    /// All crossings of `target`, and whether there would be several `reach` above or below it. Looks at every interval.
    fn all_crossings(&self, curve: Curve, target: f32, reach: f32) -> Crossings {
        let knots = self.table.knots();
        let mut all = Crossings::default();
        let ([first, ..], [.., last]) = (knots, knots) else { return all }; // a table has two knots at least
        let (high, low) = (target + reach, target - reach);
        // Below which of the three a knot lies; what changes from knot to knot is a crossing. One byte each, so that three
        // counts, of 15 at most, add in one word.
        let side = |y: f32| u32::from(y < target) | u32::from(y < high) << 8 | u32::from(y < low) << 16;
        // A knot belongs to one side only, so that a curve that passes through it is counted once. At the two ends of
        // the table there is no other interval: a curve that comes down to the reading there, or starts up from it,
        // has not changed sides and is counted here.
        let on_first = ordinate(curve, first).0 == target;
        let on_last = ordinate(curve, last).0 == target;
        let mut before = side(ordinate(curve, first).0);
        let mut counts = 0_u32;
        let end = knots.len().wrapping_sub(2);
        for (position, pair) in knots.windows(2).enumerate() {
            let [start, stop] = pair else { continue };
            let after = side(ordinate(curve, stop).0);
            let mut changed = before ^ after;
            before = after;
            let starts_up = on_first && position == 0 && ordinate(curve, stop).0 > target;
            let comes_down = on_last && position == end && ordinate(curve, start).0 > target;
            if starts_up || comes_down {
                changed |= 1;
            }
            counts = counts.wrapping_add(changed);
            if changed & 1 != 0 {
                if let Some(slot) = all.pieces.get_mut(usize::from(all.found)) {
                    *slot = Piece::new(curve, start, stop);
                }
                all.found = all.found.wrapping_add(1);
            }
        }
        if all.found == 0 && (on_first || on_last) {
            // Level at the reading up to an end, and never below it.
            let pair = knots.get(if on_first { 0 } else { end }..);
            if let (Some([start, stop, ..]), [slot, ..]) = (pair, &mut all.pieces) {
                *slot = Piece::new(curve, start, stop);
                all.found = 1;
            }
        }
        all.others_near = (counts >> 8) & 0xff > 1 || counts >> 16 > 1;
        all
    }
}

fn in_range(speed: &Scale) -> Result<(), NoFlow> {
    if RATIO_RANGE.contains(&speed.ratio) { Ok(()) } else { Err(NoFlow::SpeedOutOfRange) }
}

#[cfg(test)]
mod tests;
