//! Answers about the past, from read-only connections of its own.
//!
//! A reader sees what was committed and nothing else, and never waits for the writer (WAL). It must
//! never leave a hole in an answer or fill one with anything but unknown: time without a record,
//! before, after or between, is unknown and `not_observed`.

use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};

use rusqlite::{Connection, Row, Transaction, params};

use super::HistoryError;
use super::columns::{ChannelColumns, StepRange, channel_columns};
use super::file::open_for_reading;
use super::runs::{QUARTER_US, RunState, micros, portion};
use crate::detection::time::Utc;
use crate::detection::verdict::{Reason, Reasons};

/// Connections kept open between questions.
const IDLE_CONNECTIONS_MAX: usize = 4;

/// Columns, times channels, that one question may ask for: eight weeks of 500 channels by quarters
/// (some 150 MB). More is refused, so that no question can exhaust the node's memory.
const COLUMNS_MAX: i64 = 500 * 8 * 7 * 96;

/// A stretch of one channel's past.
#[derive(Clone, Debug, PartialEq)]
pub struct RunRow {
    /// Begin, not before the asked-for range.
    pub start: Utc,
    /// End (half-open), not after the asked-for range.
    pub end: Utc,
    /// What it says.
    pub state: RunState,
    /// Why.
    pub reasons: Reasons,
    /// Mean power of the whole run, if occupied (dB), linear average over observed time.
    pub power_mean_db: Option<f64>,
    /// Highest dwell power of the whole run, if occupied (dB).
    pub power_max_db: Option<f64>,
    /// What the powers refer to (`dBFS` or `dBm`); `None` for time without a record.
    pub level_ref: Option<String>,
    /// Time in which samples were really taken (us); for a run cut by the range, in proportion.
    pub observed_us: i64,
}

impl RunRow {
    /// Time without a record.
    fn hole(start_us: i64, end_us: i64) -> RunRow {
        RunRow {
            start: Utc(start_us * 1_000),
            end: Utc(end_us * 1_000),
            state: RunState::Unknown,
            reasons: Reasons::one(Reason::NotObserved),
            power_mean_db: None,
            power_max_db: None,
            level_ref: None,
            observed_us: 0,
        }
    }
}

/// The runs of a channel over a range, without holes or overlaps.
#[derive(Clone, Debug, PartialEq)]
pub struct RunList {
    /// By rising time.
    pub runs: Vec<RunRow>,
    /// There was more than the limit; the list ends where its last run ends.
    pub truncated: bool,
}

/// Answers questions about the past; cheap to clone, one clone for each who asks.
#[derive(Clone, Debug)]
pub struct Reader {
    pool: Arc<Pool>,
}

#[derive(Debug)]
struct Pool {
    path: PathBuf,
    idle: Mutex<Vec<Connection>>,
}

impl Reader {
    /// Opens an existing history for reading.
    ///
    /// # Errors
    /// When there is none, or it is not ours, newer or damaged.
    pub fn open(path: &Path) -> Result<Reader, HistoryError> {
        let idle = Mutex::new(vec![open_for_reading(path)?]);
        Ok(Reader { pool: Arc::new(Pool { path: path.to_path_buf(), idle }) })
    }

    /// The end of the last report on the record; `None` when there is none yet.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn recorded_until(&self) -> Result<Option<Utc>, HistoryError> {
        self.ask(|snapshot| {
            let until_us: Option<i64> =
                snapshot.query_row("SELECT max(recorded_until_us) FROM progress", [], |row| {
                    row.get(0)
                })?;
            Ok(until_us.map(|us| Utc(us * 1_000)))
        })
    }

    /// The runs of a channel from `from` to the earlier of `to` and `now`, clipped to that range.
    ///
    /// The list covers the range without holes: time that is not on the record, before the first
    /// run, after the last commit, or between, is unknown and `not_observed`; so is the whole range
    /// for a name that the history has never seen. At most `limit` runs (1 or more), fillings
    /// included. Edges are taken in whole microseconds, rounded down.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn runs(
        &self,
        channel: &str,
        from: Utc,
        to: Utc,
        now: Utc,
        limit: usize,
    ) -> Result<RunList, HistoryError> {
        let (from_us, to_us) = (micros(from), micros(to.min(now)));
        if from_us >= to_us {
            return Ok(RunList { runs: Vec::new(), truncated: false });
        }
        let mut runs = self.ask(|snapshot| {
            let mut list = FilledList { runs: Vec::new(), until_us: from_us };
            for id in identities(snapshot, channel)? {
                // One more than asked for tells that there are more.
                overlapping(snapshot, id, from_us, to_us, |row| {
                    list.push(row);
                    list.runs.len() <= limit
                })?;
            }
            if list.runs.len() <= limit {
                list.fill(to_us);
            }
            Ok(list.runs)
        })?;
        let truncated = runs.len() > limit;
        runs.truncate(limit);
        Ok(RunList { runs, truncated })
    }

    /// Sums by steps of `step_us` (us) from `from` to the earlier of `to` and `now`, for the named
    /// channels in that order, or for all on the record by name. Steps begin at multiples of
    /// themselves in UTC.
    ///
    /// The four states of each column add up to its length; time that is not on the record is
    /// unknown. A column that the range or `now` cuts, or that is shorter than a quarter of an
    /// hour, is summed from its runs, not in proportion. Edges are taken in whole microseconds,
    /// rounded down.
    ///
    /// # Errors
    /// When the file cannot be read, or more is asked for than one answer may hold.
    ///
    /// # Panics
    /// If the step neither divides a quarter of an hour nor is a multiple of it.
    pub fn columns(
        &self,
        channels: Option<&[String]>,
        from: Utc,
        to: Utc,
        now: Utc,
        step_us: i64,
    ) -> Result<Vec<ChannelColumns>, HistoryError> {
        assert!(step_us > 0, "a step must have a length");
        assert!(QUARTER_US % step_us == 0 || step_us % QUARTER_US == 0, "{step_us} us: no step");
        let range = StepRange { from_us: micros(from), to_us: micros(to.min(now)), step_us };
        let names = match channels {
            Some(names) => names.to_vec(),
            None => self.ask(names)?,
        };
        let asked = range.count().saturating_mul(names.len() as i64);
        if asked > COLUMNS_MAX {
            return Err(HistoryError::TooMuch { asked, most: COLUMNS_MAX });
        }
        self.ask(|snapshot| {
            names
                .iter()
                .map(|name| {
                    let columns = channel_columns(snapshot, name, range)?;
                    Ok(ChannelColumns { channel: name.clone(), columns })
                })
                .collect()
        })
    }

    /// The end of the last detection on record within each of the given channels, `(centre,
    /// bandwidth)` (Hz), under whatever name and plan it was made; `None` where there is none.
    ///
    /// # Errors
    /// When the file cannot be read.
    pub fn last_detections(
        &self,
        channels: &[(f64, f64)],
    ) -> Result<Vec<Option<Utc>>, HistoryError> {
        self.ask(|snapshot| {
            let mut query = snapshot.prepare_cached(
                "SELECT max((SELECT end_us FROM run WHERE channel = channel.id AND state = ?3 \
                 ORDER BY start_us DESC LIMIT 1)) FROM channel \
                 WHERE abs(centre_hz - ?1) * 2 < bandwidth_hz + ?2",
            )?;
            channels
                .iter()
                .map(|(centre_hz, bandwidth_hz)| {
                    let asked = params![centre_hz, bandwidth_hz, RunState::Occupied as i64];
                    let end_us: Option<i64> = query.query_row(asked, |row| row.get(0))?;
                    Ok(end_us.map(|us| Utc(us * 1_000)))
                })
                .collect()
        })
    }

    /// Asks within one read transaction, so that all parts of an answer are of the same moment. A
    /// connection that has failed is not used again.
    fn ask<T>(
        &self,
        question: impl FnOnce(&Transaction<'_>) -> rusqlite::Result<T>,
    ) -> Result<T, HistoryError> {
        let path = &self.pool.path;
        let idle = || self.pool.idle.lock().unwrap_or_else(PoisonError::into_inner);
        let waiting = idle().pop();
        let mut connection = match waiting {
            Some(connection) => connection,
            None => open_for_reading(path)?,
        };
        let answer = connection
            .transaction()
            .and_then(|snapshot| question(&snapshot))
            .map_err(|error| HistoryError::from_sqlite(path, &error))?;
        let mut idle = idle();
        if idle.len() < IDLE_CONNECTIONS_MAX {
            idle.push(connection);
        }
        Ok(answer)
    }
}

/// Runs in order of time, holes filled.
struct FilledList {
    runs: Vec<RunRow>,
    until_us: i64,
}

impl FilledList {
    fn push(&mut self, row: RunRow) {
        self.fill(micros(row.start));
        self.until_us = micros(row.end);
        self.append(row);
    }

    /// Fills up to `until_us` with time that is not on the record.
    fn fill(&mut self, until_us: i64) {
        if self.until_us < until_us {
            self.append(RunRow::hole(self.until_us, until_us));
            self.until_us = until_us;
        }
    }

    /// Adds a run; holes that touch become one, whether they are on the record or not.
    fn append(&mut self, row: RunRow) {
        let hole = |row: &RunRow| {
            row.state == RunState::Unknown && row.reasons == Reasons::one(Reason::NotObserved)
        };
        match self.runs.last_mut() {
            Some(last) if hole(last) && hole(&row) => {
                last.end = row.end;
                last.observed_us += row.observed_us;
            }
            _ => self.runs.push(row),
        }
    }
}

/// The names of all channels on the record.
fn names(snapshot: &Transaction<'_>) -> rusqlite::Result<Vec<String>> {
    let mut query = snapshot.prepare_cached("SELECT DISTINCT name FROM channel ORDER BY name")?;
    query.query_map([], |row| row.get(0))?.collect()
}

/// The identities that a name has had, by time. Their records never overlap.
pub(super) fn identities(snapshot: &Transaction<'_>, name: &str) -> rusqlite::Result<Vec<i64>> {
    let mut query = snapshot
        .prepare_cached("SELECT id FROM channel WHERE name = ?1 ORDER BY valid_from_us, id")?;
    query.query_map([name], |row| row.get(0))?.collect()
}

/// Hands on the runs of one identity that overlap a range, clipped to it, for as long as `take`
/// says that it wants more.
pub(super) fn overlapping(
    snapshot: &Transaction<'_>,
    id: i64,
    from_us: i64,
    to_us: i64,
    mut take: impl FnMut(RunRow) -> bool,
) -> rusqlite::Result<()> {
    // Runs do not overlap, so only the last one that starts before the range can reach into it.
    let mut query = snapshot.prepare_cached(
        "SELECT start_us, end_us, state, reasons, power_mean_db, power_max_db, level_ref, \
         observed_us FROM run JOIN configuration ON configuration.id = run.configuration \
         WHERE channel = ?1 AND start_us < ?3 AND end_us > ?2 AND start_us >= coalesce( \
         (SELECT max(start_us) FROM run WHERE channel = ?1 AND start_us <= ?2), ?2) \
         ORDER BY start_us",
    )?;
    let mut rows = query.query(params![id, from_us, to_us])?;
    while let Some(row) = rows.next()? {
        if !take(clipped(row, from_us, to_us)?) {
            break;
        }
    }
    Ok(())
}

fn clipped(row: &Row<'_>, from_us: i64, to_us: i64) -> rusqlite::Result<RunRow> {
    let (start_us, end_us): (i64, i64) = (row.get(0)?, row.get(1)?);
    let (clipped_start_us, clipped_end_us) = (start_us.max(from_us), end_us.min(to_us));
    let observed_us: i64 = row.get(7)?;
    let until = |us: i64| portion(observed_us, us - start_us, end_us - start_us);
    Ok(RunRow {
        start: Utc(clipped_start_us * 1_000),
        end: Utc(clipped_end_us * 1_000),
        state: RunState::from_code(row.get(2)?),
        reasons: Reasons::from_bits(row.get(3)?),
        power_mean_db: row.get(4)?,
        power_max_db: row.get(5)?,
        level_ref: row.get(6)?,
        observed_us: until(clipped_end_us) - until(clipped_start_us),
    })
}
