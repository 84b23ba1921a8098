//! The capture room: turns a recording, a scene or a receiver into stamped blocks of samples.
//!
//! The only room that reads a clock. It must never deliver samples across a gap without saying so:
//! what was not captured is told as a gap, so that nobody behind it can take it for silence.

use crate::detection::block::SampleBlock;
use crate::detection::time::{Stamp, Utc};

pub mod clock;
mod error;
pub mod paced;
pub mod queue;
pub mod recording;
pub mod scene;

pub use error::CaptureError;

/// Something that delivers consecutive stamped blocks of samples.
pub trait Source: Send {
    /// Radio frequency of the block's middle, where DC falls (Hz).
    fn centre_hz(&self) -> f64;

    /// Complex samples a second (Hz), above 0.
    fn sample_rate_hz(&self) -> f64;

    /// How many samples there are from the first to the last (samples); `None` if there is no end.
    fn samples_total(&self) -> Option<u64>;

    /// What this is, in one short plain line.
    fn describe(&self) -> String;

    /// Refills `block` with the next samples, at least 1 and at most `samples_max` (1 or more).
    ///
    /// Returns `Ok(false)` at the end, with nothing delivered. A block never straddles a gap;
    /// `gap_before` is set on the first block and after each gap. The block's buffer is reused.
    ///
    /// # Errors
    /// What the source meets while reading. The block's contents are then of no use.
    fn read(&mut self, block: &mut SampleBlock, samples_max: usize) -> Result<bool, CaptureError>;
}

impl<S: Source + ?Sized> Source for Box<S> {
    fn centre_hz(&self) -> f64 {
        (**self).centre_hz()
    }

    fn sample_rate_hz(&self) -> f64 {
        (**self).sample_rate_hz()
    }

    fn samples_total(&self) -> Option<u64> {
        (**self).samples_total()
    }

    fn describe(&self) -> String {
        (**self).describe()
    }

    fn read(&mut self, block: &mut SampleBlock, samples_max: usize) -> Result<bool, CaptureError> {
        (**self).read(block, samples_max)
    }
}

/// A block without samples, with room for `capacity` (samples): what [`Source::read`] fills.
pub fn empty_block(capacity: usize) -> SampleBlock {
    SampleBlock {
        samples: Vec::with_capacity(capacity),
        start: Stamp { utc: Utc(0), monotonic_ns: 0 },
        gap_before: true,
        clipped: 0,
    }
}
