//! Sums of time in columns of one step, from rollups and runs.
//!
//! It must never leave a hole or fill one with anything but unknown, and never share a run out in
//! proportion where its edges are known.

use rusqlite::{Transaction, params};

use super::reader::{identities, overlapping};
use super::runs::{QUARTER_US, Sums, micros, portion, quarter_start};
use crate::detection::time::Utc;

/// One channel's sums over one step of time, or over the part of it that was asked for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Column {
    /// Begin.
    pub start: Utc,
    /// End (half-open).
    pub end: Utc,
    /// What the time was; the four states add up to `end - start`.
    pub sums: Sums,
}

/// One channel's columns over a range, without holes or overlaps.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ChannelColumns {
    /// Name of the channel.
    pub channel: String,
    /// By rising time.
    pub columns: Vec<Column>,
}

/// A half-open range (us), and the step by which it is told.
#[derive(Clone, Copy)]
pub(super) struct StepRange {
    pub(super) from_us: i64,
    pub(super) to_us: i64,
    pub(super) step_us: i64,
}

impl StepRange {
    /// Number of the step that holds a moment.
    fn step_of(self, us: i64) -> i64 {
        us.div_euclid(self.step_us)
    }

    /// Steps that the range touches.
    pub(super) fn count(self) -> i64 {
        if self.from_us >= self.to_us {
            return 0;
        }
        self.step_of(self.to_us - 1) - self.step_of(self.from_us) + 1
    }

    /// The sums of the column that holds a moment of the range.
    fn sums_at(self, columns: &mut [Column], us: i64) -> &mut Sums {
        &mut columns[(self.step_of(us) - self.step_of(self.from_us)) as usize].sums
    }

    /// Its columns, with nothing in them yet.
    fn columns(self) -> Vec<Column> {
        let first = self.step_of(self.from_us);
        let column = |index: i64| Column {
            start: Utc((index * self.step_us).max(self.from_us) * 1_000),
            end: Utc(((index + 1) * self.step_us).min(self.to_us) * 1_000),
            sums: Sums::default(),
        };
        (first..first + self.count()).map(column).collect()
    }
}

/// One channel's columns: from the rollups what they can tell, from the runs what they cannot.
pub(super) fn channel_columns(
    snapshot: &Transaction<'_>,
    name: &str,
    range: StepRange,
) -> rusqlite::Result<Vec<Column>> {
    let mut columns = range.columns();
    let StepRange { from_us, to_us, step_us } = range;
    // The quarters that lie wholly in the range.
    let (first_us, last_us) = (quarter_start(from_us + QUARTER_US - 1), quarter_start(to_us));
    for id in identities(snapshot, name)? {
        if step_us % QUARTER_US == 0 && first_us < last_us {
            add_runs(snapshot, id, (from_us, first_us), range, &mut columns)?;
            add_rollups(snapshot, id, (first_us, last_us), range, &mut columns)?;
            add_runs(snapshot, id, (last_us, to_us), range, &mut columns)?;
        } else {
            add_runs(snapshot, id, (from_us, to_us), range, &mut columns)?;
        }
    }
    for Column { start, end, sums } in &mut columns {
        // Whatever is not on the record is unknown.
        let length_us = micros(*end) - micros(*start);
        sums.unknown_us += (length_us - sums.represented_us()).max(0);
    }
    Ok(columns)
}

/// Adds one identity's runs in a part of the range, split exactly at the steps.
fn add_runs(
    snapshot: &Transaction<'_>,
    id: i64,
    (from_us, to_us): (i64, i64),
    range: StepRange,
    columns: &mut [Column],
) -> rusqlite::Result<()> {
    if from_us >= to_us {
        return Ok(());
    }
    overlapping(snapshot, id, from_us, to_us, |run| {
        let (start_us, end_us) = (micros(run.start), micros(run.end));
        let observed = |us: i64| portion(run.observed_us, us - start_us, end_us - start_us);
        let mut at_us = start_us;
        while at_us < end_us {
            let until_us = end_us.min((range.step_of(at_us) + 1) * range.step_us);
            let observed_us = observed(until_us) - observed(at_us);
            range.sums_at(columns, at_us).add(run.state, until_us - at_us, observed_us);
            at_us = until_us;
        }
        true
    })
}

/// Adds one identity's rollups of the quarters in a part of the range.
fn add_rollups(
    snapshot: &Transaction<'_>,
    id: i64,
    (from_us, to_us): (i64, i64),
    range: StepRange,
    columns: &mut [Column],
) -> rusqlite::Result<()> {
    let mut query = snapshot.prepare_cached(
        "SELECT start_us, occupied_us, idle_us, unknown_us, own_us, observed_us FROM quarter \
         WHERE channel = ?1 AND start_us >= ?2 AND start_us < ?3",
    )?;
    let mut rows = query.query(params![id, from_us, to_us])?;
    while let Some(row) = rows.next()? {
        let sums = range.sums_at(columns, row.get(0)?);
        sums.occupied_us += row.get::<_, i64>(1)?;
        sums.idle_us += row.get::<_, i64>(2)?;
        sums.unknown_us += row.get::<_, i64>(3)?;
        sums.own_us += row.get::<_, i64>(4)?;
        sums.observed_us += row.get::<_, i64>(5)?;
    }
    Ok(())
}
