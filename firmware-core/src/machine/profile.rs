//! The machine profile: everything a controller must know of one machine, loaded at run time. Host and controller hold
//! the same bytes, so both compute the same estimates to the bit.
//!
//! The byte form is version 0, not frozen: it opens with [`LAYOUT`](crate::link::LAYOUT), a fingerprint of the layout's own source, and a
//! build with another layout refuses it. It ends with a CRC-32 over all before it. Decoding checks every range, so the
//! rest of the crate may trust a `Profile`.

use super::{
    CurveTable, Impeller,
    curve::{CurveError, KNOTS, Knot},
};
use crate::{
    board::LOOP_INPUTS,
    bytes::{Reader, Writer},
    checksum::crc32,
    head::Taps,
    link,
    sensing::Channel,
};

/// Room for any profile in its byte form.
pub const PROFILE_BYTES: usize = 640;

/// Where a channel's value comes from.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Source {
    /// This machine does not have the sensor.
    #[default]
    NotFitted,
    /// A 4–20 mA loop on a converter input; `low` and `high` are the values at 4 and 20 mA, SI.
    Loop {
        /// Converter input, below [`LOOP_INPUTS`].
        input: u8,
        /// Value at 4 mA.
        low: f32,
        /// Value at 20 mA.
        high: f32,
    },
    /// Shaft pulses (speed only).
    Pulses {
        /// Edges counted per revolution.
        per_revolution: u16,
    },
}

/// One channel: its source and how well its 100 ms mean is known.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ChannelSetup {
    /// Where the value comes from.
    pub source: Source,
    /// Constant part of the standard uncertainty, SI unit of the channel.
    pub deviation: f32,
    /// Part proportional to the value, parts of one.
    pub relative_deviation: f32,
    /// The value is the drive's own (a motor model), not an instrument's.
    pub from_drive: bool,
}

/// A limit with its deadband and delays.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Limit {
    /// Where the flag is raised.
    pub at: f32,
    /// How far back inside the value must come before the flag may fall; same unit, not negative.
    pub deadband: f32,
    /// How long beyond the limit before the flag is raised, s.
    pub on_delay: f32,
    /// How long back inside before it falls, s.
    pub off_delay: f32,
}

/// Limits the controller watches by itself; `None` where the owner declared none.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Limits {
    /// Least flow relative to best efficiency.
    pub minimum_flow: Option<Limit>,
    /// Largest flow relative to best efficiency (run-out).
    pub run_out: Option<Limit>,
    /// Largest shaft torque, N·m.
    pub torque: Option<Limit>,
    /// How long a fitted sensor must fail before the flag is raised, and be well before it falls, s.
    pub sensor_delay: f32,
}

/// How often the controller does what.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Schedule {
    /// Time between two converter scans, ms; 1 for the 1 kHz that real loops need.
    pub scan_ms: u16,
    /// Scans averaged into one estimate; scan_ms·scans should span whole mains periods (100 ms fits 50 and 60 Hz).
    pub scans_per_step: u16,
    /// Estimates per record sent.
    pub steps_per_record: u16,
}

impl Schedule {
    /// Time between two estimates, ms.
    #[must_use]
    pub const fn step_ms(&self) -> u32 {
        (self.scan_ms as u32).saturating_mul(self.scans_per_step as u32)
    }
}

/// All that is known of one machine.
#[derive(Clone, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Profile {
    /// The machine's tag, apart from the controller's identity: swapping a board keeps the machine's history.
    pub machine: u8,
    /// Local acceleration of free fall, m/s².
    pub gravity: f32,
    /// Density of the liquid, kg/m³.
    pub density: f32,
    /// Standard uncertainty of the density, kg/m³.
    pub density_deviation: f32,
    /// Pressure taps.
    pub taps: Taps,
    /// Speed the curve is stated at, rad/s.
    pub reference_speed: f32,
    /// Density the curve's powers are stated at, kg/m³.
    pub reference_density: f32,
    /// Flow of best efficiency at the reference speed, m³/s.
    pub best_efficiency_flow: f32,
    /// Relative standard uncertainty of the head curve.
    pub head_curve_deviation: f32,
    /// Relative standard uncertainty of the power curve.
    pub power_curve_deviation: f32,
    /// The expected curve.
    pub curve: CurveTable,
    /// The impeller, where its dimensions are known.
    pub impeller: Option<Impeller>,
    /// Shaft speed.
    pub speed: ChannelSetup,
    /// Delivered flow.
    pub flow: ChannelSetup,
    /// Suction pressure, gauge.
    pub suction_pressure: ChannelSetup,
    /// Discharge pressure, gauge.
    pub discharge_pressure: ChannelSetup,
    /// Shaft torque.
    pub shaft_torque: ChannelSetup,
    /// Limits for the controller's own flags.
    pub limits: Limits,
    /// Rates.
    pub schedule: Schedule,
}

/// Why bytes are not a profile.
#[derive(Clone, Copy, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ProfileError {
    /// Made by a build with another layout. Make it again with this one.
    OtherLayout {
        /// The fingerprint found.
        found: u32,
    },
    /// Fewer bytes, or more, than the layout asks for.
    WrongLength,
    /// The bytes do not match their checksum.
    ChecksumMismatch,
    /// The curve's knots do not make a curve.
    Curve(CurveError),
    /// A field outside its range, or not finite.
    OutOfRange {
        /// Which field.
        field: Field,
    },
    /// The buffer is smaller than [`PROFILE_BYTES`] needs.
    NoRoom,
}

/// Names for the fields that a range check can refuse.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[allow(missing_docs, reason = "each variant is the field of the same name")]
pub enum Field {
    Gravity,
    Density,
    DensityDeviation,
    Taps,
    ReferenceSpeed,
    ReferenceDensity,
    BestEfficiencyFlow,
    Curve,
    CurveDeviation,
    Impeller,
    Channel(Channel),
    Limits,
    Schedule,
}

impl Profile {
    /// The setup of one channel.
    #[must_use]
    pub const fn channel(&self, channel: Channel) -> &ChannelSetup {
        match channel {
            Channel::Speed => &self.speed,
            Channel::Flow => &self.flow,
            Channel::SuctionPressure => &self.suction_pressure,
            Channel::DischargePressure => &self.discharge_pressure,
            Channel::ShaftTorque => &self.shaft_torque,
        }
    }

    /// How many converter inputs one scan must cover: one more than the highest input in use.
    #[must_use]
    pub fn loop_inputs(&self) -> usize {
        Channel::ALL
            .iter()
            .filter_map(|&channel| match self.channel(channel).source {
                Source::Loop { input, .. } => Some(usize::from(input).saturating_add(1)),
                _ => None,
            })
            .max()
            .unwrap_or(0)
    }

    /// Checks every range; [`Profile::decode`] does so too.
    ///
    /// # Errors
    /// [`ProfileError::OutOfRange`] naming the first field refused.
    pub fn check(&self) -> Result<(), ProfileError> {
        let refuse = |field| Err(ProfileError::OutOfRange { field });
        let within = |value: f32, low: f32, high: f32| value >= low && value <= high; // false for NaN
        if !within(self.gravity, 9.7, 9.9) {
            return refuse(Field::Gravity);
        }
        if !within(self.density, 0.1, 20_000.0) {
            return refuse(Field::Density);
        }
        if !within(self.density_deviation, 0.0, self.density) {
            return refuse(Field::DensityDeviation);
        }
        if !within(self.taps.velocity_head, -1e9, 1e9) || !within(self.taps.elevation, -100.0, 100.0) {
            return refuse(Field::Taps);
        }
        if !within(self.reference_speed, 1.0, 10_000.0) {
            return refuse(Field::ReferenceSpeed);
        }
        if !within(self.reference_density, 0.1, 20_000.0) {
            return refuse(Field::ReferenceDensity);
        }
        let (first, last) = self.curve.flow_range();
        let (first, last) = (first.cubic_metres_per_second(), last.cubic_metres_per_second());
        if !within(first, 0.0, 1e3) || !within(last, 1e-7, 1e3) {
            return refuse(Field::Curve);
        }
        // Bounds far outside any machine, so that no law can overflow on an accepted profile.
        let sane = |knot: &Knot| {
            within(knot.head, -1e5, 1e5)
                && within(knot.head_slope, -1e12, 1e12)
                && within(knot.power, 0.0, 1e9)
                && within(knot.power_slope, -1e16, 1e16)
        };
        if !self.curve.knots().iter().all(sane) {
            return refuse(Field::Curve);
        }
        if !within(self.best_efficiency_flow, first.max(1e-7), last) {
            return refuse(Field::BestEfficiencyFlow);
        }
        if !within(self.head_curve_deviation, 0.0, 0.5) || !within(self.power_curve_deviation, 0.0, 0.5) {
            return refuse(Field::CurveDeviation);
        }
        if let Some(wheel) = &self.impeller {
            let good = within(wheel.outlet_radius, 1e-3, 10.0)
                && within(wheel.outlet_area, 1e-7, 100.0)
                && within(wheel.outlet_cotangent, -20.0, 20.0)
                && within(wheel.slip_factor, 0.1, 1.0)
                && within(wheel.inlet_whirl, -1.0, 1.0)
                && within(wheel.volumetric_efficiency, 0.3, 1.0)
                && within(wheel.drag_torque, 0.0, 1e6)
                && within(wheel.recirculation_onset, 0.0, 2.0)
                && within(wheel.model_deviation, 0.0, 1.0);
            if !good {
                return refuse(Field::Impeller);
            }
        }
        for channel in Channel::ALL {
            let setup = self.channel(channel);
            let source = match setup.source {
                Source::NotFitted => true,
                Source::Loop { input, low, high } => {
                    usize::from(input) < LOOP_INPUTS
                        && within(low, -1e9, 1e9)
                        && within(high, -1e9, 1e9)
                        && high > low
                        && channel != Channel::Speed
                }
                Source::Pulses { per_revolution } => per_revolution > 0 && channel == Channel::Speed,
            };
            if !source || !within(setup.deviation, 0.0, 1e9) || !within(setup.relative_deviation, 0.0, 1.0) {
                return refuse(Field::Channel(channel));
            }
        }
        let limits = [self.limits.minimum_flow, self.limits.run_out, self.limits.torque];
        let good = |limit: Limit| {
            within(limit.at, -1e9, 1e9)
                && within(limit.deadband, 0.0, 1e9)
                && within(limit.on_delay, 0.0, 86_400.0)
                && within(limit.off_delay, 0.0, 86_400.0)
        };
        if !limits.into_iter().flatten().all(good) || !within(self.limits.sensor_delay, 0.0, 86_400.0) {
            return refuse(Field::Limits);
        }
        let schedule = self.schedule;
        let positive = schedule.scan_ms > 0 && schedule.scans_per_step > 0 && schedule.steps_per_record > 0;
        if !positive || schedule.step_ms() > 10_000 {
            return refuse(Field::Schedule);
        }
        Ok(())
    }

    /// The byte form; returns its length.
    ///
    /// # Errors
    /// [`ProfileError::NoRoom`] if `into` is too small.
    pub fn encode(&self, into: &mut [u8]) -> Result<usize, ProfileError> {
        let mut out = Writer::new(into);
        out.u32(link::LAYOUT);
        out.u8(self.machine);
        for value in [
            self.gravity,
            self.density,
            self.density_deviation,
            self.taps.velocity_head,
            self.taps.elevation,
            self.reference_speed,
            self.reference_density,
            self.best_efficiency_flow,
            self.head_curve_deviation,
            self.power_curve_deviation,
        ] {
            out.f32(value);
        }
        out.u8(self.curve.knots().len() as u8); // at most KNOTS
        for knot in self.curve.knots() {
            for value in [knot.flow, knot.head, knot.head_slope, knot.power, knot.power_slope] {
                out.f32(value);
            }
        }
        out.u8(u8::from(self.impeller.is_some()));
        if let Some(wheel) = &self.impeller {
            for value in [
                wheel.outlet_radius,
                wheel.outlet_area,
                wheel.outlet_cotangent,
                wheel.slip_factor,
                wheel.inlet_whirl,
                wheel.volumetric_efficiency,
                wheel.drag_torque,
                wheel.recirculation_onset,
                wheel.model_deviation,
            ] {
                out.f32(value);
            }
        }
        for channel in Channel::ALL {
            encode_channel(self.channel(channel), &mut out);
        }
        for limit in [self.limits.minimum_flow, self.limits.run_out, self.limits.torque] {
            out.u8(u8::from(limit.is_some()));
            if let Some(limit) = limit {
                for value in [limit.at, limit.deadband, limit.on_delay, limit.off_delay] {
                    out.f32(value);
                }
            }
        }
        out.f32(self.limits.sensor_delay);
        out.u16(self.schedule.scan_ms);
        out.u16(self.schedule.scans_per_step);
        out.u16(self.schedule.steps_per_record);
        let body = out.finish().ok_or(ProfileError::NoRoom)?;
        let checksum = crc32(into.get(..body).ok_or(ProfileError::NoRoom)?);
        let end = body.saturating_add(4);
        // A fixed-size place: with copy_from_slice the optimiser keeps a panic for lengths that differ.
        let place = into.get_mut(body..end).and_then(<[u8]>::first_chunk_mut::<4>).ok_or(ProfileError::NoRoom)?;
        *place = checksum.to_le_bytes();
        Ok(end)
    }

    /// Reads the byte form back and checks it.
    ///
    /// # Errors
    /// [`ProfileError`], first cause found; a refused profile leaves the controller without one, never with half of one.
    pub fn decode(bytes: &[u8]) -> Result<Self, ProfileError> {
        let (body, checksum) = bytes.split_last_chunk::<4>().ok_or(ProfileError::WrongLength)?;
        let mut input = Fields(Reader::new(body));
        let found = input.u32()?;
        if found != link::LAYOUT {
            return Err(ProfileError::OtherLayout { found });
        }
        if crc32(body) != u32::from_le_bytes(*checksum) {
            return Err(ProfileError::ChecksumMismatch);
        }
        let profile = Self::read(&mut input)?;
        if !input.0.is_empty() {
            return Err(ProfileError::WrongLength);
        }
        profile.check()?;
        Ok(profile)
    }

    fn read(input: &mut Fields<'_>) -> Result<Self, ProfileError> {
        let machine = input.u8()?;
        let gravity = input.f32()?;
        let density = input.f32()?;
        let density_deviation = input.f32()?;
        let taps = Taps { velocity_head: input.f32()?, elevation: input.f32()? };
        let reference_speed = input.f32()?;
        let reference_density = input.f32()?;
        let best_efficiency_flow = input.f32()?;
        let head_curve_deviation = input.f32()?;
        let power_curve_deviation = input.f32()?;
        let curve = input.curve()?;
        let impeller = if input.flag(Field::Impeller)? { Some(input.impeller()?) } else { None };
        let speed = input.channel(Channel::Speed)?;
        let flow = input.channel(Channel::Flow)?;
        let suction_pressure = input.channel(Channel::SuctionPressure)?;
        let discharge_pressure = input.channel(Channel::DischargePressure)?;
        let shaft_torque = input.channel(Channel::ShaftTorque)?;
        let limits = Limits {
            minimum_flow: input.limit()?,
            run_out: input.limit()?,
            torque: input.limit()?,
            sensor_delay: input.f32()?,
        };
        let schedule = Schedule { scan_ms: input.u16()?, scans_per_step: input.u16()?, steps_per_record: input.u16()? };
        Ok(Self {
            machine,
            gravity,
            density,
            density_deviation,
            taps,
            reference_speed,
            reference_density,
            best_efficiency_flow,
            head_curve_deviation,
            power_curve_deviation,
            curve,
            impeller,
            speed,
            flow,
            suction_pressure,
            discharge_pressure,
            shaft_torque,
            limits,
            schedule,
        })
    }

    /// CRC-32 of the byte form: two sides with the same checksum hold the same profile.
    #[must_use]
    pub fn checksum(&self) -> u32 {
        let mut bytes = [0; PROFILE_BYTES];
        let length = self.encode(&mut bytes).unwrap_or(0);
        crc32(bytes.get(..length).unwrap_or(&[]))
    }
}

fn encode_channel(setup: &ChannelSetup, out: &mut Writer<'_>) {
    match setup.source {
        Source::NotFitted => out.u8(0),
        Source::Loop { input, low, high } => {
            out.u8(1);
            out.u8(input);
            out.f32(low);
            out.f32(high);
        }
        Source::Pulses { per_revolution } => {
            out.u8(2);
            out.u16(per_revolution);
        }
    }
    out.f32(setup.deviation);
    out.f32(setup.relative_deviation);
    out.u8(u8::from(setup.from_drive));
}

/// The byte form's fields, read one after the other; running out of bytes is [`ProfileError::WrongLength`].
struct Fields<'a>(Reader<'a>);

impl Fields<'_> {
    fn u8(&mut self) -> Result<u8, ProfileError> {
        self.0.u8().ok_or(ProfileError::WrongLength)
    }

    fn u16(&mut self) -> Result<u16, ProfileError> {
        self.0.u16().ok_or(ProfileError::WrongLength)
    }

    fn u32(&mut self) -> Result<u32, ProfileError> {
        self.0.u32().ok_or(ProfileError::WrongLength)
    }

    fn f32(&mut self) -> Result<f32, ProfileError> {
        self.0.f32().ok_or(ProfileError::WrongLength)
    }

    /// 0 or 1 and nothing else, so that a profile has one byte form.
    fn flag(&mut self, field: Field) -> Result<bool, ProfileError> {
        match self.u8()? {
            0 => Ok(false),
            1 => Ok(true),
            _ => Err(ProfileError::OutOfRange { field }),
        }
    }

    fn curve(&mut self) -> Result<CurveTable, ProfileError> {
        let count = usize::from(self.u8()?);
        let mut knots: heapless::Vec<Knot, KNOTS> = heapless::Vec::new();
        for _ in 0..count {
            let knot = Knot {
                flow: self.f32()?,
                head: self.f32()?,
                head_slope: self.f32()?,
                power: self.f32()?,
                power_slope: self.f32()?,
            };
            knots.push(knot).map_err(|_| ProfileError::Curve(CurveError::KnotCount { found: count }))?;
        }
        CurveTable::new(&knots).map_err(ProfileError::Curve)
    }

    fn impeller(&mut self) -> Result<Impeller, ProfileError> {
        Ok(Impeller {
            outlet_radius: self.f32()?,
            outlet_area: self.f32()?,
            outlet_cotangent: self.f32()?,
            slip_factor: self.f32()?,
            inlet_whirl: self.f32()?,
            volumetric_efficiency: self.f32()?,
            drag_torque: self.f32()?,
            recirculation_onset: self.f32()?,
            model_deviation: self.f32()?,
        })
    }

    fn channel(&mut self, channel: Channel) -> Result<ChannelSetup, ProfileError> {
        let field = Field::Channel(channel);
        let source = match self.u8()? {
            0 => Source::NotFitted,
            1 => Source::Loop { input: self.u8()?, low: self.f32()?, high: self.f32()? },
            2 => Source::Pulses { per_revolution: self.u16()? },
            _ => return Err(ProfileError::OutOfRange { field }),
        };
        Ok(ChannelSetup {
            source,
            deviation: self.f32()?,
            relative_deviation: self.f32()?,
            from_drive: self.flag(field)?,
        })
    }

    fn limit(&mut self) -> Result<Option<Limit>, ProfileError> {
        if !self.flag(Field::Limits)? {
            return Ok(None);
        }
        Ok(Some(Limit { at: self.f32()?, deadband: self.f32()?, on_delay: self.f32()?, off_delay: self.f32()? }))
    }
}

#[cfg(test)]
mod tests;
