//! fallowband: a live spectrum occupancy monitor for secondary radio links.
//!
//! The plan of the house. Data flows one way, each arrow a plain value or a bounded queue:
//!
//! ```text
//! capture ── SampleBlock ─▶ detection ── DwellReport ─▶ history ── runs, rollups ─▶ answers
//! (receiver,                (spectrum, floor,           (SQLite, one                 (HTTP, page)
//!  recording, scene)         verdict; pure)              writer thread)
//!                                        └── standing, in memory ──────────────────▶ "now"
//! ```
//!
//! - [`detection`] is the pure core: samples and time in, values out. No clock, no async, no I/O.
//! - [`scene`] is pure too: it makes the samples of an invented site from a seed, and knows the
//!   truth.
//! - [`capture`] turns a recording or a scene into stamped blocks; the only room that reads a
//!   clock.
//! - [`history`] keeps runs and rollups in SQLite.
//! - [`answers`] serves them, and the newest verdicts from memory, over HTTP.
//! - [`proof`] is pure: what an energy detector is worth, by closed forms and by trials of the real
//!   one.
//! - [`config`] turns a TOML file into checked values.
//! - [`command`] is the command line; [`daemon`] is the one place that joins the rooms.
//!
//! The rule of stairs: `command` and `daemon` may use every room; a room uses `detection` and,
//! down the arrows, at most the room before it (`answers` reads `history`, `capture` plays a
//! `scene`). `tests/house.rs` enforces it.

pub mod answers;
pub mod capture;
pub mod command;
pub mod config;
pub mod daemon;
pub mod detection;
pub mod history;
pub mod proof;
pub mod scene;
