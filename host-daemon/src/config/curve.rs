//! `[curve]` and `[impeller]`: the works-test points turned into a shape-preserving table, and drawing dimensions into
//! the constants that a controller needs. All in f64; the casts to f32 are the last step.
//!
//! Efficiency at a point of the curve: `η = ρ·g·Q·H/P`, with the density the powers are stated at.

use super::{
    reader::{Bounds, Section},
    units::{Dimension, plain},
};
use offcurve_core::{
    machine::{
        CurveTable, Impeller,
        curve::{KNOTS, Knot},
        design::{self, ImpellerGeometry},
    },
    momentum::LEAST_DEVIATION,
};

/// Relative standard uncertainty taken for a head curve that states none. Our choice.
pub(super) const DEFAULT_HEAD_UNCERTAINTY: f64 = 0.02;
/// The same for a power curve. Our choice.
pub(super) const DEFAULT_POWER_UNCERTAINTY: f64 = 0.03;

/// The curve's point of best efficiency at the reference speed.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BestEfficiency {
    /// Flow, m³/s.
    pub flow: f64,
    /// Head, m.
    pub head: f64,
    /// Shaft power at the curve's density, W.
    pub power: f64,
    /// Efficiency, parts of one.
    pub efficiency: f64,
    /// The flow was declared in the file, not found on the curve.
    pub declared: bool,
}

/// What `[curve]` says.
pub(super) struct Curve {
    /// rad/s.
    pub(super) speed: f64,
    pub(super) density: f64,
    pub(super) points: Points,
    pub(super) best: BestEfficiency,
    pub(super) head_uncertainty: f64,
    pub(super) power_uncertainty: f64,
}

/// The points with their slopes, f64.
pub(super) struct Points {
    pub(super) flow: Vec<f64>,
    pub(super) head: Vec<f64>,
    pub(super) power: Vec<f64>,
    head_slope: Vec<f64>,
    power_slope: Vec<f64>,
}

impl Points {
    fn new(flow: Vec<f64>, head: Vec<f64>, power: Vec<f64>) -> Self {
        let head_slope = design::monotone_slopes(&flow, &head);
        let power_slope = design::monotone_slopes(&flow, &power);
        Self { flow, head, power, head_slope, power_slope }
    }

    pub(super) fn table(&self) -> Result<CurveTable, offcurve_core::machine::curve::CurveError> {
        let knots: Vec<Knot> = (0..self.flow.len())
            .map(|k| Knot {
                flow: self.flow[k] as f32,
                head: self.head[k] as f32,
                head_slope: self.head_slope[k] as f32,
                power: self.power[k] as f32,
                power_slope: self.power_slope[k] as f32,
            })
            .collect();
        CurveTable::new(&knots)
    }

    /// First and last flow, m³/s.
    pub(super) fn span(&self) -> (f64, f64) {
        (self.flow[0], self.flow[self.flow.len() - 1]) // two points or more
    }

    /// Head and power at a flow within the span.
    pub(super) fn at(&self, flow: f64) -> (f64, f64) {
        let upper = self.flow.partition_point(|&q| q < flow).clamp(1, self.flow.len() - 1);
        let lower = upper - 1;
        let width = self.flow[upper] - self.flow[lower];
        let t = (flow - self.flow[lower]) / width;
        let hermite = |y: &[f64], slope: &[f64]| {
            let (rise, start, end) = (y[upper] - y[lower], width * slope[lower], width * slope[upper]);
            y[lower] + t * (start + t * ((3.0 * rise - 2.0 * start - end) + t * (start + end - 2.0 * rise)))
        };
        (hermite(&self.head, &self.head_slope), hermite(&self.power, &self.power_slope))
    }

    /// Flow of the largest efficiency. The curve is smooth between knots, so a fine scan and a refinement around its
    /// best place are enough; a wiggle narrower than 1/2000 of the span is not looked for.
    fn best_flow(&self) -> f64 {
        let (first, last) = self.span();
        let worth = |flow: f64| {
            let (head, power) = self.at(flow);
            flow * head / power
        };
        let (mut best, mut step) = (first, (last - first) / 2000.0);
        let scan = |around: f64, reach: i32, step: f64| {
            (-reach..=reach)
                .map(|k| (around + f64::from(k) * step).clamp(first, last))
                .max_by(|&a, &b| worth(a).total_cmp(&worth(b)))
                .unwrap_or(around)
        };
        best = scan(best, 2000, step);
        for _ in 0..6 {
            step /= 10.0;
            best = scan(best, 10, step);
        }
        best
    }
}

pub(super) fn curve(mut section: Section<'_>, gravity: f64, fluid_density: Option<f64>) -> Option<Curve> {
    let speed = section.require_quantity("speed", Dimension::Speed, Bounds(1.0, 10_000.0));
    let declared_density = section.quantity("density", Dimension::Density, Bounds(0.1, 20_000.0));
    let density = if section.has("density") { declared_density } else { fluid_density };
    let flow = section.require_list("flow", Dimension::Flow, Bounds(0.0, 1000.0));
    let head = section.require_list("head", Dimension::Head, Bounds(0.0, 10_000.0));
    let power = section.require_list("power", Dimension::Power, Bounds(0.001, 1e9));
    let declared_best = section.quantity("best_efficiency_flow", Dimension::Flow, Bounds(1e-7, 1000.0));
    let bad_best = section.has("best_efficiency_flow") && declared_best.is_none();
    let head_uncertainty = share(&mut section, "head_uncertainty", DEFAULT_HEAD_UNCERTAINTY);
    let power_uncertainty = share(&mut section, "power_uncertainty", DEFAULT_POWER_UNCERTAINTY);
    let found = (|| {
        let (flow, head, power) = (flow?, head?, power?);
        let unit = flow.unit;
        let show = |flow: f64| format!("{} {}", plain(unit.from_si(flow)), unit.name());
        let points = checked_points(&section, flow.si, head.si, power.si, &show)?;
        let density = density?;
        check_efficiencies(&section, &points, density * gravity, &show)?;
        let best = best_efficiency(&section, &points, declared_best, density * gravity, &show)?;
        Some(Curve {
            speed: speed?,
            density,
            points,
            best,
            head_uncertainty: head_uncertainty?,
            power_uncertainty: power_uncertainty?,
        })
    })();
    section.finish();
    found.filter(|_| !bad_best)
}

fn share(section: &mut Section<'_>, key: &'static str, default: f64) -> Option<f64> {
    or_default(section, key, Dimension::Share, Bounds(0.0, 0.5), default)
}

fn checked_points(
    section: &Section<'_>,
    flow: Vec<f64>,
    head: Vec<f64>,
    power: Vec<f64>,
    show: &dyn Fn(f64) -> String,
) -> Option<Points> {
    if !(2..=KNOTS).contains(&flow.len()) {
        section.problem("flow", format!("{} points; a curve has 2 to {KNOTS}", flow.len()));
        return None;
    }
    for (key, other) in [("head", &head), ("power", &power)] {
        if other.len() != flow.len() {
            section.problem(key, format!("{} values for {} flows; give one for each flow", other.len(), flow.len()));
            return None;
        }
    }
    // Compared as the controller will hold them: two flows may differ in f64 and be one in f32.
    if let Some(at) = flow.windows(2).position(|pair| pair[1] as f32 <= pair[0] as f32) {
        let message = format!("{} after {}: flows must rise from point to point", show(flow[at + 1]), show(flow[at]));
        section.problem("flow", message);
        return None;
    }
    Some(Points::new(flow, head, power))
}

fn check_efficiencies(section: &Section<'_>, points: &Points, weight: f64, show: &dyn Fn(f64) -> String) -> Option<()> {
    let mut good = Some(());
    for k in 0..points.flow.len() {
        let efficiency = weight * points.flow[k] * points.head[k] / points.power[k];
        if efficiency >= 1.0 {
            let message = format!(
                "point {} ({}): these powers make the efficiency {}, and it must be below 1; is a unit wrong, or is \
                 this the power of the liquid and not of the shaft?",
                k + 1,
                show(points.flow[k]),
                plain((efficiency * 1000.0).round() / 1000.0)
            );
            section.problem("power", message);
            good = None;
        }
    }
    good
}

fn best_efficiency(
    section: &Section<'_>,
    points: &Points,
    declared: Option<f64>,
    weight: f64,
    show: &dyn Fn(f64) -> String,
) -> Option<BestEfficiency> {
    let (first, last) = points.span();
    if let Some(flow) = declared
        && !(first..=last).contains(&flow)
    {
        let message = format!("{} is outside the curve, {} .. {}", show(flow), show(first), show(last));
        section.problem("best_efficiency_flow", message);
        return None;
    }
    let flow = declared.unwrap_or_else(|| points.best_flow());
    let (head, power) = points.at(flow);
    let efficiency = weight * flow * head / power;
    if !(efficiency > 0.0 && efficiency < 1.0) {
        section.problem("head", "no point of this curve has flow and head: efficiency is zero everywhere");
        return None;
    }
    Some(BestEfficiency { flow, head, power, efficiency, declared: declared.is_some() })
}

/// What was made of `[impeller]`, for a person to verify.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ImpellerReport {
    /// Slip factor, parts of one.
    pub slip_factor: f64,
    /// The slip factor is Wiesner's for these dimensions, not a number of the file.
    pub by_wiesner: bool,
    /// Share of the outlet circumference left free by the blades.
    pub blockage_factor: f64,
    /// Free outlet area, m².
    pub outlet_area: f64,
    /// Shaft torque at best efficiency by the momentum model and by the curve, N·m; `None` where the model says nothing.
    pub torque_at_best: Option<(f64, f64)>,
}

pub(super) fn impeller(mut section: Section<'_>) -> Option<(Impeller, ImpellerReport)> {
    let outlet_diameter = section.require_quantity("outlet_diameter", Dimension::Length, Bounds(0.002, 20.0));
    let outlet_width = section.require_quantity("outlet_width", Dimension::Length, Bounds(1e-4, 5.0));
    let inlet_diameter = section.require_quantity("inlet_diameter", Dimension::Length, Bounds(0.001, 20.0));
    let degrees = |angle: f64| angle.to_radians();
    let outlet_blade_angle =
        section.require_quantity("outlet_blade_angle", Dimension::Angle, Bounds(degrees(5.0), degrees(170.0)));
    let blades = section.require_integer("blades", 1..=50);
    let blade_thickness = section.require_quantity("blade_thickness", Dimension::Length, Bounds(0.0, 0.2));
    let slip = section.number_or_text("slip").unwrap_or(Err("wiesner"));
    let volumetric_efficiency =
        or_default(&mut section, "volumetric_efficiency", Dimension::Share, Bounds(0.3, 1.0), 1.0);
    let drag_torque = or_default(&mut section, "drag_torque", Dimension::Torque, Bounds(0.0, 1e6), 0.0);
    let recirculation_onset =
        or_default(&mut section, "recirculation_onset", Dimension::Share, Bounds(0.0, 2.0), DEFAULT_ONSET);
    let least = f64::from(LEAST_DEVIATION);
    let uncertainty = or_default(&mut section, "uncertainty", Dimension::Share, Bounds(least, 1.0), least);
    let made = (|| {
        let wheel = ImpellerGeometry {
            outlet_diameter: outlet_diameter?,
            outlet_width: outlet_width?,
            inlet_diameter: inlet_diameter?,
            outlet_blade_angle: outlet_blade_angle?,
            blades: blades?,
            blade_thickness: blade_thickness?,
        };
        if wheel.inlet_diameter >= wheel.outlet_diameter {
            section.problem("inlet_diameter", "not smaller than outlet_diameter; this is the eye of a radial impeller");
            return None;
        }
        if wheel.blockage_factor() < 0.3 {
            let message = format!(
                "{} blades this thick leave {} % of the outlet free; at least 30 % is expected",
                wheel.blades,
                plain((wheel.blockage_factor() * 100.0).round())
            );
            section.problem("blade_thickness", message);
            return None;
        }
        let by_wiesner = slip == Err("wiesner");
        let slip_factor = match slip {
            Ok(number) => number,
            Err("wiesner") => wheel.wiesner(),
            Err(other) => {
                section.problem("slip", format!("{other:?} is not known; write \"wiesner\" or a number 0.1 .. 1"));
                return None;
            }
        };
        if !(0.1..=1.0).contains(&slip_factor) {
            let found = plain(slip_factor);
            let message = if by_wiesner {
                format!("Wiesner gives {found} for these dimensions; a slip factor lies in 0.1 .. 1: check them")
            } else {
                format!("{found} is outside 0.1 .. 1 (the lost whirl is (1 - slip) of the rim speed)")
            };
            section.problem("slip", message);
            return None;
        }
        let impeller = Impeller {
            outlet_radius: (0.5 * wheel.outlet_diameter) as f32,
            outlet_area: wheel.outlet_area() as f32,
            outlet_cotangent: wheel.outlet_cotangent() as f32,
            slip_factor: slip_factor as f32,
            inlet_whirl: 0.0,
            volumetric_efficiency: volumetric_efficiency? as f32,
            drag_torque: drag_torque? as f32,
            recirculation_onset: recirculation_onset? as f32,
            model_deviation: uncertainty? as f32,
        };
        let report = ImpellerReport {
            slip_factor,
            by_wiesner,
            blockage_factor: wheel.blockage_factor(),
            outlet_area: wheel.outlet_area(),
            torque_at_best: None, // needs the whole profile
        };
        Some((impeller, report))
    })();
    section.finish();
    made
}

/// Onset of recirculation taken when none is declared, share of best efficiency flow. Our choice, on the safe side for
/// radial wheels.
const DEFAULT_ONSET: f64 = 0.6;

/// The value if the key is there and right, the default if it is not there, `None` if it is there and wrong.
pub(super) fn or_default(
    section: &mut Section<'_>,
    key: &'static str,
    dimension: Dimension,
    bounds: Bounds,
    default: f64,
) -> Option<f64> {
    let found = section.quantity(key, dimension, bounds);
    if section.has(key) { found } else { Some(default) }
}
