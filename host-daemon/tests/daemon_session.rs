//! The session of one line: who speaks, what is held, what is counted; and any bytes at all.

mod daemon;

use daemon::{frames, hello, record};
use offcurve::link::{Event, Reason, Session, session::HELD};
use offcurve_core::link::{LAYOUT, Message, WIRE_VERSION, frame};
use proptest::prelude::*;

/// A session whose line has just been opened in mid-air, and what it makes of bytes.
fn feed(session: &mut Session, bytes: &[u8]) -> Vec<Event> {
    let mut events = Vec::new();
    session.feed(bytes, &mut events);
    events
}

/// (boot, number) of the records among events.
fn records(events: &[Event]) -> Vec<(u64, u32)> {
    let of = |event: &Event| match event {
        Event::Record(received) => Some((received.record.boot, received.record.number)),
        _ => None,
    };
    events.iter().filter_map(of).collect()
}

fn say(session: &mut Session, messages: &[Message]) -> Vec<Event> {
    feed(session, &frames(messages))
}

#[test]
fn hello_then_records() {
    let mut session = Session::default();
    assert!(session.wants_hello());
    let events = say(
        &mut session,
        &[Message::Hello(hello(1, 0, 0)), Message::Record(record(1, 0)), Message::Record(record(1, 1))],
    );
    assert_eq!(events[0], Event::Speaker(hello(1, 0, 0)));
    assert_eq!(events[1], Event::Upto { boot: 1, next_number: 0, dropped: 0 });
    assert_eq!(records(&events), [(1, 0), (1, 1)]);
    let Event::Record(received) = &events[2] else { panic!("{events:?}") };
    assert_eq!(received.payload, Message::Record(record(1, 0)).payload(), "the bytes are kept as they came");
    assert!(!session.wants_hello());
    assert_eq!(session.counts().bad_frames(), 0);
}

#[test]
fn joining_within_a_frame_is_no_fault() {
    let mut session = Session::default();
    let bytes =
        frames(&[Message::Record(record(1, 4)), Message::Hello(hello(1, 5, 500)), Message::Record(record(1, 5))]);
    let events = feed(&mut session, &bytes[20..]);
    assert_eq!(records(&events), [(1, 5)]);
    assert_eq!(session.counts().bad_frames(), 0);
}

#[test]
fn records_wait_for_the_hello_of_their_boot() {
    let mut session = Session::default();
    // The hello of boot 2 comes late: its first records must not pass as boot 1's.
    let events = say(&mut session, &[Message::Hello(hello(1, 0, 0)), Message::Record(record(1, 0))]);
    assert_eq!(records(&events), [(1, 0)]);
    let events = say(&mut session, &[Message::Record(record(2, 0)), Message::Record(record(2, 1))]);
    assert_eq!(events, []);
    assert_eq!((session.held(), session.wants_hello()), (2, true));
    let events = say(&mut session, &[Message::Hello(hello(2, 2, 200)), Message::Record(record(2, 2))]);
    assert_eq!(events[0], Event::Speaker(hello(2, 2, 200)));
    assert_eq!(records(&events), [(2, 0), (2, 1), (2, 2)]);
    // What the hello says of the numbers comes after the held ones, or they would look lost.
    assert_eq!(events[3], Event::Upto { boot: 2, next_number: 2, dropped: 0 });
    assert_eq!((session.held(), session.wants_hello()), (0, false));
}

#[test]
fn boots_out_of_order_are_never_mixed() {
    let mut session = Session::default();
    say(&mut session, &[Message::Hello(hello(5, 0, 0))]);
    let events = say(&mut session, &[Message::Record(record(4, 9)), Message::Record(record(5, 0))]);
    assert_eq!(records(&events), [(5, 0)]);
    let events = say(&mut session, &[Message::Hello(hello(4, 10, 1000))]);
    assert_eq!(records(&events), [(4, 9)]);
    assert_eq!(records(&say(&mut session, &[Message::Record(record(5, 1))])), []);
    assert!(session.wants_hello());
}

#[test]
fn a_repeated_hello_is_no_news_but_a_new_profile_is() {
    let mut session = Session::default();
    say(&mut session, &[Message::Hello(hello(1, 0, 0))]);
    let events = say(&mut session, &[Message::Hello(hello(1, 8, 800))]);
    assert_eq!(events, [Event::Upto { boot: 1, next_number: 8, dropped: 0 }]);
    let mut other = hello(1, 9, 900);
    other.profile_checksum ^= 1;
    let events = say(&mut session, &[Message::Hello(other.clone())]);
    assert_eq!(events[0], Event::Speaker(other));
}

#[test]
fn after_reopening_the_old_hello_no_longer_counts() {
    let mut session = Session::default();
    say(&mut session, &[Message::Hello(hello(1, 0, 0)), Message::Record(record(1, 0))]);
    session.opened();
    assert!(session.wants_hello());
    assert_eq!(records(&say(&mut session, &[Message::Record(record(1, 1))])), [], "it may be another controller's");
    assert_eq!(records(&say(&mut session, &[Message::Hello(hello(1, 2, 200))])), [(1, 1)]);
}

#[test]
fn held_records_are_bounded_counted_and_said_once() {
    let mut session = Session::default();
    let mut events = Vec::new();
    let more = 10;
    for number in 0..(HELD as u32 + more) {
        session.feed(&Message::Record(record(3, number)).frame(), &mut events);
    }
    assert_eq!(events, [Event::NoHello]);
    assert_eq!((session.held(), session.counts().held_lost), (HELD, u64::from(more)));
    let kept = records(&say(&mut session, &[Message::Hello(hello(3, HELD as u32 + more, 0))]));
    assert_eq!(kept.first(), Some(&(3, more)), "the oldest went first");
    assert_eq!(kept.len(), HELD);
}

#[test]
fn another_build_is_said_once_and_its_records_never_pass() {
    let mut session = Session::default();
    say(&mut session, &[Message::Hello(hello(1, 0, 0))]);
    let mut payload = Message::Hello(hello(1, 0, 0)).payload();
    payload[2] ^= 0xff; // the layout's first byte
    let other = frame::encode(&payload).unwrap();
    let events = feed(&mut session, &[&other[..], &other[..]].concat());
    assert_eq!(events, [Event::OtherBuild { version: WIRE_VERSION, layout: LAYOUT ^ 0xff }]);
    assert_eq!(session.counts().bad[Reason::OtherBuild as usize], 2);
    assert_eq!(records(&say(&mut session, &[Message::Record(record(1, 0))])), []);
    // Flashed with this build again: it is heard, and a later other build is said again.
    let events = say(&mut session, &[Message::Hello(hello(1, 1, 0))]);
    assert_eq!(records(&events), [(1, 0)]);
    assert_eq!(feed(&mut session, &other).len(), 1);
}

#[test]
fn bad_frames_are_counted_by_reason() {
    let mut session = Session::default();
    let mut bytes = frames(&[Message::Hello(hello(1, 0, 0))]);
    let mut damaged = Message::Record(record(1, 0)).frame().to_vec();
    damaged[6] ^= 0x10;
    bytes.extend(&damaged);
    bytes.extend([0x55; 300]);
    bytes.push(0);
    bytes.extend(frame::encode(&[99, 1, 2]).unwrap());
    bytes.extend(frame::encode(&[2, 1, 2]).unwrap());
    bytes.extend(frames(&[Message::HelloRequest { version: 0 }, Message::Record(record(1, 1))]));
    let events = feed(&mut session, &bytes);
    assert_eq!(records(&events), [(1, 1)]);
    let bad = |reason: Reason| session.counts().bad[reason as usize];
    assert_eq!(bad(Reason::Checksum) + bad(Reason::BrokenStuffing), 1);
    assert_eq!(bad(Reason::TooLong), 1);
    assert_eq!(bad(Reason::UnknownKind), 1);
    assert_eq!(bad(Reason::WrongLength), 1);
    assert_eq!(bad(Reason::FromHost), 1);
    assert_eq!(session.counts().bad_frames(), 5);
    assert!(session.counts().bad_words().contains("1 too long"), "{}", session.counts().bad_words());
}

/// A message that a line might carry, in any order.
fn messages() -> impl Strategy<Value = Vec<(bool, u64, u32)>> {
    prop::collection::vec((any::<bool>(), 0_u64..4, 0_u32..1000), 0..600)
}

proptest! {
    #[test]
    fn any_bytes_do_no_harm(bytes in prop::collection::vec(any::<u8>(), 0..2000)) {
        let mut session = Session::default();
        let events = feed(&mut session, &bytes);
        prop_assert_eq!(records(&events), [], "nothing that was sent by nobody passes");
        // Whatever came before: a hello and a record after it are heard, one frame later at the latest.
        say(&mut session, &[Message::Hello(hello(1, 0, 0))]);
        let events = say(&mut session, &[Message::Hello(hello(1, 0, 0)), Message::Record(record(1, 0))]);
        prop_assert_eq!(records(&events), [(1, 0)]);
    }

    /// Hellos and records of four boots in any order: a record passes only while its own boot is the speaker, each
    /// boot's records keep their order, none passes twice, and nothing grows.
    #[test]
    fn any_order_keeps_identities_apart(order in messages(), chunk in 1_usize..200) {
        let mut session = Session::default();
        let mut bytes = Vec::new();
        let mut sent = 0_u64;
        for (place, &(is_hello, boot, number)) in order.iter().enumerate() {
            let message = if is_hello && number < 200 {
                Message::Hello(hello(boot, number, 0))
            } else {
                sent += 1;
                Message::Record(record(boot, place as u32))
            };
            bytes.extend_from_slice(&message.frame());
        }
        let (mut speaker, mut passed, mut last) = (None, 0, [None; 4]);
        for part in bytes.chunks(chunk) {
            for event in feed(&mut session, part) {
                match event {
                    Event::Speaker(hello) => speaker = Some(hello.boot),
                    Event::Record(received) => {
                        prop_assert_eq!(Some(received.record.boot), speaker);
                        let last = &mut last[received.record.boot as usize];
                        prop_assert!(last.is_none_or(|last| last < received.record.number));
                        *last = Some(received.record.number);
                        passed += 1;
                    }
                    _ => {}
                }
            }
            prop_assert!(session.held() <= HELD);
        }
        prop_assert_eq!(session.counts().records, sent);
        prop_assert_eq!(passed + session.held() as u64 + session.counts().held_lost, sent, "every record is accounted for");
    }
}
