//! The state of the history as plain data, for anyone who watches over the node.
//!
//! Reading it never waits for the disk: the lock is held for a copy, never over a commit.

use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::time::{Duration, Instant};

use crate::detection::time::Utc;

/// Whether history is being written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum HistoryState {
    /// The last commit succeeded, or none was due yet.
    Writing,
    /// The last commit failed, or the writer has ended. The message says why.
    Stopped,
}

impl HistoryState {
    /// The word used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            HistoryState::Writing => "writing",
            HistoryState::Stopped => "stopped",
        }
    }
}

/// How the writing of history fares.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct HistoryHealth {
    /// Whether history is being written.
    pub state: HistoryState,
    /// Why it is stopped, or that it had been; one line.
    pub message: Option<String>,
    /// Time since the last commit; `None` before the first.
    pub last_commit_age: Option<Duration>,
    /// End of the last report on the record; `None` before the first commit of this session.
    pub recorded_until: Option<Utc>,
    /// Commits of this session.
    pub commits: u64,
    /// Commits that failed; what they held is tried again.
    pub failed_commits: u64,
    /// Reports that found the queue full, or the writer gone; their time is unknown.
    pub dropped_reports: u64,
    /// Closed runs that were dropped because they waited in too great a number; unknown too.
    pub dropped_runs: u64,
    /// Closed runs that wait for the next commit, as of the last try.
    pub waiting_runs: u64,
    /// Reports that began before the record's end (UTC had gone back); the overlap was left out.
    pub clipped_reports: u64,
    /// Size of the database and its log on disk (bytes), as of the last commit.
    pub file_bytes: u64,
}

/// A view of the health that can be handed out.
#[derive(Clone, Debug)]
pub struct HealthView {
    shared: Arc<Shared>,
}

#[derive(Debug)]
struct Shared {
    health: Mutex<(HistoryHealth, Option<Instant>)>,
    dropped_reports: AtomicU64,
}

impl HealthView {
    /// The health before the first commit.
    pub(super) fn new(file_bytes: u64) -> HealthView {
        let health = HistoryHealth {
            state: HistoryState::Writing,
            message: None,
            last_commit_age: None,
            recorded_until: None,
            commits: 0,
            failed_commits: 0,
            dropped_reports: 0,
            dropped_runs: 0,
            waiting_runs: 0,
            clipped_reports: 0,
            file_bytes,
        };
        let shared =
            Shared { health: Mutex::new((health, None)), dropped_reports: AtomicU64::new(0) };
        HealthView { shared: Arc::new(shared) }
    }

    /// The health now.
    pub fn now(&self) -> HistoryHealth {
        let (mut health, committed) = self.lock().clone();
        health.last_commit_age = committed.map(|moment| moment.elapsed());
        health.dropped_reports = self.shared.dropped_reports.load(Ordering::Relaxed);
        health
    }

    /// Counts a report that was not taken; takes no lock.
    pub(super) fn count_dropped_report(&self) {
        self.shared.dropped_reports.fetch_add(1, Ordering::Relaxed);
    }

    /// Changes the health after a commit; `committed` also restarts its age.
    pub(super) fn update(&self, committed: bool, change: impl FnOnce(&mut HistoryHealth)) {
        let mut guard = self.lock();
        if committed {
            guard.1 = Some(Instant::now());
        }
        change(&mut guard.0);
    }

    /// The health; it stays readable when a thread died with the lock, since each change is whole.
    fn lock(&self) -> MutexGuard<'_, (HistoryHealth, Option<Instant>)> {
        self.shared.health.lock().unwrap_or_else(PoisonError::into_inner)
    }
}
