//! The pipe work the pump delivers into: static lift, losses, a rigid column of liquid and a check valve.
//!
//! `L/(gA)·dQ/dt = H_pump(Q) − H_static − (K_pipe + K_valve/y²)·f·Q²`, `y` the valve opening (0 to 1) and `f` the
//! wandering factor of demand. The loss term is taken half implicitly so that a nearly shut valve stays stable.
//! Flow never goes backwards. Not modelled: elasticity (water hammer), a leaking check valve, branches.

use crate::{GRAVITY, PlantError, within};

/// The pipe work.
#[derive(Debug, Clone, PartialEq)]
pub struct SystemConfig {
    /// Height of the delivery level above the suction level when both stand at their mean, m.
    pub static_lift_m: f64,
    /// Flow at which the two losses below are declared, m³/s.
    pub rated_flow_m3s: f64,
    /// Loss of the pipe at the rated flow, m of liquid.
    pub pipe_loss_m: f64,
    /// Loss of the fully open valve at the rated flow, m of liquid; grows with 1/opening².
    pub valve_loss_m: f64,
    /// Length of the pipe line, m; with the bore it sets the inertia.
    pub pipe_length_m: f64,
    /// Bore of the pipe line, m.
    pub pipe_bore_m: f64,
    /// Suction level above the pump's axis, m.
    pub suction_level_m: f64,
    /// Loss between suction tank and suction gauge at the rated flow, m of liquid.
    pub suction_loss_m: f64,
    /// Bore at the suction gauge, m.
    pub suction_bore_m: f64,
    /// Bore at the discharge gauge, m.
    pub discharge_bore_m: f64,
    /// Height of the suction gauge above the pump's axis, m.
    pub suction_gauge_m: f64,
    /// Height of the discharge gauge above the pump's axis, m.
    pub discharge_gauge_m: f64,
    /// Slow swing of the delivery level about its mean, amplitude in m.
    pub level_swing_m: f64,
    /// Period of that swing, s.
    pub level_period_s: f64,
    /// Standard deviation of the wandering loss factor (log scale), dimensionless.
    pub demand_noise: f64,
    /// Correlation time of the wandering loss factor, s.
    pub demand_correlation_s: f64,
    /// Standard deviation of the wandering suction level, m.
    pub level_noise_m: f64,
    /// Correlation time of the wandering suction level, s.
    pub level_correlation_s: f64,
}

impl Default for SystemConfig {
    /// The invented waterworks: about 80 m³/h against 32 m with the valve open and the pump at full speed.
    fn default() -> Self {
        Self {
            static_lift_m: 12.0,
            rated_flow_m3s: 80.0 / 3600.0,
            pipe_loss_m: 12.0,
            valve_loss_m: 8.0,
            pipe_length_m: 400.0,
            pipe_bore_m: 0.150,
            suction_level_m: 2.5,
            suction_loss_m: 0.8,
            suction_bore_m: 0.150,
            discharge_bore_m: 0.125,
            suction_gauge_m: 0.0,
            discharge_gauge_m: 0.4,
            level_swing_m: 0.5,
            level_period_s: 8.0 * 3600.0,
            demand_noise: 0.06,
            demand_correlation_s: 40.0,
            level_noise_m: 0.08,
            level_correlation_s: 30.0,
        }
    }
}

impl SystemConfig {
    /// Refuses what the equation of motion cannot carry.
    pub(crate) fn check(&self) -> Result<(), PlantError> {
        within("static_lift_m", self.static_lift_m, -50.0, 1000.0, "-50 to 1000 m")?;
        within("rated_flow_m3s", self.rated_flow_m3s, 1e-5, 50.0, "1e-5 to 50 m3/s")?;
        within("pipe_loss_m", self.pipe_loss_m, 0.0, 1000.0, "0 to 1000 m")?;
        within("valve_loss_m", self.valve_loss_m, 0.0, 1000.0, "0 to 1000 m")?;
        within("pipe_length_m", self.pipe_length_m, 10.0, 1e5, "10 to 100000 m")?;
        within("suction_loss_m", self.suction_loss_m, 0.0, 100.0, "0 to 100 m")?;
        within("suction_level_m", self.suction_level_m, -10.0, 100.0, "-10 to 100 m")?;
        for (name, bore) in [
            ("pipe_bore_m", self.pipe_bore_m),
            ("suction_bore_m", self.suction_bore_m),
            ("discharge_bore_m", self.discharge_bore_m),
        ] {
            within(name, bore, 0.01, 3.0, "10 mm to 3 m")?;
        }
        within("level_period_s", self.level_period_s, 1.0, 1e9, "1 s or longer")?;
        within("demand_noise", self.demand_noise, 0.0, 1.0, "0 to 1")?;
        within("demand_correlation_s", self.demand_correlation_s, 0.1, 1e5, "0.1 to 100000 s")?;
        within("level_noise_m", self.level_noise_m, 0.0, 10.0, "0 to 10 m")?;
        within("level_correlation_s", self.level_correlation_s, 0.1, 1e5, "0.1 to 100000 s")
    }

    /// Velocity head at a bore, m.
    pub(crate) fn velocity_head_m(flow: f64, bore: f64) -> f64 {
        let velocity = flow / (core::f64::consts::FRAC_PI_4 * bore * bore);
        velocity * velocity / (2.0 * GRAVITY)
    }

    /// Resistance of the line, m/(m³/s)², at a valve opening and wandering factor.
    pub(crate) fn resistance(&self, opening: f64, demand_factor: f64) -> f64 {
        let lost = self.pipe_loss_m + self.valve_loss_m / (opening * opening);
        demand_factor * lost / (self.rated_flow_m3s * self.rated_flow_m3s)
    }

    /// Flow after `dt`, given the present flow, the pump's head at it and the static head to overcome.
    pub(crate) fn next_flow(&self, flow: f64, pump_head: f64, static_head: f64, resistance: f64, dt: f64) -> f64 {
        let area = core::f64::consts::FRAC_PI_4 * self.pipe_bore_m * self.pipe_bore_m;
        let gain = dt * GRAVITY * area / self.pipe_length_m;
        // Q'·(1 + gain·R·Q) = Q + gain·(H − H_static): the quadratic loss with one factor new, one old.
        ((flow + gain * (pump_head - static_head)) / (1.0 + gain * resistance * flow)).max(0.0)
    }
}
