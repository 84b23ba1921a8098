//! From reports to runs and quarter-hour sums: pure accumulation, no database, no clock.
//!
//! Per channel the record is one line without holes or overlaps: each dwell either extends the open
//! run or begins the next where the last one ended; a hole between dwells is a run of its own,
//! unknown and `not_observed`. So occupied, idle, unknown and own time add up to the elapsed time
//! by construction. Nothing here may ever turn a hole or an `unknown` into `idle`.
//!
//! Times are whole microseconds, each moment rounded down by itself, so that two dwells which touch
//! in nanoseconds touch here too.

use std::collections::VecDeque;

use crate::detection::time::Utc;
use crate::detection::verdict::{DwellReport, Reason, Reasons, State, Verdict};

/// A dwell that starts within this of the record's end counts as starting right there (us).
///
/// Sample clocks and UTC stamps disagree by parts per million, which is microseconds a dwell; a
/// lost buffer is many milliseconds. One millisecond stands clear of both.
pub const TOLERANCE_US: i64 = 1_000;

/// A quarter of an hour (us); quarters begin at multiples of it in UTC.
pub const QUARTER_US: i64 = 900_000_000;

/// What a stretch of the record says: the three states of a verdict, own transmissions apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum RunState {
    /// An incumbent was detected.
    Occupied = 0,
    /// Nothing was detected, and the protection level would have been.
    Idle = 1,
    /// Nobody can tell; the reasons say why.
    Unknown = 2,
    /// The site's own radio had announced a transmission.
    Own = 3,
}

impl RunState {
    /// The word used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            RunState::Occupied => State::Occupied.as_str(),
            RunState::Idle => State::Idle.as_str(),
            RunState::Unknown => State::Unknown.as_str(),
            RunState::Own => Reason::Own.as_str(),
        }
    }

    /// The state of a stored code; a code that nobody wrote is unknown.
    pub(super) fn from_code(code: i64) -> RunState {
        match code {
            0 => RunState::Occupied,
            1 => RunState::Idle,
            3 => RunState::Own,
            _ => RunState::Unknown,
        }
    }

    fn of(verdict: &Verdict) -> RunState {
        match verdict.state {
            _ if verdict.own() => RunState::Own,
            State::Occupied => RunState::Occupied,
            State::Idle => RunState::Idle,
            State::Unknown => RunState::Unknown,
        }
    }
}

/// Power over the dwells of a run, weighted by their observed time.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
struct PowerSum {
    linear_us: f64,
    weight_us: f64,
    max_db: Option<f64>,
}

impl PowerSum {
    fn add(&mut self, power_db: f64, observed_us: i64) {
        self.linear_us += 10f64.powf(power_db / 10.0) * observed_us as f64;
        self.weight_us += observed_us as f64;
        self.max_db = Some(self.max_db.map_or(power_db, |max_db| max_db.max(power_db)));
    }
}

/// A stretch of consecutive equal verdicts on one channel.
#[derive(Clone, Debug, PartialEq)]
pub struct Run {
    /// Index of the channel in the plan.
    pub channel_index: usize,
    /// Begin (us).
    pub start_us: i64,
    /// End (half-open) (us).
    pub end_us: i64,
    /// What it says.
    pub state: RunState,
    /// Why. The dwells of an unknown run all have the same reasons; other runs hold the union.
    pub reasons: Reasons,
    /// The part in which samples were really taken (us).
    pub observed_us: i64,
    power: PowerSum,
    /// How far the run is on the record: its end and observed time as of the last commit (us).
    recorded: (i64, i64),
}

impl Run {
    /// Mean power of an occupied run (dB), linear average over observed time.
    pub fn power_mean_db(&self) -> Option<f64> {
        (self.power.weight_us > 0.0)
            .then(|| 10.0 * (self.power.linear_us / self.power.weight_us).log10())
    }

    /// Highest dwell power of an occupied run (dB).
    pub fn power_max_db(&self) -> Option<f64> {
        self.power.max_db
    }

    /// Whether it stands for time in which nobody looked.
    fn is_hole(&self) -> bool {
        self.state == RunState::Unknown && self.reasons == Reasons::one(Reason::NotObserved)
    }

    /// What the part of the run that is not yet on the record adds to each quarter: `(start,
    /// sums)`.
    ///
    /// Represented time is split exactly at the borders; observed time in proportion, since within
    /// a run only its total is known. Quarters wholly inside a hole are left out: a quarter without
    /// a row is unknown anyway, and a clock that jumps by years must not write a million of them.
    pub fn unrecorded_quarters(&self) -> impl Iterator<Item = (i64, Sums)> + use<> {
        let (start_us, observed_before_us) = self.recorded;
        let (end_us, state, hole) = (self.end_us, self.state, self.is_hole());
        let observed_us = self.observed_us - observed_before_us;
        let observed_until = move |us: i64| portion(observed_us, us - start_us, end_us - start_us);
        let mut at_us = start_us;
        std::iter::from_fn(move || {
            if hole && at_us % QUARTER_US == 0 && end_us - at_us >= QUARTER_US {
                at_us = quarter_start(end_us);
            }
            if at_us >= end_us {
                return None;
            }
            let quarter_us = quarter_start(at_us);
            let until_us = end_us.min(quarter_us + QUARTER_US);
            let mut sums = Sums::default();
            let observed_us = observed_until(until_us) - observed_until(at_us);
            sums.add(state, until_us - at_us, observed_us);
            at_us = until_us;
            Some((quarter_us, sums))
        })
    }
}

/// `part / whole` of `amount`, rounded down; exact for any time that fits the clock.
pub(super) fn portion(amount: i64, part: i64, whole: i64) -> i64 {
    (i128::from(amount) * i128::from(part) / i128::from(whole)) as i64
}

/// Begin of the quarter that holds a moment (us).
pub(super) fn quarter_start(us: i64) -> i64 {
    us.div_euclid(QUARTER_US) * QUARTER_US
}

/// Whole microseconds of a moment, rounded down.
pub(super) fn micros(moment: Utc) -> i64 {
    moment.0.div_euclid(1_000)
}

/// Represented time in each state, and the time in which samples were taken (us).
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Sums {
    /// Time in which an incumbent was detected (us).
    pub occupied_us: i64,
    /// Time found idle (us).
    pub idle_us: i64,
    /// Time of which nobody can tell (us).
    pub unknown_us: i64,
    /// Time of the site's own transmissions (us).
    pub own_us: i64,
    /// Time in which samples were really taken (us).
    pub observed_us: i64,
}

impl Sums {
    /// Adds represented time in a state, and the observed part of it (us).
    pub fn add(&mut self, state: RunState, represented_us: i64, observed_us: i64) {
        *match state {
            RunState::Occupied => &mut self.occupied_us,
            RunState::Idle => &mut self.idle_us,
            RunState::Unknown => &mut self.unknown_us,
            RunState::Own => &mut self.own_us,
        } += represented_us;
        self.observed_us += observed_us;
    }

    /// The four sums together (us).
    pub fn represented_us(&self) -> i64 {
        self.occupied_us + self.idle_us + self.unknown_us + self.own_us
    }
}

/// One channel's place in the record.
#[derive(Clone, Debug, Default)]
struct Track {
    /// Up to where the record stands (us); `None` before the channel's first dwell ever.
    end_us: Option<i64>,
    open: Option<Run>,
}

/// Makes runs out of reports, and holds those that are not yet on the record.
#[derive(Clone, Debug)]
pub struct RunKeeper {
    tracks: Vec<Track>,
    closed: VecDeque<Run>,
    closed_max: usize,
    dropped_runs: u64,
    clipped_reports: u64,
    first_start_us: Option<i64>,
    recorded_until_us: Option<i64>,
}

impl RunKeeper {
    /// A keeper for channels whose record ends at `ends_us` (`None` for a channel without any)
    /// (us); their time since then becomes unknown with their first dwell. At most `closed_max`
    /// closed runs are held, 1 or more; beyond that the oldest are dropped and counted.
    pub fn new(ends_us: &[Option<i64>], closed_max: usize) -> RunKeeper {
        assert!(closed_max > 0, "a keeper must be allowed to hold a run");
        let tracks = ends_us.iter().map(|&end_us| Track { end_us, open: None }).collect();
        RunKeeper {
            tracks,
            closed: VecDeque::new(),
            closed_max,
            dropped_runs: 0,
            clipped_reports: 0,
            first_start_us: None,
            recorded_until_us: None,
        }
    }

    /// Takes a report in. The part of a dwell that lies before the end of its channel's record (UTC
    /// has gone back) is left out, so that no time counts twice.
    ///
    /// # Panics
    /// If a verdict's channel is not in the plan, or the observed time is negative.
    pub fn take(&mut self, report: &DwellReport) {
        assert!(report.observed_ns >= 0, "a report of negative length: {}", report.observed_ns);
        let (start_us, end_us) = (micros(report.start.utc), micros(report.end().utc));
        self.first_start_us.get_or_insert(start_us);
        self.recorded_until_us = self.recorded_until_us.max(Some(end_us));
        let mut clipped = false;
        for verdict in &report.verdicts {
            clipped |= self.take_verdict(verdict, start_us, end_us);
        }
        self.clipped_reports += u64::from(clipped);
    }

    /// Puts one verdict on its channel's line; returns whether part of it had to be left out.
    fn take_verdict(&mut self, verdict: &Verdict, start_us: i64, end_us: i64) -> bool {
        let track = &self.tracks[verdict.channel_index];
        let last_us = track.end_us.unwrap_or(start_us);
        let clipped = start_us < last_us - TOLERANCE_US;
        if end_us <= last_us || end_us == start_us {
            return clipped;
        }
        let mut dwell = Run {
            channel_index: verdict.channel_index,
            start_us: last_us,
            end_us,
            state: RunState::of(verdict),
            reasons: verdict.reasons,
            observed_us: end_us - start_us.max(last_us),
            power: PowerSum::default(),
            recorded: (last_us, 0),
        };
        if start_us > last_us + TOLERANCE_US {
            self.append(Run {
                end_us: start_us,
                state: RunState::Unknown,
                reasons: Reasons::one(Reason::NotObserved),
                observed_us: 0,
                ..dwell.clone()
            });
            dwell.start_us = start_us;
            dwell.recorded.0 = start_us;
        }
        if let (RunState::Occupied, Some(levels)) = (dwell.state, &verdict.levels)
            && levels.power_db.is_finite()
        {
            dwell.power.add(levels.power_db, dwell.observed_us);
        }
        self.append(dwell);
        clipped
    }

    /// Adds a stretch that starts where the channel's record ends.
    fn append(&mut self, next: Run) {
        let track = &mut self.tracks[next.channel_index];
        debug_assert!(track.end_us.is_none_or(|end_us| end_us == next.start_us));
        track.end_us = Some(next.end_us);
        match &mut track.open {
            Some(open)
                if open.state == next.state
                    && (open.state != RunState::Unknown || open.reasons == next.reasons) =>
            {
                open.end_us = next.end_us;
                open.reasons = open.reasons.union(next.reasons);
                open.observed_us += next.observed_us;
                open.power.linear_us += next.power.linear_us;
                open.power.weight_us += next.power.weight_us;
                open.power.max_db = match (open.power.max_db, next.power.max_db) {
                    (Some(a), Some(b)) => Some(a.max(b)),
                    (a, b) => a.or(b),
                };
            }
            open => {
                // A run that is wholly on the record needs no second writing.
                self.closed.extend(open.replace(next).filter(|run| run.recorded.0 < run.end_us));
            }
        }
        while self.closed.len() > self.closed_max {
            self.closed.pop_front();
            self.dropped_runs += 1;
        }
    }

    /// The runs that are not on the record as they stand: closed ones, then open ones.
    pub fn pending(&self) -> impl Iterator<Item = &Run> {
        let open = self.tracks.iter().filter_map(|track| track.open.as_ref());
        self.closed.iter().chain(open.filter(|run| run.recorded.0 < run.end_us))
    }

    /// All that is pending has been put on the record.
    pub fn committed(&mut self) {
        self.closed.clear();
        for run in self.tracks.iter_mut().filter_map(|track| track.open.as_mut()) {
            run.recorded = (run.end_us, run.observed_us);
        }
    }

    /// Closed runs that wait for a commit.
    pub fn closed_runs(&self) -> usize {
        self.closed.len()
    }

    /// Closed runs that were dropped because too many waited.
    pub fn dropped_runs(&self) -> u64 {
        self.dropped_runs
    }

    /// Reports of which a part lay before the record's end and was left out.
    pub fn clipped_reports(&self) -> u64 {
        self.clipped_reports
    }

    /// Start of the first report (us).
    pub fn first_start_us(&self) -> Option<i64> {
        self.first_start_us
    }

    /// The latest end of all reports (us).
    pub fn recorded_until_us(&self) -> Option<i64> {
        self.recorded_until_us
    }
}
