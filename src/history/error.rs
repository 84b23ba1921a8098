//! What can go wrong with a history, each in one line that names the path and what to do.

use std::fmt;
use std::path::{Path, PathBuf};

use rusqlite::ErrorCode;

/// Why a history cannot be opened, written or read.
#[derive(Debug)]
pub enum HistoryError {
    /// The file or its directory cannot be opened or written.
    Inaccessible {
        /// The file that was tried.
        path: PathBuf,
        /// What the system said.
        detail: String,
    },
    /// A newer program wrote the file.
    NewerVersion {
        /// The file.
        path: PathBuf,
        /// The file's version.
        found: i64,
        /// The newest version that this program knows.
        known: i64,
    },
    /// The file is something else.
    NotOurs {
        /// The file.
        path: PathBuf,
    },
    /// The file is the history of another node.
    OtherNode {
        /// The file.
        path: PathBuf,
        /// The site that the file names.
        site: String,
        /// The node that the file names.
        node: String,
    },
    /// The file is damaged.
    Corrupt {
        /// The file.
        path: PathBuf,
        /// What SQLite said.
        detail: String,
    },
    /// Another running node writes the file.
    Locked {
        /// The file.
        path: PathBuf,
    },
    /// Another program holds the database for longer than we wait.
    Busy {
        /// The file.
        path: PathBuf,
    },
    /// No space is left on the disk, or the file has reached its allowed size.
    Full {
        /// The file.
        path: PathBuf,
    },
    /// A question with more answers than we are willing to hold in memory.
    TooMuch {
        /// Columns times channels that were asked for.
        asked: i64,
        /// The most that one question may ask for.
        most: i64,
    },
    /// Anything else that SQLite reports.
    Database {
        /// The file.
        path: PathBuf,
        /// What SQLite said.
        detail: String,
    },
}

impl HistoryError {
    /// The error that a failed SQLite call on `path` stands for.
    pub(super) fn from_sqlite(path: &Path, error: &rusqlite::Error) -> HistoryError {
        let path = path.to_path_buf();
        let detail = error.to_string();
        match error.sqlite_error_code() {
            Some(ErrorCode::DatabaseCorrupt | ErrorCode::NotADatabase) => {
                HistoryError::Corrupt { path, detail }
            }
            Some(ErrorCode::DiskFull) => HistoryError::Full { path },
            Some(ErrorCode::DatabaseBusy | ErrorCode::DatabaseLocked) => {
                HistoryError::Busy { path }
            }
            Some(ErrorCode::CannotOpen | ErrorCode::ReadOnly | ErrorCode::PermissionDenied) => {
                HistoryError::Inaccessible { path, detail }
            }
            _ => HistoryError::Database { path, detail },
        }
    }
}

impl fmt::Display for HistoryError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            HistoryError::Inaccessible { path, detail } => write!(
                f,
                "history {}: cannot be written ({detail}): its directory must exist and be \
                 writable by the user that runs the node, or choose another path",
                path.display()
            ),
            HistoryError::NewerVersion { path, found, known } => write!(
                f,
                "history {}: has version {found}, this program knows up to {known}: run the newer \
                 program, or choose another path; the file was left untouched",
                path.display()
            ),
            HistoryError::NotOurs { path } => write!(
                f,
                "history {}: is not a fallowband history: choose another path; the file was left \
                 untouched",
                path.display()
            ),
            HistoryError::OtherNode { path, site, node } => write!(
                f,
                "history {}: belongs to node \"{node}\" at site \"{site}\": correct the names in \
                 the configuration, or choose another path; the file was left untouched",
                path.display()
            ),
            HistoryError::Corrupt { path, detail } => write!(
                f,
                "history {}: is damaged ({detail}): move it aside with its -wal file, and a new \
                 one is begun",
                path.display()
            ),
            HistoryError::Locked { path } => write!(
                f,
                "history {}: another running node writes it: stop that node, or choose another \
                 path",
                path.display()
            ),
            HistoryError::Busy { path } => write!(
                f,
                "history {}: another program holds the database: close that program",
                path.display()
            ),
            HistoryError::Full { path } => write!(
                f,
                "history {}: no space is left on its disk, or the file has reached its allowed \
                 size: free some space",
                path.display()
            ),
            HistoryError::TooMuch { asked, most } => write!(
                f,
                "history: {asked} columns were asked for, at most {most} at once: ask \
                 for a shorter range or fewer channels"
            ),
            HistoryError::Database { path, detail } => {
                write!(f, "history {}: {detail}", path.display())
            }
        }
    }
}

impl std::error::Error for HistoryError {}
