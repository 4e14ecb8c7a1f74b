//! The core's estimate against the same physics written a second time in f64, why values are missing, and whether its
//! intervals hold what they promise.

mod against_reference;
mod coverage;
mod missing;
mod record;
