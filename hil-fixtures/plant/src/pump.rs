//! One centrifugal stage as a one-dimensional build-up of losses: the truth that estimates are judged by.
//!
//! The specific work of the blades (J/kg, no pre-whirl) is reduced for the finite blade number after Pfleiderer
//! (from memory): `Y_th = Y_inf / (1 + p)`, `Y_inf = u2·(u2 − c_m2·cot β2)`, `p = ψ'·r2² / (z·S)`,
//! `S = (r2² − r1²)/2`, `ψ' = a·(1 + β2/60°)`. From it are taken
//!
//! - friction in the passages `∝ Q_i²`, with a weak Reynolds dependence,
//! - incidence `∝ (Q_i − Q_s)²` about the shock-free flow, which is proportional to speed,
//! - part-load recirculation below an onset flow, which costs a little head and more power.
//!
//! `Q_i = Q + Q_L` passes the impeller; the wear ring lets back `Q_L = c_d·π·d·s·√(2Δp/ρ)`, `c_d = (ζ + λl/2s)^-½`,
//! `Δp` a share of the impeller head. Shaft torque adds disc friction `∝ ρω²r2⁵·Re^-0.2` and bearings and seals
//! `a + b·n`. Loss coefficients are declared at one reference speed and were chosen for a believable machine; they
//! are nobody's data.
//!
//! Because of the Reynolds terms and the constant bearing torque the affinity laws hold only nearly, as in life.
//! True for forward rotation and `Q ≥ 0` up to run-out. Below zero head the figures are a smooth continuation, not
//! a prediction. Not modelled: cavitation, saddle in the curve, axial thrust, stage interaction.

use core::f64::consts::PI;

use crate::{GRAVITY, PlantError, within};

/// Disc friction of both faces: `M = 0.039·ρω²r2⁵(1 − (r1/r2)⁵)·Re^-0.2`. A smooth disc in turbulent flow has about
/// 0.02 to 0.05 depending on the gap (from memory); within that our choice, for cast walls.
const DISC_FRICTION: f64 = 0.039;

/// Lowest shaft speed at which the blades are taken to do work, rev/min.
const STANDSTILL_RPM: f64 = 1.0;

/// What the maker would know of the stage. Lengths m, angles degrees from the tangential direction.
#[derive(Debug, Clone, PartialEq)]
pub struct PumpGeometry {
    /// Blade inlet radius, m.
    pub inlet_radius_m: f64,
    /// Impeller outer radius, m.
    pub outer_radius_m: f64,
    /// Outlet width between the shrouds, m.
    pub outlet_width_m: f64,
    /// Outlet blade angle from the tangent, degrees, backward-curved (below 90).
    pub outlet_angle_deg: f64,
    /// Number of blades.
    pub blades: u32,
    /// Blade thickness at the outlet, normal to the blade, m.
    pub blade_thickness_m: f64,
    /// Pfleiderer's experience factor `a` (0.65 to 0.85 for a volute, from memory).
    pub slip_factor_a: f64,
    /// Diameter of the suction-side wear ring, m.
    pub ring_diameter_m: f64,
    /// Length of the ring gap along the axis, m.
    pub ring_length_m: f64,
    /// Radial clearance of the ring when new, m.
    pub ring_clearance_m: f64,
    /// Entry and exit loss of the ring gap, in velocity heads.
    pub ring_entry_loss: f64,
    /// Friction factor λ in the ring gap.
    pub ring_friction: f64,
    /// Share of the impeller's specific work that stands as static difference over the ring.
    pub ring_pressure_share: f64,
    /// Speed at which the loss coefficients below are declared, rev/min.
    pub reference_speed_rpm: f64,
    /// Shock-free flow through the impeller at the reference speed, m³/s.
    pub shock_free_flow_m3s: f64,
    /// Friction loss at the shock-free flow and reference speed, m of liquid.
    pub friction_loss_m: f64,
    /// Incidence loss at zero flow and reference speed, m of liquid.
    pub incidence_loss_m: f64,
    /// Flow below which recirculation begins, share of the shock-free flow.
    pub recirculation_onset: f64,
    /// Head lost to recirculation at zero flow and reference speed, m of liquid.
    pub recirculation_loss_m: f64,
    /// Power taken by recirculation at zero flow, reference speed and a density of 1000 kg/m³, W.
    pub recirculation_power_w: f64,
    /// Kinematic viscosity of the liquid, m²/s.
    pub viscosity_m2s: f64,
    /// Bearing and seal torque that does not depend on speed, N·m.
    pub bearing_torque_nm: f64,
    /// Bearing and seal torque added at the reference speed, proportional to speed, N·m.
    pub seal_torque_nm: f64,
}

impl Default for PumpGeometry {
    /// The invented waterworks machine: 1480 rev/min, best efficiency near 80 m³/h and 32 m.
    fn default() -> Self {
        Self {
            inlet_radius_m: 0.0625,
            outer_radius_m: 0.1575,
            outlet_width_m: 0.0118,
            outlet_angle_deg: 25.0,
            blades: 6,
            blade_thickness_m: 0.004,
            slip_factor_a: 0.65,
            ring_diameter_m: 0.140,
            ring_length_m: 0.014,
            ring_clearance_m: 0.000_25,
            ring_entry_loss: 1.5,
            ring_friction: 0.04,
            ring_pressure_share: 0.62,
            reference_speed_rpm: 1480.0,
            shock_free_flow_m3s: 0.0280,
            friction_loss_m: 4.3,
            incidence_loss_m: 3.2,
            recirculation_onset: 0.80,
            recirculation_loss_m: 0.7,
            recirculation_power_w: 2600.0,
            viscosity_m2s: 1.138e-6,
            bearing_torque_nm: 0.5,
            seal_torque_nm: 0.9,
        }
    }
}

/// A steady operating point of the stage.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SteadyPoint {
    /// Total head between suction and discharge flange, m of the pumped liquid; negative past run-out.
    pub head_m: f64,
    /// Torque the driver gives at the coupling, N·m.
    pub shaft_torque_nm: f64,
    /// Shaft power, W.
    pub shaft_power_w: f64,
    /// Power in the delivered liquid `ρgQH`, W; negative past run-out.
    pub hydraulic_power_w: f64,
    /// Hydraulic over shaft power; `None` where flow, head or power is not positive.
    pub efficiency: Option<f64>,
    /// Flow back through the wear ring, m³/s.
    pub leakage_m3s: f64,
}

/// The stage with its derived constants.
#[derive(Debug, Clone)]
pub struct PumpModel {
    geometry: PumpGeometry,
    /// 1/(1 + p), the share of the ideal work that the finite blade number leaves.
    slip_share: f64,
    /// cot β2 over the free outlet area, 1/m².
    whirl_per_flow: f64,
    /// Reference speed, rad/s.
    reference_omega: f64,
    /// Disc torque over ρω²·Re^-0.2 for both faces, m⁵.
    disc_volume: f64,
}

impl PumpModel {
    /// Builds the model.
    ///
    /// # Errors
    /// [`PlantError`] where a length, angle or coefficient is outside what the build-up can represent.
    pub fn new(geometry: PumpGeometry) -> Result<Self, PlantError> {
        let g = &geometry;
        within("outer_radius_m", g.outer_radius_m, 0.02, 2.0, "0.02 to 2 m")?;
        within("inlet_radius_m", g.inlet_radius_m, 0.005, 0.9 * g.outer_radius_m, "5 mm to 0.9 of the outer radius")?;
        within("outlet_width_m", g.outlet_width_m, 0.001, 0.5, "1 to 500 mm")?;
        within("outlet_angle_deg", g.outlet_angle_deg, 10.0, 80.0, "10 to 80 degrees")?;
        within("blades", f64::from(g.blades), 2.0, 20.0, "2 to 20")?;
        within("ring_clearance_m", g.ring_clearance_m, 1e-6, 5e-3, "0.001 to 5 mm")?;
        within("ring_length_m", g.ring_length_m, 1e-3, 0.2, "1 to 200 mm")?;
        within("reference_speed_rpm", g.reference_speed_rpm, 100.0, 20_000.0, "100 to 20000 rev/min")?;
        within("shock_free_flow_m3s", g.shock_free_flow_m3s, 1e-5, 20.0, "1e-5 to 20 m3/s")?;
        within("recirculation_onset", g.recirculation_onset, 0.1, 1.0, "0.1 to 1")?;
        within("viscosity_m2s", g.viscosity_m2s, 1e-7, 1e-4, "1e-7 to 1e-4 m2/s")?;
        let beta = g.outlet_angle_deg.to_radians();
        let (r1, r2, z) = (g.inlet_radius_m, g.outer_radius_m, f64::from(g.blades));
        let free_circumference = 2.0 * PI * r2 - z * g.blade_thickness_m / libm::sin(beta);
        within("blade_thickness_m", free_circumference, 0.3 * r2, 2.0 * PI * r2, "thin enough to leave free passages")?;
        let static_moment = 0.5 * (r2 * r2 - r1 * r1);
        let psi = g.slip_factor_a * (1.0 + g.outlet_angle_deg / 60.0);
        let p = psi * r2 * r2 / (z * static_moment);
        let radius_ratio = r1 / r2;
        let disc_volume = DISC_FRICTION * libm::pow(r2, 5.0) * (1.0 - libm::pow(radius_ratio, 5.0));
        Ok(Self {
            slip_share: 1.0 / (1.0 + p),
            whirl_per_flow: 1.0 / (libm::tan(beta) * free_circumference * g.outlet_width_m),
            reference_omega: g.reference_speed_rpm * PI / 30.0,
            disc_volume,
            geometry,
        })
    }

    /// The geometry the model was built from.
    pub fn geometry(&self) -> &PumpGeometry {
        &self.geometry
    }

    /// Steady point at a shaft speed (rev/min, forward), delivered flow (m³/s, >= 0), radial ring clearance (m)
    /// and density (kg/m³). Negative speed, flow and clearance count as zero.
    pub fn steady(&self, speed_rpm: f64, flow_m3s: f64, clearance_m: f64, density: f64) -> SteadyPoint {
        let flow = flow_m3s.max(0.0);
        let g = &self.geometry;
        if speed_rpm < STANDSTILL_RPM {
            let head_m = -g.friction_loss_m * square(flow / g.shock_free_flow_m3s);
            return SteadyPoint {
                head_m,
                shaft_torque_nm: 0.0,
                shaft_power_w: 0.0,
                hydraulic_power_w: density * GRAVITY * flow * head_m,
                efficiency: None,
                leakage_m3s: 0.0,
            };
        }
        let wheel = Wheel::at(self, speed_rpm);
        let leakage = self.leakage(&wheel, flow, clearance_m.max(0.0));
        let through = flow + leakage;
        let head_m = wheel.net_work(through) / GRAVITY;
        let blade_power = (density * through * wheel.blade_work(through)).max(0.0);
        let recirculation_power = g.recirculation_power_w
            * (density / 1000.0)
            * wheel.ratio
            * wheel.ratio
            * wheel.ratio
            * wheel.stall(through);
        let disc_torque = self.disc_volume * wheel.reynolds_fifth_root_inverse * density * square(wheel.omega);
        let bearing_torque = g.bearing_torque_nm + g.seal_torque_nm * wheel.ratio;
        let shaft_torque_nm = (blade_power + recirculation_power) / wheel.omega + disc_torque + bearing_torque;
        let shaft_power_w = shaft_torque_nm * wheel.omega;
        let hydraulic_power_w = density * GRAVITY * flow * head_m;
        let efficiency = (hydraulic_power_w > 0.0 && shaft_power_w > 0.0).then_some(hydraulic_power_w / shaft_power_w);
        SteadyPoint { head_m, shaft_torque_nm, shaft_power_w, hydraulic_power_w, efficiency, leakage_m3s: leakage }
    }

    /// Solves `Q_L = c_d·A·√(2·share·Y(Q + Q_L))` for the ring flow.
    ///
    /// The right side falls with `Q_L`, so the root is single; it is bracketed by 0 and the value at no leakage,
    /// and a secant step kept inside the bracket (Illinois rule) finds it in a few evaluations.
    fn leakage(&self, wheel: &Wheel<'_>, flow: f64, clearance: f64) -> f64 {
        if clearance <= 0.0 {
            return 0.0;
        }
        let g = &self.geometry;
        let discharge = 1.0 / (g.ring_entry_loss + g.ring_friction * g.ring_length_m / (2.0 * clearance)).sqrt();
        let area = discharge * PI * g.ring_diameter_m * clearance;
        // The gap sees the pressure of the impeller alone: friction and incidence counted, spread over Q + Q_L.
        let driven = |leak: f64| area * (2.0 * g.ring_pressure_share * wheel.net_work(flow + leak).max(0.0)).sqrt();
        let (mut low, mut high) = (0.0, driven(0.0));
        let (mut f_low, mut f_high) = (-high, high - driven(high));
        if f_high <= 0.0 {
            return high;
        }
        for _ in 0..40 {
            let guess = high - f_high * (high - low) / (f_high - f_low);
            let f = guess - driven(guess);
            if f.abs() <= 1e-12 * guess.abs() + 1e-18 {
                return guess;
            }
            if f > 0.0 {
                (high, f_high) = (guess, f);
                f_low *= 0.5;
            } else {
                (low, f_low) = (guess, f);
                f_high *= 0.5;
            }
        }
        0.5 * (low + high)
    }
}

/// The wheel at one speed: everything that does not depend on flow, worked out once.
struct Wheel<'a> {
    pump: &'a PumpModel,
    omega: f64,
    /// Speed over reference speed.
    ratio: f64,
    rim_speed: f64,
    /// Friction grows as the Reynolds number falls: (Re_ref/Re)^0.12.
    friction_factor: f64,
    /// Re^-0.2 for the disc, Re = ω·r2²/ν.
    reynolds_fifth_root_inverse: f64,
}

impl<'a> Wheel<'a> {
    fn at(pump: &'a PumpModel, speed_rpm: f64) -> Self {
        let omega = speed_rpm * PI / 30.0;
        let ratio = omega / pump.reference_omega;
        let reynolds = omega * square(pump.geometry.outer_radius_m) / pump.geometry.viscosity_m2s;
        Self {
            pump,
            omega,
            ratio,
            rim_speed: omega * pump.geometry.outer_radius_m,
            friction_factor: libm::pow(ratio, -0.12),
            reynolds_fifth_root_inverse: libm::pow(reynolds, -0.2),
        }
    }

    /// Specific work the blades give, J/kg.
    fn blade_work(&self, through: f64) -> f64 {
        self.pump.slip_share * self.rim_speed * (self.rim_speed - through * self.pump.whirl_per_flow)
    }

    /// How deep in recirculation: 0 above the onset, 1 at zero flow.
    fn stall(&self, through: f64) -> f64 {
        let g = &self.pump.geometry;
        square((1.0 - through / (g.recirculation_onset * g.shock_free_flow_m3s * self.ratio)).max(0.0))
    }

    /// Specific work left at the discharge flange, J/kg.
    fn net_work(&self, through: f64) -> f64 {
        let g = &self.pump.geometry;
        let relative = through / g.shock_free_flow_m3s;
        let losses_m = g.friction_loss_m * self.friction_factor * square(relative)
            + g.incidence_loss_m * square(relative - self.ratio)
            + g.recirculation_loss_m * square(self.ratio) * self.stall(through);
        self.blade_work(through) - GRAVITY * losses_m
    }
}

fn square(x: f64) -> f64 {
    x * x
}
