//! Messages byte by byte, round trips, and what damaged payloads become. In a file of its own, because
//! [`LAYOUT`](crate::link::LAYOUT) fingerprints `message.rs`: a new test must not make another protocol.
//!
//! Version 0 is NOT frozen: the literal bytes below follow the layout and may change with it until version 1.

use super::*;
use crate::link::frame::{Decoder, MAX_FRAME, OVERHEAD};
use proptest::prelude::*;
use std::{format, println, vec::Vec};

fn name(text: &str) -> Name {
    let mut name = Name::new();
    name.push_str(text).unwrap();
    name
}

fn hello() -> Hello {
    Hello {
        version: WIRE_VERSION,
        layout: LAYOUT,
        boot: 7,
        profile_checksum: 0x1234_5678,
        machine: 3,
        at_ms: 0x0001_0203,
        record_interval_ms: 1000,
        next_number: 0x0102,
        dropped: 5,
        name: name("pump"),
    }
}

fn value(value: f32, code: u8, saturated: bool, age: u8) -> Reading {
    Ok(ChannelValue { value, deviation: Deviation::from_code(code), saturated, age })
}

fn key(value: f32, code: u8) -> Option<KeyEstimate> {
    Some(KeyEstimate { value, deviation: Deviation::from_code(code) })
}

fn record() -> Record {
    Record {
        machine: 3,
        boot: 7,
        number: 0x0102,
        at_ms: 0x0001_0203,
        sample: ConditionedSample {
            speed: value(150.0, 0x51, false, 0),
            flow: value(0.015_625, 0x90, true, 2),
            suction_pressure: value(-12_000.0, 0x7f, false, 63),
            discharge_pressure: Err(ChannelFault::FailureHigh),
            shaft_torque: Err(ChannelFault::NotFitted),
            run: RunState::Running,
            direction: Direction::Forward,
        },
        advisories: Advisories::from_bits(0x8009),
        key: KeyEstimates([None, None, key(48.5, 0x60), None, key(-1.0, 0xff)]),
        estimate_checksum: 0xdead_beef,
    }
}

/// Every channel a value, every key estimate there, no byte zero that a frame could code shorter.
fn longest_record() -> Record {
    let full = value(f32::from_bits(0x0102_0304), 0xff, true, 63);
    Record {
        machine: 0xff,
        boot: u64::MAX,
        number: u32::MAX,
        at_ms: u32::MAX,
        sample: ConditionedSample {
            speed: full,
            flow: full,
            suction_pressure: full,
            discharge_pressure: full,
            shaft_torque: full,
            run: RunState::Running,
            direction: Direction::Reverse,
        },
        advisories: Advisories::from_bits(0xffff),
        key: KeyEstimates([key(1.1, 0xff); 5]),
        estimate_checksum: u32::MAX,
    }
}

fn assert_bytes(message: &Message, bytes: &[u8]) {
    assert_eq!(message.payload().as_slice(), bytes);
    assert_eq!(Message::decode(bytes).as_ref(), Ok(message));
}

#[test]
fn hello_byte_for_byte() {
    let [l0, l1, l2, l3] = LAYOUT.to_le_bytes();
    #[rustfmt::skip]
    let bytes = [
        0x01, // kind
        0x00, // wire version
        l0, l1, l2, l3, // layout fingerprint, u32 LE
        0x07, 0, 0, 0, 0, 0, 0, 0, // boot, u64 LE
        0x78, 0x56, 0x34, 0x12, // profile checksum, u32 LE
        0x03, // machine
        0x03, 0x02, 0x01, 0x00, // time since boot, ms, u32 LE
        0xe8, 0x03, 0, 0, // record interval, ms, u32 LE
        0x02, 0x01, 0, 0, // next record number, u32 LE
        0x05, 0, 0, 0, // records dropped, u32 LE
        0x04, b'p', b'u', b'm', b'p', // name: length, UTF-8
    ];
    assert_bytes(&Message::Hello(hello()), &bytes);
}

#[test]
fn record_byte_for_byte() {
    #[rustfmt::skip]
    let bytes = [
        0x02, // kind
        0x03, // machine
        0x07, 0, 0, 0, 0, 0, 0, 0, // boot, u64 LE: rises at each restart, so a restart is not taken for a lost record
        0x02, 0x01, 0, 0, // number, u32 LE
        0x03, 0x02, 0x01, 0x00, // time since boot, ms, u32 LE
        0b0110, // running (2), forward (1 << 2)
        0x09, 0x80, // advisories, u16 LE, unknown bits kept
        0x80, 0x00, 0x00, 0x16, 0x43, 0x51, // speed: value, 150.0 rad/s, uncertainty
        0xc2, 0x00, 0x00, 0x80, 0x3c, 0x90, // flow: saturated, 0.2 s old, 2^-6 m³/s
        0xbf, 0x00, 0x80, 0x3b, 0xc6, 0x7f, // suction pressure: 6.3 s old or more, −12 kPa
        0x05, // discharge pressure: failure high
        0x01, // torque: not fitted
        0b1_0100, // key estimates present: shaft torque, head residual
        0x00, 0x00, 0x42, 0x42, 0x60, // shaft torque 48.5 N·m
        0x00, 0x00, 0x80, 0xbf, 0xff, // head residual −1 m
        0xef, 0xbe, 0xad, 0xde, // CRC-32 over all estimates, u32 LE
    ];
    assert_bytes(&Message::Record(record()), &bytes);
}

#[test]
fn hello_request_byte_for_byte() {
    assert_bytes(&Message::HelloRequest { version: 0 }, &[0x03 /* kind */, 0x00 /* asker's wire version */]);
    // A newer host may ask an older controller: the answer tells it what the controller speaks.
    assert_bytes(&Message::HelloRequest { version: 9 }, &[0x03, 0x09]);
}

#[test]
fn acknowledgement_byte_for_byte() {
    #[rustfmt::skip]
    let bytes = [
        0x04, // kind
        0x07, 0, 0, 0, 0, 0, 0, 0, // boot, u64 LE
        0x02, 0x01, 0, 0, // last durable record, u32 LE
    ];
    assert_bytes(&Message::Ack { boot: 7, number: 0x0102 }, &bytes);
}

#[test]
fn every_state_and_fault_has_its_own_byte() {
    // Place 18 holds the state, place 21 the first channel.
    for (run, low) in [(RunState::Unknown, 0), (RunState::Stopped, 1), (RunState::Running, 2)] {
        for (direction, high) in [(Direction::Unknown, 0), (Direction::Forward, 4), (Direction::Reverse, 8)] {
            let message =
                Message::Record(Record { sample: ConditionedSample { run, direction, ..record().sample }, ..record() });
            assert_eq!(message.payload()[18], low | high);
            assert_eq!(Message::decode(&message.payload()), Ok(message));
        }
    }
    for (fault, code) in [
        (ChannelFault::NotFitted, 1),
        (ChannelFault::NoReading, 2),
        (ChannelFault::ConverterFailed, 3),
        (ChannelFault::FailureLow, 4),
        (ChannelFault::FailureHigh, 5),
        (ChannelFault::ImplausiblePulses, 6),
    ] {
        let sample = ConditionedSample { speed: Err(fault), ..record().sample };
        let message = Message::Record(Record { sample, ..record() });
        assert_eq!(message.payload()[21], code, "{fault:?}");
        assert_eq!(Message::decode(&message.payload()), Ok(message));
    }
}

#[test]
fn longest_frames_fit() {
    let record = Message::Record(longest_record());
    let hello = Message::Hello(Hello { name: name("0123456789abcdef"), ..hello() });
    println!(
        "longest record: payload {} bytes, frame {} of {MAX_FRAME}; longest hello: frame {}",
        record.payload().len(),
        record.frame().len(),
        hello.frame().len()
    );
    // 21 bytes of numbers and states, 5 × 6 of channels, 1 + 5 × 5 of key estimates, 4 of checksum.
    assert_eq!(record.payload().len(), 21 + 30 + 26 + 4);
    assert_eq!(record.frame().len(), 81 + OVERHEAD);
    assert!(record.frame().len() <= 96);
    assert_eq!(hello.frame().len(), 36 + NAME_BYTES + OVERHEAD);
}

#[test]
fn unknown_states_faults_and_bits_are_bad_fields() {
    let good = Message::Record(record()).payload();
    let bad = Err(MessageError::BadField { kind: KIND_RECORD });
    let with = |place: usize, byte: u8| {
        let mut bytes = good.clone();
        bytes[place] = byte;
        Message::decode(&bytes)
    };
    for state in 0..=u8::MAX {
        let known = state & 3 != 3 && state >> 2 < 3;
        assert_eq!(with(18, state) == bad, !known, "state {state:#04x}");
    }
    for code in 0..0x80 {
        // Place 39 holds the discharge pressure's fault, which no value follows.
        assert_eq!(with(39, code) == bad, !(1..=6).contains(&code), "fault {code}");
    }
    for bit in 5..8 {
        assert_eq!(with(41, 0b1_0100 | 1 << bit), bad, "key estimate bit {bit}");
    }
}

#[test]
fn names_that_are_no_text_or_too_long_are_bad_fields() {
    let bad = Err(MessageError::BadField { kind: KIND_HELLO });
    let mut bytes = Message::Hello(hello()).payload();
    bytes[36] = 0xff; // the first letter of the name
    assert_eq!(Message::decode(&bytes), bad);
    let mut long: Vec<u8> = Message::Hello(hello()).payload()[..35].to_vec();
    long.push(17);
    long.extend_from_slice(b"seventeen letters");
    assert_eq!(Message::decode(&long), bad);
}

#[test]
fn another_version_or_layout_is_named_whatever_follows() {
    let good = Message::Hello(hello()).payload();
    for (place, version, layout) in [(1, 1, LAYOUT), (2, 0, LAYOUT ^ 1), (5, 0, LAYOUT ^ 1 << 24)] {
        let mut bytes = good.clone();
        bytes[place] ^= 1;
        let wanted = Err(MessageError::OtherVersion { version, layout });
        assert_eq!(Message::decode(&bytes), wanted);
        // A later version may be laid out otherwise behind these two fields, down to nothing.
        assert_eq!(Message::decode(&bytes[..6]), wanted);
    }
}

#[test]
fn unknown_kinds_are_named() {
    assert_eq!(Message::decode(&[]), Err(MessageError::WrongLength { kind: 0 }));
    for kind in (0..=u8::MAX).filter(|kind| !(1..=4).contains(kind)) {
        assert_eq!(Message::decode(&[kind, 1, 2]), Err(MessageError::UnknownKind { kind }));
    }
}

#[test]
fn every_truncation_and_extension_is_a_wrong_length() {
    let messages = [
        Message::Hello(hello()),
        Message::Record(record()),
        Message::Record(longest_record()),
        Message::HelloRequest { version: 0 },
        Message::Ack { boot: 1, number: 2 },
    ];
    for message in messages {
        let payload = message.payload();
        let wrong = Err(MessageError::WrongLength { kind: payload[0] });
        for length in 1..payload.len() {
            assert_eq!(Message::decode(&payload[..length]), wrong, "{length} bytes of {message:?}");
        }
        let mut longer = payload.to_vec();
        longer.push(0);
        assert_eq!(Message::decode(&longer), wrong, "one byte more than {message:?}");
    }
}

fn readings() -> impl Strategy<Value = Reading> {
    prop_oneof![
        (any::<u32>(), any::<u8>(), any::<bool>(), 0..=LARGEST_AGE).prop_map(|(bits, code, saturated, age)| value(
            f32::from_bits(bits),
            code,
            saturated,
            age
        )),
        (1_u8..=6).prop_map(|code| Err(ChannelFault::from_code(code).unwrap())),
    ]
}

fn records() -> impl Strategy<Value = Record> {
    let keys = prop::array::uniform5(prop::option::of((any::<u32>(), any::<u8>())));
    (
        (any::<u8>(), any::<u64>(), any::<u32>(), any::<u32>()),
        prop::array::uniform5(readings()),
        (0_usize..3, 0_usize..3, any::<u16>()),
        keys,
        any::<u32>(),
    )
        .prop_map(|((machine, boot, number, at_ms), readings, (run, direction, advisories), keys, checksum)| {
            let [speed, flow, suction_pressure, discharge_pressure, shaft_torque] = readings;
            let run = [RunState::Unknown, RunState::Running, RunState::Stopped][run];
            let direction = [Direction::Unknown, Direction::Forward, Direction::Reverse][direction];
            Record {
                machine,
                boot,
                number,
                at_ms,
                sample: ConditionedSample {
                    speed,
                    flow,
                    suction_pressure,
                    discharge_pressure,
                    shaft_torque,
                    run,
                    direction,
                },
                advisories: Advisories::from_bits(advisories),
                key: KeyEstimates(keys.map(|key| {
                    let (bits, code) = key?;
                    Some(KeyEstimate { value: f32::from_bits(bits), deviation: Deviation::from_code(code) })
                })),
                estimate_checksum: checksum,
            }
        })
}

/// NaN is not equal to itself, so messages with random bits in their values are compared by bytes and by text.
fn assert_same(left: &Message, right: &Message) -> Result<(), TestCaseError> {
    prop_assert_eq!(left.payload(), right.payload());
    prop_assert_eq!(format!("{left:?}"), format!("{right:?}"));
    Ok(())
}

proptest! {
    #[test]
    fn any_record_survives_the_line(record in records()) {
        let message = Message::Record(record);
        let mut decoder = Decoder::<MAX_FRAME>::default();
        let mut arrived = 0;
        let frame = message.frame();
        prop_assert!(frame.len() <= MAX_FRAME);
        for &byte in &frame {
            if let Some(payload) = decoder.push(byte) {
                assert_same(&Message::decode(payload.unwrap()).unwrap(), &message)?;
                arrived += 1;
            }
        }
        prop_assert_eq!(arrived, 1);
    }

    #[test]
    fn any_hello_survives(
        numbers in (any::<u64>(), any::<u32>(), any::<u8>(), any::<u32>(), any::<u32>(), any::<u32>(), any::<u32>()),
        text in "\\PC{0,4}",
    ) {
        let (boot, profile_checksum, machine, at_ms, record_interval_ms, next_number, dropped) = numbers;
        let name = name(&text); // four characters of at most four bytes
        let hello = Hello {
            boot, profile_checksum, machine, at_ms, record_interval_ms, next_number, dropped, name, ..hello()
        };
        let message = Message::Hello(hello);
        prop_assert_eq!(Message::decode(&message.payload()), Ok(message));
    }

    /// What is accepted has one byte form: there is no second way to say the same, in which damage could hide.
    #[test]
    fn random_bytes_are_refused_or_mean_exactly_themselves(
        kind in 0_u8..6,
        body in prop::collection::vec(any::<u8>(), 0..MAX_PAYLOAD),
    ) {
        let mut bytes = std::vec![kind];
        bytes.extend_from_slice(&body);
        if let Ok(message) = Message::decode(&bytes) {
            let payload = message.payload();
            prop_assert_eq!(payload.as_slice(), bytes.as_slice());
        }
    }

    #[test]
    fn damaged_payloads_are_refused_or_mean_exactly_themselves(
        record in records(),
        flips in prop::collection::vec((0_usize..MAX_PAYLOAD, 1_u8..=255), 1..4),
        cut in prop::option::of(0_usize..MAX_PAYLOAD),
    ) {
        let mut bytes = Message::Record(record).payload().to_vec();
        for (place, mask) in flips {
            if let Some(byte) = bytes.get_mut(place) { *byte ^= mask; }
        }
        bytes.truncate(cut.unwrap_or(MAX_PAYLOAD));
        if let Ok(message) = Message::decode(&bytes) {
            let payload = message.payload();
            prop_assert_eq!(payload.as_slice(), bytes.as_slice());
        }
    }
}
