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
    /// Time since a report or a run was last dropped; `None` if never.
    pub last_drop_age: Option<Duration>,
    /// Reports that began before the record's end (UTC had gone back); the overlap was left out.
    pub clipped_reports: u64,
    /// Time since such a report was last seen, to the next try of a commit; `None` if never.
    pub last_clip_age: Option<Duration>,
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
    health: Mutex<(HistoryHealth, Moments)>,
    dropped_reports: AtomicU64,
    /// When a report was last dropped: time since `began` (ns), 0 for never.
    report_dropped_ns: AtomicU64,
    began: Instant,
}

/// When the writer last did something; `None` for never.
#[derive(Clone, Copy, Debug, Default)]
struct Moments {
    committed: Option<Instant>,
    run_dropped: Option<Instant>,
    clipped: Option<Instant>,
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
            last_drop_age: None,
            clipped_reports: 0,
            last_clip_age: None,
            file_bytes,
        };
        let shared = Shared {
            health: Mutex::new((health, Moments::default())),
            dropped_reports: AtomicU64::new(0),
            report_dropped_ns: AtomicU64::new(0),
            began: Instant::now(),
        };
        HealthView { shared: Arc::new(shared) }
    }

    /// The health now.
    pub fn now(&self) -> HistoryHealth {
        let (mut health, moments) = self.lock().clone();
        let age = |moment: Option<Instant>| moment.map(|moment| moment.elapsed());
        let dropped_ns = self.shared.report_dropped_ns.load(Ordering::Relaxed);
        let report_dropped =
            (dropped_ns > 0).then(|| self.shared.began + Duration::from_nanos(dropped_ns));
        health.last_commit_age = age(moments.committed);
        health.last_drop_age = age(moments.run_dropped.max(report_dropped));
        health.last_clip_age = age(moments.clipped);
        health.dropped_reports = self.shared.dropped_reports.load(Ordering::Relaxed);
        health
    }

    /// Counts a report that was not taken; takes no lock.
    pub(super) fn count_dropped_report(&self) {
        let since = self.shared.began.elapsed().as_nanos() as u64;
        self.shared.report_dropped_ns.store(since.max(1), Ordering::Relaxed);
        self.shared.dropped_reports.fetch_add(1, Ordering::Relaxed);
    }

    /// Changes the health after a try to commit; `committed` restarts its age, and a count that has
    /// risen restarts that count's.
    ///
    /// `change` must not log or wait for anything else: whoever asks for the health would wait too.
    pub(super) fn update<T>(
        &self,
        committed: bool,
        change: impl FnOnce(&mut HistoryHealth) -> T,
    ) -> T {
        let mut guard = self.lock();
        let (health, moments) = &mut *guard;
        let before = (health.dropped_runs, health.clipped_reports);
        let outcome = change(health);
        let now = Some(Instant::now());
        if committed {
            moments.committed = now;
        }
        if health.dropped_runs > before.0 {
            moments.run_dropped = now;
        }
        if health.clipped_reports > before.1 {
            moments.clipped = now;
        }
        outcome
    }

    /// The health; it stays readable when a thread died with the lock, since each change is whole.
    fn lock(&self) -> MutexGuard<'_, (HistoryHealth, Moments)> {
        self.shared.health.lock().unwrap_or_else(PoisonError::into_inner)
    }
}
