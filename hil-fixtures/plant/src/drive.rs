//! A variable-speed drive as the process sees it: speed follows a set-point, no faster than a ramp.
//!
//! `dn_ref/dt` is limited to the ramp, `dn/dt = (n_ref − n)/τ`; the shaft angle is the integral of speed, so pulses
//! can be placed exactly. Stop runs the ramp down to zero. Not modelled: torque limit, slip under load, coasting,
//! supply dips, reverse rotation.

use crate::{PlantError, within};

/// Settings of the drive.
#[derive(Debug, Clone, PartialEq)]
pub struct DriveConfig {
    /// Steepest change of the speed reference, rev/min per second, up and down alike.
    pub ramp_rpm_per_s: f64,
    /// First-order time constant between reference and speed, s.
    pub time_constant_s: f64,
    /// Highest set-point accepted, rev/min.
    pub max_speed_rpm: f64,
    /// Moment of inertia between the torque shaft and the impeller, kg·m²; adds `J·dω/dt` to the measured torque.
    pub inertia_kgm2: f64,
}

impl Default for DriveConfig {
    fn default() -> Self {
        Self { ramp_rpm_per_s: 50.0, time_constant_s: 0.4, max_speed_rpm: 1600.0, inertia_kgm2: 0.12 }
    }
}

/// The drive and its shaft.
#[derive(Debug, Clone)]
pub struct Drive {
    config: DriveConfig,
    set_point_rpm: f64,
    reference_rpm: f64,
    speed_rpm: f64,
    acceleration_rpm_per_s: f64,
    revolutions: f64,
    run: bool,
}

impl Drive {
    /// A drive already at its set-point when `run`, else at rest.
    ///
    /// # Errors
    /// [`PlantError`] for a ramp, time constant or speed outside the stated range.
    pub fn new(config: DriveConfig, set_point_rpm: f64, run: bool) -> Result<Self, PlantError> {
        within("ramp_rpm_per_s", config.ramp_rpm_per_s, 0.1, 1e5, "0.1 to 100000 rpm/s")?;
        within("time_constant_s", config.time_constant_s, 0.02, 60.0, "0.02 to 60 s")?;
        within("max_speed_rpm", config.max_speed_rpm, 10.0, 20_000.0, "10 to 20000 rpm")?;
        within("inertia_kgm2", config.inertia_kgm2, 0.0, 1e4, "0 to 10000 kg m2")?;
        within("speed_rpm", set_point_rpm, 0.0, config.max_speed_rpm, "0 to the drive's highest speed")?;
        let speed_rpm = if run { set_point_rpm } else { 0.0 };
        Ok(Self {
            config,
            set_point_rpm,
            reference_rpm: speed_rpm,
            speed_rpm,
            acceleration_rpm_per_s: 0.0,
            revolutions: 0.0,
            run,
        })
    }

    /// Advances by `dt` seconds (>= 0).
    pub fn step(&mut self, dt: f64) {
        let target = if self.run { self.set_point_rpm } else { 0.0 };
        let reach = self.config.ramp_rpm_per_s * dt;
        self.reference_rpm += (target - self.reference_rpm).clamp(-reach, reach);
        let before = self.speed_rpm;
        let share = 1.0 - libm::exp(-dt / self.config.time_constant_s);
        self.speed_rpm += (self.reference_rpm - self.speed_rpm) * share;
        if self.reference_rpm == 0.0 && self.speed_rpm < 0.5 {
            self.speed_rpm = 0.0;
        }
        self.acceleration_rpm_per_s = if dt > 0.0 { (self.speed_rpm - before) / dt } else { 0.0 };
        self.revolutions += 0.5 * (before + self.speed_rpm) / 60.0 * dt;
    }

    /// New set-point, rev/min; limited to 0 and the drive's highest speed. NaN is ignored.
    pub fn set_speed(&mut self, rpm: f64) {
        if !rpm.is_nan() {
            self.set_point_rpm = rpm.clamp(0.0, self.config.max_speed_rpm);
        }
    }

    /// Start (`true`) or stop.
    pub fn set_run(&mut self, run: bool) {
        self.run = run;
    }

    /// Shaft speed, rev/min.
    pub fn speed_rpm(&self) -> f64 {
        self.speed_rpm
    }

    /// Shaft angle since the start, revolutions.
    pub fn revolutions(&self) -> f64 {
        self.revolutions
    }

    /// The drive's own run state: started by command.
    pub fn running(&self) -> bool {
        self.run
    }

    /// Torque that speeds up the rotor, N·m (negative while slowing down).
    pub fn inertia_torque_nm(&self) -> f64 {
        self.config.inertia_kgm2 * self.acceleration_rpm_per_s * core::f64::consts::PI / 30.0
    }
}
