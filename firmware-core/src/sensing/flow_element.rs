//! Differential-pressure flow elements (orifice, nozzle, venturi): from a pressure difference to flow, the root taken
//! once and once only.
//!
//! `Q = Q_fs·√(Δp/Δp_fs)·√(ρ_design/ρ)`. Whether the transmitter already takes the root is part of the type: a
//! [`FlowElement<RootHere>`] takes a [`PressureDifference`], a [`FlowElement<RootInTransmitter>`] takes the flow the
//! transmitter indicates, and neither accepts the other's input. Both correct for density, which the transmitter does
//! not know.
//!
//! `u(Q)/Q` = ½·u(Δp)/Δp: near zero flow the same error of pressure means more and more flow (slope `1/(2√x)`), so below
//! the cut-off the flow is called zero, with the uncertainty that this leaves. Coefficient and expansibility are taken
//! as those of the design point: what they change by is part of the declared relative uncertainty. Pulsation and
//! upstream disturbance are not modelled. An element measures one direction only.
//!
//! ```compile_fail
//! # use offcurve_core::{quantity::PressureDifference, sensing::{Measured, flow_element::{FlowElement, RootInTransmitter}}};
//! // A pressure difference into an element whose transmitter already takes the root: refused by the compiler.
//! fn wrong(element: FlowElement<RootInTransmitter>, pressure: Measured<PressureDifference>) {
//!     let _ = element.flow(pressure);
//! }
//! ```

use super::Measured;
use crate::{
    math,
    quantity::{Density, PressureDifference, VolumeFlow},
};

/// Cut-offs that may be declared, as a share of the span of Δp (common practice, no source).
pub const CUT_OFF_RANGE: core::ops::RangeInclusive<f32> = 0.005..=0.02;

/// Above this share of the span of Δp the value is flagged: the transmitter saturates at 20.5 mA, 1.03 of the span.
pub const BEYOND_SPAN: f32 = 1.03;

const INVERSE_ROOT_OF_3: f32 = 0.577_350_3;

/// Kind of element: the transmitter sends the pressure difference and the root is taken here.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RootHere {
    full_scale_pressure: f32,
}

/// Kind of element: the transmitter takes the root and sends flow.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RootInTransmitter;

/// Why a flow element cannot be set up so.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ElementError {
    /// Full-scale flow, full-scale pressure or design density is not a positive number.
    NotPositive,
    /// The cut-off lies outside [`CUT_OFF_RANGE`].
    CutOffOutOfRange {
        /// The share asked for.
        share: f32,
    },
    /// The relative uncertainty is not within 0 to 1.
    DeviationOutOfRange {
        /// The relative uncertainty asked for.
        relative: f32,
    },
}

/// Why there is no flow.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ElementFault {
    /// A reading is no number.
    NotANumber,
    /// Negative beyond the cut-off: the liquid flows backwards, the impulse lines are swapped or one is blocked.
    Backwards,
    /// The density is not positive.
    DensityNotPositive,
}

/// Where on its range the element works.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Place {
    /// Between cut-off and end of the span.
    InRange,
    /// Below the cut-off: the value is 0, the uncertainty says how much may flow.
    BelowCutOff,
    /// Beyond the end of the span: a bound more than a value.
    BeyondSpan,
}

/// A flow and where on the range it was found.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ElementFlow {
    /// Flow at the density given, and its standard uncertainty, m³/s.
    pub flow: Measured<VolumeFlow>,
    /// Where on the range.
    pub place: Place,
}

/// What every element is declared with.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ElementDesign {
    /// Flow at full scale and design density.
    pub full_scale_flow: VolumeFlow,
    /// Density the element was designed for.
    pub density: Density,
    /// Below this share of the span of Δp the flow is called zero; within [`CUT_OFF_RANGE`]. It is declared on the
    /// pressure in both kinds: 0.01 is 10 % of the flow.
    pub cut_off: f32,
    /// Relative standard uncertainty of the flow at a known Δp (coefficient, bores, expansibility), 0 to 1.
    pub relative_deviation: f32,
}

/// A flow element, checked; `Kind` is [`RootHere`] or [`RootInTransmitter`].
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct FlowElement<Kind> {
    design: ElementDesign,
    kind: Kind,
    density: Measured<Density>,
}

impl<Kind> FlowElement<Kind> {
    fn checked(design: ElementDesign, kind: Kind) -> Result<Self, ElementError> {
        let positive = |x: f32| x.is_finite() && x > 0.0;
        let (flow, density) =
            (design.full_scale_flow.cubic_metres_per_second(), design.density.kilograms_per_cubic_metre());
        if !positive(flow) || !positive(density) {
            return Err(ElementError::NotPositive);
        }
        if !CUT_OFF_RANGE.contains(&design.cut_off) {
            return Err(ElementError::CutOffOutOfRange { share: design.cut_off });
        }
        if !(0.0..=1.0).contains(&design.relative_deviation) {
            return Err(ElementError::DeviationOutOfRange { relative: design.relative_deviation });
        }
        Ok(Self { design, kind, density: Measured { value: design.density, deviation: 0.0 } })
    }

    /// The same element with the density of now (kg/m³, with its standard uncertainty). Without it the design density
    /// is taken as exact.
    #[must_use]
    pub fn at_density(self, density: Measured<Density>) -> Self {
        Self { density, ..self }
    }

    /// √(ρ_design/ρ) and half the relative uncertainty of ρ.
    fn density_correction(&self) -> Result<(f32, f32), ElementFault> {
        let density = self.density.value.kilograms_per_cubic_metre();
        if density.is_nan() || self.density.deviation.is_nan() {
            return Err(ElementFault::NotANumber);
        }
        if density <= 0.0 || density.is_infinite() {
            return Err(ElementFault::DensityNotPositive);
        }
        let ratio = self.design.density.kilograms_per_cubic_metre() / density;
        Ok((math::sqrt(ratio), 0.5 * self.density.deviation / density))
    }

    /// From the share of full-scale flow `root` = √x and what x is uncertain by.
    fn corrected(&self, share: f32, share_deviation: f32, root: f32) -> Result<ElementFlow, ElementFault> {
        if share.is_nan() || share_deviation.is_nan() {
            return Err(ElementFault::NotANumber);
        }
        if share < -self.design.cut_off {
            return Err(ElementFault::Backwards);
        }
        let (correction, density_part) = self.density_correction()?;
        let full = self.design.full_scale_flow.cubic_metres_per_second() * correction;
        let measured =
            |value, deviation| Measured { value: VolumeFlow::from_cubic_metres_per_second(value), deviation };
        if share < self.design.cut_off {
            // Anything from nothing to the cut-off is equally likely (half-width over √3), and the pressure's own
            // uncertainty moves the cut-off. First order would divide by zero here.
            let bound = full * math::sqrt(self.design.cut_off + share_deviation);
            return Ok(ElementFlow { flow: measured(0.0, bound * INVERSE_ROOT_OF_3), place: Place::BelowCutOff });
        }
        let value = full * root;
        let deviation = math::root_sum_square([
            full * share_deviation / (2.0 * root),
            value * self.design.relative_deviation,
            value * density_part,
        ]);
        let place = if share > BEYOND_SPAN { Place::BeyondSpan } else { Place::InRange };
        Ok(ElementFlow { flow: measured(value, deviation), place })
    }
}

impl FlowElement<RootHere> {
    /// An element whose transmitter sends the pressure difference, `full_scale` of it at 20 mA.
    ///
    /// # Errors
    /// [`ElementError`], see there.
    pub fn root_here(design: ElementDesign, full_scale: PressureDifference) -> Result<Self, ElementError> {
        let full_scale_pressure = full_scale.pascals();
        if !full_scale_pressure.is_finite() || full_scale_pressure <= 0.0 {
            return Err(ElementError::NotPositive);
        }
        Self::checked(design, RootHere { full_scale_pressure })
    }

    /// Flow from the pressure difference over the element.
    ///
    /// # Errors
    /// [`ElementFault`]: no number, backwards beyond the cut-off, or a density that is none.
    pub fn flow(&self, pressure: Measured<PressureDifference>) -> Result<ElementFlow, ElementFault> {
        let share = pressure.value.pascals() / self.kind.full_scale_pressure;
        self.corrected(share, pressure.deviation / self.kind.full_scale_pressure, math::sqrt(share))
    }
}

impl FlowElement<RootInTransmitter> {
    /// An element whose transmitter takes the root itself.
    ///
    /// # Errors
    /// [`ElementError`], see there.
    pub fn root_in_transmitter(design: ElementDesign) -> Result<Self, ElementError> {
        Self::checked(design, RootInTransmitter)
    }

    /// Flow from the flow the transmitter indicates (at design density), with the standard uncertainty of that
    /// indication, m³/s.
    ///
    /// # Errors
    /// [`ElementFault`]: no number, backwards beyond the cut-off, or a density that is none.
    pub fn flow(&self, indicated: Measured<VolumeFlow>) -> Result<ElementFlow, ElementFault> {
        let full = self.design.full_scale_flow.cubic_metres_per_second();
        let root = indicated.value.cubic_metres_per_second() / full;
        // Back to a share of the pressure span, where cut-off and range are declared: x = root², u(x) = 2·root·u(root).
        let share = root * root.abs();
        let magnitude = root.abs();
        self.corrected(share, 2.0 * magnitude * indicated.deviation / full, magnitude)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    const DESIGN: ElementDesign = ElementDesign {
        full_scale_flow: VolumeFlow::from_cubic_metres_per_second(0.02),
        density: Density::from_kilograms_per_cubic_metre(998.0),
        cut_off: 0.01,
        relative_deviation: 0.005,
    };

    fn element() -> FlowElement<RootHere> {
        FlowElement::root_here(DESIGN, PressureDifference::from_pascals(25_000.0)).unwrap()
    }

    fn pressure(pascals: f32, deviation: f32) -> Measured<PressureDifference> {
        Measured { value: PressureDifference::from_pascals(pascals), deviation }
    }

    fn indicated(flow: f32, deviation: f32) -> Measured<VolumeFlow> {
        Measured { value: VolumeFlow::from_cubic_metres_per_second(flow), deviation }
    }

    #[test]
    fn the_root_is_taken_once_in_either_kind() {
        let here = element().flow(pressure(6_250.0, 0.0)).unwrap();
        let there = FlowElement::root_in_transmitter(DESIGN).unwrap().flow(indicated(0.01, 0.0)).unwrap();
        assert!((here.flow.value.cubic_metres_per_second() - 0.01).abs() < 1e-8);
        assert!((there.flow.value.cubic_metres_per_second() - 0.01).abs() < 1e-8);
        assert_eq!((here.place, there.place), (Place::InRange, Place::InRange));
    }

    #[test]
    fn the_same_signal_error_grows_towards_zero_flow_only_where_the_root_is_taken_here() {
        let exact = ElementDesign { relative_deviation: 0.0, ..DESIGN };
        let here = FlowElement::root_here(exact, PressureDifference::from_pascals(25_000.0)).unwrap();
        // 25 Pa of 25 kPa at full scale: u = 0.02·0.001/(2·1); at a tenth of the flow ten times that.
        let full = here.flow(pressure(25_000.0, 25.0)).unwrap().flow.deviation;
        let tenth = here.flow(pressure(250.1, 25.0)).unwrap().flow.deviation;
        assert!((full - 1e-5).abs() < 1e-9 && (tenth - 1e-4).abs() < 1e-7, "{full} {tenth}");
        let there = FlowElement::root_in_transmitter(exact).unwrap();
        for flow in [0.02, 0.0021] {
            let got = there.flow(indicated(flow, 3e-5)).unwrap().flow.deviation;
            assert!((got - 3e-5).abs() < 1e-10, "{got}");
        }
    }

    #[test]
    fn relative_and_density_parts_add() {
        let warm =
            element().at_density(Measured { value: Density::from_kilograms_per_cubic_metre(960.0), deviation: 9.6 });
        let got = warm.flow(pressure(25_000.0, 0.0)).unwrap().flow;
        let exact = 0.02 * (998.0_f64 / 960.0).sqrt();
        assert!((f64::from(got.value.cubic_metres_per_second()) / exact - 1.0).abs() < 4e-7);
        // 0.5 % of the element and half of 1 % of the density.
        assert!((f64::from(got.deviation) / exact - 0.005 * 2_f64.sqrt()).abs() < 1e-7);
    }

    #[test]
    fn below_the_cut_off_is_zero_with_its_uncertainty() {
        for pascals in [249.0, 0.0, -0.0, -249.0] {
            let got = element().flow(pressure(pascals, 0.0)).unwrap();
            assert_eq!((got.flow.value.cubic_metres_per_second(), got.place), (0.0, Place::BelowCutOff));
            assert!((got.flow.deviation - 0.002 / 3_f32.sqrt()).abs() < 1e-8, "{got:?}");
        }
        assert_eq!(element().flow(pressure(251.0, 0.0)).unwrap().place, Place::InRange);
        let there = FlowElement::root_in_transmitter(DESIGN).unwrap();
        assert_eq!(there.flow(indicated(0.00199, 0.0)).unwrap().place, Place::BelowCutOff);
        assert_eq!(there.flow(indicated(0.00201, 0.0)).unwrap().place, Place::InRange);
    }

    #[test]
    fn readings_without_a_flow_say_why() {
        let element = element();
        assert_eq!(element.flow(pressure(-251.0, 1.0)), Err(ElementFault::Backwards));
        assert_eq!(element.flow(pressure(f32::NAN, 1.0)), Err(ElementFault::NotANumber));
        assert_eq!(element.flow(pressure(100.0, f32::NAN)), Err(ElementFault::NotANumber));
        for density in [0.0, -998.0, f32::INFINITY] {
            let at = element
                .at_density(Measured { value: Density::from_kilograms_per_cubic_metre(density), deviation: 1.0 });
            assert_eq!(at.flow(pressure(9_000.0, 1.0)), Err(ElementFault::DensityNotPositive), "{density}");
        }
        let there = FlowElement::root_in_transmitter(DESIGN).unwrap();
        assert_eq!(there.flow(indicated(-0.0021, 0.0)), Err(ElementFault::Backwards));
        assert_eq!(there.flow(indicated(f32::NAN, 0.0)), Err(ElementFault::NotANumber));
        assert_eq!(element.flow(pressure(26_000.0, 1.0)).unwrap().place, Place::BeyondSpan);
        assert_eq!(element.flow(pressure(25_600.0, 1.0)).unwrap().place, Place::InRange);
    }

    #[test]
    fn designs_outside_their_ranges_are_refused() {
        let with = |design| FlowElement::root_in_transmitter(design);
        for share in [0.0049, 0.0201, f32::NAN] {
            let wrong = with(ElementDesign { cut_off: share, ..DESIGN });
            assert!(matches!(wrong, Err(ElementError::CutOffOutOfRange { .. })), "{share}");
        }
        for flow in [0.0, -1.0, f32::NAN, f32::INFINITY] {
            let full_scale_flow = VolumeFlow::from_cubic_metres_per_second(flow);
            assert_eq!(with(ElementDesign { full_scale_flow, ..DESIGN }), Err(ElementError::NotPositive));
            let wrong = FlowElement::root_here(DESIGN, PressureDifference::from_pascals(flow));
            assert_eq!(wrong, Err(ElementError::NotPositive));
            let density = Density::from_kilograms_per_cubic_metre(flow);
            assert_eq!(with(ElementDesign { density, ..DESIGN }), Err(ElementError::NotPositive));
        }
        let wrong = with(ElementDesign { relative_deviation: -0.1, ..DESIGN });
        assert_eq!(wrong, Err(ElementError::DeviationOutOfRange { relative: -0.1 }));
    }

    proptest! {
        /// Both kinds agree wherever both see the same flow: value and uncertainty.
        #[test]
        fn both_kinds_agree(share in 0.011_f32..1.0, deviation in 0.0_f32..0.002) {
            let here = element().flow(pressure(share * 25_000.0, deviation * 25_000.0)).unwrap();
            let root = share.sqrt();
            let there = FlowElement::root_in_transmitter(DESIGN).unwrap()
                .flow(indicated(0.02 * root, 0.02 * deviation / (2.0 * root))).unwrap();
            prop_assert!((here.flow.value.cubic_metres_per_second() / there.flow.value.cubic_metres_per_second() - 1.0).abs() < 1e-6);
            prop_assert!((here.flow.deviation / there.flow.deviation - 1.0).abs() < 1e-5);
        }
    }
}
