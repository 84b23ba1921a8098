//! The capture thread seen from outside: what it does, what it has counted, how to stop it.
//!
//! It only ever shows; the counters are written by the capture loop alone.

use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::thread::JoinHandle;

/// What capture is doing.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum CaptureState {
    /// It reads.
    Running,
    /// The source came to its end, the reader went away, or capture was told to stop.
    Ended,
    /// The source failed; the line says how.
    Failed(String),
}

/// What capture has done so far. `samples_read` less `samples_dropped` is what was handed over.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct CaptureCounts {
    /// Samples read from the source, dropped ones included.
    pub samples_read: u64,
    /// Blocks handed over.
    pub blocks: u64,
    /// Blocks handed over that do not follow on the one before; the first is not counted.
    pub gaps: u64,
    /// Blocks dropped because the queue was full.
    pub blocks_dropped: u64,
    /// Samples in those.
    pub samples_dropped: u64,
    /// Samples at the converter's limits, dropped ones included.
    pub clipped: u64,
}

/// What the capture thread writes and everybody may read.
#[derive(Debug)]
pub(super) struct Shared {
    pub(super) stop: AtomicBool,
    state: Mutex<CaptureState>,
    pub(super) samples_read: AtomicU64,
    pub(super) blocks: AtomicU64,
    pub(super) gaps: AtomicU64,
    pub(super) blocks_dropped: AtomicU64,
    pub(super) samples_dropped: AtomicU64,
    pub(super) clipped: AtomicU64,
}

impl Shared {
    pub(super) fn running() -> Shared {
        Shared {
            stop: AtomicBool::new(false),
            state: Mutex::new(CaptureState::Running),
            samples_read: AtomicU64::new(0),
            blocks: AtomicU64::new(0),
            gaps: AtomicU64::new(0),
            blocks_dropped: AtomicU64::new(0),
            samples_dropped: AtomicU64::new(0),
            clipped: AtomicU64::new(0),
        }
    }

    /// The state; a thread that panicked while it held the lock left a whole value behind.
    pub(super) fn state(&self) -> MutexGuard<'_, CaptureState> {
        self.state.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

/// The capture thread seen from outside. Clones look at the same thread.
#[derive(Clone, Debug)]
pub struct CaptureStatus(pub(super) Arc<Shared>);

impl CaptureStatus {
    /// What capture has done so far.
    pub fn counts(&self) -> CaptureCounts {
        let shared = &self.0;
        CaptureCounts {
            samples_read: shared.samples_read.load(Ordering::Relaxed),
            blocks: shared.blocks.load(Ordering::Relaxed),
            gaps: shared.gaps.load(Ordering::Relaxed),
            blocks_dropped: shared.blocks_dropped.load(Ordering::Relaxed),
            samples_dropped: shared.samples_dropped.load(Ordering::Relaxed),
            clipped: shared.clipped.load(Ordering::Relaxed),
        }
    }

    /// What capture is doing.
    pub fn state(&self) -> CaptureState {
        self.0.state().clone()
    }

    /// Tells capture to stop after the block that it is reading.
    pub fn stop(&self) {
        self.0.stop.store(true, Ordering::Relaxed);
    }
}

/// The owner's hold on the capture thread.
#[derive(Debug)]
pub struct CaptureHandle {
    pub(super) status: CaptureStatus,
    pub(super) thread: JoinHandle<()>,
}

impl CaptureHandle {
    /// A view of the thread for anybody who wants to know.
    pub fn status(&self) -> CaptureStatus {
        self.status.clone()
    }

    /// Waits for the end of the thread; returns how it ended.
    pub fn join(self) -> CaptureState {
        // A panic has already been noted in the state, which says more than the payload.
        drop(self.thread.join());
        self.status.state()
    }
}
