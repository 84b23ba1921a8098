//! The writer: one thread, one writing connection, one bounded queue.
//!
//! It must never make the caller wait and never lose what it has without counting it. A commit that
//! fails is tried again at the next interval; until then the runs wait in memory, up to a bound.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::mpsc::{Receiver, RecvTimeoutError, SyncSender, sync_channel};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use super::commit::Recorder;
use super::health::{HealthView, HistoryHealth, HistoryState};
use super::runs::RunKeeper;
use super::{HistoryError, Identity, Options};
use crate::detection::plan::Plan;
use crate::detection::time::Utc;
use crate::detection::verdict::DwellReport;

/// The longest that a commit waits for another program to let go of the database.
const BUSY_WAIT_MAX: Duration = Duration::from_secs(1);

/// Hands reports to the writer thread. To drop it is to close it.
#[derive(Debug)]
pub struct Writer {
    /// `None` once closed: the thread takes what is queued, commits and ends.
    queue: Option<SyncSender<Arc<DwellReport>>>,
    thread: Option<JoinHandle<()>>,
    health: HealthView,
    /// Allowed size (bytes), `u64::MAX` for no limit.
    file_bytes_max: Arc<AtomicU64>,
}

impl Writer {
    /// Opens the file and starts the thread.
    pub(super) fn open(
        path: &Path,
        identity: &Identity,
        plan: &Plan,
        options: Options,
    ) -> Result<(Writer, HealthView), HistoryError> {
        assert!(options.queue_depth > 0, "a queue must hold a report");
        let busy_wait = options.commit_interval.min(BUSY_WAIT_MAX);
        let (recorder, ends_us) = Recorder::open(path, identity, plan, busy_wait)?;
        let health = HealthView::new(recorder.file.bytes());
        let file_bytes_max = Arc::new(AtomicU64::new(options.file_bytes_max.unwrap_or(u64::MAX)));
        let (queue, reports) = sync_channel(options.queue_depth);
        let task = Task {
            path: path.to_path_buf(),
            recorder,
            keeper: RunKeeper::new(&ends_us, options.waiting_runs_max),
            health: health.clone(),
            file_bytes_max: Arc::clone(&file_bytes_max),
            limit_set: u64::MAX,
            recorded_until_us: None,
        };
        let thread = std::thread::Builder::new()
            .name("history".to_owned())
            .spawn(move || task.run(&reports, options.commit_interval))
            .map_err(|error| HistoryError::Inaccessible {
                path: path.to_path_buf(),
                detail: format!("its thread did not start: {error}"),
            })?;
        let writer = Writer {
            queue: Some(queue),
            thread: Some(thread),
            health: health.clone(),
            file_bytes_max,
        };
        Ok((writer, health))
    }

    /// Offers a report; returns at once. `false` when the queue is full or the writer has ended:
    /// then the report is counted as dropped, and its time becomes unknown by itself.
    pub fn offer(&self, report: Arc<DwellReport>) -> bool {
        let taken = self.queue.as_ref().is_some_and(|queue| queue.try_send(report).is_ok());
        if !taken {
            self.health.count_dropped_report();
        }
        taken
    }

    /// Changes the size that the database may take (bytes), from the next commit on. A database
    /// that is larger already stays as it is and does not grow.
    pub fn limit_file_bytes(&self, bytes: Option<u64>) {
        self.file_bytes_max.store(bytes.unwrap_or(u64::MAX), Ordering::Relaxed);
    }

    /// Takes what is queued, commits, and waits for the thread to end. If the last commit failed,
    /// the health says so, and what it held is unknown.
    pub fn close(mut self) -> HistoryHealth {
        self.finish();
        self.health.now()
    }

    fn finish(&mut self) {
        self.queue = None;
        if let Some(thread) = self.thread.take() {
            // A panic has been printed by then, and the task's end has marked the health.
            drop(thread.join());
        }
    }
}

impl Drop for Writer {
    fn drop(&mut self) {
        self.finish();
    }
}

/// What the thread owns.
struct Task {
    path: PathBuf,
    recorder: Recorder,
    keeper: RunKeeper,
    health: HealthView,
    file_bytes_max: Arc<AtomicU64>,
    /// The size limit that SQLite was told last.
    limit_set: u64,
    /// How far the record stood at the last commit.
    recorded_until_us: Option<i64>,
}

impl Task {
    fn run(mut self, reports: &Receiver<Arc<DwellReport>>, commit_interval: Duration) {
        let mut due = Instant::now() + commit_interval;
        loop {
            match reports.recv_timeout(due.saturating_duration_since(Instant::now())) {
                Ok(report) => self.keeper.take(&report),
                Err(RecvTimeoutError::Timeout) => {}
                Err(RecvTimeoutError::Disconnected) => break,
            }
            if Instant::now() >= due {
                self.commit();
                due = Instant::now() + commit_interval;
            }
        }
        self.commit();
        self.recorder.file.fold_log();
    }

    /// Commits if there is anything to commit, and tells how it went.
    fn commit(&mut self) {
        let changed = self.keeper.recorded_until_us() > self.recorded_until_us;
        if !changed && self.keeper.pending().next().is_none() {
            // Reports may still have come, all of them from before the record's end.
            self.health.update(false, |health| count(health, &self.keeper));
            return;
        }
        let limit = self.file_bytes_max.load(Ordering::Relaxed);
        let limited = if limit == self.limit_set {
            Ok(())
        } else {
            self.recorder.file.limit_bytes((limit != u64::MAX).then_some(limit))
        };
        match limited.and_then(|()| self.recorder.commit(&self.keeper)) {
            Ok(()) => {
                self.limit_set = limit;
                self.keeper.committed();
                self.succeeded();
            }
            Err(error) => self.failed(&HistoryError::from_sqlite(&self.path, &error)),
        }
    }

    fn succeeded(&mut self) {
        self.recorded_until_us = self.keeper.recorded_until_us();
        let recorded_until = self.recorded_until_us.map(|us| Utc(us * 1_000));
        let file_bytes = self.recorder.file.bytes();
        let resumed = self.health.update(true, |health| {
            health.commits += 1;
            health.recorded_until = recorded_until;
            health.file_bytes = file_bytes;
            count(health, &self.keeper);
            let stopped = health.state == HistoryState::Stopped;
            stopped.then(|| {
                let message = format!(
                    "history {}: is written again after {} failed commits; {} runs were lost",
                    self.path.display(),
                    health.failed_commits,
                    health.dropped_runs
                );
                health.state = HistoryState::Writing;
                health.message = Some(message.clone());
                message
            })
        });
        if let Some(message) = resumed {
            tracing::info!("{message}");
        }
    }

    fn failed(&self, error: &HistoryError) {
        let before = self.health.update(false, |health| {
            health.failed_commits += 1;
            count(health, &self.keeper);
            health.message = Some(error.to_string());
            std::mem::replace(&mut health.state, HistoryState::Stopped)
        });
        if before == HistoryState::Writing {
            tracing::error!("{error}");
        }
    }
}

fn count(health: &mut HistoryHealth, keeper: &RunKeeper) {
    health.clipped_reports = keeper.clipped_reports();
    health.dropped_runs = keeper.dropped_runs();
    health.waiting_runs = keeper.closed_runs() as u64;
}

impl Drop for Task {
    fn drop(&mut self) {
        if std::thread::panicking() {
            self.health.update(false, |health| {
                health.state = HistoryState::Stopped;
                health.message = Some("history: its writer has failed: restart the node".into());
            });
        }
    }
}
