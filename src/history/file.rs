//! The file itself: whose it is, who may write it, and its schema.
//!
//! A file is looked at before anything may write to it: first its header as plain bytes, then
//! through a read-only connection. What is refused is left untouched.

use std::fs::{File, TryLockError};
use std::io::{ErrorKind, Read};
use std::path::{Path, PathBuf};
use std::time::Duration;

use rusqlite::{Connection, OpenFlags, TransactionBehavior, params};

use super::{HistoryError, Identity};

/// Marks a SQLite file as a fallowband history (header offset 68): the letters `fbhi`.
const APPLICATION_ID: i32 = i32::from_be_bytes(*b"fbhi");

/// Steps of the schema, forward only; the file's version is how many of them it has had.
const MIGRATIONS: [&str; 1] = [include_str!("../../migrations/0001_first_light.sql")];

/// 4096 is right: 2048 saved 17 % of flash wear in our trials, 8192 and more cost a lot.
const PAGE_BYTES: u64 = 4096;

/// What the log may keep on disk once it has been copied back (bytes).
const LOG_BYTES_MAX: i64 = 16 << 20;

/// The one writing connection, and the lock that keeps it the only one.
#[derive(Debug)]
pub(super) struct HistoryFile {
    pub(super) path: PathBuf,
    pub(super) connection: Connection,
    /// Held open for as long as we write; the system frees it when the process dies.
    _lock: File,
}

impl HistoryFile {
    /// Opens the file for writing, creates it where there is none, and brings its schema up to
    /// date.
    pub(super) fn open(
        path: &Path,
        identity: &Identity,
        busy_wait: Duration,
    ) -> Result<HistoryFile, HistoryError> {
        let header_version = look(path)?;
        let lock = lock(path)?;
        // A file of version 0 without a log has nothing to read yet: its making was cut short.
        if header_version.is_some_and(|version| version > 0 || beside(path, "-wal").exists()) {
            inspect(path, identity)?;
        }
        let sqlite = |error: rusqlite::Error| HistoryError::from_sqlite(path, &error);
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE
            | OpenFlags::SQLITE_OPEN_CREATE
            | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let mut connection = Connection::open_with_flags(path, flags).map_err(sqlite)?;
        connection.busy_timeout(busy_wait).map_err(sqlite)?;
        prepare(&mut connection, identity).map_err(sqlite)?;
        Ok(HistoryFile { path: path.to_path_buf(), connection, _lock: lock })
    }

    /// Sets the size that the database may take (bytes); `None` for no limit of ours.
    pub(super) fn limit_bytes(&self, bytes: Option<u64>) -> rusqlite::Result<()> {
        // 4294967294 pages is SQLite's own limit.
        let pages = bytes.map_or(4_294_967_294, |bytes| (bytes / PAGE_BYTES).max(1) as i64);
        self.connection.pragma_update_and_check(None, "max_page_count", pages, |_| Ok(()))
    }

    /// Brings the log into the file before we leave, so that whoever copies the file has it all.
    /// Nothing is lost if that fails: the log stays, and the next opening reads it.
    pub(super) fn fold_log(&self) {
        if let Err(error) = checkpoint(&self.connection) {
            tracing::warn!("history {}: its log stays beside it: {error}", self.path.display());
        }
    }

    /// Size of the database and its log on disk (bytes).
    pub(super) fn bytes(&self) -> u64 {
        let length = |path: &Path| path.metadata().map_or(0, |metadata| metadata.len());
        length(&self.path) + length(&beside(&self.path, "-wal"))
    }
}

/// Opens a read-only connection to a history that is there.
pub(super) fn open_for_reading(path: &Path) -> Result<Connection, HistoryError> {
    if look(path)?.is_none() {
        let detail = "there is no history yet".to_owned();
        return Err(HistoryError::Inaccessible { path: path.to_path_buf(), detail });
    }
    let connection = read_only(path)?;
    refuse_newer(path, version(path, &connection)?)?;
    Ok(connection)
}

fn read_only(path: &Path) -> Result<Connection, HistoryError> {
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    let connection = Connection::open_with_flags(path, flags)
        .map_err(|error| HistoryError::from_sqlite(path, &error))?;
    // In WAL mode a reader only ever waits for a recovery or the end of the last connection.
    connection
        .busy_timeout(Duration::from_secs(1))
        .map_err(|error| HistoryError::from_sqlite(path, &error))?;
    Ok(connection)
}

/// Reads the version from the header without SQLite; `None` when there is no history. Offsets: the
/// SQLite file format's description, section 1.3.
fn look(path: &Path) -> Result<Option<i64>, HistoryError> {
    let inaccessible = |error: std::io::Error| HistoryError::Inaccessible {
        path: path.to_path_buf(),
        detail: error.to_string(),
    };
    let mut file = match File::open(path) {
        Ok(file) => file,
        Err(error) if error.kind() == ErrorKind::NotFound => return Ok(None),
        Err(error) => return Err(inaccessible(error)),
    };
    if file.metadata().map_err(inaccessible)?.len() == 0 {
        return Ok(None);
    }
    let mut header = [0; 100];
    match file.read_exact(&mut header) {
        Err(error) if error.kind() != ErrorKind::UnexpectedEof => return Err(inaccessible(error)),
        _ => {}
    }
    let number = |at: usize| {
        i32::from_be_bytes([header[at], header[at + 1], header[at + 2], header[at + 3]])
    };
    if !header.starts_with(b"SQLite format 3\0") || number(68) != APPLICATION_ID {
        return Err(HistoryError::NotOurs { path: path.to_path_buf() });
    }
    let version = i64::from(number(60));
    refuse_newer(path, version)?;
    Ok(Some(version))
}

/// Asks SQLite, without the right to write, for what the header cannot tell: a newer version that
/// still stands in the log, and whose history it is. Another node's is not continued.
fn inspect(path: &Path, identity: &Identity) -> Result<(), HistoryError> {
    let connection = read_only(path)?;
    let version = version(path, &connection)?;
    refuse_newer(path, version)?;
    if version == 0 {
        return Ok(());
    }
    let (site, node): (String, String) = connection
        .query_row("SELECT site, node FROM site", [], |row| Ok((row.get(0)?, row.get(1)?)))
        .map_err(|error| HistoryError::from_sqlite(path, &error))?;
    if site != identity.site || node != identity.node {
        return Err(HistoryError::OtherNode { path: path.to_path_buf(), site, node });
    }
    Ok(())
}

fn version(path: &Path, connection: &Connection) -> Result<i64, HistoryError> {
    connection
        .pragma_query_value(None, "user_version", |row| row.get(0))
        .map_err(|error| HistoryError::from_sqlite(path, &error))
}

fn refuse_newer(path: &Path, found: i64) -> Result<(), HistoryError> {
    let known = MIGRATIONS.len() as i64;
    if found > known {
        return Err(HistoryError::NewerVersion { path: path.to_path_buf(), found, known });
    }
    Ok(())
}

/// Takes the advisory lock beside the file. The lock file stays behind: to delete it would let two
/// nodes each hold a lock on a file of that name.
fn lock(path: &Path) -> Result<File, HistoryError> {
    let inaccessible = |error: std::io::Error| HistoryError::Inaccessible {
        path: path.to_path_buf(),
        detail: error.to_string(),
    };
    let lock = File::options()
        .create(true)
        .truncate(false)
        .write(true)
        .open(beside(path, ".lock"))
        .map_err(inaccessible)?;
    match lock.try_lock() {
        Ok(()) => Ok(lock),
        Err(TryLockError::WouldBlock) => Err(HistoryError::Locked { path: path.to_path_buf() }),
        Err(TryLockError::Error(error)) => Err(inaccessible(error)),
    }
}

/// The path with `ending` appended to the file's name.
fn beside(path: &Path, ending: &str) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(ending);
    PathBuf::from(name)
}

/// Sets what holds for the file and the connection, and runs the migrations that are missing.
fn prepare(connection: &mut Connection, identity: &Identity) -> rusqlite::Result<()> {
    let found: i64 = connection.pragma_query_value(None, "user_version", |row| row.get(0))?;
    if found == 0 {
        // Before the log is switched on, so that the mark stands in the file whatever happens next.
        connection.pragma_update(None, "page_size", PAGE_BYTES as i64)?;
        connection.pragma_update(None, "application_id", APPLICATION_ID)?;
    }
    // Readers never wait for the writer in WAL mode. FULL, not NORMAL: in our power-cut trials
    // NORMAL lost minutes to hours of acknowledged data, FULL lost none.
    connection.pragma_update_and_check(None, "journal_mode", "WAL", |_| Ok(()))?;
    connection.pragma_update(None, "synchronous", "FULL")?;
    connection.pragma_update_and_check(None, "journal_size_limit", LOG_BYTES_MAX, |_| Ok(()))?;
    connection.pragma_update(None, "foreign_keys", true)?;
    for (index, migration) in MIGRATIONS.iter().enumerate().skip(found as usize) {
        let transaction = connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
        transaction.execute_batch(migration)?;
        if index == 0 {
            transaction.execute(
                "INSERT INTO site (one, site, node) VALUES (1, ?1, ?2)",
                params![identity.site, identity.node],
            )?;
        }
        transaction.pragma_update(None, "user_version", index as i64 + 1)?;
        transaction.commit()?;
    }
    if (found as usize) < MIGRATIONS.len() {
        // Brings the new version into the header, where a look without SQLite finds it.
        checkpoint(connection)?;
    }
    Ok(())
}

/// Copies the log back into the file and empties it, unless someone is reading from it.
fn checkpoint(connection: &Connection) -> rusqlite::Result<()> {
    connection.query_row("PRAGMA wal_checkpoint(TRUNCATE)", [], |_| Ok(()))
}
