//! The command line as its first user meets it: the real program, real files, real sockets.
//!
//! Exit codes are those that `--help` lists; the numbers are from the BSD `sysexits.h` (from
//! memory). The site, its channels and all recordings are invented.

#[path = "command/arguments.rs"]
mod arguments;
#[path = "command/check.rs"]
mod check;
#[path = "command/live.rs"]
mod live;
#[path = "command/replay.rs"]
mod replay;
#[path = "command/start.rs"]
mod start;
#[path = "command/support.rs"]
mod support;
