//! The impeller as the controller needs it: constants that follow from drawing dimensions, worked out on the host in
//! f64 ([`design`](super::design)) so that no sine, power or root of a design figure is taken on the target.

/// Constants of one impeller. All finite; ranges are checked when a profile is decoded.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Impeller {
    /// Outlet radius r2, m.
    pub outlet_radius: f32,
    /// Free outlet area π·D2·b2·κ2, m².
    pub outlet_area: f32,
    /// Cotangent of the outlet blade angle (from tangential); negative for forward-curved blades.
    pub outlet_cotangent: f32,
    /// Slip factor σ = 1 − (c_u2∞ − c_u2)/u2, parts of one.
    pub slip_factor: f32,
    /// Whirl brought in by the stream as r1·c_u1/(ω·r2²); 0 for a straight inlet, positive with the rotation.
    pub inlet_whirl: f32,
    /// Delivered flow over flow through the impeller, Q/(Q + Q_leak), parts of one.
    pub volumetric_efficiency: f32,
    /// Disc friction, bearing and seal torque at the reference speed and density, N·m; carried as ∝ n².
    pub drag_torque: f32,
    /// Flow relative to best efficiency below which the stream recirculates and the model says nothing.
    pub recirculation_onset: f32,
    /// Relative standard uncertainty of the momentum torque; never taken below
    /// [`momentum::LEAST_DEVIATION`](crate::momentum::LEAST_DEVIATION).
    pub model_deviation: f32,
}
