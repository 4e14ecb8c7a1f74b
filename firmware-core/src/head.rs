//! Total head of a pump from two pressure taps, and the power it puts into the liquid.
//!
//! `H = (p_d − p_s)/(ρg) + (z_d − z_s) + (v_d² − v_s²)/2g` with `v = 4Q/(πD²)` at each tap (ISO 9906; clause from
//! memory), and `P_h = ρgQH`. Both gauges must share one atmospheric reference and have liquid-filled lines; `z` are
//! the heights of the gauge centres, `D` the pipe bore AT the tap, not the nozzle size.
//! Not modelled: friction between pump flange and tap, line inertia while the flow changes.

use crate::uncertain::Uncertain;

/// Where the two taps sit, reduced to what the head needs.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Taps {
    /// Velocity-head difference per flow squared, `8/(π²g)·(1/D_d⁴ − 1/D_s⁴)`, m per (m³/s)²; 0 for equal bores.
    pub velocity_head: f32,
    /// Height of the discharge gauge above the suction gauge, m.
    pub elevation: f32,
}

impl Taps {
    /// From the two bores and the height of the discharge gauge above the suction gauge, all in metres, g in m/s².
    ///
    /// Worked out in f64 on the host: the fourth powers lose digits in f32.
    #[cfg(any(feature = "std", test))]
    #[must_use]
    pub fn from_bores(suction_bore: f64, discharge_bore: f64, elevation: f64, gravity: f64) -> Self {
        let per_flow_squared = 8.0 / (core::f64::consts::PI * core::f64::consts::PI * gravity)
            * (discharge_bore.powi(-4) - suction_bore.powi(-4));
        Self { velocity_head: per_flow_squared as f32, elevation: elevation as f32 }
    }
}

/// Total head, m. `pressure_rise` in Pa, `flow` in m³/s, `density` in kg/m³ (not zero), `gravity` in m/s².
pub(crate) fn total_head(
    taps: &Taps,
    pressure_rise: &Uncertain,
    flow: &Uncertain,
    density: &Uncertain,
    gravity: f32,
) -> Uncertain {
    let static_head = pressure_rise.over(&density.scaled(gravity));
    let velocity_head = flow.times(flow).scaled(taps.velocity_head);
    static_head.plus(&velocity_head).shifted(taps.elevation)
}

/// Power put into the liquid, W: `ρgQH`. Negative when flow and head have opposite signs.
pub(crate) fn hydraulic_power(head: &Uncertain, flow: &Uncertain, density: &Uncertain, gravity: f32) -> Uncertain {
    density.scaled(gravity).times(flow).times(head)
}
