//! Rules of the core that its source must keep, read from the source: the compiler checks what a lint forbids, but
//! nobody checks that the lint is still there; and a missing `Format` shows only where a board tries to log the value.

use super::root;
use std::{
    fs,
    path::{Path, PathBuf},
};

/// Files of a crate's `src`, tests left out.
fn sources(folder: &Path) -> Vec<PathBuf> {
    let mut found = Vec::new();
    for entry in fs::read_dir(folder).expect("a folder of sources") {
        let path = entry.expect("a readable entry").path();
        if path.is_dir() {
            found.extend(sources(&path));
        } else if path.extension().is_some_and(|end| end == "rs") && !path.ends_with("tests.rs") {
            found.push(path);
        }
    }
    found
}

/// The inner attributes of a crate, without any white space: formatting may break them anywhere.
fn crate_attributes(krate: &str) -> String {
    let text = fs::read_to_string(root().join(krate).join("src/lib.rs")).expect("a crate");
    text.split_whitespace().collect()
}

/// Lints that would let a panic in.
const DENIED: [&str; 5] = ["indexing_slicing", "arithmetic_side_effects", "unwrap_used", "expect_used", "panic"];

#[test]
fn what_runs_on_a_controller_denies_every_way_to_panic() {
    for krate in ["firmware-core", "hil-fixtures/controller"] {
        let attributes = crate_attributes(krate);
        assert!(attributes.contains("#![no_std]"), "{krate} is not no_std");
        assert!(attributes.contains("#![forbid(unsafe_code)]"), "{krate} may be unsafe");
        let (_, denied) = attributes.split_once("deny(clippy::").unwrap_or_else(|| panic!("{krate} denies nothing"));
        let (denied, _) = denied.split_once(')').expect("a closed list");
        let denied: Vec<&str> = denied.split(',').map(|name| name.trim_start_matches("clippy::")).collect();
        for lint in DENIED {
            assert!(denied.contains(&lint), "{krate} does not deny clippy::{lint}, only {denied:?}");
        }
    }
}

/// `allow` attributes of a text without a reason, by the line they begin on.
fn unreasoned(text: &str) -> Vec<usize> {
    let begins = text.match_indices("#[allow(").chain(text.match_indices("#![allow("));
    let without = begins.filter(|(at, _)| {
        let rest = &text[*at..];
        !rest[..rest.find(")]").unwrap_or(rest.len())].contains("reason")
    });
    without.map(|(at, _)| 1 + text[..at].matches('\n').count()).collect()
}

#[test]
fn every_exception_has_its_reason() {
    let mut all = Vec::new();
    for path in sources(&root().join("firmware-core/src")) {
        let found = unreasoned(&fs::read_to_string(&path).expect("a readable source"));
        all.extend(found.iter().map(|line| format!("{}:{line}", path.display())));
    }
    assert!(all.is_empty(), "allow without a reason: {all:#?}");
    assert_eq!(unreasoned("fn a() {}\n#[allow(clippy::panic)]\nfn b() {}"), [2]);
    assert!(unreasoned("#[allow(\n    clippy::panic,\n    reason = \"why\"\n)]\nfn b() {}").is_empty());
}

/// Public types of a text that are plain values (they can be copied) and have no `Format` under the feature.
fn without_format(text: &str) -> Vec<String> {
    let mut attributes = String::new();
    let mut found = Vec::new();
    for line in text.lines().map(str::trim) {
        if line.starts_with("#[") || line.starts_with("derive(") {
            attributes += line;
        } else if line.starts_with("pub struct ") || line.starts_with("pub enum ") {
            let formatted = attributes.contains("feature = \"defmt\"") && attributes.contains("defmt::Format");
            if attributes.contains("Copy") && !formatted {
                let name = line.split(' ').nth(2).unwrap_or(line);
                found.push(name.split(['(', '{', '<', ';']).next().unwrap_or(name).to_owned());
            }
            attributes.clear();
        } else if !line.starts_with("//") && !line.starts_with(')') {
            attributes.clear();
        }
    }
    found
}

/// What keeps state is logged by its results. These hold only numbers and can therefore be copied, as a value can.
const KEEPS_STATE: [&str; 5] = ["Health", "LagBank", "MainsAverage", "Median", "PulseFlowMeter"];

/// Every value that goes in or comes out can be logged.
#[test]
fn a_controller_can_log_every_value_of_the_core() {
    let mut all = Vec::new();
    for path in sources(&root().join("firmware-core/src")) {
        let text = fs::read_to_string(&path).expect("a readable source");
        if text.contains("extern crate std;") && !path.ends_with("lib.rs") {
            continue; // design-time maths: never on a controller
        }
        let found = without_format(&text);
        let values = found.iter().filter(|name| !KEEPS_STATE.contains(&name.as_str()));
        all.extend(values.map(|name| format!("{}: {name}", path.display())));
    }
    assert!(all.is_empty(), "no defmt::Format under the feature: {all:#?}");
    let bare = "#[derive(Clone, Copy)]\n/// Words.\npub struct One(u8);\n#[derive(Clone)]\npub struct State;\n";
    assert_eq!(without_format(bare), ["One"]);
    let good = "#[derive(Clone, Copy)]\n#[cfg_attr(feature = \"defmt\", derive(defmt::Format))]\npub enum Two {\n";
    assert!(without_format(good).is_empty());
}
