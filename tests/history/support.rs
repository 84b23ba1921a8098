//! What the history tests share: an invented plan, reports, and a naive model of the record.

use std::path::Path;
use std::sync::Arc;
use std::time::{Duration, Instant};

use fallowband::detection::plan::{
    Band, Channel, FloorEstimator, FloorSettings, FloorTrend, LevelRef, Plan, Policy, Receiver,
    SpectrumSettings,
};
use fallowband::detection::time::{Stamp, Utc};
use fallowband::detection::verdict::{DwellReport, Levels, Reason, Reasons, State, Verdict};
use fallowband::detection::window::Window;
use fallowband::history::{History, HistoryError, Identity, Options, Reader, RunState};

/// 2026-03-02T10:07:30Z: not at the border of a quarter (ms).
pub(crate) const BEGIN_MS: i64 = 1_772_446_050_000;

/// A plan with `count` channels of 25 kHz (invented: the Lower Saltmarsh block).
pub(crate) fn plan(count: usize) -> Plan {
    let channel = |n: usize| Channel {
        id: format!("L{n:02}"),
        band_index: 0,
        centre_hz: 168.0e6 + 25e3 * n as f64,
        bandwidth_hz: 16e3,
        protected: false,
    };
    Plan {
        receiver: Receiver {
            centre_hz: 168.5e6,
            sample_rate_hz: 2.4e6,
            usable_bandwidth_hz: 2e6,
            dc_guard_hz: 0.0,
        },
        spectrum: SpectrumSettings { window: Window::Hann, overlap: 0.5, transform_length: 4096 },
        floor: FloorSettings { estimator: FloorEstimator::CellAveraging, trend: FloorTrend::Flat },
        level_ref: LevelRef::Dbfs,
        bands: vec![Band {
            id: "saltmarsh".into(),
            pfa: 1e-3,
            pd: 0.9,
            protection_level_db: -100.0,
            dwell_s: 0.2,
            slice_s: 0.005,
            policy: Policy { check_time_ns: 0, hold_off_ns: 0, max_age_ns: 1 },
        }],
        channels: (0..count).map(channel).collect(),
    }
}

pub(crate) fn identity() -> Identity {
    Identity {
        site: "Lower Saltmarsh".into(),
        node: "Quern Mill".into(),
        program_version: "0.1.0".into(),
        configuration_text: "# invented\n".into(),
    }
}

/// Commits every 20 ms, so that a test waits for conditions and not for a clock.
pub(crate) fn quick() -> Options {
    Options {
        commit_interval: Duration::from_millis(20),
        queue_depth: 100_000,
        ..Options::default()
    }
}

pub(crate) fn open(path: &Path, channels: usize) -> Result<History, HistoryError> {
    History::open(path, &identity(), &plan(channels), quick())
}

/// A moment given in milliseconds after [`BEGIN_MS`].
pub(crate) fn at(ms: i64) -> Utc {
    Utc((BEGIN_MS + ms) * 1_000_000)
}

pub(crate) fn verdict(channel_index: usize, state: RunState, power_db: f64) -> Verdict {
    let (state, reasons) = match state {
        RunState::Occupied => (State::Occupied, Reasons::NONE),
        RunState::Idle => (State::Idle, Reasons::NONE),
        RunState::Unknown => (State::Unknown, Reasons::one(Reason::Overload)),
        RunState::Own => (State::Unknown, Reasons::one(Reason::Own)),
    };
    let levels =
        Levels { power_db, floor_db: -110.0, threshold_db: -107.0, sensitivity_db: -108.0 };
    Verdict { channel_index, state, reasons, levels: Some(levels) }
}

/// A report of `[start_ms, start_ms + length_ms)` after [`BEGIN_MS`].
pub(crate) fn report(start_ms: i64, length_ms: i64, verdicts: Vec<Verdict>) -> Arc<DwellReport> {
    Arc::new(DwellReport {
        sequence: 0,
        start: Stamp { utc: at(start_ms), monotonic_ns: 0 },
        observed_ns: length_ms * 1_000_000,
        verdicts,
        slice_power_db: Vec::new(),
        spectrum: Vec::new(),
    })
}

/// A report that says the same of channels `0..channels`.
pub(crate) fn same(
    start_ms: i64,
    length_ms: i64,
    channels: usize,
    state: RunState,
) -> Arc<DwellReport> {
    report(start_ms, length_ms, (0..channels).map(|n| verdict(n, state, -90.0)).collect())
}

/// Waits for a condition; a minute is far beyond anything but a hang.
pub(crate) fn wait_until(what: &str, condition: impl Fn() -> bool) {
    let begun = Instant::now();
    while !condition() {
        assert!(begun.elapsed() < Duration::from_secs(60), "waited in vain for {what}");
        std::thread::park_timeout(Duration::from_millis(1));
    }
}

/// The runs of a channel as `(start_ms, end_ms, state)` after [`BEGIN_MS`].
pub(crate) fn runs_ms(
    reader: &Reader,
    channel: &str,
    from_ms: i64,
    to_ms: i64,
) -> Vec<(i64, i64, RunState)> {
    let list = reader.runs(channel, at(from_ms), at(to_ms), at(to_ms), 1_000_000).unwrap();
    assert!(!list.truncated);
    let ms = |moment: Utc| moment.0 / 1_000_000 - BEGIN_MS;
    list.runs.iter().map(|run| (ms(run.start), ms(run.end), run.state)).collect()
}

/// The model: time as cells of [`STEP_MS`], painted once and never again. No intervals, no SQL.
pub(crate) const STEP_MS: i64 = 100;

#[derive(Default)]
pub(crate) struct Line {
    /// Cells from [`BEGIN_MS`] on; `None` where nobody looked.
    pub(crate) cells: Vec<Option<RunState>>,
}

impl Line {
    /// Paints cells `[start, end)` that lie beyond all that were painted before.
    pub(crate) fn paint(&mut self, start: usize, end: usize, state: RunState) {
        for cell in self.cells.len().min(end)..end {
            self.cells.push((cell >= start).then_some(state));
        }
    }

    pub(crate) fn at(&self, cell: i64) -> Option<RunState> {
        usize::try_from(cell).ok().and_then(|cell| self.cells.get(cell).copied().flatten())
    }

    /// Time in each state over the cells `[from, to)`, unknown where nobody looked (us).
    pub(crate) fn sums_us(&self, from: i64, to: i64) -> [i64; 4] {
        let mut sums = [0; 4];
        for cell in from..to {
            sums[self.at(cell).unwrap_or(RunState::Unknown) as usize] += STEP_MS * 1_000;
        }
        sums
    }
}

/// What SQLite itself says of a file, and whether each rollup equals the runs it stands for.
pub(crate) fn assert_sound(path: &Path) {
    let connection = rusqlite::Connection::open(path).unwrap();
    let text = |sql: &str| connection.query_row(sql, [], |row| row.get::<_, String>(0)).unwrap();
    assert_eq!(text("PRAGMA integrity_check"), "ok");
    let count = |sql: &str| connection.query_row(sql, [], |row| row.get::<_, i64>(0)).unwrap();
    assert_eq!(count("SELECT count(*) FROM pragma_foreign_key_check"), 0);
    for (code, column) in ["occupied_us", "idle_us", "unknown_us", "own_us"].iter().enumerate() {
        let differing = count(&format!(
            "SELECT count(*) FROM quarter AS q WHERE {column} <> (SELECT coalesce(sum( \
             min(end_us, q.start_us + 900000000) - max(start_us, q.start_us)), 0) FROM run \
             WHERE channel = q.channel AND state = {code} AND end_us > q.start_us \
             AND start_us < q.start_us + 900000000)"
        ));
        assert_eq!(differing, 0, "{column} of a quarter is not what its runs say");
    }
    let unrolled = count(
        "SELECT count(*) FROM run AS r WHERE NOT EXISTS (SELECT 1 FROM quarter WHERE \
         channel = r.channel AND start_us <= r.start_us AND start_us + 900000000 > r.start_us) \
         AND NOT (state = 2 AND reasons = 64)",
    );
    assert_eq!(unrolled, 0, "a run that is in no quarter");
    let overlapping = count(
        "SELECT count(*) FROM (SELECT start_us, lag(end_us) OVER \
         (PARTITION BY channel ORDER BY start_us) AS before_us FROM run) \
         WHERE start_us < before_us",
    );
    assert_eq!(overlapping, 0, "runs that overlap");
}
