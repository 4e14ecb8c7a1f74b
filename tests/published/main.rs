//! The core against published figures: rows of textbooks and standards, and the measured speeds of a blower.
//!
//! Every row of the files named in [`ACCOUNT`] is either checked or listed with the reason why it is not, so that a row
//! cannot be forgotten. Inputs are worked out here in f64 from the row's `given` text, written out beside its name.

mod blower;
mod euler;
mod fluids;
mod head_and_power;
mod operating_point;
mod regions;
mod run_lengths;
mod sensors;
mod similarity;
mod slip;
mod taps;
mod uncertainty;

use offcurve_tests::published::{Arithmetic, rows};
use std::collections::BTreeMap;

/// One check: the row's name, the arithmetic of the code under test, and the result in the row's unit.
type Check = (&'static str, Arithmetic, fn() -> Vec<f64>);

/// Rows that are not checked, and why.
type OutOfScope = (&'static [&'static str], &'static str);

/// Holds a group of checks against their rows; says every row that fails, not only the first.
fn run(file: &str, checks: &[Check]) {
    let rows = rows(file).expect("the reference file is readable");
    let mut failures = Vec::new();
    for (id, arithmetic, compute) in checks {
        match rows.iter().find(|row| row.id == *id) {
            None => failures.push(format!("{id}: no such row in {file}")),
            Some(row) => failures.extend(row.check(&compute(), *arithmetic).err()),
        }
    }
    assert!(failures.is_empty(), "{} of {} rows failed:\n{}", failures.len(), checks.len(), failures.join("\n"));
}

/// A file, the groups of checks that use it, and the rows left out.
type Account = (&'static str, &'static [&'static [Check]], &'static [OutOfScope]);

const ACCOUNT: [Account; 9] = [
    ("01_air", &[fluids::ALTITUDE, fluids::STANDARD_ATMOSPHERE, fluids::MOIST_AIR, fluids::SATURATED_AIR], &[]),
    (
        "01_water",
        &[fluids::WATER_EXACT, fluids::WATER_VAPOUR, fluids::WATER_DENSITY, fluids::WATER_VISCOSITY],
        fluids::WATER_OUT_OF_SCOPE,
    ),
    ("02_head_npsh_fan", &[head_and_power::CHECKS], head_and_power::OUT_OF_SCOPE),
    ("03_euler_textbook", &[euler::CHECKS, slip::CHECKS], euler::OUT_OF_SCOPE),
    ("04_similarity", &[similarity::CHECKS, regions::SPECIFIC_SPEEDS], similarity::OUT_OF_SCOPE),
    ("05_viscosity", &[fluids::VISCOUS], fluids::VISCOUS_OUT_OF_SCOPE),
    ("07_sensors", &[sensors::CHECKS], sensors::OUT_OF_SCOPE),
    ("07_orifice_grid", &[sensors::GRID], &[]),
    ("09_uncertainty", &[uncertainty::CHECKS], &[]),
];

#[test]
fn every_row_is_checked_or_left_out_for_a_stated_reason() {
    let mut faults = Vec::new();
    for (file, groups, out_of_scope) in ACCOUNT {
        let mut uses: BTreeMap<String, usize> =
            rows(file).expect("the reference file is readable").into_iter().map(|row| (row.id, 0)).collect();
        let checked = groups.iter().flat_map(|group| group.iter().map(|(id, ..)| *id));
        let left_out = out_of_scope.iter().flat_map(|(ids, reason)| {
            assert!(!reason.is_empty(), "{ids:?} are left out without a reason");
            ids.iter().copied()
        });
        for id in checked.chain(left_out) {
            match uses.get_mut(id) {
                Some(count) => *count += 1,
                None => faults.push(format!("{id} is named, but {file} has no such row")),
            }
        }
        for (id, count) in uses {
            match count {
                0 => faults.push(format!("{id} is neither checked nor left out")),
                1 => {}
                more => faults.push(format!("{id} is accounted for {more} times")),
            }
        }
    }
    // The blower's rows have no name of their own; `blower` uses every one, which it counts.
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}
