//! What decisions are worth, worked out twice: from closed forms before a node is built, and by
//! trials of its own detector afterwards.
//!
//! Pure, as `detection` is, which is all that it uses: no clock, no file, no thread. The same seed
//! gives the same trials. Nothing here decides anything about a real band.

pub mod format;
pub mod radiometer;
pub mod stated;
pub mod tally;
pub mod trial;
