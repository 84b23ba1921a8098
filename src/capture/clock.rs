//! The one place where the program asks what time it is.

use std::time::{Instant, SystemTime, UNIX_EPOCH};

use crate::detection::time::{Stamp, Utc};

/// Tells the present moment on both clocks.
pub trait Clock: Send + Sync {
    /// The present moment.
    fn now(&self) -> Stamp;
}

/// The computer's clocks. One per program: its monotonic time counts from its making.
#[derive(Debug)]
pub struct SystemClock {
    origin: Instant,
}

impl SystemClock {
    /// A clock whose monotonic time is 0 now.
    pub fn new() -> SystemClock {
        SystemClock { origin: Instant::now() }
    }
}

impl Default for SystemClock {
    fn default() -> SystemClock {
        SystemClock::new()
    }
}

impl Clock for SystemClock {
    fn now(&self) -> Stamp {
        // A computer without a battery clock may start before 1970; the time is then negative.
        let utc_ns = match SystemTime::now().duration_since(UNIX_EPOCH) {
            Ok(since) => saturated(since.as_nanos()),
            Err(before) => -saturated(before.duration().as_nanos()),
        };
        Stamp { utc: Utc(utc_ns), monotonic_ns: saturated(self.origin.elapsed().as_nanos()) }
    }
}

/// Nanoseconds as they are kept everywhere; a clock set past the year 2262 stays there.
fn saturated(nanos: u128) -> i64 {
    i64::try_from(nanos).unwrap_or(i64::MAX)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn monotonic_time_starts_near_zero_and_never_runs_back() {
        let clock = SystemClock::new();
        let mut before = clock.now();
        // An hour is far more than a loaded machine needs between two statements.
        assert!((0..3_600_000_000_000).contains(&before.monotonic_ns));
        for _ in 0..1000 {
            let now = clock.now();
            assert!(now.monotonic_ns >= before.monotonic_ns);
            before = now;
        }
    }

    #[test]
    fn utc_agrees_with_an_independent_reading_of_the_clock() {
        let earlier = jiff::Timestamp::now().as_nanosecond();
        let utc_ns = i128::from(SystemClock::new().now().utc.0);
        let later = jiff::Timestamp::now().as_nanosecond();
        assert!((earlier..=later).contains(&utc_ns));
    }
}
