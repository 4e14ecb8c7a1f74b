//! What a viscous liquid takes from a pump's water curve: factors on flow, head and efficiency after ISO/TR 17766
//! (= ANSI/HI 9.6.7).
//!
//! `B = 16.5·ν^0.5·H^0.0625/(Q^0.375·n^0.25)` with ν in mm²/s, H in m per stage, Q in m³/h, n in rev/min, all at the best
//! efficiency point on WATER at the speed of now. For B above 1:
//! `C_Q = C_H(BEP) = 2.71^(−0.165·(log10 B)^3.15)` (the base is printed 2.71, not e),
//! `C_H = 1 − (1 − C_Q)·(Q/Q_BEP)^0.75`, `C_η = B^(−0.0547·B^0.69)`. For B up to 1 all are 1.
//!
//! Computed in f32 on the controller, not at design time: the viscosity of an oil halves within 10 to 20 K. Since Q ∝ n
//! and H ∝ n² at the best efficiency point, `B ∝ √(ν/n)`, so all roots of the pump's data are taken once and a step
//! costs one root, two logarithms, three exponentials. Largest relative errors against the formulas in f64, measured in
//! `tests/published/fluids.rs` for B from 1 to 100: B 3.7e-7, C_Q 5.2e-7, C_H 3.7e-7, C_η 3.1e-6.
//!
//! The formulas are fits to tests of conventional pumps: Newtonian liquids, radial wheels, enough NPSH. Results outside
//! the published ranges, and for B of 40 or more, are given but flagged. Not modelled: the extra efficiency step of the
//! standard for liquids thinner than B = 1, viscous losses on the suction side.

use crate::{
    affinity::SpeedRatio,
    math,
    quantity::{AngularSpeed, Head, KinematicViscosity, Ratio, VolumeFlow},
};

/// From this B up the factors are highly uncertain (as the standard says).
pub const UNCERTAIN_FROM: f32 = 40.0;
/// Kinematic viscosities of the published tests, mm²/s.
pub const VISCOSITY_RANGE: core::ops::RangeInclusive<f32> = 1.0..=3000.0;
/// Water flows at best efficiency of the published tests, m³/h.
pub const FLOW_RANGE: core::ops::RangeInclusive<f32> = 3.0..=260.0;
/// Water heads per stage at best efficiency of the published tests, m.
pub const HEAD_RANGE: core::ops::RangeInclusive<f32> = 6.0..=130.0;
/// Highest specific speed n_q (rev/min, m³/s, m) of the published method.
pub const HIGHEST_SPECIFIC_SPEED: f32 = 60.0;
/// Standard uncertainty of a factor as a part of the loss it stands for, `u(C) = 0.2·(1 − C)`. Our choice, no source.
pub const LOSS_DEVIATION: f32 = 0.2;

/// Why a pump or a liquid is refused.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ViscousError {
    /// Flow of best efficiency not from 1e-6 to 100 m³/s, or NaN.
    BestFlow {
        /// What was given, m³/s.
        found: f32,
    },
    /// Head per stage not from 0.01 to 10,000 m, or NaN.
    StageHead {
        /// What was given, m.
        found: f32,
    },
    /// Speed not from 0.1 to 10,000 rad/s, or NaN.
    Speed {
        /// What was given, rad/s.
        found: f32,
    },
    /// Viscosity not from 1e-9 to 10 m²/s, or NaN.
    Viscosity {
        /// What was given, m²/s.
        found: f32,
    },
    /// Standard uncertainty of the viscosity negative, infinite or NaN.
    Deviation {
        /// What was given, m²/s.
        found: f32,
    },
}

/// Which limits of the published method a result lies beyond.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Limits {
    /// B of [`UNCERTAIN_FROM`] or more.
    pub highly_uncertain: bool,
    /// Viscosity outside [`VISCOSITY_RANGE`].
    pub viscosity: bool,
    /// Water flow outside [`FLOW_RANGE`].
    pub flow: bool,
    /// Water head outside [`HEAD_RANGE`].
    pub head: bool,
    /// Specific speed above [`HIGHEST_SPECIFIC_SPEED`].
    pub specific_speed: bool,
}

impl Limits {
    /// Whether all of the published limits hold.
    #[must_use]
    pub fn are_kept(self) -> bool {
        self == Self::default()
    }
}

/// A pump's water data, reduced to what the correction needs.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ViscousPump {
    /// B² per mm²/s at the reference speed.
    square_per_viscosity: f32,
    /// m³/h at the reference speed.
    flow: f32,
    /// m per stage at the reference speed.
    head: f32,
    specific_speed: f32,
}

/// A factor with its uncertainty.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Factor {
    /// The factor, 0 to 1.
    pub value: f32,
    /// Change per relative change of the viscosity, dC/d(ln ν); 0 or negative.
    pub per_relative_viscosity: f32,
    /// Standard uncertainty: the viscosity's and the method's own.
    pub deviation: f32,
}

/// The correction at one viscosity and speed.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Correction {
    /// The parameter B.
    pub b: f32,
    /// C_Q: flow of a point, viscous over water; equal to C_H at the best efficiency point.
    pub flow: Factor,
    /// C_η: efficiency of a point, viscous over water.
    pub efficiency: Factor,
    /// Published limits that do not hold.
    pub limits: Limits,
    /// u(ν)/ν, for the factors that follow from these.
    relative_deviation: f32,
}

impl ViscousPump {
    /// A pump by its water data at its reference speed: flow at best efficiency (half of it for a double-suction
    /// wheel, as for the specific speed), head per stage there, speed.
    ///
    /// # Errors
    /// [`ViscousError`], naming the figure.
    pub fn new(best_flow: VolumeFlow, stage_head: Head, speed: AngularSpeed) -> Result<Self, ViscousError> {
        let found = best_flow.cubic_metres_per_second();
        if !(1e-6..=100.0).contains(&found) {
            return Err(ViscousError::BestFlow { found });
        }
        let head = stage_head.metres();
        if !(0.01..=1e4).contains(&head) {
            return Err(ViscousError::StageHead { found: head });
        }
        let radians = speed.radians_per_second();
        if !(0.1..=1e4).contains(&radians) {
            return Err(ViscousError::Speed { found: radians });
        }
        let flow = found * 3600.0;
        let turns = speed.revolutions_per_minute();
        // Roots of roots: H^(1/8), Q^(3/4), n^(1/2).
        let eighth = math::sqrt(math::sqrt(math::sqrt(head)));
        let square_per_viscosity = 16.5 * 16.5 * eighth / (three_quarters(flow) * math::sqrt(turns));
        let specific_speed = turns * math::sqrt(found) / three_quarters(head);
        Ok(Self { square_per_viscosity, flow, head, specific_speed })
    }

    /// The correction for a liquid of this kinematic viscosity and its standard uncertainty (same unit), at a speed.
    ///
    /// # Errors
    /// [`ViscousError::Viscosity`] or [`ViscousError::Deviation`].
    ///
    /// # Examples
    /// ```
    /// use offcurve_core::fluid::viscous::ViscousPump;
    /// use offcurve_core::{affinity::SpeedRatio, quantity::{AngularSpeed, Head, KinematicViscosity, VolumeFlow}};
    ///
    /// let pump = ViscousPump::new(
    ///     VolumeFlow::from_cubic_metres_per_second(110.0 / 3600.0),
    ///     Head::from_metres(77.0),
    ///     AngularSpeed::from_revolutions_per_minute(2950.0),
    /// )?;
    /// let oil = KinematicViscosity::from_square_millimetres_per_second(120.0);
    /// let exact = KinematicViscosity::from_square_metres_per_second(0.0);
    /// let found = pump.correction(oil, exact, SpeedRatio::new(1.0).expect("within the trusted range"))?;
    /// assert!((found.flow.value - 0.938).abs() < 0.001 && (found.efficiency.value - 0.738).abs() < 0.001);
    /// # Ok::<(), offcurve_core::fluid::viscous::ViscousError>(())
    /// ```
    pub fn correction(
        &self,
        viscosity: KinematicViscosity,
        deviation: KinematicViscosity,
        ratio: SpeedRatio,
    ) -> Result<Correction, ViscousError> {
        let found = viscosity.square_metres_per_second();
        if !(1e-9..=10.0).contains(&found) {
            return Err(ViscousError::Viscosity { found });
        }
        let spread = deviation.square_metres_per_second();
        if !spread.is_finite() || spread < 0.0 {
            return Err(ViscousError::Deviation { found: spread });
        }
        let ratio = ratio.get();
        let millimetres = viscosity.square_millimetres_per_second();
        let b = math::sqrt(self.square_per_viscosity * millimetres / ratio);
        let limits = Limits {
            highly_uncertain: b >= UNCERTAIN_FROM,
            viscosity: !VISCOSITY_RANGE.contains(&millimetres),
            flow: !FLOW_RANGE.contains(&(self.flow * ratio)),
            head: !HEAD_RANGE.contains(&(self.head * (ratio * ratio))),
            specific_speed: self.specific_speed > HIGHEST_SPECIFIC_SPEED,
        };
        let relative_deviation = spread / found;
        let ((flow, flow_slope), (efficiency, efficiency_slope)) = (flow_factor(b), efficiency_factor(b));
        Ok(Correction {
            b,
            flow: factor(flow, flow_slope, relative_deviation),
            efficiency: factor(efficiency, efficiency_slope, relative_deviation),
            limits,
            relative_deviation,
        })
    }
}

impl Correction {
    /// C_H: head of a point, viscous over water, at a water flow relative to that of best efficiency.
    ///
    /// `None` for a negative flow or NaN, where there is no correction.
    #[must_use]
    pub fn head(&self, relative_flow: Ratio) -> Option<Factor> {
        let q = relative_flow.fraction();
        if !(q >= 0.0 && q.is_finite()) {
            return None;
        }
        let weight = three_quarters(q);
        let value = 1.0 - (1.0 - self.flow.value) * weight;
        // Far beyond run-out the form turns negative; the pump has no head there.
        let value = if value > 0.0 { value } else { 0.0 };
        Some(factor(value, self.flow.per_relative_viscosity * weight, self.relative_deviation))
    }

    /// Shaft power of a point, viscous over water, per density ratio: `C_Q·C_H/C_η`, from `P = ρgQH/η`.
    ///
    /// `None` where [`head`](Self::head) has none, and where the efficiency factor is 0.
    #[must_use]
    pub fn power(&self, relative_flow: Ratio) -> Option<f32> {
        let head = self.head(relative_flow)?;
        (self.efficiency.value > 0.0).then(|| self.flow.value * head.value / self.efficiency.value)
    }
}

fn factor(value: f32, per_relative_viscosity: f32, relative_deviation: f32) -> Factor {
    let deviation =
        math::root_sum_square([per_relative_viscosity * relative_deviation, LOSS_DEVIATION * (1.0 - value)]);
    Factor { value, per_relative_viscosity, deviation }
}

/// x^0.75, x not negative.
fn three_quarters(x: f32) -> f32 {
    let root = math::sqrt(x);
    root * math::sqrt(root)
}

/// C_Q of B, and dC_Q/d(ln ν) where B ∝ √ν.
fn flow_factor(b: f32) -> (f32, f32) {
    /// 0.165·ln 2.71, the base as printed.
    const STEEPNESS: f32 = 0.164_496_52;
    const INVERSE_LN_10: f32 = core::f32::consts::LOG10_E;
    if b <= 1.0 {
        return (1.0, 0.0);
    }
    let decades = math::ln(b) * INVERSE_LN_10;
    let loss = STEEPNESS * math::exp(3.15 * math::ln(decades));
    let value = math::exp(-loss);
    (value, value * loss / decades * (-0.5 * 3.15 * INVERSE_LN_10))
}

/// C_η of B, and dC_η/d(ln ν).
fn efficiency_factor(b: f32) -> (f32, f32) {
    if b <= 1.0 {
        return (1.0, 0.0);
    }
    let logarithm = math::ln(b);
    let exponent = 0.0547 * math::exp(0.69 * logarithm);
    let value = math::exp(-exponent * logarithm);
    (value, -0.5 * value * exponent * (1.0 + 0.69 * logarithm))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn pump(flow: f32, head: f32, turns: f32) -> Result<ViscousPump, ViscousError> {
        ViscousPump::new(
            VolumeFlow::from_cubic_metres_per_second(flow / 3600.0),
            Head::from_metres(head),
            AngularSpeed::from_revolutions_per_minute(turns),
        )
    }

    fn at(pump: &ViscousPump, viscosity: f32, deviation: f32, ratio: f32) -> Result<Correction, ViscousError> {
        let unit = KinematicViscosity::from_square_millimetres_per_second;
        pump.correction(unit(viscosity), unit(deviation), SpeedRatio::new(ratio).unwrap())
    }

    fn example() -> ViscousPump {
        pump(110.0, 77.0, 2950.0).unwrap()
    }

    #[test]
    fn thin_liquids_take_nothing() {
        let water = at(&example(), 1.0, 0.1, 1.0).unwrap();
        assert!(water.b < 1.0 && water.limits.are_kept());
        assert_eq!((water.flow.value, water.efficiency.value, water.flow.deviation), (1.0, 1.0, 0.0));
        assert_eq!(water.head(Ratio::from_fraction(1.3)).map(|head| head.value), Some(1.0));
        assert_eq!(water.power(Ratio::from_fraction(0.5)), Some(1.0));
    }

    /// A slower pump is the same as one whose water data are those of the slower speed.
    #[test]
    fn speed_enters_as_the_affinity_laws_say() {
        let ratio = 0.6_f32;
        let slow = pump(110.0 * ratio, 77.0 * ratio * ratio, 2950.0 * ratio).unwrap();
        let (carried, direct) = (at(&example(), 60.0, 0.0, ratio).unwrap(), at(&slow, 60.0, 0.0, 1.0).unwrap());
        assert!((carried.b / direct.b - 1.0).abs() < 1e-6, "{} {}", carried.b, direct.b);
        assert!((carried.efficiency.value - direct.efficiency.value).abs() < 1e-6);
    }

    #[test]
    fn slopes_and_uncertainties_are_those_of_the_values() {
        for viscosity in [10.0_f32, 120.0, 1500.0] {
            let step = 0.01_f32;
            let (here, low, high) = (
                at(&example(), viscosity, 0.1 * viscosity, 1.0).unwrap(),
                at(&example(), viscosity * (-step).exp(), 0.0, 1.0).unwrap(),
                at(&example(), viscosity * step.exp(), 0.0, 1.0).unwrap(),
            );
            let q = Ratio::from_fraction(0.7);
            for (factor, low, high) in [
                (here.flow, low.flow, high.flow),
                (here.efficiency, low.efficiency, high.efficiency),
                (here.head(q).unwrap(), low.head(q).unwrap(), high.head(q).unwrap()),
            ] {
                let slope = (high.value - low.value) / (2.0 * step);
                assert!(
                    (factor.per_relative_viscosity - slope).abs() < 2e-3 * slope.abs() + 2e-5,
                    "{factor:?} {slope}"
                );
                let wanted = (0.1 * slope).hypot(0.2 * (1.0 - factor.value));
                assert!((factor.deviation / wanted - 1.0).abs() < 5e-3, "{factor:?} {wanted}");
            }
        }
    }

    #[test]
    fn each_published_limit_is_flagged() {
        let limits = |pump: ViscousPump, viscosity| at(&pump, viscosity, 0.0, 1.0).unwrap().limits;
        let kept = Limits::default();
        assert_eq!(limits(example(), 120.0), kept);
        assert_eq!(limits(example(), 0.9), Limits { viscosity: true, ..kept });
        assert_eq!(limits(example(), 3001.0), Limits { viscosity: true, ..kept });
        assert_eq!(limits(pump(2.9, 30.0, 2950.0).unwrap(), 100.0), Limits { flow: true, ..kept });
        assert_eq!(limits(pump(261.0, 77.0, 2950.0).unwrap(), 100.0), Limits { flow: true, ..kept });
        assert_eq!(limits(pump(110.0, 131.0, 2950.0).unwrap(), 100.0), Limits { head: true, ..kept });
        assert_eq!(limits(pump(20.0, 5.9, 1000.0).unwrap(), 100.0), Limits { head: true, ..kept });
        assert_eq!(limits(pump(200.0, 15.0, 2950.0).unwrap(), 100.0), Limits { specific_speed: true, ..kept });
        let small = pump(5.0, 30.0, 1450.0).unwrap();
        assert_eq!(
            limits(small, 900.0),
            Limits { highly_uncertain: at(&small, 900.0, 0.0, 1.0).unwrap().b >= 40.0, ..kept }
        );
        assert!(limits(small, 2900.0).highly_uncertain && !limits(small, 100.0).highly_uncertain);
        // Slowed down, the water head leaves the published range.
        assert!(at(&example(), 120.0, 0.0, 0.25).unwrap().limits.head);
    }

    #[test]
    fn bad_figures_are_named() {
        assert_eq!(pump(0.0, 77.0, 2950.0), Err(ViscousError::BestFlow { found: 0.0 }));
        assert_eq!(pump(110.0, -1.0, 2950.0), Err(ViscousError::StageHead { found: -1.0 }));
        assert_eq!(pump(110.0, 77.0, 0.0), Err(ViscousError::Speed { found: 0.0 }));
        assert!(matches!(pump(f32::NAN, 77.0, 2950.0), Err(ViscousError::BestFlow { .. })));
        assert!(matches!(pump(110.0, f32::INFINITY, 2950.0), Err(ViscousError::StageHead { .. })));
        assert!(matches!(pump(110.0, 77.0, f32::NAN), Err(ViscousError::Speed { .. })));
        assert_eq!(at(&example(), 0.0, 0.0, 1.0), Err(ViscousError::Viscosity { found: 0.0 }));
        assert!(matches!(at(&example(), f32::NAN, 0.0, 1.0), Err(ViscousError::Viscosity { .. })));
        assert!(matches!(at(&example(), 100.0, -1.0, 1.0), Err(ViscousError::Deviation { .. })));
        assert!(matches!(at(&example(), 100.0, f32::NAN, 1.0), Err(ViscousError::Deviation { .. })));
        let oil = at(&example(), 120.0, 0.0, 1.0).unwrap();
        for bad in [-0.1, f32::NAN, f32::INFINITY] {
            assert_eq!(oil.head(Ratio::from_fraction(bad)), None);
            assert_eq!(oil.power(Ratio::from_fraction(bad)), None);
        }
        assert_eq!(oil.head(Ratio::from_fraction(0.0)).map(|head| head.value), Some(1.0));
    }

    proptest! {
        #[test]
        fn factors_stay_factors(
            viscosity in 1e-3_f32..1e7, flow in 0.01_f32..1e5, head in 0.01_f32..1e4, turns in 1.0_f32..9e4,
            ratio in 0.2_f32..1.2, q in 0.0_f32..3.0, spread in 0.0_f32..1e7,
        ) {
            let found = at(&pump(flow, head, turns).unwrap(), viscosity, spread, ratio).unwrap();
            let head = found.head(Ratio::from_fraction(q)).unwrap();
            for factor in [found.flow, found.efficiency, head] {
                prop_assert!((0.0..=1.0).contains(&factor.value), "{factor:?}");
                prop_assert!(factor.per_relative_viscosity <= 0.0 && factor.deviation >= 0.0, "{factor:?}");
            }
            prop_assert_eq!(found.limits.highly_uncertain, found.b >= 40.0);
        }
    }
}
