//! From a controller's milliseconds since its start to UTC.
//!
//! `t = anchor + at`, where the anchor is the UTC of the boot's time zero, fixed when the boot is first seen and kept
//! over restarts of the daemon; `at` is the controller's 32-bit count carried on beyond its wrap after 49.7 days.
//! A later jump of the computer's clock therefore moves nothing within a boot.
//!
//! Where it stops: the controller's crystal runs on by itself (tens of ppm: some seconds a day, from memory), and the
//! anchor is late by the time the first hello took. A boot first seen after its count has wrapped gets a time zero that
//! is a whole number of wraps late; times stay right. When the computer's clock was wrong by being ahead, later boots
//! continue from there until it has caught up: for one machine time never goes back.

/// One wrap of the controller's count, ms.
const WRAP_MS: i64 = 1 << 32;

/// The clock of one boot.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Clock {
    anchor_us: i64,
    /// Largest time seen, ms after time zero.
    newest_ms: i64,
    /// When that was read, µs since 1970 UTC.
    newest_received_us: i64,
}

impl Clock {
    /// A boot seen for the first time: its count stood at `at_ms` when it was read at `received_us`.
    ///
    /// `not_before_us` is the newest time of an earlier boot of the same machine. When plant time is ahead of the
    /// computer's (a simulated plant in fast time, or the computer's clock was set back), the new boot begins there.
    #[must_use]
    pub fn first_seen(at_ms: u32, received_us: i64, not_before_us: Option<i64>) -> Self {
        let zero = received_us.saturating_sub(i64::from(at_ms) * 1000);
        let anchor_us = match not_before_us {
            Some(before) if received_us < before => before,
            _ => zero,
        };
        Self { anchor_us, newest_ms: i64::from(at_ms), newest_received_us: received_us }
    }

    /// A boot that the store knows: its anchor, and the newest record's time (ms after time zero) and time of reading.
    #[must_use]
    pub fn known(anchor_us: i64, last: Option<(i64, i64)>) -> Self {
        let (newest_ms, newest_received_us) = last.unwrap_or((0, anchor_us));
        Self { anchor_us, newest_ms, newest_received_us }
    }

    /// UTC of the boot's time zero, µs since 1970.
    #[must_use]
    pub const fn anchor_us(&self) -> i64 {
        self.anchor_us
    }

    /// The count without its wraps, ms after time zero. A count a little lower than the newest is an earlier time, not
    /// a wrap.
    pub fn unwrap_ms(&mut self, at_ms: u32, received_us: i64) -> i64 {
        let newest = self.newest_ms.rem_euclid(WRAP_MS) as u32;
        let step = i64::from(at_ms.wrapping_sub(newest).cast_signed());
        // Longer silent than half a wrap: only the computer's clock can say how many wraps were missed.
        let silent_ms = received_us.saturating_sub(self.newest_received_us) / 1000;
        let missed = if silent_ms > WRAP_MS / 2 { (silent_ms - step + WRAP_MS / 2) / WRAP_MS } else { 0 };
        let unwrapped = self.newest_ms + step + missed * WRAP_MS;
        if unwrapped > self.newest_ms {
            self.newest_ms = unwrapped;
            self.newest_received_us = received_us;
        }
        unwrapped
    }

    /// UTC of a time after time zero, µs since 1970.
    #[must_use]
    pub const fn utc_us(&self, at_ms: i64) -> i64 {
        self.anchor_us.saturating_add(at_ms.saturating_mul(1000))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    const NOON: i64 = 1_700_000_000_000_000;

    #[test]
    fn a_first_hello_fixes_time_zero() {
        let mut clock = Clock::first_seen(1500, NOON, None);
        assert_eq!(clock.anchor_us(), NOON - 1_500_000);
        assert_eq!(clock.unwrap_ms(1600, NOON + 7_000_000), 1600, "the time of reading does not enter");
        assert_eq!(clock.utc_us(1600), NOON + 100_000);
        assert_eq!(clock.unwrap_ms(1400, NOON + 7_000_000), 1400, "a held record from before the hello");
    }

    #[test]
    fn the_count_wraps_after_49_days() {
        let mut clock = Clock::first_seen(u32::MAX - 50, NOON, None);
        assert_eq!(clock.unwrap_ms(49, NOON + 100_000), WRAP_MS + 49);
        assert_eq!(clock.unwrap_ms(u32::MAX, NOON + 200_000), WRAP_MS - 1, "late, from before the wrap");
        assert_eq!(clock.unwrap_ms(149, NOON + 200_000), WRAP_MS + 149);
    }

    #[test]
    fn a_daemon_that_was_away_for_long_counts_the_missed_wraps() {
        let days = |count: i64| count * 86_400_000; // ms
        for away in [1, 24, 26, 49, 51, 100, 400] {
            let last_ms = WRAP_MS + 12_345;
            let mut clock = Clock::known(NOON, Some((last_ms, NOON + last_ms * 1000)));
            let truth = last_ms + days(away);
            let count = truth.rem_euclid(WRAP_MS) as u32;
            assert_eq!(clock.unwrap_ms(count, NOON + truth * 1000 + 3_000_000), truth, "{away} days away");
        }
    }

    #[test]
    fn plant_time_ahead_of_the_clock_goes_on_after_a_restart() {
        // Fast time: the machine's newest record is an hour ahead of the computer.
        let ahead = NOON + 3_600_000_000;
        let clock = Clock::first_seen(100, NOON, Some(ahead));
        assert!(clock.utc_us(0) >= ahead);
        // Real time: a restart begins when it begins.
        let clock = Clock::first_seen(100, NOON, Some(NOON - 50_000));
        assert_eq!(clock.utc_us(100), NOON);
    }

    proptest! {
        /// Any rising times with steps below half a wrap come back exactly, wherever the count stands.
        #[test]
        fn rising_times_come_back(start in 0_i64..WRAP_MS, steps in prop::collection::vec(0_i64..WRAP_MS / 2, 1..20)) {
            let mut clock = Clock::first_seen(start as u32, NOON, None);
            let mut truth = start;
            for step in steps {
                truth += step;
                prop_assert_eq!(clock.unwrap_ms(truth.rem_euclid(WRAP_MS) as u32, NOON + (truth - start) * 1000), truth);
            }
        }
    }
}
