//! A record carries enough: the sample bit for bit, so that whoever holds the profile computes the same estimate, and
//! five key estimates for whoever does not.

use offcurve_core::{
    estimate::estimate,
    guard::Advisories,
    link::{Decoder, KeyEstimates, Message, Record, frame::MAX_FRAME},
    quantity::Quantity,
    sensing::Channel,
};
use offcurve_tests::{
    draws::Draws,
    fixtures::{self, Shape},
};

/// The record as it comes out of the line's other end.
fn across(record: Record) -> Record {
    let mut decoder = Decoder::<MAX_FRAME>::default();
    let frame = Message::Record(record).frame();
    let payload = frame.iter().find_map(|&byte| decoder.push(byte).map(|found| found.map(<[u8]>::to_vec)));
    match Message::decode(&payload.expect("a frame ends").expect("a sound frame")) {
        Ok(Message::Record(record)) => record,
        other => panic!("{other:?}"),
    }
}

#[test]
fn the_other_side_computes_the_same_estimate_to_the_bit() {
    let profile = Shape::WATERWORKS.profile();
    let mut draws = Draws::new(3);
    for number in 0..2000 {
        let point = (draws.between(0.1, 1.3), draws.between(-0.1, 1.6));
        let readings = fixtures::on_curve(
            &Shape::WATERWORKS,
            point,
            (draws.between(0.8, 1.1), draws.between(0.9, 1.2)),
            draws.between(-50_000.0, 100_000.0),
            core::array::from_fn(|_| draws.between(1e-4, 0.05)),
        );
        let fitted = draws.bits();
        let mut place = 0;
        let readings = readings.map(|reading| {
            place += 1;
            (fitted >> (4 * place) & 15 != 0).then_some(reading) // one in sixteen is missing
        });
        let sample = fixtures::sample(readings);
        let sent = Record::new((7, 3, number, number * 100), sample, Advisories::NONE, &estimate(&sample, &profile));
        let got = across(sent);
        assert_eq!(got, sent);
        assert_eq!(estimate(&got.sample, &profile).checksum(), got.estimate_checksum, "record {number}");
    }
}

#[test]
fn a_reading_changed_by_thirty_millionths_shows_in_the_checksum() {
    let profile = Shape::WATERWORKS.profile();
    let readings = fixtures::on_curve(&Shape::WATERWORKS, (0.9, 0.8), (1.0, 1.0), 10_000.0, [0.01; 5]).map(Some);
    let sample = fixtures::sample(readings);
    let sent = estimate(&sample, &profile).checksum();
    for channel in Channel::ALL {
        let mut other = sample;
        let reading = other.channel_mut(channel).as_mut().expect("every sensor is there");
        // Not the last bit: a small suction pressure's is lost in the pressure rise.
        reading.value = f32::from_bits(reading.value.to_bits() ^ 1 << 8);
        assert_ne!(estimate(&other, &profile).checksum(), sent, "{channel:?}");
    }
}

#[test]
fn key_estimates_are_those_of_the_estimate() {
    let profile = Shape::WATERWORKS.profile();
    let readings = fixtures::on_curve(&Shape::WATERWORKS, (0.9, 0.8), (0.95, 1.0), 10_000.0, [0.01; 5]).map(Some);
    let sample = fixtures::sample(readings);
    let found = estimate(&sample, &profile);
    let record = Record::new((7, 1, 0, 0), sample, Advisories::NONE, &found);
    fn both<T: Quantity>(outcome: offcurve_core::estimate::Outcome<T>) -> (f32, f32) {
        let found = outcome.expect("a well instrumented machine has every value");
        (found.value.si(), found.deviation.si())
    }
    let wanted = [
        both(found.head),
        both(found.hydraulic_power),
        both(found.shaft_torque),
        both(found.efficiency),
        both(found.head_residual),
    ];
    for (place, ((value, deviation), base)) in wanted.into_iter().zip(KeyEstimates::BASES).enumerate() {
        let key = record.key.0[place].expect("there is a value");
        assert_eq!(key.value, value, "key estimate {place}");
        let coded = key.deviation.value(base);
        assert!(coded >= deviation && coded <= 1.0906 * deviation, "key estimate {place}: {coded} for {deviation}");
    }
    // What the estimate lacks, the record lacks, and nothing else.
    let mut no_gauge = sample;
    no_gauge.suction_pressure = Err(offcurve_core::sensing::ChannelFault::FailureLow);
    let record = Record::new((7, 1, 0, 0), no_gauge, Advisories::NONE, &estimate(&no_gauge, &profile));
    assert_eq!(record.key.0.map(|key| key.is_some()), [false, false, true, false, false]);
}
