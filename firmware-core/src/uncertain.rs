//! A value that carries how each uncertain input moves it, so that every law is written once, as physics, and its
//! standard uncertainty follows by itself (first order, JCGM 100 clause 5).
//!
//! Four inputs can enter one law twice, so each has its own signed contribution (∂value/∂xᵢ)·u(xᵢ), in the value's unit:
//! it adds up before it is squared, and correlations are kept (power formed from torque and speed, and efficiency from
//! that power, share their speed error). What enters once only, a torque reading or a model's own error, is a variance
//! that just adds.
//! First order only: near zero flow, where a relative uncertainty grows without limit, the laws refuse instead.

use crate::math;

/// The inputs that may meet themselves again within one law.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Input {
    /// Discharge minus suction pressure, both gauges' uncertainties combined.
    PressureRise,
    Flow,
    Speed,
    Density,
}

/// Named fields, not an array: there is no loop for a compiler that saves space to leave rolled.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Uncertain {
    pub(crate) value: f32,
    rise: f32,
    flow: f32,
    speed: f32,
    density: f32,
    /// Variance of what enters once, in the value's unit squared.
    own: f32,
}

impl Uncertain {
    /// A value known exactly, for this purpose.
    pub(crate) const fn exact(value: f32) -> Self {
        Self { value, rise: 0.0, flow: 0.0, speed: 0.0, density: 0.0, own: 0.0 }
    }

    /// A shared input with its standard uncertainty (same unit, not negative).
    pub(crate) const fn input(input: Input, value: f32, deviation: f32) -> Self {
        let exact = Self::exact(value);
        match input {
            Input::PressureRise => Self { rise: deviation, ..exact },
            Input::Flow => Self { flow: deviation, ..exact },
            Input::Speed => Self { speed: deviation, ..exact },
            Input::Density => Self { density: deviation, ..exact },
        }
    }

    /// An input that enters every law once at most, with its standard uncertainty.
    pub(crate) const fn once(value: f32, deviation: f32) -> Self {
        Self::exact(value).with_own(deviation)
    }

    /// Standard uncertainty, in the value's unit.
    pub(crate) fn deviation(&self) -> f32 {
        let shared =
            self.rise * self.rise + self.flow * self.flow + self.speed * self.speed + self.density * self.density;
        math::sqrt(shared + self.own)
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
        let inverse = 1.0 / other.value;
        let quotient = self.value * inverse;
        self.combine(quotient, inverse, other, -quotient * inverse)
    }

    pub(crate) fn scaled(&self, factor: f32) -> Self {
        self.through(self.value * factor, factor)
    }

    /// A function of this value alone: its result and its slope here.
    pub(crate) fn through(&self, value: f32, slope: f32) -> Self {
        Self {
            value,
            rise: self.rise * slope,
            flow: self.flow * slope,
            speed: self.speed * slope,
            density: self.density * slope,
            own: self.own * (slope * slope),
        }
    }

    /// Moved by an exact offset.
    pub(crate) fn shifted(mut self, offset: f32) -> Self {
        self.value += offset;
        self
    }

    /// Adds an uncertainty that enters here and nowhere else, `deviation` in the value's unit.
    pub(crate) const fn with_own(mut self, deviation: f32) -> Self {
        self.own += deviation * deviation;
        self
    }

    fn combine(&self, value: f32, own: f32, other: &Self, others: f32) -> Self {
        Self {
            value,
            rise: own * self.rise + others * other.rise,
            flow: own * self.flow + others * other.flow,
            speed: own * self.speed + others * other.speed,
            density: own * self.density + others * other.density,
            own: own * own * self.own + others * others * other.own,
        }
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
    fn what_enters_once_adds_as_a_variance() {
        let torque = Uncertain::once(50.0, 3.0).with_own(4.0);
        assert!((torque.deviation() - 5.0).abs() < 1e-6);
    }
}
