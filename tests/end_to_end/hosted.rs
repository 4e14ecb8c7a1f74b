//! The chain on this computer: bench, controller program compiled for the host, pseudo-terminal, daemon, store, alarm.
//! The controller runs as fast as the daemon takes its records, so hours pass in a minute.

use offcurve_core::link::Message;
use offcurve_rig::scenario::Scenario;
use offcurve_tests::running::{MACHINE_FILE, PlantFolder, journal, number, open, wait_for};
use std::time::{Duration, Instant};

const LIMIT: Duration = Duration::from_secs(600);

/// Runs until the plant is this old, then until everything sent is durable; the wall time it took.
fn run_until(folder: &PlantFolder, scenario: &str, plant_seconds: f64) -> Duration {
    let begun = Instant::now();
    let scenario = Scenario::built_in(scenario).expect("a built-in scenario");
    let daemon = folder.daemon();
    let controller = folder.controller(&scenario, None);
    wait_for(LIMIT, || (controller.status().plant_seconds >= plant_seconds).then_some(())).expect("plant time passes");
    drop(controller); // the line goes: the daemon stores what it has
    std::thread::sleep(Duration::from_millis(500));
    let (status, stopping) = daemon.stop();
    assert!(status.success(), "the daemon ended with {status}");
    assert!(stopping < Duration::from_secs(2), "stopping took {stopping:?}");
    begun.elapsed()
}

#[test]
fn ten_healthy_hours_raise_no_alarm() {
    let folder = PlantFolder::new(MACHINE_FILE);
    let wall = run_until(&folder, "waterworks-healthy", 36_000.0);
    let store = open(&folder.store());
    let records = number(&store, "SELECT count(*) FROM record");
    println!("ten healthy hours: {records} records, {:.0} s of wall time", wall.as_secs_f64());
    // What the controller's outbox and the line hold when they are cut never arrives: about a hundred records.
    assert!(records >= 35_890, "{records} records of 36,000 s at 1 Hz");
    assert_eq!(number(&store, "SELECT count(*) FROM gap"), 0, "gaps");
    assert_eq!(journal(&store), [], "alarms in healthy running");
}

#[test]
fn ring_wear_raises_one_off_curve_alarm_that_names_it() {
    let folder = PlantFolder::new(MACHINE_FILE);
    run_until(&folder, "waterworks-wear", 3_600.0);
    let journal = journal(&open(&folder.store()));
    println!("{journal:#?}");
    let [(kind, state, at, text)] = journal.as_slice() else { panic!("one change of an alarm, not {journal:?}") };
    assert_eq!((kind.as_str(), state.as_str()), ("off-curve", "unacknowledged"));
    let delay = at - 1_200.0;
    println!("alarm {delay:.0} plant seconds after the ring begins to open");
    assert!((0.0..=600.0).contains(&delay), "{delay} s");
    assert!(text.contains("Likely cause: worn wear rings"), "{text}");
}

#[test]
fn twenty_kills_lose_and_double_no_stored_record() {
    let folder = PlantFolder::new(MACHINE_FILE);
    let scenario = Scenario::built_in("waterworks-healthy").expect("a built-in scenario");
    let controller = folder.controller(&scenario, Some(60.0));
    let mut durable = 0;
    for kill in 0..20 {
        let daemon = folder.daemon();
        // Killed at another moment of the writer's cycle each time, but never before it has stored something.
        wait_for(Duration::from_secs(20), || {
            let now = controller.status().acknowledged.get(&1).copied().unwrap_or(0);
            (now > durable + 20).then_some(())
        })
        .expect("records become durable");
        std::thread::sleep(Duration::from_millis(37 * kill % 230));
        durable = controller.status().acknowledged[&1];
        daemon.kill();
        let missing = missing_below(&folder, durable);
        assert_eq!(missing, 0, "acknowledged records that are neither stored nor written down as a gap, kill {kill}");
    }
    let daemon = folder.daemon();
    std::thread::sleep(Duration::from_secs(2));
    let last = controller.status().acknowledged[&1];
    assert!(daemon.stop().0.success());
    assert_eq!(missing_below(&folder, last), 0);

    let store = open(&folder.store());
    let records = number(&store, "SELECT count(*) FROM record");
    let distinct = number(&store, "SELECT count(*) FROM (SELECT DISTINCT boot, number FROM record)");
    let lost = number(&store, "SELECT sum(last - first + 1) FROM gap");
    println!("20 kills: {records} records stored, {lost} lost while the daemon was away, up to number {last}");
    assert_eq!(records, distinct);
    assert!(records > 400, "{records}");
    let check: String = store.query_row("PRAGMA integrity_check", [], |row| row.get(0)).expect("a store");
    assert_eq!(check, "ok");
    // Nothing but records with their own number got in.
    let mut query = store.prepare("SELECT number, payload FROM record").expect("a valid query");
    let rows = query.query_map([], |row| Ok((row.get::<_, u32>(0)?, row.get::<_, Vec<u8>>(1)?))).expect("rows");
    for row in rows {
        let (number, payload) = row.expect("a readable row");
        match Message::decode(&payload) {
            Ok(Message::Record(record)) => assert_eq!(record.number, number),
            other => panic!("record {number} reads as {other:?}"),
        }
    }
}

/// Records up to and with `last` that are neither stored nor within a gap. What a controller made before anybody ever
/// listened is not lost: counting begins with the first record heard.
fn missing_below(folder: &PlantFolder, last: u32) -> i64 {
    let store = open(&folder.store());
    let stored = number(&store, &format!("SELECT count(*) FROM record WHERE number <= {last}"));
    let lost = number(&store, &format!("SELECT sum(min(last, {last}) - first + 1) FROM gap WHERE first <= {last}"));
    let first = number(&store, "SELECT min(number) FROM record");
    i64::from(last) + 1 - first - stored - lost
}

#[test]
fn unplugging_and_a_restart_of_the_controller_are_survived() {
    let folder = PlantFolder::new(MACHINE_FILE);
    let scenario = Scenario::built_in("waterworks-healthy").expect("a built-in scenario");
    let controller = folder.controller(&scenario, Some(60.0));
    let daemon = folder.daemon();
    let acknowledged = |boot: u64| controller.status().acknowledged.get(&boot).copied();
    let more_than = |boot: u64, before: Option<u32>| {
        wait_for(Duration::from_secs(20), || acknowledged(boot).filter(|now| Some(*now) > before.map(|b| b + 10)))
            .unwrap_or_else(|| panic!("boot {boot}: nothing new after {before:?}"))
    };
    let first = more_than(1, None);
    controller.unplug();
    std::thread::sleep(Duration::from_millis(700));
    controller.plug();
    let second = more_than(1, Some(first));
    controller.restart();
    let after_restart = more_than(2, None);
    println!("acknowledged: {first}, after replug {second}, after restart {after_restart} of boot 2");
    drop(controller);
    assert!(daemon.stop().0.success());
    let store = open(&folder.store());
    assert_eq!(number(&store, "SELECT count(DISTINCT boot) FROM record"), 2);
    assert_eq!(number(&store, "SELECT count(*) FROM record WHERE boot = 2 AND number = 0"), 1, "from its first record");
    assert!(number(&store, "SELECT sum(last - first + 1) FROM gap WHERE boot = 1") > 0, "the unplugged time is a gap");
    assert_eq!(journal(&store), [], "none of this is an alarm of the machine");
}
