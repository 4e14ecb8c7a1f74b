//! State between raw readings and the estimate: scans are summed over one step, pulses are timed, and out comes a
//! [`ConditionedSample`], all that an estimate needs. The estimate itself keeps nothing, so a host that holds the
//! sample and the profile gets the same estimate to the bit.

use crate::{
    board::{Direction, LOOP_INPUTS, LoopCurrent, PulseSnapshot, RunState, ScanError},
    machine::{
        Profile,
        profile::{ChannelSetup, Source},
    },
    sensing::{Channel, ChannelFault, Reading, current_loop::Accumulator, pulse::SpeedMeter},
};

/// One instant of one machine: each channel a value or the reason there is none.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct ConditionedSample {
    /// Shaft speed, rad/s, without sign; [`direction`](Self::direction) has the sign where there is a source for it.
    pub speed: Reading,
    /// Delivered flow, m³/s.
    pub flow: Reading,
    /// Suction pressure, Pa gauge.
    pub suction_pressure: Reading,
    /// Discharge pressure, Pa gauge.
    pub discharge_pressure: Reading,
    /// Shaft torque, N·m.
    pub shaft_torque: Reading,
    /// Whether the driver is on.
    pub run: RunState,
    /// Which way the shaft turns.
    pub direction: Direction,
}

impl ConditionedSample {
    /// A sample in which nothing has been read yet.
    pub const EMPTY: Self = Self {
        speed: Err(ChannelFault::NoReading),
        flow: Err(ChannelFault::NoReading),
        suction_pressure: Err(ChannelFault::NoReading),
        discharge_pressure: Err(ChannelFault::NoReading),
        shaft_torque: Err(ChannelFault::NoReading),
        run: RunState::Unknown,
        direction: Direction::Unknown,
    };

    /// One channel's reading.
    pub const fn channel(&self, channel: Channel) -> &Reading {
        match channel {
            Channel::Speed => &self.speed,
            Channel::Flow => &self.flow,
            Channel::SuctionPressure => &self.suction_pressure,
            Channel::DischargePressure => &self.discharge_pressure,
            Channel::ShaftTorque => &self.shaft_torque,
        }
    }

    /// One channel's reading, to be changed.
    pub const fn channel_mut(&mut self, channel: Channel) -> &mut Reading {
        match channel {
            Channel::Speed => &mut self.speed,
            Channel::Flow => &mut self.flow,
            Channel::SuctionPressure => &mut self.suction_pressure,
            Channel::DischargePressure => &mut self.discharge_pressure,
            Channel::ShaftTorque => &mut self.shaft_torque,
        }
    }
}

/// Gathers one step's readings of one machine.
#[derive(Clone, Debug, Default)]
pub struct Conditioner {
    loops: [Accumulator; LOOP_INPUTS],
    meter: SpeedMeter,
}

impl Conditioner {
    /// Takes one converter scan; a failed one counts for nothing, and a step of failed scans makes its channels fail.
    pub fn add_scan(&mut self, scan: Result<&[LoopCurrent], ScanError>) {
        if let Ok(currents) = scan {
            for (sums, &current) in self.loops.iter_mut().zip(currents) {
                sums.add(current);
            }
        }
    }

    /// Ends the step: readings of all channels, sums start afresh.
    ///
    /// `ticks_per_second` is the capture timer's clock.
    pub fn finish(
        &mut self,
        profile: &Profile,
        pulses: &PulseSnapshot,
        ticks_per_second: u32,
        run: RunState,
    ) -> ConditionedSample {
        let mut sample = ConditionedSample { run, direction: pulses.direction, ..ConditionedSample::EMPTY };
        for channel in Channel::ALL {
            let setup = profile.channel(channel);
            *sample.channel_mut(channel) = match setup.source {
                Source::NotFitted => Err(ChannelFault::NotFitted),
                Source::Pulses { per_revolution } => self.meter.step(pulses, ticks_per_second, per_revolution, setup),
                Source::Loop { input, low, high } => self.take_loop(channel, setup, input, low, high),
            };
        }
        self.loops = Default::default(); // inputs that no channel uses must not fill up
        sample
    }

    fn take_loop(&mut self, channel: Channel, setup: &ChannelSetup, input: u8, low: f32, high: f32) -> Reading {
        match self.loops.get_mut(usize::from(input)) {
            Some(sums) => sums.take(channel, setup, low, high),
            None => Err(ChannelFault::ConverterFailed),
        }
    }
}
