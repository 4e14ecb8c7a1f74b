//! The profile's byte form and its range checks. In a file of its own, because [`link::LAYOUT`] fingerprints
//! `profile.rs`: a new test must not make another layout.

use super::*;
use proptest::prelude::*;
use std::{boxed::Box, println, vec, vec::Vec};

fn on_loop(input: u8, low: f32, high: f32) -> ChannelSetup {
    ChannelSetup {
        source: Source::Loop { input, low, high },
        deviation: 0.5,
        relative_deviation: 0.002,
        from_drive: false,
    }
}

/// As long as a valid profile gets: all knots, an impeller, every channel on a loop that may be, every limit.
fn longest() -> Profile {
    let knots: Vec<Knot> = (0..KNOTS)
        .map(|k| {
            let flow = 0.0025 * k as f32;
            Knot { flow, head: 38.0 - 8.0 * flow, head_slope: -8.0, power: 4000.0 + flow, power_slope: 1.0 }
        })
        .collect();
    let limit = Limit { at: 0.3, deadband: 0.05, on_delay: 10.0, off_delay: 20.0 };
    Profile {
        machine: 7,
        gravity: 9.81,
        density: 998.6,
        density_deviation: 0.5,
        taps: Taps { velocity_head: 488.0, elevation: 0.4 },
        reference_speed: 155.0,
        reference_density: 998.2,
        best_efficiency_flow: 0.024,
        head_curve_deviation: 0.01,
        power_curve_deviation: 0.015,
        curve: CurveTable::new(&knots).unwrap(),
        impeller: Some(Impeller {
            outlet_radius: 0.16,
            outlet_area: 0.0125,
            outlet_cotangent: 2.2,
            slip_factor: 0.78,
            inlet_whirl: 0.1,
            volumetric_efficiency: 0.95,
            drag_torque: 3.0,
            recirculation_onset: 0.5,
            model_deviation: 0.1,
        }),
        speed: ChannelSetup { source: Source::Pulses { per_revolution: 60 }, ..on_loop(0, 0.0, 1.0) },
        flow: on_loop(0, 0.0, 0.05),
        suction_pressure: on_loop(1, -1e5, 3e5),
        discharge_pressure: on_loop(2, 0.0, 1e6),
        shaft_torque: on_loop(7, 0.0, 100.0),
        limits: Limits {
            minimum_flow: Some(limit),
            run_out: Some(Limit { at: 1.3, ..limit }),
            torque: Some(Limit { at: 70.0, ..limit }),
            sensor_delay: 2.0,
        },
        schedule: Schedule { scan_ms: 1, scans_per_step: 100, steps_per_record: 10 },
    }
}

fn bytes(profile: &Profile) -> Vec<u8> {
    let mut buffer = [0; PROFILE_BYTES];
    let length = profile.encode(&mut buffer).unwrap();
    buffer[..length].to_vec()
}

/// A body with the checksum that belongs to it: damage that the checksum does not see.
fn sealed(body: &[u8]) -> Vec<u8> {
    let mut sealed = body.to_vec();
    sealed.extend_from_slice(&crc32(body).to_le_bytes());
    sealed
}

#[test]
fn room_for_the_longest_profile() {
    let profile = longest();
    assert_eq!(profile.check(), Ok(()));
    let length = bytes(&profile).len();
    println!("longest valid profile: {length} of {PROFILE_BYTES} bytes");
    // Layout and machine, ten numbers, count and knots, impeller, speed on pulses, four loops, three limits, sensor
    // delay, schedule, checksum.
    assert_eq!(length, 5 + 40 + (1 + KNOTS * 20) + 37 + 12 + 4 * 19 + 3 * 17 + 4 + 6 + 4);
    // Even one that the checks refuse, with the speed on a loop.
    let refused = Profile { speed: on_loop(3, 0.0, 400.0), ..profile };
    assert_eq!(bytes(&refused).len(), length + 7);
}

#[test]
fn every_buffer_that_is_too_small_is_refused() {
    let profile = longest();
    let whole = bytes(&profile);
    for room in 0..whole.len() {
        assert_eq!(profile.encode(&mut vec![0; room]), Err(ProfileError::NoRoom), "{room} bytes");
    }
    let mut exact = vec![0; whole.len()];
    assert_eq!(profile.encode(&mut exact), Ok(whole.len()));
    assert_eq!(exact, whole);
}

#[test]
fn every_single_bit_flip_is_refused() {
    let whole = bytes(&longest());
    for place in 0..whole.len() {
        for bit in 0..8 {
            let mut flipped = whole.clone();
            flipped[place] ^= 1 << bit;
            let wanted = if place < 4 {
                ProfileError::OtherLayout { found: link::LAYOUT ^ 1 << (8 * place + bit) }
            } else {
                ProfileError::ChecksumMismatch
            };
            assert_eq!(Profile::decode(&flipped), Err(wanted), "byte {place} bit {bit}");
        }
    }
}

#[test]
fn every_truncation_is_refused() {
    let whole = bytes(&longest());
    for length in 0..whole.len() {
        let wanted = if length < 8 { ProfileError::WrongLength } else { ProfileError::ChecksumMismatch };
        assert_eq!(Profile::decode(&whole[..length]), Err(wanted), "{length} bytes");
    }
    // The same with a checksum that fits: the layout itself asks for more.
    let body = &whole[..whole.len() - 4];
    for length in 4..body.len() {
        assert_eq!(Profile::decode(&sealed(&body[..length])), Err(ProfileError::WrongLength), "{length} sealed bytes");
    }
    let mut longer = body.to_vec();
    longer.push(0);
    assert_eq!(Profile::decode(&sealed(&longer)), Err(ProfileError::WrongLength));
}

#[test]
fn another_layout_is_named_before_anything_else() {
    let mut other = bytes(&longest());
    other[..4].copy_from_slice(&0x0bad_cafe_u32.to_le_bytes());
    let wanted = Err(ProfileError::OtherLayout { found: 0x0bad_cafe });
    assert_eq!(Profile::decode(&other), wanted);
    let end = other.len() - 4;
    assert_eq!(Profile::decode(&sealed(&other[..end])), wanted, "with a sound checksum too");
}

#[test]
fn knots_that_make_no_curve_are_refused() {
    let whole = bytes(&longest());
    let body = &whole[..whole.len() - 4];
    let count = 5 + 40;
    let mut many = body.to_vec();
    many[count] = KNOTS as u8 + 1;
    let knots = usize::from(many[count]);
    let wanted = Err(ProfileError::Curve(CurveError::KnotCount { found: knots }));
    assert_eq!(Profile::decode(&sealed(&many)), wanted);
    let mut equal_flows = body.to_vec();
    equal_flows.copy_within(count + 1..count + 5, count + 21); // the first knot's flow over the second's
    let wanted = Err(ProfileError::Curve(CurveError::FlowsNotRising { knot: 1 }));
    assert_eq!(Profile::decode(&sealed(&equal_flows)), wanted);
}

/// A change to a valid profile, and the field that must be named.
type Spoil = (Field, Box<dyn Fn(&mut Profile)>);

/// For every number of a profile: just outside each end of its range, and NaN.
fn spoils() -> Vec<Spoil> {
    let mut all: Vec<Spoil> = Vec::new();
    {
        // Knots are checked for being finite when the table is made, so only finite values get as far as this.
        for (head, power, flow) in [(1.01e5, 1.0, 0.0), (-1.01e5, 1.0, 0.0), (1.0, 1.01e9, 0.0), (1.0, 1.0, -0.001)] {
            let knot = |flow| Knot { flow, head, head_slope: 0.0, power, power_slope: 0.0 };
            let curve = CurveTable::new(&[knot(flow), knot(0.05)]).unwrap();
            all.push((Field::Curve, Box::new(move |profile| profile.curve = curve.clone())));
        }
        let mut number = |field: Field, set: fn(&mut Profile, f32), outside: &[f32]| {
            for &value in outside.iter().chain(&[f32::NAN, f32::INFINITY, f32::NEG_INFINITY]) {
                all.push((field, Box::new(move |profile| set(profile, value))));
            }
        };
        number(Field::Gravity, |p, v| p.gravity = v, &[9.699, 9.901]);
        number(Field::Density, |p, v| p.density = v, &[0.099, 20_001.0, -998.0]);
        number(Field::DensityDeviation, |p, v| p.density_deviation = v, &[-0.001, 998.7]);
        number(Field::Taps, |p, v| p.taps.velocity_head = v, &[-1.001e9, 1.001e9]);
        number(Field::Taps, |p, v| p.taps.elevation = v, &[-100.1, 100.1]);
        number(Field::ReferenceSpeed, |p, v| p.reference_speed = v, &[0.999, 10_001.0, -155.0]);
        number(Field::ReferenceDensity, |p, v| p.reference_density = v, &[0.099, 20_001.0]);
        number(Field::BestEfficiencyFlow, |p, v| p.best_efficiency_flow = v, &[0.99e-7, 1001.0, 0.0, -0.024]);
        number(Field::CurveDeviation, |p, v| p.head_curve_deviation = v, &[-0.001, 0.501]);
        number(Field::CurveDeviation, |p, v| p.power_curve_deviation = v, &[-0.001, 0.501]);
        let wheel =
            |p: &mut Profile, set: fn(&mut Impeller, f32), v: f32| p.impeller.iter_mut().for_each(|w| set(w, v));
        for (set, outside) in [
            ((|w, v| w.outlet_radius = v) as fn(&mut Impeller, f32), [0.99e-3, 10.1]),
            (|w, v| w.outlet_area = v, [0.99e-7, 100.1]),
            (|w, v| w.outlet_cotangent = v, [-20.1, 20.1]),
            (|w, v| w.slip_factor = v, [0.099, 1.001]),
            (|w, v| w.inlet_whirl = v, [-1.001, 1.001]),
            (|w, v| w.volumetric_efficiency = v, [0.299, 1.001]),
            (|w, v| w.drag_torque = v, [-0.001, 1.001e6]),
            (|w, v| w.recirculation_onset = v, [-0.001, 2.001]),
            (|w, v| w.model_deviation = v, [-0.001, 1.001]),
        ] {
            for value in [outside[0], outside[1], f32::NAN, f32::INFINITY] {
                all.push((Field::Impeller, Box::new(move |profile| wheel(profile, set, value))));
            }
        }
    }
    for channel in Channel::ALL {
        let mut setup = |change: fn(&mut ChannelSetup)| {
            let place = move |p: &mut Profile| {
                change(match channel {
                    Channel::Speed => &mut p.speed,
                    Channel::Flow => &mut p.flow,
                    Channel::SuctionPressure => &mut p.suction_pressure,
                    Channel::DischargePressure => &mut p.discharge_pressure,
                    Channel::ShaftTorque => &mut p.shaft_torque,
                });
            };
            all.push((Field::Channel(channel), Box::new(place)));
        };
        setup(|s| s.deviation = -0.001);
        setup(|s| s.deviation = f32::NAN);
        setup(|s| s.deviation = 1.001e9);
        setup(|s| s.relative_deviation = -0.001);
        setup(|s| s.relative_deviation = 1.001);
        setup(|s| s.relative_deviation = f32::NAN);
        setup(|s| s.source = Source::Loop { input: LOOP_INPUTS as u8, low: 0.0, high: 1.0 });
        setup(|s| s.source = Source::Loop { input: 0, low: 1.0, high: 1.0 });
        setup(|s| s.source = Source::Loop { input: 0, low: f32::NAN, high: 1.0 });
        setup(|s| s.source = Source::Loop { input: 0, low: 0.0, high: f32::INFINITY });
        setup(|s| s.source = Source::Pulses { per_revolution: 0 });
        if channel == Channel::Speed {
            setup(|s| s.source = Source::Loop { input: 0, low: 0.0, high: 400.0 }); // a speed comes from pulses
        } else {
            setup(|s| s.source = Source::Pulses { per_revolution: 60 }); // and only a speed does
        }
    }
    for place in 0..3 {
        let mut limit = |change: fn(&mut Limit)| {
            let all_limits = move |p: &mut Profile| {
                let limits = [&mut p.limits.minimum_flow, &mut p.limits.run_out, &mut p.limits.torque];
                for (at, limit) in limits.into_iter().enumerate() {
                    if at == place {
                        limit.iter_mut().for_each(change);
                    }
                }
            };
            all.push((Field::Limits, Box::new(all_limits)));
        };
        limit(|l| l.at = f32::NAN);
        limit(|l| l.at = 1.001e9);
        limit(|l| l.at = -1.001e9);
        limit(|l| l.deadband = -0.001);
        limit(|l| l.on_delay = -0.001);
        limit(|l| l.on_delay = 86_401.0);
        limit(|l| l.off_delay = f32::INFINITY);
    }
    let mut whole = |field: Field, change: fn(&mut Profile)| all.push((field, Box::new(change)));
    whole(Field::Limits, |p| p.limits.sensor_delay = -0.001);
    whole(Field::Limits, |p| p.limits.sensor_delay = f32::NAN);
    whole(Field::Limits, |p| p.limits.sensor_delay = 86_401.0);
    whole(Field::Schedule, |p| p.schedule.scan_ms = 0);
    whole(Field::Schedule, |p| p.schedule.scans_per_step = 0);
    whole(Field::Schedule, |p| p.schedule.steps_per_record = 0);
    whole(Field::Schedule, |p| p.schedule.scan_ms = 101); // 101 ms × 100 scans
    whole(Field::Schedule, |p| (p.schedule.scan_ms, p.schedule.scans_per_step) = (u16::MAX, u16::MAX));
    all
}

#[test]
fn the_field_out_of_range_is_named() {
    for (number, (field, spoil)) in spoils().into_iter().enumerate() {
        let mut profile = longest();
        spoil(&mut profile);
        let wanted = ProfileError::OutOfRange { field };
        assert_eq!(profile.check(), Err(wanted), "change {number}");
        // The same through the byte form: no profile gets past it that `check` refuses.
        assert_eq!(Profile::decode(&bytes(&profile)), Err(wanted), "change {number} decoded");
    }
}

/// The ends of every range belong to it.
#[test]
fn the_ends_of_the_ranges_are_accepted() {
    let (first, last) = longest().curve.flow_range();
    let (first, last) = (first.cubic_metres_per_second(), last.cubic_metres_per_second());
    for end in [0, 1] {
        let pick = |low: f32, high: f32| if end == 0 { low } else { high };
        let limit = Limit {
            at: pick(-1e9, 1e9),
            deadband: pick(0.0, 1e9),
            on_delay: pick(0.0, 86_400.0),
            off_delay: pick(0.0, 86_400.0),
        };
        let setup = ChannelSetup {
            source: Source::Loop { input: if end == 0 { 0 } else { LOOP_INPUTS as u8 - 1 }, low: -1e9, high: 1e9 },
            deviation: pick(0.0, 1e9),
            relative_deviation: pick(0.0, 1.0),
            from_drive: end == 1,
        };
        let edge = Profile {
            machine: if end == 0 { 0 } else { u8::MAX },
            gravity: pick(9.7, 9.9),
            density: pick(0.1, 20_000.0),
            density_deviation: pick(0.0, 20_000.0),
            taps: Taps { velocity_head: pick(-1e9, 1e9), elevation: pick(-100.0, 100.0) },
            reference_speed: pick(1.0, 10_000.0),
            reference_density: pick(0.1, 20_000.0),
            best_efficiency_flow: pick(first.max(1e-7), last),
            head_curve_deviation: pick(0.0, 0.5),
            power_curve_deviation: pick(0.0, 0.5),
            impeller: Some(Impeller {
                outlet_radius: pick(1e-3, 10.0),
                outlet_area: pick(1e-7, 100.0),
                outlet_cotangent: pick(-20.0, 20.0),
                slip_factor: pick(0.1, 1.0),
                inlet_whirl: pick(-1.0, 1.0),
                volumetric_efficiency: pick(0.3, 1.0),
                drag_torque: pick(0.0, 1e6),
                recirculation_onset: pick(0.0, 2.0),
                model_deviation: pick(0.0, 1.0),
            }),
            speed: ChannelSetup { source: Source::Pulses { per_revolution: [1, u16::MAX][end] }, ..setup },
            flow: setup,
            suction_pressure: setup,
            discharge_pressure: setup,
            shaft_torque: setup,
            limits: Limits {
                minimum_flow: Some(limit),
                run_out: Some(limit),
                torque: Some(limit),
                sensor_delay: pick(0.0, 86_400.0),
            },
            schedule: Schedule {
                scan_ms: [1, 10][end],
                scans_per_step: [1, 1000][end],
                steps_per_record: [1, u16::MAX][end],
            },
            ..longest()
        };
        assert_eq!(edge.check(), Ok(()), "end {end}");
        assert_eq!(Profile::decode(&bytes(&edge)).as_ref(), Ok(&edge));
    }
}

#[test]
fn inputs_in_use_are_counted_to_the_highest() {
    assert_eq!(longest().loop_inputs(), 8);
    let none = ChannelSetup::default();
    let empty =
        Profile { flow: none, suction_pressure: none, discharge_pressure: none, shaft_torque: none, ..longest() };
    assert_eq!(empty.loop_inputs(), 0);
}

fn setups(speed: bool) -> impl Strategy<Value = ChannelSetup> {
    let fitted = if speed {
        (1..=u16::MAX).prop_map(|per_revolution| Source::Pulses { per_revolution }).boxed()
    } else {
        (0..LOOP_INPUTS as u8, -1e6_f32..1e6, 1.0_f32..1e6)
            .prop_map(|(input, low, span)| Source::Loop { input, low, high: low + span })
            .boxed()
    };
    (prop_oneof![1 => Just(Source::NotFitted), 4 => fitted], 0.0_f32..1e9, 0.0_f32..=1.0, any::<bool>()).prop_map(
        |(source, deviation, relative_deviation, from_drive)| ChannelSetup {
            source,
            deviation,
            relative_deviation,
            from_drive,
        },
    )
}

fn limits() -> impl Strategy<Value = Option<Limit>> {
    prop::option::of(
        (-1e9_f32..1e9, 0.0_f32..1e9, 0.0_f32..=86_400.0, 0.0_f32..=86_400.0)
            .prop_map(|(at, deadband, on_delay, off_delay)| Limit { at, deadband, on_delay, off_delay }),
    )
}

fn impellers() -> impl Strategy<Value = Option<Impeller>> {
    prop::option::of(
        (
            (1e-3_f32..10.0, 1e-7_f32..100.0, -20.0_f32..20.0, 0.1_f32..=1.0, -1.0_f32..1.0),
            (0.3_f32..=1.0, 0.0_f32..1e6, 0.0_f32..2.0, 0.0_f32..=1.0),
        )
            .prop_map(|((outlet_radius, outlet_area, outlet_cotangent, slip_factor, inlet_whirl), rest)| {
                let (volumetric_efficiency, drag_torque, recirculation_onset, model_deviation) = rest;
                Impeller {
                    outlet_radius,
                    outlet_area,
                    outlet_cotangent,
                    slip_factor,
                    inlet_whirl,
                    volumetric_efficiency,
                    drag_torque,
                    recirculation_onset,
                    model_deviation,
                }
            }),
    )
}

fn curves() -> impl Strategy<Value = CurveTable> {
    let knot = (0.01_f32..10.0, -1e5_f32..1e5, -1e6_f32..1e6, 1e-3_f32..1e7, -1e6_f32..1e6);
    (0.0_f32..10.0, prop::collection::vec(knot, 2..=KNOTS)).prop_map(|(mut flow, knots)| {
        let knots: Vec<Knot> = knots
            .into_iter()
            .map(|(step, head, head_slope, power, power_slope)| {
                flow += step;
                Knot { flow, head, head_slope, power, power_slope }
            })
            .collect();
        CurveTable::new(&knots).unwrap()
    })
}

fn profiles() -> impl Strategy<Value = Profile> {
    let numbers = (
        (any::<u8>(), 9.7_f32..=9.9, 0.1_f32..20_000.0, 0.0_f32..=1.0, -1e9_f32..1e9, -100.0_f32..100.0),
        (1.0_f32..10_000.0, 0.1_f32..20_000.0, 0.0_f32..=1.0, 0.0_f32..=0.5, 0.0_f32..=0.5),
    );
    let channels = (setups(true), setups(false), setups(false), setups(false), setups(false));
    let flags = (limits(), limits(), limits(), 0.0_f32..=86_400.0);
    let schedule = (1_u16..=10, 1_u16..=1000, 1..=u16::MAX);
    (numbers, curves(), impellers(), channels, flags, schedule).prop_map(
        |(numbers, curve, impeller, channels, flags, schedule)| {
            let ((machine, gravity, density, of_density, velocity_head, elevation), rest) = numbers;
            let (reference_speed, reference_density, of_last_flow, head_curve, power_curve) = rest;
            let (first, last) = curve.flow_range();
            let (first, last) = (first.cubic_metres_per_second(), last.cubic_metres_per_second());
            let best_efficiency_flow = (of_last_flow * last).clamp(first, last);
            let (speed, flow, suction_pressure, discharge_pressure, shaft_torque) = channels;
            let (minimum_flow, run_out, torque, sensor_delay) = flags;
            let (scan_ms, scans_per_step, steps_per_record) = schedule;
            Profile {
                machine,
                gravity,
                density,
                density_deviation: of_density * density,
                taps: Taps { velocity_head, elevation },
                reference_speed,
                reference_density,
                best_efficiency_flow,
                head_curve_deviation: head_curve,
                power_curve_deviation: power_curve,
                curve,
                impeller,
                speed,
                flow,
                suction_pressure,
                discharge_pressure,
                shaft_torque,
                limits: Limits { minimum_flow, run_out, torque, sensor_delay },
                schedule: Schedule { scan_ms, scans_per_step, steps_per_record },
            }
        },
    )
}

proptest! {
    #[test]
    fn any_valid_profile_survives(profile in profiles()) {
        prop_assert_eq!(profile.check(), Ok(()));
        let whole = bytes(&profile);
        let back = Profile::decode(&whole);
        prop_assert_eq!(back.as_ref(), Ok(&profile));
        prop_assert_eq!(bytes(&back.unwrap()), whole.clone());
        prop_assert_eq!(profile.checksum(), crc32(&whole));
    }

    #[test]
    fn any_damage_is_refused(
        profile in profiles(),
        places in prop::collection::vec((any::<prop::sample::Index>(), 1_u8..=255), 1..6),
    ) {
        let whole = bytes(&profile);
        let mut damaged = whole.clone();
        for (place, mask) in places {
            let at = place.index(damaged.len());
            damaged[at] ^= mask;
        }
        // Masks at one place may cancel; 32 bits of checksum let one change in four thousand million through.
        prop_assume!(damaged != whole);
        prop_assert!(Profile::decode(&damaged).is_err());
    }

    /// Behind a right layout and a right checksum anything may stand: no panic, and what is accepted passes the checks.
    #[test]
    fn random_bodies_do_not_panic(random in prop::collection::vec(any::<u8>(), 0..PROFILE_BYTES)) {
        let mut body = link::LAYOUT.to_le_bytes().to_vec();
        body.extend_from_slice(&random);
        if let Ok(profile) = Profile::decode(&sealed(&body)) {
            prop_assert_eq!(profile.check(), Ok(()));
        }
    }

    #[test]
    fn bodies_with_a_few_changed_bytes_do_not_panic(
        profile in profiles(),
        places in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 1..6),
    ) {
        let whole = bytes(&profile);
        let mut body = whole[..whole.len() - 4].to_vec();
        for (place, byte) in places {
            let at = 4 + place.index(body.len() - 4);
            body[at] = byte;
        }
        if let Ok(profile) = Profile::decode(&sealed(&body)) {
            prop_assert_eq!(profile.check(), Ok(()));
        }
    }
}
