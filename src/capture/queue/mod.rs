//! The capture loop: reads a source on its own OS thread and hands its blocks over.
//!
//! The blocks circulate: a fixed pool, a bounded queue to the reader and the way back, so that
//! nothing is allocated per block. It must never make a radio wait, never grow, and never lose a
//! block without counting it and marking the next one with `gap_before`.

use std::sync::Arc;
use std::sync::atomic::Ordering;
use std::sync::mpsc::{self, Receiver, RecvTimeoutError, SyncSender, TrySendError};
use std::thread;
use std::time::Duration;

mod status;

pub use status::{CaptureCounts, CaptureHandle, CaptureState, CaptureStatus};

use super::{CaptureError, Source, empty_block};
use crate::detection::block::SampleBlock;
use status::Shared;

/// How often a capture thread that waits for a buffer looks whether it is to stop.
const STOP_POLL: Duration = Duration::from_millis(20);

/// What capture does with a new block while the queue is full.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum WhenFull {
    /// Drops it and counts it; the next block has `gap_before`. For whatever runs in real time.
    Drop,
    /// Waits until there is room: nothing is lost. For a replay.
    Wait,
}

/// What [`Blocks::next`] finds.
#[derive(Debug)]
pub enum Next<'a> {
    /// The next block, lent until the next call.
    Block(&'a SampleBlock),
    /// Nothing came in the time given; there may be more.
    Nothing,
    /// Nothing will come any more; the state says why.
    Ended,
}

/// The reader's end of the queue.
#[derive(Debug)]
pub struct Blocks {
    filled: Receiver<SampleBlock>,
    spent: SyncSender<SampleBlock>,
    lent: Option<SampleBlock>,
}

impl Blocks {
    /// The next block, waiting for it at most `timeout`. Takes back the block that was lent before:
    /// the reader never holds more than one, so the pool cannot run dry.
    pub fn next(&mut self, timeout: Duration) -> Next<'_> {
        if let Some(block) = self.lent.take() {
            // The way back has room for the whole pool; if capture has ended, the block ends too.
            drop(self.spent.try_send(block));
        }
        match self.filled.recv_timeout(timeout) {
            Ok(block) => Next::Block(self.lent.insert(block)),
            Err(RecvTimeoutError::Timeout) => Next::Nothing,
            Err(RecvTimeoutError::Disconnected) => Next::Ended,
        }
    }
}

/// Starts capturing on a thread of its own, in blocks of at most `block_samples` [samples, 1 or
/// more], with a queue of `depth` blocks (1 or more).
///
/// # Errors
/// [`CaptureError::Thread`]; what the source meets later is told by the state.
pub fn spawn(
    source: Box<dyn Source>,
    block_samples: usize,
    depth: usize,
    when_full: WhenFull,
) -> Result<(Blocks, CaptureHandle), CaptureError> {
    assert!(block_samples > 0, "a block must have room for a sample");
    assert!(depth > 0, "a queue must have room for a block");
    // One block in the queue for each of its places, one with the reader, one being filled.
    let pool = depth + 2;
    // With `Wait`, capture waits for a buffer, not for the queue: there it can see the stop flag.
    let queue = if when_full == WhenFull::Wait { pool } else { depth };
    let (filled_in, filled_out) = mpsc::sync_channel(queue);
    let (spent_in, spent_out) = mpsc::sync_channel(pool);
    for _ in 0..pool {
        spent_in.try_send(empty_block(block_samples)).expect("the way back has room for the pool");
    }
    let shared = Arc::new(Shared::running());
    let capture = Capture {
        source,
        block_samples,
        filled: filled_in,
        spent: spent_out,
        closing: Closing(Arc::clone(&shared)),
        lost: false,
    };
    let thread = thread::Builder::new()
        .name("capture".to_owned())
        .spawn(move || capture.run())
        .map_err(CaptureError::Thread)?;
    let blocks = Blocks { filled: filled_out, spent: spent_in, lent: None };
    Ok((blocks, CaptureHandle { status: CaptureStatus(shared), thread }))
}

/// Sees to it that a capture thread that panics does not leave `Running` behind.
struct Closing(Arc<Shared>);

impl Drop for Closing {
    fn drop(&mut self) {
        if thread::panicking() {
            *self.0.state() = CaptureState::Failed("the capture thread panicked".to_owned());
        }
    }
}

/// What the thread owns. Dropping `filled` tells the reader that it is over, so `closing`, which
/// settles the state, stands before it.
struct Capture {
    closing: Closing,
    source: Box<dyn Source>,
    block_samples: usize,
    filled: SyncSender<SampleBlock>,
    spent: Receiver<SampleBlock>,
    /// Whether a block was dropped since the last one that was handed over.
    lost: bool,
}

impl Capture {
    fn run(mut self) {
        let state = match self.read_all() {
            Ok(()) => CaptureState::Ended,
            Err(error) => CaptureState::Failed(error.to_string()),
        };
        *self.closing.0.state() = state;
    }

    fn read_all(&mut self) -> Result<(), CaptureError> {
        let mut kept = None;
        loop {
            let Some(mut block) = kept.take().or_else(|| self.buffer()) else { return Ok(()) };
            if self.stopping() || !self.source.read(&mut block, self.block_samples)? {
                return Ok(());
            }
            let length = block.samples.len();
            assert!((1..=self.block_samples).contains(&length), "a source keeps to the block size");
            let shared = &self.closing.0;
            shared.samples_read.fetch_add(length as u64, Ordering::Relaxed);
            shared.clipped.fetch_add(block.clipped as u64, Ordering::Relaxed);
            // A gap is counted when it begins, before any block that tells of it can be read: at a
            // gap of the source, or at the first of the blocks that are dropped in a row.
            let begun = shared.blocks.load(Ordering::Relaxed) > 0 && !self.lost;
            let source_gap = block.gap_before;
            shared.gaps.fetch_add(u64::from(begun && source_gap), Ordering::Relaxed);
            block.gap_before |= self.lost;
            // Likewise: whoever holds the block must find it counted.
            shared.blocks.fetch_add(1, Ordering::Relaxed);
            match self.filled.try_send(block) {
                Ok(()) => self.lost = false,
                Err(TrySendError::Full(block)) => {
                    shared.blocks.fetch_sub(1, Ordering::Relaxed);
                    shared.blocks_dropped.fetch_add(1, Ordering::Relaxed);
                    shared.samples_dropped.fetch_add(length as u64, Ordering::Relaxed);
                    shared.gaps.fetch_add(u64::from(begun && !source_gap), Ordering::Relaxed);
                    self.lost = true;
                    kept = Some(block);
                }
                Err(TrySendError::Disconnected(_)) => return Ok(()),
            }
        }
    }

    /// A spent buffer. With [`WhenFull::Drop`] there always is one; with [`WhenFull::Wait`] this is
    /// where capture waits. `None` when it is to stop or the reader is gone.
    fn buffer(&self) -> Option<SampleBlock> {
        loop {
            match self.spent.recv_timeout(STOP_POLL) {
                Ok(block) => return Some(block),
                Err(RecvTimeoutError::Timeout) if !self.stopping() => {}
                Err(_) => return None,
            }
        }
    }

    fn stopping(&self) -> bool {
        self.closing.0.stop.load(Ordering::Relaxed)
    }
}

#[cfg(test)]
mod tests {
    use std::collections::BTreeSet;
    use std::io;
    use std::time::Instant;

    use num_complex::Complex32;

    use super::*;
    use crate::detection::time::{Stamp, Utc};

    /// Longer than any condition here can take to come true on a loaded machine.
    const PATIENCE: Duration = Duration::from_secs(30);

    /// What the source does at its next read.
    enum Step {
        Deliver { samples: usize, gap: bool, clipped: usize },
        End,
        Fail,
        Panic,
    }

    /// Does one step for each that the test sends, and waits for the next. Blocks carry the number
    /// of the read in their stamp, which tells them apart.
    struct Stepped {
        steps: Receiver<Step>,
        reads: i64,
    }

    impl Source for Stepped {
        fn centre_hz(&self) -> f64 {
            433e6
        }
        fn sample_rate_hz(&self) -> f64 {
            1e6
        }
        fn samples_total(&self) -> Option<u64> {
            None
        }
        fn describe(&self) -> String {
            "test source".to_owned()
        }
        fn read(&mut self, block: &mut SampleBlock, max: usize) -> Result<bool, CaptureError> {
            let step = self.steps.recv().unwrap_or(Step::End);
            self.reads += 1;
            block.start = Stamp { utc: Utc(0), monotonic_ns: self.reads };
            match step {
                Step::Deliver { samples, gap, clipped } => {
                    block.samples.clear();
                    block.samples.resize(samples.min(max), Complex32::ONE);
                    (block.gap_before, block.clipped) = (gap, clipped);
                    Ok(true)
                }
                Step::End => Ok(false),
                Step::Fail => {
                    let source = io::Error::other("unplugged");
                    Err(CaptureError::File { path: "receiver".into(), source })
                }
                Step::Panic => panic!("a source that breaks its own rules"),
            }
        }
    }

    fn start(depth: usize, when_full: WhenFull) -> (mpsc::Sender<Step>, Blocks, CaptureHandle) {
        let (steps_in, steps) = mpsc::channel();
        let source = Box::new(Stepped { steps, reads: 0 });
        let (blocks, handle) = spawn(source, 100, depth, when_full).expect("a thread");
        (steps_in, blocks, handle)
    }

    fn deliver(steps: &mpsc::Sender<Step>, count: usize) {
        for _ in 0..count {
            let step = Step::Deliver { samples: 100, gap: false, clipped: 0 };
            steps.send(step).expect("the source listens");
        }
    }

    fn until(what: &str, condition: impl Fn() -> bool) {
        let began = Instant::now();
        while !condition() {
            assert!(began.elapsed() < PATIENCE, "waited in vain for: {what}");
            thread::yield_now();
        }
    }

    /// Number of the next block and its gap flag; `None` at the end.
    fn next(blocks: &mut Blocks) -> Option<(i64, bool)> {
        match blocks.next(PATIENCE) {
            Next::Block(block) => Some((block.start.monotonic_ns, block.gap_before)),
            Next::Nothing => panic!("no block within {PATIENCE:?}"),
            Next::Ended => None,
        }
    }

    #[test]
    fn a_full_queue_drops_the_new_block_and_marks_the_next_with_a_gap() {
        let (steps, mut blocks, handle) = start(2, WhenFull::Drop);
        let status = handle.status();
        steps.send(Step::Deliver { samples: 100, gap: true, clipped: 3 }).expect("listens");
        deliver(&steps, 4);
        until("three dropped blocks", || status.counts().blocks_dropped == 3);
        assert_eq!(next(&mut blocks), Some((1, true)));
        deliver(&steps, 1);
        until("the block after the gap", || status.counts().blocks == 3);
        deliver(&steps, 1);
        until("one more dropped block", || status.counts().blocks_dropped == 4);
        assert_eq!(next(&mut blocks), Some((2, false)));
        assert_eq!(next(&mut blocks), Some((6, true)));
        deliver(&steps, 1);
        assert_eq!(next(&mut blocks), Some((8, true)));
        steps.send(Step::Deliver { samples: 40, gap: false, clipped: 40 }).expect("listens");
        assert_eq!(next(&mut blocks), Some((9, false)));
        drop(steps);
        assert_eq!(next(&mut blocks), None);
        assert_eq!(handle.join(), CaptureState::Ended);
        let expected = CaptureCounts {
            samples_read: 840,
            blocks: 5,
            gaps: 2,
            blocks_dropped: 4,
            samples_dropped: 400,
            clipped: 43,
        };
        assert_eq!(status.counts(), expected);
    }

    #[test]
    fn waiting_loses_nothing_and_a_fixed_set_of_buffers_serves_any_number_of_blocks() {
        let (steps, mut blocks, handle) = start(3, WhenFull::Wait);
        deliver(&steps, 5000);
        drop(steps);
        let mut buffers = BTreeSet::new();
        let mut count = 0;
        while let Next::Block(block) = blocks.next(PATIENCE) {
            count += 1;
            assert_eq!((block.start.monotonic_ns, block.gap_before), (count, false));
            assert_eq!(block.samples.capacity(), 100);
            buffers.insert(block.samples.as_ptr().addr());
        }
        assert_eq!(count, 5000);
        assert!((2..=5).contains(&buffers.len()), "{} buffers", buffers.len());
        assert_eq!(handle.status().counts().blocks_dropped, 0);
        assert_eq!(handle.join(), CaptureState::Ended);
    }

    #[test]
    fn dropping_uses_a_fixed_set_of_buffers_too() {
        let (steps, mut blocks, handle) = start(1, WhenFull::Drop);
        let mut buffers = BTreeSet::new();
        for _ in 0..300 {
            deliver(&steps, 3);
            let Next::Block(block) = blocks.next(PATIENCE) else { panic!("a block") };
            assert_eq!(block.samples.capacity(), 100);
            buffers.insert(block.samples.as_ptr().addr());
        }
        assert!(buffers.len() <= 3, "{} buffers", buffers.len());
        drop((steps, blocks));
        assert_eq!(handle.join(), CaptureState::Ended);
    }

    #[test]
    fn a_stop_ends_capture_even_while_it_waits_for_the_reader() {
        let (steps, mut blocks, handle) = start(1, WhenFull::Wait);
        let status = handle.status();
        deliver(&steps, 10);
        until("a full queue", || status.counts().blocks == 3);
        status.stop();
        assert_eq!(handle.join(), CaptureState::Ended);
        // What was captured before the stop is still handed over, whole.
        let taken: Vec<_> = std::iter::from_fn(|| next(&mut blocks)).map(|block| block.0).collect();
        assert_eq!(taken, [1, 2, 3]);
    }

    #[test]
    fn capture_ends_when_the_reader_goes_away() {
        for when_full in [WhenFull::Drop, WhenFull::Wait] {
            let (steps, blocks, handle) = start(1, when_full);
            drop(blocks);
            deliver(&steps, 1);
            assert_eq!(handle.join(), CaptureState::Ended);
        }
    }

    #[test]
    fn a_source_that_fails_or_panics_is_told_by_the_state() {
        for (step, expected) in [
            (Step::Fail, "receiver: cannot be read: unplugged"),
            (Step::Panic, "the capture thread panicked"),
        ] {
            let (steps, mut blocks, handle) = start(4, WhenFull::Drop);
            assert_eq!(handle.status().state(), CaptureState::Running);
            assert!(matches!(blocks.next(Duration::ZERO), Next::Nothing));
            deliver(&steps, 1);
            steps.send(step).expect("the source listens");
            assert_eq!(next(&mut blocks), Some((1, false)));
            assert_eq!(next(&mut blocks), None);
            // The state is settled before the reader learns of the end.
            assert_eq!(handle.status().state(), CaptureState::Failed(expected.to_owned()));
            assert_eq!(handle.join(), CaptureState::Failed(expected.to_owned()));
        }
    }
}
