//! Where every channel stands after the newest dwell: what "now" is answered from.
//!
//! Durations are measured on the monotonic clock only, so a wrong or stepped UTC clock can neither
//! stretch nor shorten an idle time.

use super::plan::Plan;
use super::time::{Stamp, Utc};
use super::verdict::{DwellReport, State, Verdict};

/// Two dwells follow each other without a gap when the second starts within this of the first's end
/// (ns). Stamps count samples, so only rounding separates neighbours; a real gap is far longer.
pub const CONTIGUITY_NS: i64 = 1_000_000;

/// Where one channel stands.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ChannelStanding {
    /// The newest verdict; `None` before the first dwell.
    pub verdict: Option<Verdict>,
    /// Sequence number of the dwell behind it.
    pub sequence: u64,
    /// Start of that dwell.
    pub start: Stamp,
    /// End of that dwell.
    pub end: Stamp,
    /// Start of the unbroken run of this state.
    pub since: Stamp,
    /// End of the last dwell in which the channel was occupied, or of a detection recalled from the
    /// record.
    pub last_detection: Option<Stamp>,
}

impl ChannelStanding {
    const NEVER: Stamp = Stamp { utc: Utc(0), monotonic_ns: i64::MIN / 2 };

    fn new() -> ChannelStanding {
        ChannelStanding {
            verdict: None,
            sequence: 0,
            start: Self::NEVER,
            end: Self::NEVER,
            since: Self::NEVER,
            last_detection: None,
        }
    }

    /// How long the channel has been in its state without a gap, up to the newest dwell's end (ns).
    pub fn run_length_ns(&self) -> i64 {
        self.end.monotonic_ns - self.since.monotonic_ns
    }

    /// Age of the evidence: time from the newest dwell's end to `now` (ns); `None` before the
    /// first.
    pub fn age_ns(&self, now: Stamp) -> Option<i64> {
        self.verdict.map(|_| now.monotonic_ns - self.end.monotonic_ns)
    }

    fn observe(&mut self, verdict: &Verdict, report: &DwellReport) {
        let gap_ns = report.start.monotonic_ns - self.end.monotonic_ns;
        let continues = self.verdict.is_some_and(|before| before.state == verdict.state)
            && gap_ns.abs() <= CONTIGUITY_NS;
        if !continues {
            self.since = report.start;
        }
        self.verdict = Some(*verdict);
        self.sequence = report.sequence;
        self.start = report.start;
        self.end = report.end();
        if verdict.state == State::Occupied {
            self.last_detection = Some(self.end);
        }
    }
}

/// Where every channel of the plan stands, by channel index.
#[derive(Clone, Debug, PartialEq)]
pub struct Standing {
    /// One entry per channel of the plan.
    pub channels: Vec<ChannelStanding>,
}

impl Standing {
    /// The standing before the first dwell.
    pub fn new(plan: &Plan) -> Standing {
        Standing { channels: vec![ChannelStanding::new(); plan.channels.len()] }
    }

    /// Takes in the end of a channel's last detection on record, as of the present moment `now`.
    ///
    /// The monotonic clock of that time is gone, so its age is taken from UTC. A detection that
    /// ended after `now` tells that UTC has gone back by nobody knows how much: it counts as just
    /// now, which holds a channel off for too long rather than too short.
    ///
    /// # Panics
    /// If the channel index is outside the plan.
    pub fn recall(&mut self, channel_index: usize, detected: Utc, now: Stamp) {
        let age_ns = now.utc.nanos_since(detected).max(0);
        self.channels[channel_index].last_detection = Some(now.plus_nanos(-age_ns));
    }

    /// Takes in a dwell.
    ///
    /// # Panics
    /// If a verdict's channel index is outside the plan.
    pub fn observe(&mut self, report: &DwellReport) {
        for verdict in &report.verdicts {
            self.channels[verdict.channel_index].observe(verdict, report);
        }
    }
}
