//! What the tests of offcurve share: the published rows they are held against, a second form of the estimate in f64,
//! and samples and profiles to feed both.
//!
//! The test programs lie beside this library, one folder per kind of evidence: `published/` (rows of books and
//! standards, measured data), `estimate/` (the core against the f64 form, coverage of its intervals), `workspace/`
//! (who may depend on whom), `benches/`, and behind the feature `end-to-end` whole runs in `end_to_end/`.

pub mod draws;
pub mod fixtures;
pub mod published;
pub mod reference_estimate;
#[cfg(feature = "end-to-end")]
pub mod running;
