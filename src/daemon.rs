//! The one place that joins the rooms: a source, the detector, the history and the answers.
//!
//! Threads: capture (blocks on the source), detection (blocks on the queue), the history's writer,
//! and the answers' small runtime. Each hands values on and never waits for the next one: a full
//! queue costs the newest block or report, which is counted and becomes `unknown`.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicI64, AtomicU64, Ordering};
use std::thread::JoinHandle;
use std::time::Duration;

use tokio::net::TcpListener;
use tokio::sync::watch;

use crate::answers::{
    AppState, CaptureHealth, CaptureState as ServedCapture, DetectionHealth, Health,
    HistoryHealth as ServedHistory, HistoryState as ServedHistoryState, Live, NodeInfo,
};
use crate::capture::clock::{Clock, SystemClock};
use crate::capture::paced::{Paced, PacedCounters};
use crate::capture::queue::{
    self, Blocks, CaptureHandle, CaptureState, CaptureStatus, Next, WhenFull,
};
use crate::capture::recording::{Recording, Told};
use crate::capture::scene::SceneSource;
use crate::capture::{CaptureError, Source};
use crate::config::{self, ConfigError, Configuration};
use crate::detection::detector::Detector;
use crate::detection::plan::Plan;
use crate::detection::standing::Standing;
use crate::detection::time::{Stamp, Utc};
use crate::detection::verdict::DwellReport;
use crate::history::{
    HealthView, History, HistoryError, HistoryState, Identity, Options, Reader, Writer,
};
use crate::scene::{Scene, SceneSpec};

/// Time that a block of samples covers, about [s]: short against a dwell, long against a wake-up.
const BLOCK_S: f64 = 0.01;

/// Blocks that may wait for the detector: a quarter of a second, after which the newest is dropped.
pub const QUEUE_BLOCKS: usize = 25;

/// How long the detection thread waits for a block before it looks whether it is to stop.
const POLL: Duration = Duration::from_millis(100);

/// History is late when its newest commit is older than the commit interval by this (s).
const COMMIT_LATE_S: f64 = 60.0;

/// Name of the database in the data directory.
pub const DATABASE_NAME: &str = "history.sqlite3";

/// The program's version, as answers and history name it.
pub const VERSION: &str = env!("CARGO_PKG_VERSION");

/// Why the daemon did not start. Each is one line.
#[derive(Debug)]
pub enum StartError {
    /// The configuration does not fit the source.
    Config(ConfigError),
    /// The recording that the configuration (named first) gives cannot be used.
    Recording(String, CaptureError),
    /// The operating system gave no thread for this.
    Thread(&'static str, String),
    /// The data directory or the database in it cannot be used.
    History(HistoryError),
    /// The data directory cannot be made.
    Directory(PathBuf, std::io::Error),
    /// The configuration names no source.
    NoSource(String),
}

impl std::fmt::Display for StartError {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            StartError::Config(error) => error.fmt(f),
            StartError::Recording(file, error) => write!(f, "{file}: receiver.recording: {error}"),
            StartError::Thread(what, error) => write!(f, "no thread for {what}: {error}"),
            StartError::History(error) => error.fmt(f),
            StartError::Directory(path, error) if path.is_file() => {
                write!(f, "{} is a file, not a folder ({error})", path.display())
            }
            StartError::Directory(path, error) => {
                write!(f, "{}: the folder cannot be made: {error}", path.display())
            }
            StartError::NoSource(file) => {
                write!(f, "{file}: receiver.source: missing; give \"scene\" or \"recording\"")
            }
        }
    }
}

/// Samples a block of the given rate holds.
pub fn block_samples(sample_rate_hz: f64) -> usize {
    ((sample_rate_hz * BLOCK_S) as usize).clamp(256, 1 << 20)
}

/// Opens the source that a configuration names; `start` is the present moment, `seed` a scene's.
///
/// # Errors
/// [`StartError::NoSource`] or [`StartError::Recording`].
pub fn open_source(
    configuration: &Configuration,
    start: Utc,
    seed: u64,
) -> Result<Box<dyn Source>, StartError> {
    match &configuration.source {
        Some(config::Source::Scene { name }) => {
            let mut spec = SceneSpec::lower_saltmarsh();
            spec.start_of_week_s = second_of_week(start);
            Ok(Box::new(SceneSource::new(Scene::new(spec, seed), name, start)))
        }
        Some(config::Source::Recording { path }) => {
            let fallback_centre_hz = configuration.centre_hz();
            let told = Told { fallback_centre_hz, ..Told::default() };
            let recording = Recording::open(path, told)
                .map_err(|error| StartError::Recording(configuration.file.clone(), error))?;
            Ok(Box::new(recording))
        }
        None => Err(StartError::NoSource(configuration.file.clone())),
    }
}

/// Seconds since Monday 00:00 UTC; 1970-01-01 was a Thursday.
fn second_of_week(moment: Utc) -> f64 {
    let seconds = moment.0.div_euclid(1_000_000_000) + 3 * 86_400;
    seconds.rem_euclid(7 * 86_400) as f64
}

/// A running node.
pub struct Daemon {
    capture: CaptureHandle,
    /// Gives the writer back at its end. If it panics, the writer is closed on the way out.
    detection: JoinHandle<Writer>,
    state: AppState,
}

impl Daemon {
    /// Starts capture, detection and history on the configuration's source.
    ///
    /// # Errors
    /// [`StartError`]; whatever was started is stopped again.
    pub fn start(configuration: &Configuration, seed: u64) -> Result<Daemon, StartError> {
        let clock: Arc<dyn Clock> = Arc::new(SystemClock::new());
        let started = clock.now().utc;
        let source = open_source(configuration, started, seed)?;
        let described = source.describe();
        let simulated = matches!(configuration.source, Some(config::Source::Scene { .. }));
        let plan = configuration
            .plan(Some(source.centre_hz()), Some(source.sample_rate_hz()))
            .map_err(StartError::Config)?;
        for warning in configuration.warnings(&plan) {
            tracing::warn!("{}: {warning}", configuration.file);
        }
        let plan = Arc::new(plan);
        let History { writer, reader, health } = open_history(configuration, &plan)?;
        let standing = recall(&plan, &reader, clock.now()).map_err(StartError::History)?;
        let source = Box::new(Paced::new(source, Arc::clone(&clock)));
        let pacing = source.counters();
        let samples = block_samples(plan.receiver.sample_rate_hz);
        let (blocks, capture) = queue::spawn(source, samples, QUEUE_BLOCKS, WhenFull::Drop)
            .map_err(|error| StartError::Thread("capture", error.to_string()))?;
        let recalled = Live { standing: standing.clone(), newest: None };
        let (publish, live) = watch::channel(Arc::new(recalled));
        let progress = Arc::new(Progress::default());
        let detection = {
            let (plan, progress) = (Arc::clone(&plan), Arc::clone(&progress));
            let (clock, status) = (Arc::clone(&clock), capture.status());
            let task = Detection { plan, standing, publish, writer, progress, clock };
            std::thread::Builder::new()
                .name("detection".to_owned())
                .spawn(move || task.run(blocks, &status))
                .map_err(|error| StartError::Thread("detection", error.to_string()))?
        };
        let watched = Watched {
            capture: capture.status(),
            pacing,
            progress,
            history: health,
            dwell_late_after_s: longest_max_age_s(&plan),
            commit_late_after_s: configuration.commit_interval.as_secs_f64() + COMMIT_LATE_S,
        };
        let health_clock = Arc::clone(&clock);
        let state = AppState {
            node: Arc::new(NodeInfo {
                site: configuration.node.site.clone(),
                node: configuration.node.name.clone(),
                version: VERSION.to_owned(),
                started,
                simulated,
                source: described,
                configuration_sha256: configuration.sha256.clone(),
            }),
            plan,
            live,
            health: Arc::new(move || watched.health(&*health_clock)),
            reader: Some(reader),
            clock: Arc::new(move || clock.now()),
        };
        Ok(Daemon { capture, detection, state })
    }

    /// What the answers are made from.
    pub fn state(&self) -> AppState {
        self.state.clone()
    }

    /// Serves until `shutdown` completes, then stops in the order of the flow, so that the last
    /// dwell is decided and the last run is committed.
    pub async fn serve(
        self,
        listener: TcpListener,
        shutdown: impl Future<Output = ()> + Send + 'static,
    ) -> Stopped {
        crate::answers::serve(listener, self.state.clone(), shutdown).await;
        self.stop()
    }

    /// Stops capture, detection and history, in this order.
    pub fn stop(self) -> Stopped {
        self.capture.status().stop();
        if let CaptureState::Failed(message) = self.capture.join() {
            tracing::error!("capture had failed: {message}");
        }
        let Ok(writer) = self.detection.join() else { return Stopped::Panicked };
        let history = writer.close();
        match history.state {
            HistoryState::Writing => Stopped::Well,
            HistoryState::Stopped => {
                let why = history.message.unwrap_or_default();
                Stopped::HistoryLost(format!("the end of the history is not written: {why}"))
            }
        }
    }
}

/// How a daemon has stopped.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Stopped {
    /// Everything that was decided is on the record, but for what the health counts as dropped.
    Well,
    /// The last commit failed, for the reason given.
    HistoryLost(String),
    /// The detection thread had panicked.
    Panicked,
}

fn open_history(configuration: &Configuration, plan: &Plan) -> Result<History, StartError> {
    let directory = &configuration.data_directory;
    std::fs::create_dir_all(directory)
        .map_err(|error| StartError::Directory(directory.clone(), error))?;
    let identity = Identity {
        site: configuration.node.site.clone(),
        node: configuration.node.name.clone(),
        program_version: VERSION.to_owned(),
        configuration_text: configuration.text.clone(),
    };
    let options = Options { commit_interval: configuration.commit_interval, ..Options::default() };
    let path: &Path = &directory.join(DATABASE_NAME);
    History::open(path, &identity, plan, options).map_err(StartError::History)
}

/// Where every channel stands before the first dwell: the hold-off outlives a restart.
fn recall(plan: &Plan, reader: &Reader, now: Stamp) -> Result<Standing, HistoryError> {
    let channels: Vec<(f64, f64)> =
        plan.channels.iter().map(|channel| (channel.centre_hz, channel.bandwidth_hz)).collect();
    let mut standing = Standing::new(plan);
    for (index, detected) in reader.last_detections(&channels)?.into_iter().enumerate() {
        if let Some(detected) = detected {
            standing.recall(index, detected, now);
        }
    }
    Ok(standing)
}

fn longest_max_age_s(plan: &Plan) -> f64 {
    plan.bands.iter().map(|band| band.policy.max_age_ns as f64 * 1e-9).fold(0.0, f64::max)
}

/// What the detection thread owns.
struct Detection {
    plan: Arc<Plan>,
    standing: Standing,
    publish: watch::Sender<Arc<Live>>,
    writer: Writer,
    progress: Arc<Progress>,
    clock: Arc<dyn Clock>,
}

impl Detection {
    fn run(mut self, mut blocks: Blocks, status: &CaptureStatus) -> Writer {
        let plan = Arc::clone(&self.plan);
        let mut detector = Detector::new(&plan);
        let mut first = true;
        loop {
            match blocks.next(POLL) {
                Next::Block(block) => {
                    self.progress.sample_at(self.clock.now().monotonic_ns);
                    // The first block of all follows on nothing, and misses nothing.
                    if block.gap_before && !std::mem::take(&mut first) {
                        self.progress.loss_at(block.start.monotonic_ns);
                    }
                    detector.push(block, |report| self.publish(report));
                }
                Next::Nothing => {}
                Next::Ended => break,
            }
        }
        detector.finish(|report| self.publish(report));
        match status.state() {
            CaptureState::Failed(message) => tracing::error!("capture failed: {message}"),
            _ => tracing::info!("capture has ended: every channel is unknown from here on"),
        }
        self.writer
    }

    fn publish(&mut self, report: DwellReport) {
        self.standing.observe(&report);
        self.progress.dwell_at(report.end().monotonic_ns);
        let report = Arc::new(report);
        let live = Live { standing: self.standing.clone(), newest: Some(Arc::clone(&report)) };
        // Nobody listening is no fault: the receiver end lives in the state that is served.
        self.publish.send_replace(Arc::new(live));
        // A full queue is counted by the writer and told by its health.
        self.writer.offer(report);
    }
}

/// How far detection has come; read by whoever asks for the health. 0 stands for "never".
#[derive(Default)]
struct Progress {
    dwells: AtomicU64,
    last_sample_ns: AtomicI64,
    last_dwell_ns: AtomicI64,
    last_loss_ns: AtomicI64,
}

impl Progress {
    fn sample_at(&self, monotonic_ns: i64) {
        self.last_sample_ns.store(monotonic_ns.max(1), Ordering::Relaxed);
    }

    fn loss_at(&self, monotonic_ns: i64) {
        self.last_loss_ns.store(monotonic_ns.max(1), Ordering::Relaxed);
    }

    fn dwell_at(&self, monotonic_ns: i64) {
        self.last_dwell_ns.store(monotonic_ns.max(1), Ordering::Relaxed);
        self.dwells.fetch_add(1, Ordering::Relaxed);
    }
}

/// Everything that the health is read from.
struct Watched {
    capture: CaptureStatus,
    pacing: Arc<PacedCounters>,
    progress: Arc<Progress>,
    history: HealthView,
    dwell_late_after_s: f64,
    commit_late_after_s: f64,
}

impl Watched {
    fn health(&self, clock: &dyn Clock) -> Health {
        let now_ns = clock.now().monotonic_ns;
        let age_s = |moment: &AtomicI64| {
            let moment_ns = moment.load(Ordering::Relaxed);
            (moment_ns > 0).then(|| (now_ns - moment_ns).max(0) as f64 * 1e-9)
        };
        let seconds = |age: Option<Duration>| age.map(|age| age.as_secs_f64());
        let counts = self.capture.counts();
        let history = self.history.now();
        Health {
            capture: CaptureHealth {
                state: match self.capture.state() {
                    CaptureState::Running => ServedCapture::Running,
                    CaptureState::Ended => ServedCapture::Ended,
                    CaptureState::Failed(_) => ServedCapture::Failed,
                },
                samples: counts.samples_read,
                lost_samples: counts.samples_dropped,
                gaps: counts.gaps,
                blocks_dropped: counts.blocks_dropped,
                late: self.pacing.late(),
                clock_steps: self.pacing.clock_steps(),
                last_sample_age_s: age_s(&self.progress.last_sample_ns),
                last_loss_age_s: age_s(&self.progress.last_loss_ns),
            },
            detection: DetectionHealth {
                dwells: self.progress.dwells.load(Ordering::Relaxed),
                last_dwell_age_s: age_s(&self.progress.last_dwell_ns),
                late_after_s: self.dwell_late_after_s,
            },
            history: ServedHistory {
                state: match history.state {
                    HistoryState::Writing => ServedHistoryState::Writing,
                    HistoryState::Stopped => ServedHistoryState::Stopped,
                },
                path_name: DATABASE_NAME.to_owned(),
                last_commit_age_s: seconds(history.last_commit_age),
                late_after_s: self.commit_late_after_s,
                failed_commits: history.failed_commits,
                dropped_reports: history.dropped_reports,
                dropped_runs: history.dropped_runs,
                last_drop_age_s: seconds(history.last_drop_age),
                clipped_reports: history.clipped_reports,
                last_clip_age_s: seconds(history.last_clip_age),
                bytes: history.file_bytes,
            },
        }
    }
}
