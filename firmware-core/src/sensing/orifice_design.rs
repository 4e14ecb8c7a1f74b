//! Design-time maths of an orifice plate in f64, for the host that prepares a profile: discharge coefficient,
//! expansibility and mass flow, with the limits they hold within. None of it runs on a controller, which gets the
//! full-scale flow of a [`FlowElement`](super::flow_element::FlowElement).
//!
//! ISO 5167-2:2003: `q_m = C/√(1 − β⁴)·ε·(π/4)·d²·√(2·Δp·ρ1)`, C by Reader-Harris/Gallagher (equation 4), and
//! `ε = 1 − (0.351 + 0.256·β⁴ + 0.93·β⁸)·(1 − (p2/p1)^(1/κ))`. C depends on the Reynolds number and so on the flow:
//! solved by repeated substitution, which converges because C hardly moves. Limits of use are from memory of the standard;
//! outside them a figure still comes out, with [`Limits`] saying which limit it breaks. Worn edges, swirl, pulsation and
//! wet gas are not modelled.

extern crate std;

use core::f64::consts::PI;

/// Where the pressure is tapped.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Taps {
    /// At the corners of the plate.
    Corner,
    /// In the flanges, 25.4 mm from the plate on both sides.
    Flange,
    /// One pipe bore upstream, half a bore downstream.
    DAndHalfD,
}

/// An orifice plate in its pipe, at working temperature.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Orifice {
    /// Bore of the pipe D, m.
    pub pipe_bore: f64,
    /// Bore of the plate d, m.
    pub bore: f64,
    /// Where the pressure is tapped.
    pub taps: Taps,
}

/// The fluid at the upstream tap.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Upstream {
    /// Pressure p1, Pa absolute.
    pub pressure: f64,
    /// Density ρ1, kg/m³.
    pub density: f64,
    /// Dynamic viscosity μ1, Pa·s.
    pub viscosity: f64,
    /// Isentropic exponent κ of a gas; `None` for a liquid, which does not expand (ε = 1).
    pub isentropic_exponent: Option<f64>,
}

/// Why there is no figure at all.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
pub enum OrificeError {
    /// A dimension or a property of the fluid is not a positive number.
    NotPositive {
        /// Which one.
        what: &'static str,
        /// What it is.
        found: f64,
    },
    /// The plate's bore is not smaller than the pipe's.
    BoreTooWide {
        /// d/D.
        beta: f64,
    },
    /// The pressure difference is negative, no number, or takes more than the upstream pressure.
    PressureDifference {
        /// What it is, Pa.
        found: f64,
    },
}

/// Limits of use of the standard (from memory); `true` where the limit is met.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Limits {
    /// 50 mm ≤ D ≤ 1000 mm.
    pub pipe_bore: bool,
    /// d ≥ 12.5 mm.
    pub bore: bool,
    /// 0.1 ≤ β ≤ 0.75.
    pub beta: bool,
    /// Re_D ≥ 5000 and, corner or D–D/2 taps with β > 0.56, Re_D ≥ 16000·β²; flange taps Re_D ≥ 170·β²·D with D in mm.
    pub reynolds: bool,
    /// p2/p1 ≥ 0.75.
    pub pressure_ratio: bool,
}

impl Limits {
    /// Whether every limit is met.
    #[must_use]
    pub const fn all_met(&self) -> bool {
        self.pipe_bore && self.bore && self.beta && self.reynolds && self.pressure_ratio
    }
}

/// What a plate passes.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct OrificeFlow {
    /// Mass flow, kg/s.
    pub mass_flow: f64,
    /// Discharge coefficient C.
    pub coefficient: f64,
    /// Expansibility ε.
    pub expansibility: f64,
    /// Reynolds number in the pipe, Re_D = 4·q_m/(π·D·μ1).
    pub reynolds: f64,
    /// Which limits of use are met.
    pub limits: Limits,
}

/// Substitutions of the Reynolds number; each gains about two digits at 5000, three at a million.
const SUBSTITUTIONS: usize = 30;

impl Orifice {
    /// Diameter ratio β = d/D.
    #[must_use]
    pub fn beta(&self) -> f64 {
        self.bore / self.pipe_bore
    }

    /// Discharge coefficient by Reader-Harris/Gallagher (ISO 5167-2:2003, equation 4) at a pipe Reynolds number.
    ///
    /// The term for pipes below 71.12 mm is included.
    #[must_use]
    pub fn coefficient(&self, reynolds: f64) -> f64 {
        let beta = self.beta();
        let (b2, b4, b8) = (beta.powi(2), beta.powi(4), beta.powi(8));
        let (upstream, downstream) = match self.taps {
            Taps::Corner => (0.0, 0.0),
            Taps::Flange => (0.0254 / self.pipe_bore, 0.0254 / self.pipe_bore),
            Taps::DAndHalfD => (1.0, 0.47),
        };
        let a = (19_000.0 * beta / reynolds).powf(0.8);
        let m = 2.0 * downstream / (1.0 - beta);
        let low_reynolds = (0.0188 + 0.0063 * a) * beta.powf(3.5) * (1e6 / reynolds).powf(0.3);
        let upstream_term =
            (0.043 + 0.080 * (-10.0 * upstream).exp() - 0.123 * (-7.0 * upstream).exp()) * (1.0 - 0.11 * a) * b4
                / (1.0 - b4);
        let downstream_term = -0.031 * (m - 0.8 * m.powf(1.1)) * beta.powf(1.3);
        // 0.0254 m: the small-pipe term counts in inches, as the standard's 2.8 − D/25.4 with D in mm does.
        let small_pipe =
            if self.pipe_bore < 0.07112 { 0.011 * (0.75 - beta) * (2.8 - self.pipe_bore / 0.0254) } else { 0.0 };
        0.5961 + 0.0261 * b2 - 0.216 * b8
            + 0.000_521 * (1e6 * beta / reynolds).powf(0.7)
            + low_reynolds
            + upstream_term
            + downstream_term
            + small_pipe
    }

    /// Expansibility ε of a gas: `upstream` and `downstream` pressure in Pa absolute.
    #[must_use]
    pub fn expansibility(&self, upstream: f64, downstream: f64, isentropic_exponent: f64) -> f64 {
        let beta = self.beta();
        1.0 - (0.351 + 0.256 * beta.powi(4) + 0.93 * beta.powi(8))
            * (1.0 - (downstream / upstream).powf(1.0 / isentropic_exponent))
    }

    /// Mass flow at a pressure difference in Pa; 0 gives 0.
    ///
    /// # Errors
    /// [`OrificeError`] where no figure exists. Limits of use do not refuse, see [`OrificeFlow::limits`].
    ///
    /// # Examples
    /// ```
    /// use offcurve_core::sensing::orifice_design::{Orifice, Taps, Upstream};
    ///
    /// let plate = Orifice { pipe_bore: 0.1, bore: 0.06, taps: Taps::Flange };
    /// let water = Upstream { pressure: 4e5, density: 998.2, viscosity: 1.0e-3, isentropic_exponent: None };
    /// let full_scale = plate.mass_flow(&water, 25_000.0)?;
    /// assert!(full_scale.limits.all_met());
    /// assert!((full_scale.mass_flow / 998.2 - 0.01306).abs() < 1e-4); // m³/s at 25 kPa
    /// # Ok::<(), offcurve_core::sensing::orifice_design::OrificeError>(())
    /// ```
    pub fn mass_flow(&self, fluid: &Upstream, pressure_difference: f64) -> Result<OrificeFlow, OrificeError> {
        let positive = [
            ("pipe bore", self.pipe_bore),
            ("plate bore", self.bore),
            ("upstream pressure", fluid.pressure),
            ("density", fluid.density),
            ("viscosity", fluid.viscosity),
            ("isentropic exponent", fluid.isentropic_exponent.unwrap_or(1.0)),
        ];
        if let Some(&(what, found)) = positive.iter().find(|(_, value)| !value.is_finite() || *value <= 0.0) {
            return Err(OrificeError::NotPositive { what, found });
        }
        let beta = self.beta();
        if beta >= 1.0 {
            return Err(OrificeError::BoreTooWide { beta });
        }
        if !(0.0..fluid.pressure).contains(&pressure_difference) {
            return Err(OrificeError::PressureDifference { found: pressure_difference });
        }
        let downstream = fluid.pressure - pressure_difference;
        let expansibility =
            fluid.isentropic_exponent.map_or(1.0, |kappa| self.expansibility(fluid.pressure, downstream, kappa));
        let per_coefficient = expansibility / (1.0 - beta.powi(4)).sqrt()
            * (PI / 4.0)
            * self.bore.powi(2)
            * (2.0 * pressure_difference * fluid.density).sqrt();
        let reynolds = |mass_flow: f64| 4.0 * mass_flow / (PI * self.pipe_bore * fluid.viscosity);
        let mut coefficient = 0.6;
        if per_coefficient > 0.0 {
            for _ in 0..SUBSTITUTIONS {
                coefficient = self.coefficient(reynolds(coefficient * per_coefficient));
            }
        }
        let mass_flow = coefficient * per_coefficient;
        let reynolds = reynolds(mass_flow);
        let limits = self.limits(reynolds, downstream / fluid.pressure);
        Ok(OrificeFlow { mass_flow, coefficient, expansibility, reynolds, limits })
    }

    /// Which limits of use are met at a Reynolds number and a pressure ratio p2/p1.
    #[must_use]
    pub fn limits(&self, reynolds: f64, pressure_ratio: f64) -> Limits {
        let beta = self.beta();
        let least_reynolds = match self.taps {
            Taps::Corner | Taps::DAndHalfD if beta > 0.56 => 16_000.0 * beta * beta,
            Taps::Corner | Taps::DAndHalfD => 0.0,
            Taps::Flange => 170.0 * beta * beta * self.pipe_bore * 1000.0,
        };
        Limits {
            pipe_bore: (0.05..=1.0).contains(&self.pipe_bore),
            bore: self.bore >= 0.0125,
            beta: (0.1..=0.75).contains(&beta),
            reynolds: reynolds >= least_reynolds.max(5_000.0),
            pressure_ratio: pressure_ratio >= 0.75,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const PLATE: Orifice = Orifice { pipe_bore: 0.1, bore: 0.06, taps: Taps::DAndHalfD };
    const WATER: Upstream = Upstream { pressure: 4e5, density: 998.2, viscosity: 1.0e-3, isentropic_exponent: None };

    #[test]
    fn the_solution_solves() {
        for taps in [Taps::Corner, Taps::Flange, Taps::DAndHalfD] {
            for (bore, pressure_difference) in [(0.02, 50.0), (0.06, 1.0), (0.06, 25_000.0), (0.075, 100_000.0)] {
                let plate = Orifice { bore, taps, ..PLATE };
                let found = plate.mass_flow(&WATER, pressure_difference).unwrap();
                let again = plate.coefficient(found.reynolds);
                assert!((again / found.coefficient - 1.0).abs() < 1e-14, "{plate:?} {found:?}");
            }
        }
    }

    #[test]
    fn every_limit_is_flagged_on_its_own() {
        let limits = |plate: Orifice, reynolds, ratio| plate.limits(reynolds, ratio);
        let met = Limits { pipe_bore: true, bore: true, beta: true, reynolds: true, pressure_ratio: true };
        assert_eq!(limits(PLATE, 1e5, 0.9), met);
        assert!(met.all_met());
        assert_eq!(limits(PLATE, 1e5, 0.749), Limits { pressure_ratio: false, ..met });
        // β 0.6: 16000·0.36 = 5760; flange: 170·0.36·100 = 6120; β 0.5: 5000.
        assert_eq!(limits(PLATE, 5_759.0, 0.9), Limits { reynolds: false, ..met });
        assert_eq!(limits(PLATE, 5_761.0, 0.9), met);
        let flange = Orifice { taps: Taps::Flange, ..PLATE };
        assert_eq!(limits(flange, 6_119.0, 0.9), Limits { reynolds: false, ..met });
        assert_eq!(limits(flange, 6_121.0, 0.9), met);
        let half = Orifice { bore: 0.05, ..PLATE };
        assert_eq!(limits(half, 4_999.0, 0.9), Limits { reynolds: false, ..met });
        assert_eq!(limits(half, 5_001.0, 0.9), met);
        assert_eq!(limits(Orifice { bore: 0.076, ..PLATE }, 1e6, 0.9), Limits { beta: false, ..met });
        assert_eq!(
            limits(Orifice { pipe_bore: 0.049, bore: 0.0124, ..PLATE }, 1e6, 0.9),
            Limits { pipe_bore: false, bore: false, ..met }
        );
        assert_eq!(
            limits(Orifice { pipe_bore: 1.01, bore: 0.5, ..PLATE }, 1e6, 0.9),
            Limits { pipe_bore: false, ..met }
        );
        assert!(!limits(PLATE, 4e3, 0.9).all_met());
    }

    #[test]
    fn what_cannot_be_is_refused() {
        let zero = PLATE.mass_flow(&WATER, 0.0).unwrap();
        assert_eq!((zero.mass_flow, zero.reynolds, zero.limits.reynolds), (0.0, 0.0, false));
        for bad in [-1.0, 4e5, f64::NAN, f64::INFINITY] {
            assert!(matches!(PLATE.mass_flow(&WATER, bad), Err(OrificeError::PressureDifference { .. })), "{bad}");
        }
        let wide = Orifice { bore: 0.1, ..PLATE };
        assert_eq!(wide.mass_flow(&WATER, 1e3), Err(OrificeError::BoreTooWide { beta: 1.0 }));
        for bad in [0.0, -1.0, f64::NAN] {
            let thin = Upstream { viscosity: bad, ..WATER };
            assert!(matches!(thin_error(&thin), Some("viscosity")), "{bad}");
        }
        fn thin_error(fluid: &Upstream) -> Option<&'static str> {
            match PLATE.mass_flow(fluid, 1e3) {
                Err(OrificeError::NotPositive { what, .. }) => Some(what),
                _ => None,
            }
        }
    }
}
