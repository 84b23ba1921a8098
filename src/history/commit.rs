//! One commit: what the keeper holds goes on the record in one transaction, or not at all.
//!
//! Open runs are rows too: each commit moves their end in place. Quarter sums get exactly what the
//! runs got, in the same transaction, so that the two can never disagree. Identities
//! (configuration, channels) are written with the first commit that needs them: opening writes
//! nothing, so that a full disk at start does not keep the node from running.

use std::path::Path;
use std::time::Duration;

use rusqlite::{OptionalExtension, Transaction, TransactionBehavior, params};
use sha2::{Digest, Sha256};

use super::file::HistoryFile;
use super::runs::{Run, RunKeeper};
use super::{HistoryError, Identity};
use crate::detection::plan::Plan;

/// What makes a channel the same channel as before.
#[derive(Clone, Debug, PartialEq)]
struct ChannelKey {
    name: String,
    band: String,
    centre_hz: f64,
    bandwidth_hz: f64,
}

#[derive(Debug)]
struct Configuration {
    sha256: String,
    text: String,
    program_version: String,
    level_ref: &'static str,
}

/// The rows that runs point to; an id is `None` until it is on the record.
#[derive(Clone, Debug)]
struct Ids {
    configuration: Option<i64>,
    channels: Vec<Option<i64>>,
    /// Identities in force that the plan no longer has.
    superseded: Vec<i64>,
}

/// The open file, and what is known of the rows in it.
#[derive(Debug)]
pub(super) struct Recorder {
    pub(super) file: HistoryFile,
    configuration: Configuration,
    channels: Vec<ChannelKey>,
    ids: Ids,
}

impl Recorder {
    /// Opens the file; also returns where each channel's record ends (us).
    pub(super) fn open(
        path: &Path,
        identity: &Identity,
        plan: &Plan,
        busy_wait: Duration,
    ) -> Result<(Recorder, Vec<Option<i64>>), HistoryError> {
        let file = HistoryFile::open(path, identity, busy_wait)?;
        let digest = Sha256::digest(identity.configuration_text.as_bytes());
        let configuration = Configuration {
            sha256: digest.iter().map(|byte| format!("{byte:02x}")).collect(),
            text: identity.configuration_text.clone(),
            program_version: identity.program_version.clone(),
            level_ref: plan.level_ref.as_str(),
        };
        let key = |channel: &crate::detection::plan::Channel| ChannelKey {
            name: channel.id.clone(),
            band: plan.band_of(channel).id.clone(),
            centre_hz: channel.centre_hz,
            bandwidth_hz: channel.bandwidth_hz,
        };
        let channels: Vec<ChannelKey> = plan.channels.iter().map(key).collect();
        let (ids, ends_us) = known(&file, &configuration, &channels)
            .map_err(|error| HistoryError::from_sqlite(path, &error))?;
        Ok((Recorder { file, configuration, channels, ids }, ends_us))
    }

    /// Puts all that is pending on the record. After an error nothing of it is.
    pub(super) fn commit(&mut self, keeper: &RunKeeper) -> rusqlite::Result<()> {
        let (Some(first_us), Some(until_us)) =
            (keeper.first_start_us(), keeper.recorded_until_us())
        else {
            return Ok(());
        };
        let mut ids = self.ids.clone();
        let transaction =
            self.file.connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
        for id in std::mem::take(&mut ids.superseded) {
            supersede(&transaction, id)?;
        }
        let configuration = match ids.configuration {
            Some(id) => id,
            None => add_configuration(&transaction, &self.configuration, first_us)?,
        };
        ids.configuration = Some(configuration);
        for run in keeper.pending() {
            let id = &mut ids.channels[run.channel_index];
            let channel = match *id {
                Some(channel) => channel,
                None => {
                    let key = &self.channels[run.channel_index];
                    *id.insert(add_channel(&transaction, key, run.start_us)?)
                }
            };
            put_run(&transaction, channel, configuration, run)?;
        }
        transaction.execute(
            "UPDATE site SET first_report_us = ?1 WHERE first_report_us IS NULL",
            [first_us],
        )?;
        transaction.execute(
            "INSERT INTO progress (one, recorded_until_us) VALUES (1, ?1) ON CONFLICT (one) \
             DO UPDATE SET recorded_until_us = max(recorded_until_us, excluded.recorded_until_us)",
            [until_us],
        )?;
        transaction.commit()?;
        self.ids = ids;
        Ok(())
    }
}

/// The identities that the file has already, and where each channel's record ends (us).
fn known(
    file: &HistoryFile,
    configuration: &Configuration,
    channels: &[ChannelKey],
) -> rusqlite::Result<(Ids, Vec<Option<i64>>)> {
    let connection = &file.connection;
    let mut ids = Ids {
        configuration: connection
            .query_row(
                "SELECT id FROM configuration WHERE sha256 = ?1 AND program_version = ?2",
                params![configuration.sha256, configuration.program_version],
                |row| row.get(0),
            )
            .optional()?,
        channels: vec![None; channels.len()],
        superseded: Vec::new(),
    };
    let mut in_force = connection.prepare(
        "SELECT id, name, band, centre_hz, bandwidth_hz FROM channel WHERE valid_to_us IS NULL",
    )?;
    let mut rows = in_force.query([])?;
    while let Some(row) = rows.next()? {
        let key = ChannelKey {
            name: row.get(1)?,
            band: row.get(2)?,
            centre_hz: row.get(3)?,
            bandwidth_hz: row.get(4)?,
        };
        match channels.iter().position(|channel| *channel == key) {
            Some(index) => ids.channels[index] = Some(row.get(0)?),
            None => ids.superseded.push(row.get(0)?),
        }
    }
    // By name, not by identity: a new identity takes the name's line up where the old one left it,
    // or a clock that had gone back in between would make the same time count twice.
    let mut ends = connection.prepare(
        "SELECT max((SELECT end_us FROM run WHERE channel = channel.id \
         ORDER BY start_us DESC LIMIT 1)) FROM channel WHERE name = ?1",
    )?;
    let ends_us: rusqlite::Result<Vec<Option<i64>>> =
        channels.iter().map(|key| ends.query_row([&key.name], |row| row.get(0))).collect();
    Ok((ids, ends_us?))
}

/// Closes an identity at the end of its record.
fn supersede(transaction: &Transaction<'_>, id: i64) -> rusqlite::Result<()> {
    transaction.execute(
        "UPDATE channel SET valid_to_us = coalesce((SELECT end_us FROM run WHERE channel = ?1 \
         ORDER BY start_us DESC LIMIT 1), valid_from_us) WHERE id = ?1",
        [id],
    )?;
    Ok(())
}

fn add_configuration(
    transaction: &Transaction<'_>,
    configuration: &Configuration,
    first_used_us: i64,
) -> rusqlite::Result<i64> {
    transaction.execute(
        "INSERT INTO configuration (sha256, text, program_version, level_ref, first_used_us) \
         VALUES (?1, ?2, ?3, ?4, ?5)",
        params![
            configuration.sha256,
            configuration.text,
            configuration.program_version,
            configuration.level_ref,
            first_used_us,
        ],
    )?;
    Ok(transaction.last_insert_rowid())
}

fn add_channel(
    transaction: &Transaction<'_>,
    key: &ChannelKey,
    valid_from_us: i64,
) -> rusqlite::Result<i64> {
    transaction.execute(
        "INSERT INTO channel (name, band, centre_hz, bandwidth_hz, valid_from_us) \
         VALUES (?1, ?2, ?3, ?4, ?5)",
        params![key.name, key.band, key.centre_hz, key.bandwidth_hz, valid_from_us],
    )?;
    Ok(transaction.last_insert_rowid())
}

/// Writes a run, or moves the end of the row it has, and adds what is new of it to its quarters.
fn put_run(
    transaction: &Transaction<'_>,
    channel: i64,
    configuration: i64,
    run: &Run,
) -> rusqlite::Result<()> {
    let mut put = transaction.prepare_cached(
        "INSERT INTO run (channel, start_us, end_us, state, reasons, power_mean_db, power_max_db, \
         observed_us, configuration) VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9) \
         ON CONFLICT (channel, start_us) DO UPDATE SET end_us = excluded.end_us, \
         reasons = excluded.reasons, power_mean_db = excluded.power_mean_db, \
         power_max_db = excluded.power_max_db, observed_us = excluded.observed_us",
    )?;
    put.execute(params![
        channel,
        run.start_us,
        run.end_us,
        run.state as i64,
        run.reasons.bits(),
        run.power_mean_db(),
        run.power_max_db(),
        run.observed_us,
        configuration,
    ])?;
    let mut add = transaction.prepare_cached(
        "INSERT INTO quarter (channel, start_us, occupied_us, idle_us, unknown_us, own_us, \
         observed_us) VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7) \
         ON CONFLICT (channel, start_us) DO UPDATE SET \
         occupied_us = occupied_us + excluded.occupied_us, idle_us = idle_us + excluded.idle_us, \
         unknown_us = unknown_us + excluded.unknown_us, own_us = own_us + excluded.own_us, \
         observed_us = observed_us + excluded.observed_us",
    )?;
    for (start_us, sums) in run.unrecorded_quarters() {
        add.execute(params![
            channel,
            start_us,
            sums.occupied_us,
            sums.idle_us,
            sums.unknown_us,
            sums.own_us,
            sums.observed_us,
        ])?;
    }
    Ok(())
}
