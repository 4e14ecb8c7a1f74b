//! Messages byte by byte, little-endian, first byte the kind. Version 0: not frozen.
//!
//! **Hello** (kind 1): version u8, layout u32, boot u64, profile checksum u32 (0: no profile), machine u8, time u32 ms
//! since boot, record interval u32 ms, next record number u32, records dropped u32, name: length u8 and up to 16 bytes.
//!
//! **Record** (kind 2): machine u8, boot u64, number u32, time u32 ms since boot, state u8 (run in bits 0–1, direction
//! in bits 2–3), advisories u16; then per channel (speed, flow, suction pressure, discharge pressure, torque) one byte:
//! 1–127 a fault, no value follows; with bit 7 set a value: bit 6 saturated, bits 0–5 age in 100 ms, followed by f32 and the
//! coded uncertainty u8; then one byte of bits for the five key estimates (head, hydraulic power, shaft torque, efficiency, head
//! residual), for each bit set f32 and coded uncertainty u8; last the CRC-32 over all estimates.
//!
//! **Hello request** (kind 3): version u8. **Ack** (kind 4): boot u64, number u32: this and all before it are durable.
//!
//! Times and numbers: `boot` rises at each restart and `number` at each record, so a restart is never taken for a loss.

use super::{
    LAYOUT, WIRE_VERSION,
    frame::{self, Frame, MAX_PAYLOAD},
};
use crate::{
    board::{Direction, RunState},
    bytes::{Reader, Writer},
    conditioning::ConditionedSample,
    deviation::Deviation,
    estimate::{Estimate, Outcome},
    guard::Advisories,
    quantity::Quantity,
    sensing::{Channel, ChannelFault, ChannelValue, LARGEST_AGE, Reading},
};

const KIND_HELLO: u8 = 1;
const KIND_RECORD: u8 = 2;
const KIND_HELLO_REQUEST: u8 = 3;
const KIND_ACK: u8 = 4;

/// The longest controller name, bytes.
pub const NAME_BYTES: usize = 16;

/// A controller's name, UTF-8.
pub type Name = heapless::String<NAME_BYTES>;

/// Who speaks, and where its records stand.
#[derive(Clone, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Hello {
    /// [`WIRE_VERSION`] of the sender.
    pub version: u8,
    /// [`LAYOUT`] of the sender.
    pub layout: u32,
    /// Number of this start of the controller.
    pub boot: u64,
    /// Checksum of the profile in use; 0 when there is none, and then no records come.
    pub profile_checksum: u32,
    /// Machine tag of the profile in use.
    pub machine: u8,
    /// Time since boot, ms; wraps after 49.7 days.
    pub at_ms: u32,
    /// Time between two records, ms.
    pub record_interval_ms: u32,
    /// Number the next record will have; the first one has 0.
    pub next_number: u32,
    /// Records that were made but dropped because the line did not take them in time.
    pub dropped: u32,
    /// The controller's name.
    pub name: Name,
}

/// A key estimate as a record carries it.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct KeyEstimate {
    /// Value, SI.
    pub value: f32,
    /// Standard uncertainty, coded with the base of its place in [`KeyEstimates::BASES`].
    pub deviation: Deviation,
}

/// The five estimates a record carries for readers that hold no profile: head (m), hydraulic power (W), shaft torque
/// (N·m), efficiency (parts of one), head residual (m).
#[derive(Clone, Copy, Debug, Default, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct KeyEstimates(pub [Option<KeyEstimate>; 5]);

impl KeyEstimates {
    /// Exponents of two that the coded uncertainties start at.
    pub const BASES: [i8; 5] = [-16, -8, -16, -24, -16];

    fn of(estimate: &Estimate) -> Self {
        let [head, power, torque, efficiency, residual] = Self::BASES;
        Self([
            key(&estimate.head, head),
            key(&estimate.hydraulic_power, power),
            key(&estimate.shaft_torque, torque),
            key(&estimate.efficiency, efficiency),
            key(&estimate.head_residual, residual),
        ])
    }
}

fn key<T: Quantity>(outcome: &Outcome<T>, base: i8) -> Option<KeyEstimate> {
    let found = outcome.as_ref().ok()?;
    Some(KeyEstimate { value: found.value.si(), deviation: Deviation::at_least(found.deviation.si(), base) })
}

/// One step of one machine, as sent and as kept.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Record {
    /// Machine tag.
    pub machine: u8,
    /// Number of the controller's start.
    pub boot: u64,
    /// Number of the record within that start, from 0.
    pub number: u32,
    /// Time since boot, ms.
    pub at_ms: u32,
    /// The sample, bit for bit what the estimate was made from.
    pub sample: ConditionedSample,
    /// The controller's own flags.
    pub advisories: Advisories,
    /// Key estimates.
    pub key: KeyEstimates,
    /// [`Estimate::checksum`] on the controller.
    pub estimate_checksum: u32,
}

impl Record {
    /// A record of this step.
    #[must_use]
    pub fn new(
        (machine, boot, number, at_ms): (u8, u64, u32, u32),
        sample: ConditionedSample,
        advisories: Advisories,
        estimate: &Estimate,
    ) -> Self {
        Self {
            machine,
            boot,
            number,
            at_ms,
            sample,
            advisories,
            key: KeyEstimates::of(estimate),
            estimate_checksum: estimate.checksum(),
        }
    }
}

/// Everything that crosses the line.
#[derive(Clone, Debug, PartialEq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[allow(clippy::large_enum_variant, reason = "no heap to put the large one on")]
pub enum Message {
    /// See [`Hello`].
    Hello(Hello),
    /// See [`Record`].
    Record(Record),
    /// "Say hello"; carries the asker's wire version.
    HelloRequest {
        /// The asker's [`WIRE_VERSION`].
        version: u8,
    },
    /// Records of `boot` up to and with `number` are durable.
    Ack {
        /// Number of the controller's start.
        boot: u64,
        /// Last durable record of it.
        number: u32,
    },
}

/// Why a payload is no message of this version.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum MessageError {
    /// A kind this version does not know.
    UnknownKind {
        /// The kind found.
        kind: u8,
    },
    /// Shorter or longer than the kind allows.
    WrongLength {
        /// The kind found.
        kind: u8,
    },
    /// A byte with a meaning this version does not know.
    BadField {
        /// The kind found.
        kind: u8,
    },
    /// A hello of another wire version or layout. Both sides must come from one build while the version is 0.
    OtherVersion {
        /// The version found.
        version: u8,
        /// The layout found.
        layout: u32,
    },
}

/// A payload buffer.
pub type Payload = heapless::Vec<u8, MAX_PAYLOAD>;

impl Message {
    /// The payload bytes.
    #[must_use]
    pub fn payload(&self) -> Payload {
        let mut buffer = [0; MAX_PAYLOAD];
        let mut out = Writer::new(&mut buffer);
        match self {
            Self::Hello(hello) => write_hello(hello, &mut out),
            Self::Record(record) => write_record(record, &mut out),
            Self::HelloRequest { version } => {
                out.u8(KIND_HELLO_REQUEST);
                out.u8(*version);
            }
            Self::Ack { boot, number } => {
                out.u8(KIND_ACK);
                out.u64(*boot);
                out.u32(*number);
            }
        }
        // Every layout above is shorter than a payload; the tests hold the longest of each against it.
        let length = out.finish().unwrap_or(0);
        Payload::from_slice(buffer.get(..length).unwrap_or(&[])).unwrap_or_default()
    }

    /// The frame that carries this message.
    #[must_use]
    pub fn frame(&self) -> Frame {
        frame::encode(&self.payload()).unwrap_or_default()
    }

    /// Reads a payload.
    ///
    /// # Errors
    /// [`MessageError`]; the frame was sound, so the peer speaks another protocol or version.
    pub fn decode(payload: &[u8]) -> Result<Self, MessageError> {
        let mut input = Reader::new(payload);
        let kind = input.u8().ok_or(MessageError::WrongLength { kind: 0 })?;
        let message = match kind {
            KIND_HELLO => read_hello(&mut input)?.map(Self::Hello),
            KIND_RECORD => read_record(&mut input)?.map(Self::Record),
            KIND_HELLO_REQUEST => input.u8().map(|version| Self::HelloRequest { version }),
            KIND_ACK => read_ack(&mut input),
            _ => return Err(MessageError::UnknownKind { kind }),
        };
        match message {
            Some(message) if input.is_empty() => Ok(message),
            _ => Err(MessageError::WrongLength { kind }),
        }
    }
}

fn write_hello(hello: &Hello, out: &mut Writer<'_>) {
    out.u8(KIND_HELLO);
    out.u8(hello.version);
    out.u32(hello.layout);
    out.u64(hello.boot);
    out.u32(hello.profile_checksum);
    out.u8(hello.machine);
    out.u32(hello.at_ms);
    out.u32(hello.record_interval_ms);
    out.u32(hello.next_number);
    out.u32(hello.dropped);
    out.u8(hello.name.len() as u8); // at most NAME_BYTES
    out.raw(hello.name.as_bytes());
}

fn read_hello(input: &mut Reader<'_>) -> Result<Option<Hello>, MessageError> {
    // Version and layout come first and are judged first: what follows may be laid out otherwise.
    let (Some(version), Some(layout)) = (input.u8(), input.u32()) else { return Ok(None) };
    if version != WIRE_VERSION || layout != LAYOUT {
        return Err(MessageError::OtherVersion { version, layout });
    }
    let Some(mut hello) = read_hello_body(input, version, layout) else { return Ok(None) };
    let Some(length) = input.u8() else { return Ok(None) };
    let Some(name) = input.raw(usize::from(length)) else { return Ok(None) };
    let bad = MessageError::BadField { kind: KIND_HELLO };
    let name = core::str::from_utf8(name).map_err(|_| bad)?;
    hello.name.push_str(name).map_err(|_| bad)?;
    Ok(Some(hello))
}

fn read_hello_body(input: &mut Reader<'_>, version: u8, layout: u32) -> Option<Hello> {
    Some(Hello {
        version,
        layout,
        boot: input.u64()?,
        profile_checksum: input.u32()?,
        machine: input.u8()?,
        at_ms: input.u32()?,
        record_interval_ms: input.u32()?,
        next_number: input.u32()?,
        dropped: input.u32()?,
        name: Name::new(),
    })
}

fn write_record(record: &Record, out: &mut Writer<'_>) {
    out.u8(KIND_RECORD);
    out.u8(record.machine);
    out.u64(record.boot);
    out.u32(record.number);
    out.u32(record.at_ms);
    let run = match record.sample.run {
        RunState::Unknown => 0,
        RunState::Stopped => 1,
        RunState::Running => 2,
    };
    let direction = match record.sample.direction {
        Direction::Unknown => 0,
        Direction::Forward => 1,
        Direction::Reverse => 2,
    };
    out.u8(run | direction << 2);
    out.u16(record.advisories.bits());
    for channel in Channel::ALL {
        match record.sample.channel(channel) {
            Ok(reading) => {
                out.u8(0x80 | u8::from(reading.saturated) << 6 | reading.age.min(LARGEST_AGE));
                out.f32(reading.value);
                out.u8(reading.deviation.code());
            }
            Err(fault) => out.u8(fault.code()),
        }
    }
    let mut present = 0;
    for (place, key) in record.key.0.iter().enumerate() {
        present |= u8::from(key.is_some()) << place;
    }
    out.u8(present);
    for key in record.key.0.iter().flatten() {
        out.f32(key.value);
        out.u8(key.deviation.code());
    }
    out.u32(record.estimate_checksum);
}

fn read_record(input: &mut Reader<'_>) -> Result<Option<Record>, MessageError> {
    let bad = MessageError::BadField { kind: KIND_RECORD };
    let Some((machine, boot, number, at_ms)) = read_numbers(input) else { return Ok(None) };
    let Some(state) = input.u8() else { return Ok(None) };
    let run = match state & 3 {
        0 => RunState::Unknown,
        1 => RunState::Stopped,
        2 => RunState::Running,
        _ => return Err(bad),
    };
    let direction = match state >> 2 {
        0 => Direction::Unknown,
        1 => Direction::Forward,
        2 => Direction::Reverse,
        _ => return Err(bad),
    };
    let Some(advisories) = input.u16().map(Advisories::from_bits) else { return Ok(None) };
    let mut sample = ConditionedSample { run, direction, ..ConditionedSample::EMPTY };
    for channel in Channel::ALL {
        let Some(head) = input.u8() else { return Ok(None) };
        *sample.channel_mut(channel) = if head & 0x80 == 0 {
            Err(ChannelFault::from_code(head).ok_or(bad)?)
        } else {
            let Some(reading) = read_value(head, input) else { return Ok(None) };
            reading
        };
    }
    let Some(present) = input.u8() else { return Ok(None) };
    if present >> 5 != 0 {
        return Err(bad);
    }
    let mut key = KeyEstimates::default();
    for (place, slot) in key.0.iter_mut().enumerate() {
        if present >> place & 1 == 1 {
            let (Some(value), Some(code)) = (input.f32(), input.u8()) else { return Ok(None) };
            *slot = Some(KeyEstimate { value, deviation: Deviation::from_code(code) });
        }
    }
    let Some(estimate_checksum) = input.u32() else { return Ok(None) };
    Ok(Some(Record { machine, boot, number, at_ms, sample, advisories, key, estimate_checksum }))
}

fn read_numbers(input: &mut Reader<'_>) -> Option<(u8, u64, u32, u32)> {
    Some((input.u8()?, input.u64()?, input.u32()?, input.u32()?))
}

fn read_value(head: u8, input: &mut Reader<'_>) -> Option<Reading> {
    let value = input.f32()?;
    let deviation = Deviation::from_code(input.u8()?);
    Some(Ok(ChannelValue { value, deviation, saturated: head & 0x40 != 0, age: head & LARGEST_AGE }))
}

fn read_ack(input: &mut Reader<'_>) -> Option<Message> {
    Some(Message::Ack { boot: input.u64()?, number: input.u32()? })
}

#[cfg(test)]
mod tests;
