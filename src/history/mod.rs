//! The history room: runs and rollups in one SQLite file, written by one thread.
//!
//! ```text
//! DwellReport ─▶ Writer::offer ─▶ bounded queue ─▶ RunKeeper ─▶ one transaction per interval
//! Reader (own read-only connections) ◀── what was committed, and nothing else
//! ```
//!
//! What it must never do: make the caller wait, turn `unknown` into `idle`, count a stretch twice,
//! edit what is on the record, or touch a file that is not ours. Time comes in with the reports;
//! the only clock read here is the monotonic one that says when the next commit is due.

mod columns;
mod commit;
mod error;
mod file;
mod health;
mod reader;
mod runs;
mod writer;

use std::path::Path;
use std::time::Duration;

use crate::detection::plan::Plan;

pub use columns::{ChannelColumns, Column};
pub use error::HistoryError;
pub use health::{HealthView, HistoryHealth, HistoryState};
pub use reader::{Reader, RunList, RunRow};
pub use runs::{QUARTER_US, Run, RunKeeper, RunState, Sums, TOLERANCE_US};
pub use writer::Writer;

/// Whose history it is, and what made it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Identity {
    /// Name of the site.
    pub site: String,
    /// Name of the node at that site.
    pub node: String,
    /// Version of the program that writes.
    pub program_version: String,
    /// The configuration file's text, kept word for word with the history it made.
    pub configuration_text: String,
}

/// What a row of a run takes in the file, its share of the interior pages included (bytes);
/// measured by `a_row_takes_the_space_that_is_stated`.
pub const RUN_ROW_BYTES: f64 = 47.0;

/// What a row of a quarter hour takes in the file (bytes); measured likewise.
pub const QUARTER_ROW_BYTES: f64 = 37.0;

/// Quarter hours in a day.
pub fn quarters_per_day() -> f64 {
    86_400e6 / QUARTER_US as f64
}

/// How the history is written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Options {
    /// Wall time between commits: what a power cut can lose (default 10 s).
    pub commit_interval: Duration,
    /// Reports that may wait for the writer (1 or more, default 256). At ten reports a second that
    /// bridges 25 s of a stalled disk; what comes on top is dropped, counted, and unknown.
    pub queue_depth: usize,
    /// Closed runs that are kept in memory while they cannot be written (1 or more, default
    /// 100,000: some 12 MB, and three hours of 500 channels at 9 changes a second). Beyond it the
    /// oldest are dropped, counted, and their time is unknown.
    pub waiting_runs_max: usize,
    /// Size that the database may take (bytes), `None` for all that the disk has (default). At the
    /// limit the history stops and says so, as on a full disk.
    pub file_bytes_max: Option<u64>,
}

impl Default for Options {
    fn default() -> Options {
        Options {
            commit_interval: Duration::from_secs(10),
            queue_depth: 256,
            waiting_runs_max: 100_000,
            file_bytes_max: None,
        }
    }
}

/// An open history: the parts that its users take away.
#[derive(Debug)]
pub struct History {
    /// Takes reports; owned by whoever makes them.
    pub writer: Writer,
    /// Answers questions; cheap to clone, one for each who asks.
    pub reader: Reader,
    /// The state of the writing, as plain data; cheap to clone.
    pub health: HealthView,
}

impl History {
    /// Opens the history at `path`, creates it where there is none, and starts its writer thread.
    ///
    /// A channel of `plan` continues its identity when name, band, centre and bandwidth are the
    /// same as before; else it gets a new one, and the older history stays as it was. The time
    /// since a channel was last recorded becomes unknown with its first report.
    ///
    /// # Errors
    /// One line with the path and what to do; a file that is refused is left byte for byte as it
    /// was.
    pub fn open(
        path: &Path,
        identity: &Identity,
        plan: &Plan,
        options: Options,
    ) -> Result<History, HistoryError> {
        let (writer, health) = Writer::open(path, identity, plan, options)?;
        Ok(History { writer, reader: Reader::open(path)?, health })
    }
}
