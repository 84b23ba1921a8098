//! The pure core: samples and time in, verdicts out.
//!
//! Nothing here reads a clock, a file or a socket, starts a thread or logs; the same code runs in
//! the daemon, in a replay, in the tests and in a simulation at a thousand times real time.
//!
//! Conventions, stated once: a complex tone of amplitude 1 is 0 dBFS; power spectra are scaled so
//! that their bins sum to the mean of `|x|^2`; bins run from the lowest frequency to the highest,
//! DC at index `N/2`; frequencies in a plan are radio frequencies, offsets from the centre are so
//! named.

pub mod availability;
pub mod block;
pub mod burst;
pub mod decision;
pub mod detector;
pub mod floor;
pub mod layout;
pub mod memory;
pub mod plan;
pub mod segment;
mod slices;
pub mod spectrum;
pub mod standing;
pub mod statistics;
pub mod time;
pub mod timing;
pub mod verdict;
pub mod window;
