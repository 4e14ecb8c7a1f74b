//! A value that carries how each uncertain input moves it, so that every law is written once, as physics, and its
//! standard uncertainty follows by itself (first order, JCGM 100 clause 5).
//!
//! `by[i]` is (∂value/∂xᵢ)·u(xᵢ) in the value's own unit: a reading that enters twice adds up before it is squared,
//! so correlations are kept (power formed from torque and speed, efficiency from that power, share their speed error).
//! First order only: near zero flow, where a relative uncertainty grows without limit, the laws refuse instead.

use crate::math;

/// The independent inputs of one estimate.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Input {
    /// Discharge minus suction pressure, both gauges' uncertainties combined.
    PressureRise,
    Flow,
    Speed,
    Torque,
    Density,
    /// What a model or a curve adds on its own: one per value, never shared by two values that meet in a law.
    Model,
}

const INPUTS: usize = 6;

#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Uncertain {
    pub(crate) value: f32,
    by: [f32; INPUTS],
}

impl Uncertain {
    /// A value known exactly, for this purpose.
    pub(crate) const fn exact(value: f32) -> Self {
        Self { value, by: [0.0; INPUTS] }
    }

    /// An input with its standard uncertainty (same unit, not negative).
    pub(crate) fn input(input: Input, value: f32, deviation: f32) -> Self {
        let own = |at: Input| if at == input { deviation } else { 0.0 };
        let by = [
            own(Input::PressureRise),
            own(Input::Flow),
            own(Input::Speed),
            own(Input::Torque),
            own(Input::Density),
            own(Input::Model),
        ];
        Self { value, by }
    }

    /// Standard uncertainty, in the value's unit.
    pub(crate) fn deviation(&self) -> f32 {
        math::root_sum_square(self.by)
    }

    pub(crate) fn plus(&self, other: &Self) -> Self {
        self.combine(self.value + other.value, 1.0, other, 1.0)
    }

    pub(crate) fn minus(&self, other: &Self) -> Self {
        self.combine(self.value - other.value, 1.0, other, -1.0)
    }

    pub(crate) fn times(&self, other: &Self) -> Self {
        self.combine(self.value * other.value, other.value, other, self.value)
    }

    /// Division; the caller has made sure that the divisor is not zero.
    pub(crate) fn over(&self, other: &Self) -> Self {
        let quotient = self.value / other.value;
        self.combine(quotient, 1.0 / other.value, other, -quotient / other.value)
    }

    pub(crate) fn scaled(&self, factor: f32) -> Self {
        self.through(self.value * factor, factor)
    }

    /// A function of this value alone: its result and its slope here.
    pub(crate) fn through(&self, value: f32, slope: f32) -> Self {
        Self { value, by: self.by.map(|part| part * slope) }
    }

    /// Adds an uncertainty of its own, `deviation` in the value's unit, as [`Input::Model`].
    pub(crate) fn with_model(mut self, deviation: f32) -> Self {
        let [.., model] = &mut self.by;
        *model = math::root_sum_square([*model, deviation]);
        self
    }

    fn combine(&self, value: f32, own: f32, other: &Self, others: f32) -> Self {
        let mut by = self.by;
        for (mine, theirs) in by.iter_mut().zip(&other.by) {
            *mine = own * *mine + others * *theirs;
        }
        Self { value, by }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn independent_products_add_relative_variances() {
        let flow = Uncertain::input(Input::Flow, 4.0, 0.04); // 1 %
        let rise = Uncertain::input(Input::PressureRise, 5.0, 0.1); // 2 %
        let product = flow.times(&rise);
        assert_eq!(product.value, 20.0);
        assert!((product.deviation() - 20.0 * 0.05_f32.sqrt() / 10.0).abs() < 1e-6);
        let quotient = flow.over(&rise);
        assert!((quotient.deviation() / quotient.value - 0.05_f32.sqrt() / 10.0).abs() < 1e-7);
    }

    #[test]
    fn a_reading_that_enters_twice_is_not_counted_as_two() {
        let speed = Uncertain::input(Input::Speed, 10.0, 0.1);
        assert!((speed.times(&speed).deviation() - 2.0).abs() < 1e-6); // d(n²) = 2n·dn, not √2·n·dn
        assert_eq!(speed.minus(&speed).deviation(), 0.0);
        assert_eq!(speed.over(&speed).deviation(), 0.0);
    }

    #[test]
    fn model_uncertainty_adds_in_quadrature() {
        let torque = Uncertain::exact(50.0).with_model(3.0).with_model(4.0);
        assert!((torque.deviation() - 5.0).abs() < 1e-6);
    }
}
