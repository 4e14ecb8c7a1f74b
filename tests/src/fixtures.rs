//! Profiles and samples of invented machines: a waterworks pump for tests that need one machine, and a shape with a few
//! numbers for those that need many.
//!
//! The curve is `H = H_0·(1 − d·(Q/Q_b)²)`, `P = P_b·(0.45 + 0.65·Q/Q_b − 0.10·(Q/Q_b)²)`, knots closer together at low
//! flow; the impeller follows from shut-off head and best flow by round figures of the trade (common practice, no
//! source). They need to be plausible, not to be any real machine.

use offcurve_core::{
    board::{Direction, RunState},
    conditioning::ConditionedSample,
    deviation::Deviation,
    head::Taps,
    machine::{
        Impeller, Profile,
        curve::{CurveTable, Knot},
        design,
        profile::{ChannelSetup, Limit, Limits, Schedule, Source},
    },
    sensing::{Channel, ChannelFault, ChannelValue, Reading},
};

/// A machine by a few numbers.
#[derive(Clone, Copy, Debug)]
pub struct Shape {
    /// Head at zero flow and reference speed, m.
    pub shut_off_head: f64,
    /// Flow of best efficiency at reference speed, m³/s.
    pub best_flow: f64,
    /// Part of the shut-off head lost at best flow.
    pub droop: f64,
    /// Reference speed, rad/s.
    pub reference_speed: f64,
    /// Knots of the curve, 2 to 16.
    pub knots: usize,
    /// Density of the liquid, kg/m³.
    pub density: f64,
    /// Density of the curve's powers, kg/m³.
    pub reference_density: f64,
    /// Local acceleration of free fall, m/s².
    pub gravity: f64,
    /// Bore at the suction tap, m.
    pub suction_bore: f64,
    /// Bore at the discharge tap, m.
    pub discharge_bore: f64,
    /// Height of the discharge gauge above the suction gauge, m.
    pub elevation: f64,
    /// Relative standard uncertainties: density, head curve, power curve, momentum model.
    pub deviations: [f64; 4],
    /// Whether the impeller's dimensions are known.
    pub impeller: bool,
}

/// Flow of the last knot, relative to best flow.
pub const LAST_KNOT: f64 = 1.5;

impl Shape {
    /// A pump of an invented small waterworks: 38 m at shut-off, 24 l/s, 1,480 rev/min.
    pub const WATERWORKS: Self = Self {
        shut_off_head: 38.0,
        best_flow: 0.024,
        droop: 0.16,
        reference_speed: 154.985_239_372,
        knots: 9,
        density: 998.6,
        reference_density: 998.2,
        gravity: 9.81,
        suction_bore: 0.125,
        discharge_bore: 0.1,
        elevation: 0.4,
        deviations: [0.0005, 0.01, 0.015, 0.08],
        impeller: true,
    };

    /// Head at a flow and the reference speed, m.
    #[must_use]
    pub fn head(&self, flow: f64) -> f64 {
        self.shut_off_head * (1.0 - self.droop * (flow / self.best_flow).powi(2))
    }

    /// Shaft power at a flow, the reference speed and density, W.
    #[must_use]
    pub fn power(&self, flow: f64) -> f64 {
        let at_best = self.reference_density * 9.81 * self.best_flow * self.head(self.best_flow) / 0.78;
        let x = flow / self.best_flow;
        at_best * (0.45 + 0.65 * x - 0.10 * x * x)
    }

    /// The profile of this machine; every channel on a loop but the speed, which comes from pulses.
    ///
    /// # Panics
    /// When the numbers make no curve; that is the caller's mistake.
    #[must_use]
    pub fn profile(&self) -> Profile {
        let [density, head_curve, power_curve, momentum] = self.deviations;
        let last = (self.knots - 1) as f64;
        let flows: Vec<f64> =
            (0..self.knots).map(|k| LAST_KNOT * self.best_flow * (k as f64 / last).powf(1.2)).collect();
        let heads: Vec<f64> = flows.iter().map(|&q| self.head(q)).collect();
        let powers: Vec<f64> = flows.iter().map(|&q| self.power(q)).collect();
        let (head_slopes, power_slopes) =
            (design::monotone_slopes(&flows, &heads), design::monotone_slopes(&flows, &powers));
        let knots: Vec<Knot> = (0..self.knots)
            .map(|k| Knot {
                flow: flows[k] as f32,
                head: heads[k] as f32,
                head_slope: head_slopes[k] as f32,
                power: powers[k] as f32,
                power_slope: power_slopes[k] as f32,
            })
            .collect();
        let rim_speed = (1.75 * self.gravity * self.shut_off_head).sqrt();
        let radius = rim_speed / self.reference_speed;
        let impeller = Impeller {
            outlet_radius: radius as f32,
            outlet_area: (self.best_flow / (0.09 * rim_speed)) as f32,
            outlet_cotangent: 2.3,
            slip_factor: 0.79,
            inlet_whirl: 0.02,
            volumetric_efficiency: 0.96,
            drag_torque: (0.06 * self.power(self.best_flow) / self.reference_speed) as f32,
            recirculation_onset: 0.45,
            model_deviation: momentum as f32,
        };
        let on_loop = |input, low, high| ChannelSetup {
            source: Source::Loop { input, low, high },
            deviation: 0.001 * high,
            relative_deviation: 0.002,
            from_drive: false,
        };
        let pressure = (2.0 * self.density * self.gravity * self.shut_off_head) as f32;
        Profile {
            machine: 7,
            gravity: self.gravity as f32,
            density: self.density as f32,
            density_deviation: (density * self.density) as f32,
            taps: Taps::from_bores(self.suction_bore, self.discharge_bore, self.elevation, self.gravity),
            reference_speed: self.reference_speed as f32,
            reference_density: self.reference_density as f32,
            best_efficiency_flow: self.best_flow as f32,
            head_curve_deviation: head_curve as f32,
            power_curve_deviation: power_curve as f32,
            curve: CurveTable::new(&knots).expect("the shape makes a curve"),
            impeller: self.impeller.then_some(impeller),
            speed: ChannelSetup {
                source: Source::Pulses { per_revolution: 60 },
                deviation: 0.01,
                relative_deviation: 0.0005,
                from_drive: false,
            },
            flow: on_loop(0, 0.0, (2.0 * self.best_flow) as f32),
            suction_pressure: on_loop(1, -1e5, 3e5),
            discharge_pressure: on_loop(2, 0.0, pressure),
            shaft_torque: on_loop(3, 0.0, (2.0 * self.power(self.best_flow) / self.reference_speed) as f32),
            limits: Limits {
                minimum_flow: Some(Limit { at: 0.3, deadband: 0.05, on_delay: 10.0, off_delay: 10.0 }),
                run_out: Some(Limit { at: 1.3, deadband: 0.05, on_delay: 10.0, off_delay: 10.0 }),
                torque: None,
                sensor_delay: 2.0,
            },
            schedule: Schedule { scan_ms: 1, scans_per_step: 100, steps_per_record: 10 },
        }
    }
}

/// A reading with a standard uncertainty of at least `deviation`, coded as the controller would.
pub fn reading(channel: Channel, value: f64, deviation: f64) -> Reading {
    Ok(ChannelValue {
        value: value as f32,
        deviation: Deviation::at_least(deviation as f32, channel.deviation_base()),
        saturated: false,
        age: 0,
    })
}

/// A sample of a running machine from (value, standard uncertainty) per channel in record order; `None`: sensor not
/// fitted.
#[must_use]
pub fn sample(readings: [Option<(f64, f64)>; 5]) -> ConditionedSample {
    let mut sample =
        ConditionedSample { run: RunState::Running, direction: Direction::Forward, ..ConditionedSample::EMPTY };
    for (channel, found) in Channel::ALL.into_iter().zip(readings) {
        *sample.channel_mut(channel) = match found {
            Some((value, deviation)) => reading(channel, value, deviation),
            None => Err(ChannelFault::NotFitted),
        };
    }
    sample
}

/// Readings of a machine of this shape that runs on its curve at a speed ratio and a flow relative to best flow, with
/// head and power off the curve by the given factors. Each reading's relative uncertainty is given; pressures get theirs
/// from the pressure rise.
#[must_use]
pub fn on_curve(
    shape: &Shape,
    (speed_ratio, relative_flow): (f64, f64),
    (head_factor, power_factor): (f64, f64),
    suction_pressure: f64,
    relative: [f64; 5],
) -> [(f64, f64); 5] {
    let reference_flow = relative_flow * shape.best_flow;
    let speed = speed_ratio * shape.reference_speed;
    let flow = speed_ratio * reference_flow;
    let head = head_factor * speed_ratio.powi(2) * shape.head(reference_flow);
    let density = shape.density / shape.reference_density;
    let power = power_factor * speed_ratio.powi(3) * density * shape.power(reference_flow);
    let velocity = |bore: f64| 4.0 * flow / (core::f64::consts::PI * bore.powi(2));
    let velocity_head =
        (velocity(shape.discharge_bore).powi(2) - velocity(shape.suction_bore).powi(2)) / (2.0 * shape.gravity);
    let rise = shape.density * shape.gravity * (head - shape.elevation - velocity_head);
    let torque = power / speed;
    let [of_speed, of_flow, of_suction, of_discharge, of_torque] = relative;
    [
        (speed, of_speed * speed),
        (flow, of_flow * flow),
        (suction_pressure, of_suction * rise.abs()),
        (suction_pressure + rise, of_discharge * rise.abs()),
        (torque, of_torque * torque),
    ]
}
