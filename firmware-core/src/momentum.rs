//! Moment of momentum: the torque an impeller must give to turn a stream, from drawing dimensions, speed and flow.
//!
//! `T = ρ·Q_i·(r2·c_u2 − r1·c_u1)` with `c_u2 = σ·u2 − c_m2·cot β2`, `c_m2 = Q_i/(π·D2·b2·κ2)`, `Q_i = Q/η_v`, and
//! Euler's head `H_th = (u2·c_u2 − u1·c_u1)/g`. Steady running: the storage term is dropped. `c_u` is positive with the
//! rotation: pre-whirl with it lowers head and torque, against it raises both.
//! Disc friction, bearings and seals are one declared drag torque ∝ ρn². Below the declared onset of recirculation the
//! one stream of this model no longer exists and no torque is given.

use crate::{machine::Impeller, uncertain::Uncertain};

/// Least relative standard uncertainty of a momentum torque that was not calibrated against measured points.
pub const LEAST_DEVIATION: f32 = 0.08;

/// Rim speed `u = r·ω`, m/s (common practice, no source).
#[must_use]
pub fn rim_speed(radius: f32, angular_speed: f32) -> f32 {
    radius * angular_speed
}

/// Whirl of the stream leaving the blades, m/s: `c_u2 = σ·u2 − c_m2·cot β2`, the slip factor taken as lost rim speed.
///
/// `rim_speed` u2 and `meridional` c_m2 in m/s, `cotangent` of the blade angle from tangential.
#[must_use]
pub fn outlet_whirl(rim_speed: f32, meridional: f32, cotangent: f32, slip_factor: f32) -> f32 {
    slip_factor * rim_speed - meridional * cotangent
}

/// Euler's head in metres of the fluid: `(u2·c_u2 − u1·c_u1)/g`, all speeds in m/s, g in m/s².
#[must_use]
pub fn euler_head(outlet_rim: f32, outlet_whirl: f32, inlet_rim: f32, inlet_whirl: f32, gravity: f32) -> f32 {
    (outlet_rim * outlet_whirl - inlet_rim * inlet_whirl) / gravity
}

/// Torque the impeller gives to the stream, N·m: `ρ·Q_i·(r2·c_u2 − r1·c_u1)`.
///
/// `mass_flow` ρ·Q_i in kg/s through the impeller (leakage included), radii in m, whirls in m/s.
#[must_use]
pub fn stream_torque(mass_flow: f32, outlet: (f32, f32), inlet: (f32, f32)) -> f32 {
    let ((outlet_radius, outlet_whirl), (inlet_radius, inlet_whirl)) = (outlet, inlet);
    mass_flow * (outlet_radius * outlet_whirl - inlet_radius * inlet_whirl)
}

/// Shaft torque by the momentum model with its uncertainty, N·m, from speed (rad/s), delivered flow (m³/s) and
/// density (kg/m³); `ratio` is speed over reference speed, `reference_density` that of the drag torque.
pub(crate) fn shaft_torque(
    impeller: &Impeller,
    speed: &Uncertain,
    flow: &Uncertain,
    density: &Uncertain,
    ratio: &Uncertain,
    reference_density: f32,
) -> Uncertain {
    let through = flow.scaled(1.0 / impeller.volumetric_efficiency);
    let radius = impeller.outlet_radius;
    // r2·c_u2 − r1·c_u1 = ω·r2²·(σ − λ) − r2·cot β2·Q_i/A2, λ being the inlet whirl over ω·r2².
    let turned = speed
        .scaled(radius * radius * (impeller.slip_factor - impeller.inlet_whirl))
        .minus(&through.scaled(radius * impeller.outlet_cotangent / impeller.outlet_area));
    let stream = density.times(&through).times(&turned);
    let drag = ratio.times(ratio).times(density).scaled(impeller.drag_torque / reference_density);
    let torque = stream.plus(&drag);
    let relative = impeller.model_deviation.max(LEAST_DEVIATION);
    torque.with_own(relative * torque.value)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::uncertain::Input;

    const IMPELLER: Impeller = Impeller {
        outlet_radius: 0.16,
        outlet_area: 0.0125,
        outlet_cotangent: 2.2,
        slip_factor: 0.78,
        inlet_whirl: 0.1,
        volumetric_efficiency: 0.95,
        drag_torque: 3.0,
        recirculation_onset: 0.5,
        model_deviation: 0.0,
    };

    #[test]
    fn uncertain_form_is_the_plain_law() {
        let (omega, q, rho) = (155.0_f32, 0.022_f32, 998.0_f32);
        let r = 155.0 / 154.0;
        let got = shaft_torque(
            &IMPELLER,
            &Uncertain::exact(omega),
            &Uncertain::exact(q),
            &Uncertain::exact(rho),
            &Uncertain::exact(r),
            1000.0,
        );
        let through = q / IMPELLER.volumetric_efficiency;
        let u2 = rim_speed(IMPELLER.outlet_radius, omega);
        let whirl = outlet_whirl(u2, through / IMPELLER.outlet_area, IMPELLER.outlet_cotangent, IMPELLER.slip_factor);
        let inlet_whirl = IMPELLER.inlet_whirl * omega * IMPELLER.outlet_radius * IMPELLER.outlet_radius;
        let plain = stream_torque(rho * through, (IMPELLER.outlet_radius, whirl), (1.0, inlet_whirl))
            + IMPELLER.drag_torque * r * r * rho / 1000.0;
        assert!((got.value - plain).abs() < 2e-5 * plain, "{} against {plain}", got.value);
    }

    #[test]
    fn never_surer_than_eight_per_cent() {
        let exact = |v| Uncertain::exact(v);
        let torque = shaft_torque(&IMPELLER, &exact(155.0), &exact(0.022), &exact(998.0), &exact(1.0), 998.0);
        assert!((torque.deviation() / torque.value - 0.08).abs() < 1e-6);
        let noisy_flow = Uncertain::input(Input::Flow, 0.022, 0.0022);
        let wider = shaft_torque(&IMPELLER, &exact(155.0), &noisy_flow, &exact(998.0), &exact(1.0), 998.0);
        assert!(wider.deviation() > torque.deviation());
    }
}
