//! Time as a value. The core never asks what time it is: a stamp comes in with the samples.

/// Nanoseconds in one second.
pub const NANOS_PER_SECOND: i64 = 1_000_000_000;

/// A moment in UTC: nanoseconds since 1970-01-01T00:00:00Z, leap seconds not counted (POSIX time).
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Utc(pub i64);

impl Utc {
    /// The moment `nanos` later (earlier when negative), at most the ends of 64 bits: a computer's
    /// clock may be set to any year, and that is no reason to stop.
    pub fn plus_nanos(self, nanos: i64) -> Utc {
        Utc(self.0.saturating_add(nanos))
    }

    /// Nanoseconds from `earlier` to `self`; negative when `self` is the earlier one.
    pub fn nanos_since(self, earlier: Utc) -> i64 {
        self.0.saturating_sub(earlier.0)
    }
}

/// When a sample was taken, on both clocks: UTC says when, the monotonic clock says how long ago.
///
/// A wrong or stepped UTC clock can thus never stretch the life of an answer.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Stamp {
    /// UTC.
    pub utc: Utc,
    /// Monotonic time (ns), from an origin that stays the same while the program runs.
    pub monotonic_ns: i64,
}

impl Stamp {
    /// The stamp `nanos` later on both clocks.
    pub fn plus_nanos(self, nanos: i64) -> Stamp {
        Stamp { utc: self.utc.plus_nanos(nanos), monotonic_ns: self.monotonic_ns + nanos }
    }
}

/// Duration of `samples` samples at `sample_rate_hz`, rounded to the nearest nanosecond (ns).
///
/// Exact to 1 ns for any count below 2^63: whole seconds and the remainder are kept apart, since
/// `samples * 1e9` would lose nanoseconds in a double after some weeks of samples.
pub fn samples_to_nanos(samples: u64, sample_rate_hz: f64) -> i64 {
    let seconds = (samples as f64 / sample_rate_hz).floor();
    let remainder = samples as f64 - seconds * sample_rate_hz;
    seconds as i64 * NANOS_PER_SECOND + (remainder / sample_rate_hz * 1e9).round() as i64
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_clock_that_stands_at_the_end_of_time_stays_there() {
        let end = Stamp { utc: Utc(i64::MAX), monotonic_ns: 5 };
        assert_eq!(end.plus_nanos(1), Stamp { utc: Utc(i64::MAX), monotonic_ns: 6 });
        assert_eq!(Utc(i64::MIN).nanos_since(Utc(1)), i64::MIN);
    }

    #[test]
    fn sample_counts_become_nanoseconds_without_loss() {
        assert_eq!(samples_to_nanos(0, 2.4e6), 0);
        assert_eq!(samples_to_nanos(24_000, 24_000.0), NANOS_PER_SECOND);
        assert_eq!(samples_to_nanos(1, 2.4e6), 417);
        // A year at 2.4 MS/s and one sample.
        let year_s = 31_536_000_u64;
        assert_eq!(
            samples_to_nanos(year_s * 2_400_000 + 1, 2.4e6),
            year_s as i64 * NANOS_PER_SECOND + 417
        );
    }
}
