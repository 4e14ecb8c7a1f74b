//! The whole plant in one object: drive, pump and pipe work stepped together, and the truth they stand at.
//!
//! One step of `dt` advances the drive exactly, the wandering quantities exactly, and the flow by one implicit
//! Euler step; keep `dt` at or below 20 ms, a fiftieth of the liquid column's time constant of about a second. Total
//! head follows ISO 9906 (from memory): `H = (p_d − p_s)/(ρg) + (z_d − z_s) + (v_d² − v_s²)/2g`, gauge pressures at
//! the height of each gauge.

use crate::drive::{Drive, DriveConfig};
use crate::noise::{Stream, Wander};
use crate::pump::{PumpGeometry, PumpModel, SteadyPoint};
use crate::system::SystemConfig;
use crate::{GRAVITY, PlantError, within};

/// All that is set before a run.
#[derive(Debug, Clone, PartialEq)]
pub struct PlantConfig {
    /// The pump when new.
    pub pump: PumpGeometry,
    /// The pipe work and its unrest.
    pub system: SystemConfig,
    /// The drive.
    pub drive: DriveConfig,
    /// Density of the liquid, kg/m³.
    pub density: f64,
    /// Speed set-point at the start, rev/min.
    pub speed_rpm: f64,
    /// Valve opening at the start, share of fully open.
    pub valve_opening: f64,
    /// Whether the pump runs (and has settled) at the start.
    pub run: bool,
}

impl Default for PlantConfig {
    /// The invented waterworks at full speed, water at 15 °C.
    fn default() -> Self {
        Self {
            pump: PumpGeometry::default(),
            system: SystemConfig::default(),
            drive: DriveConfig::default(),
            density: 999.1,
            speed_rpm: 1480.0,
            valve_opening: 1.0,
            run: true,
        }
    }
}

/// What is really the case, before any instrument.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Truth {
    /// Time since the start, s.
    pub time_s: f64,
    /// Shaft speed, rev/min.
    pub speed_rpm: f64,
    /// Delivered flow, m³/s, never negative.
    pub flow_m3s: f64,
    /// Total head of the pump, m of liquid.
    pub head_m: f64,
    /// Torque at the coupling, N·m; includes speeding up the rotor.
    pub shaft_torque_nm: f64,
    /// That torque times angular speed, W.
    pub shaft_power_w: f64,
    /// Hydraulic power over steady shaft power; `None` where flow, head or torque is not positive.
    pub efficiency: Option<f64>,
    /// Pressure at the suction gauge, Pa gauge.
    pub suction_pa_gauge: f64,
    /// Pressure at the discharge gauge, Pa gauge.
    pub discharge_pa_gauge: f64,
    /// Radial clearance of the wear ring, m.
    pub ring_clearance_m: f64,
    /// Flow back through the ring, m³/s.
    pub leakage_m3s: f64,
    /// Shaft angle since the start, revolutions.
    pub revolutions: f64,
    /// The drive's run state.
    pub running: bool,
}

/// A plant in motion.
#[derive(Debug, Clone)]
pub struct Plant {
    config: PlantConfig,
    pump: PumpModel,
    drive: Drive,
    demand: Wander,
    suction_wander: Wander,
    time_s: f64,
    flow: f64,
    valve_opening: f64,
    suction_level: f64,
    clearance: f64,
    point: SteadyPoint,
}

/// Smallest valve opening; below it the valve counts as this far open, which passes practically nothing.
const SHUT: f64 = 1e-3;

impl Plant {
    /// Builds the plant; a running one starts settled at its set-point.
    ///
    /// # Errors
    /// [`PlantError`] naming the first setting out of range.
    pub fn new(config: &PlantConfig, seed: u64) -> Result<Self, PlantError> {
        config.system.check()?;
        within("density", config.density, 300.0, 2000.0, "300 to 2000 kg/m3")?;
        within("valve_opening", config.valve_opening, 0.0, 1.0, "0 to 1")?;
        let pump = PumpModel::new(config.pump.clone())?;
        let drive = Drive::new(config.drive.clone(), config.speed_rpm, config.run)?;
        let system = &config.system;
        let demand = Wander::new(Stream::new(seed, 1), system.demand_noise, system.demand_correlation_s);
        let suction_wander = Wander::new(Stream::new(seed, 2), system.level_noise_m, system.level_correlation_s);
        let clearance = config.pump.ring_clearance_m;
        let point = pump.steady(drive.speed_rpm(), 0.0, clearance, config.density);
        let mut plant = Self {
            pump,
            drive,
            demand,
            suction_wander,
            time_s: 0.0,
            flow: 0.0,
            valve_opening: config.valve_opening,
            suction_level: system.suction_level_m,
            clearance,
            point,
            config: config.clone(),
        };
        for _ in 0..3000 {
            plant.move_liquid(0.02);
        }
        Ok(plant)
    }

    /// Advances by `dt` seconds; see the module's note on its size. A `dt` that is not positive does nothing.
    pub fn step(&mut self, dt: f64) {
        if dt.is_nan() || dt <= 0.0 {
            return;
        }
        self.time_s += dt;
        self.drive.step(dt);
        self.demand.step(dt);
        self.suction_wander.step(dt);
        self.move_liquid(dt);
    }

    fn move_liquid(&mut self, dt: f64) {
        let system = &self.config.system;
        let swing = system.level_swing_m * libm::sin(2.0 * core::f64::consts::PI * self.time_s / system.level_period_s);
        // A higher suction level lowers the lift by as much.
        let static_head = system.static_lift_m + swing - (self.present_suction_level() - system.suction_level_m)
            + system.suction_loss_m * (self.flow / system.rated_flow_m3s) * (self.flow / system.rated_flow_m3s);
        let resistance = system.resistance(self.valve_opening.max(SHUT), libm::exp(self.demand.value()));
        self.flow = system.next_flow(self.flow, self.point.head_m, static_head, resistance, dt);
        self.point = self.pump.steady(self.drive.speed_rpm(), self.flow, self.clearance, self.config.density);
    }

    fn present_suction_level(&self) -> f64 {
        self.suction_level + self.suction_wander.value()
    }

    /// The present state without instrument errors.
    pub fn truth(&self) -> Truth {
        let system = &self.config.system;
        let weight = self.config.density * GRAVITY;
        let relative_flow = self.flow / system.rated_flow_m3s;
        let suction_velocity = SystemConfig::velocity_head_m(self.flow, system.suction_bore_m);
        let discharge_velocity = SystemConfig::velocity_head_m(self.flow, system.discharge_bore_m);
        let suction_head = self.present_suction_level()
            - system.suction_loss_m * relative_flow * relative_flow
            - system.suction_gauge_m
            - suction_velocity;
        let discharge_head = suction_head + self.point.head_m
            - (system.discharge_gauge_m - system.suction_gauge_m)
            - (discharge_velocity - suction_velocity);
        let shaft_torque_nm = self.point.shaft_torque_nm + self.drive.inertia_torque_nm();
        Truth {
            time_s: self.time_s,
            speed_rpm: self.drive.speed_rpm(),
            flow_m3s: self.flow,
            head_m: self.point.head_m,
            shaft_torque_nm,
            shaft_power_w: shaft_torque_nm * self.drive.speed_rpm() * core::f64::consts::PI / 30.0,
            efficiency: self.point.efficiency,
            suction_pa_gauge: weight * suction_head,
            discharge_pa_gauge: weight * discharge_head,
            ring_clearance_m: self.clearance,
            leakage_m3s: self.point.leakage_m3s,
            revolutions: self.drive.revolutions(),
            running: self.drive.running(),
        }
    }

    /// The pump inside, for reference curves.
    pub fn pump(&self) -> &PumpModel {
        &self.pump
    }

    /// Density of the liquid, kg/m³.
    pub fn density(&self) -> f64 {
        self.config.density
    }

    /// New speed set-point, rev/min, limited to 0 and the drive's highest speed.
    pub fn set_speed(&mut self, rpm: f64) {
        self.drive.set_speed(rpm);
    }

    /// Valve opening, 0 shut to 1 fully open; other values are limited to that range, NaN is ignored.
    pub fn set_valve(&mut self, opening: f64) {
        if !opening.is_nan() {
            self.valve_opening = opening.clamp(0.0, 1.0);
        }
    }

    /// Mean suction level above the pump's axis, m; NaN is ignored.
    pub fn set_suction_level(&mut self, level_m: f64) {
        if !level_m.is_nan() {
            self.suction_level = level_m;
        }
    }

    /// Radial clearance of the wear ring, m; negative counts as none, NaN is ignored.
    pub fn set_ring_clearance(&mut self, clearance_m: f64) {
        if !clearance_m.is_nan() {
            self.clearance = clearance_m.max(0.0);
        }
    }

    /// Start or stop.
    pub fn set_run(&mut self, run: bool) {
        self.drive.set_run(run);
    }
}
