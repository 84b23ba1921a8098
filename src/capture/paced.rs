//! Makes a source without a clock of its own (a recording, a scene) behave as a live receiver.
//!
//! It must never deliver faster than real time, and never claim to have listened while it was late.

use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

use super::clock::Clock;
use super::{CaptureError, Source};
use crate::detection::block::SampleBlock;
use crate::detection::time::{NANOS_PER_SECOND, Stamp, samples_to_nanos};

/// How far delivery may fall behind real time, or UTC part from the monotonic clock, before the
/// stretch between is given up as unobserved (ns).
pub const LATE_MAX_NS: i64 = NANOS_PER_SECOND;

/// Lets time pass. Separate from the clock, so that a simulation needs no real waiting.
pub trait Pace: Send {
    /// Returns after about `nanos` (ns, above 0); it may be earlier, and is then asked again.
    fn wait(&mut self, nanos: i64);
}

/// Waits by putting the capture thread to sleep.
#[derive(Debug)]
pub struct ThreadPace;

impl Pace for ThreadPace {
    fn wait(&mut self, nanos: i64) {
        std::thread::sleep(Duration::from_nanos(nanos.unsigned_abs()));
    }
}

/// How often a paced source had to start its time anew.
#[derive(Debug, Default)]
pub struct PacedCounters {
    late: AtomicU64,
    clock_steps: AtomicU64,
}

impl PacedCounters {
    /// How often delivery had fallen behind by more than [`LATE_MAX_NS`].
    pub fn late(&self) -> u64 {
        self.late.load(Ordering::Relaxed)
    }

    /// How often UTC had parted from the monotonic clock by more than [`LATE_MAX_NS`]: it was set,
    /// or the computer slept.
    pub fn clock_steps(&self) -> u64 {
        self.clock_steps.load(Ordering::Relaxed)
    }
}

/// A source that delivers in real time, with stamps of its own.
///
/// A block is delivered when its last sample would have been taken. Stamps are the clock's at the
/// first block, and the sample count after it. A gap of the wrapped source stays a gap, but is not
/// waited for. Where the stamps no longer fit the clock they start anew, with `gap_before`.
pub struct Paced<S> {
    source: S,
    clock: Arc<dyn Clock>,
    pace: Box<dyn Pace>,
    anchor: Option<Anchor>,
    counters: Arc<PacedCounters>,
}

/// The moment that samples are counted from.
#[derive(Clone, Copy)]
struct Anchor {
    start: Stamp,
    samples: u64,
}

impl<S: Source> Paced<S> {
    /// Paces `source` by `clock`, sleeping on the thread that reads.
    pub fn new(source: S, clock: Arc<dyn Clock>) -> Paced<S> {
        Paced::with_pace(source, clock, Box::new(ThreadPace))
    }

    /// Paces `source` by `clock`, waiting by `pace`.
    pub fn with_pace(source: S, clock: Arc<dyn Clock>, pace: Box<dyn Pace>) -> Paced<S> {
        Paced { source, clock, pace, anchor: None, counters: Arc::default() }
    }

    /// The counters; they stay readable after the source has gone to its thread.
    pub fn counters(&self) -> Arc<PacedCounters> {
        Arc::clone(&self.counters)
    }

    /// Waits until the monotonic clock has reached `due_ns`; returns the moment then.
    fn wait_until(&mut self, due_ns: i64) -> Stamp {
        loop {
            let now = self.clock.now();
            if now.monotonic_ns >= due_ns {
                return now;
            }
            self.pace.wait(due_ns - now.monotonic_ns);
        }
    }
}

impl<S: Source> Source for Paced<S> {
    fn centre_hz(&self) -> f64 {
        self.source.centre_hz()
    }

    fn sample_rate_hz(&self) -> f64 {
        self.source.sample_rate_hz()
    }

    fn samples_total(&self) -> Option<u64> {
        self.source.samples_total()
    }

    fn describe(&self) -> String {
        format!("{}, in real time", self.source.describe())
    }

    fn read(&mut self, block: &mut SampleBlock, samples_max: usize) -> Result<bool, CaptureError> {
        if !self.source.read(block, samples_max)? {
            return Ok(false);
        }
        let rate_hz = self.source.sample_rate_hz();
        let length = block.samples.len() as u64;
        let mut anchor =
            self.anchor.unwrap_or_else(|| Anchor { start: self.clock.now(), samples: 0 });
        let due = anchor.start.plus_nanos(samples_to_nanos(anchor.samples + length, rate_hz));
        let now = self.wait_until(due.monotonic_ns);
        let late_ns = now.monotonic_ns - due.monotonic_ns;
        let clock_step_ns = now.utc.nanos_since(due.utc) - late_ns;
        let late = late_ns > LATE_MAX_NS;
        let clock_stepped = clock_step_ns.abs() > LATE_MAX_NS;
        if late || clock_stepped {
            self.counters.late.fetch_add(u64::from(late), Ordering::Relaxed);
            self.counters.clock_steps.fetch_add(u64::from(clock_stepped), Ordering::Relaxed);
            // The block ends now. It starts no earlier than the one before it ended, since it was
            // not delivered before it was due.
            anchor =
                Anchor { start: now.plus_nanos(-samples_to_nanos(length, rate_hz)), samples: 0 };
            block.gap_before = true;
        }
        block.start = anchor.start.plus_nanos(samples_to_nanos(anchor.samples, rate_hz));
        anchor.samples += length;
        self.anchor = Some(anchor);
        Ok(true)
    }
}

#[cfg(test)]
mod tests {
    use std::sync::Mutex;

    use num_complex::Complex32;

    use super::*;
    use crate::capture::empty_block;
    use crate::detection::time::Utc;

    /// Time that passes only when somebody waits or the test says so.
    struct VirtualClock(Mutex<Stamp>);

    impl VirtualClock {
        fn new() -> Arc<VirtualClock> {
            let utc = Utc(1_772_366_400 * NANOS_PER_SECOND);
            Arc::new(VirtualClock(Mutex::new(Stamp { utc, monotonic_ns: 77 })))
        }

        fn pass(&self, nanos: i64) {
            let mut now = self.0.lock().expect("not poisoned");
            *now = now.plus_nanos(nanos);
        }

        fn set_utc(&self, nanos: i64) {
            let mut now = self.0.lock().expect("not poisoned");
            now.utc = now.utc.plus_nanos(nanos);
        }
    }

    impl Clock for VirtualClock {
        fn now(&self) -> Stamp {
            *self.0.lock().expect("not poisoned")
        }
    }

    /// Passes at most 30 ms at a time, to show that early returns are no harm.
    struct VirtualPace(Arc<VirtualClock>);

    impl Pace for VirtualPace {
        fn wait(&mut self, nanos: i64) {
            assert!(nanos > 0);
            self.0.pass(nanos.min(30_000_000));
        }
    }

    /// 1000 samples a second; each read takes as long as the list says (ns) and fills the block.
    struct Slow {
        clock: Arc<VirtualClock>,
        read_takes_ns: Vec<i64>,
        reads: usize,
        gap_at_read: usize,
    }

    impl Source for Slow {
        fn centre_hz(&self) -> f64 {
            433e6
        }
        fn sample_rate_hz(&self) -> f64 {
            1000.0
        }
        fn samples_total(&self) -> Option<u64> {
            None
        }
        fn describe(&self) -> String {
            "test source".to_owned()
        }
        fn read(&mut self, block: &mut SampleBlock, max: usize) -> Result<bool, CaptureError> {
            let Some(takes_ns) = self.read_takes_ns.get(self.reads) else { return Ok(false) };
            self.clock.pass(*takes_ns);
            block.samples.clear();
            block.samples.resize(max, Complex32::ZERO);
            block.gap_before = self.reads == 0 || self.reads == self.gap_at_read;
            // A recording's stamps, which must not get through.
            block.start = Stamp { utc: Utc(0), monotonic_ns: 0 };
            self.reads += 1;
            Ok(true)
        }
    }

    fn paced(read_takes_ms: &[i64], gap_at_read: usize) -> (Arc<VirtualClock>, Paced<Slow>) {
        let clock = VirtualClock::new();
        let read_takes_ns = read_takes_ms.iter().map(|ms| ms * 1_000_000).collect();
        let slow = Slow { clock: Arc::clone(&clock), read_takes_ns, reads: 0, gap_at_read };
        let pace = Box::new(VirtualPace(Arc::clone(&clock)));
        (Arc::clone(&clock), Paced::with_pace(slow, clock, pace))
    }

    /// Start of the block on both clocks since the clock's first moment (ms), its gap flag, and
    /// when it was delivered (ms).
    fn next(source: &mut Paced<Slow>, clock: &VirtualClock) -> (i64, i64, bool, i64) {
        let first = VirtualClock::new().now();
        let mut block = empty_block(100);
        assert!(source.read(&mut block, 100).expect("reads"));
        (
            block.start.utc.nanos_since(first.utc) / 1_000_000,
            (block.start.monotonic_ns - first.monotonic_ns) / 1_000_000,
            block.gap_before,
            (clock.now().monotonic_ns - first.monotonic_ns) / 1_000_000,
        )
    }

    #[test]
    fn blocks_come_in_real_time_with_stamps_of_the_clock_and_the_sample_count() {
        // The first read takes 5 ms: the first sample is stamped after it. The fourth read is slow,
        // but not by more than the bound: its block comes late, and the count goes on.
        let (clock, mut source) = paced(&[5, 0, 20, 700, 0], 2);
        assert_eq!(next(&mut source, &clock), (5, 5, true, 105));
        assert_eq!(next(&mut source, &clock), (105, 105, false, 205));
        assert_eq!(next(&mut source, &clock), (205, 205, true, 305));
        assert_eq!(next(&mut source, &clock), (305, 305, false, 1005));
        assert_eq!(next(&mut source, &clock), (405, 405, false, 1005));
        assert!(!source.read(&mut empty_block(1), 1).expect("ends"));
        assert_eq!((source.counters().late(), source.counters().clock_steps()), (0, 0));
    }

    #[test]
    fn a_stretch_that_was_missed_by_more_than_the_bound_is_a_gap() {
        let (clock, mut source) = paced(&[0, 1100, 1101, 0], 9);
        assert_eq!(next(&mut source, &clock), (0, 0, true, 100));
        // Due at 200, delivered at 1200: exactly the bound, still kept.
        assert_eq!(next(&mut source, &clock), (100, 100, false, 1200));
        // Due at 300, delivered at 2301: given up, and the block ends now.
        assert_eq!(next(&mut source, &clock), (2201, 2201, true, 2301));
        assert_eq!(next(&mut source, &clock), (2301, 2301, false, 2401));
        assert_eq!((source.counters().late(), source.counters().clock_steps()), (1, 0));
    }

    #[test]
    fn a_step_of_utc_starts_the_stamps_anew_and_never_turns_the_monotonic_clock_back() {
        let (clock, mut source) = paced(&[0, 0, 0, 0], 9);
        assert_eq!(next(&mut source, &clock), (0, 0, true, 100));
        clock.set_utc(-3_600_000_000_000);
        assert_eq!(next(&mut source, &clock), (100 - 3_600_000, 100, true, 200));
        assert_eq!(next(&mut source, &clock), (200 - 3_600_000, 200, false, 300));
        clock.set_utc(LATE_MAX_NS);
        assert_eq!(next(&mut source, &clock), (300 - 3_600_000, 300, false, 400));
        assert_eq!((source.counters().late(), source.counters().clock_steps()), (0, 1));
    }

    #[test]
    fn waiting_on_the_thread_lasts_at_least_as_long_as_asked() {
        let before = std::time::Instant::now();
        ThreadPace.wait(2_000_000);
        assert!(before.elapsed() >= Duration::from_millis(2));
    }
}
