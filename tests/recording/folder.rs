//! A folder with a recording in it, and the metadata to write there.

use std::fs;
use std::path::PathBuf;

use fallowband::capture::CaptureError;
use fallowband::capture::recording::{Recording, Told};
use fallowband::detection::time::Utc;
use serde_json::{Value, json};
use tempfile::TempDir;

/// What a user says of a recording that states no centre.
pub(crate) const CENTRE: Told =
    Told { centre_hz: Some(433e6), start: None, fallback_centre_hz: None };
/// Nothing to say.
pub(crate) const NOTHING: Told = Told { centre_hz: None, start: None, fallback_centre_hz: None };
/// 2026-03-01T12:00:00Z (s).
pub(crate) const NOON_S: i64 = 1_772_366_400;
/// The same as the program keeps it.
pub(crate) const NOON: Utc = Utc(NOON_S * 1_000_000_000);

/// A folder with one recording named `site`.
pub(crate) struct Folder(TempDir);

impl Folder {
    pub(crate) fn new(meta: &Value, data: &[u8]) -> Folder {
        let folder = Folder(TempDir::new().expect("a folder"));
        fs::write(folder.path("site.sigmf-meta"), meta.to_string()).expect("written");
        fs::write(folder.path("site.sigmf-data"), data).expect("written");
        folder
    }

    pub(crate) fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    pub(crate) fn open(&self, told: Told) -> Result<Recording, CaptureError> {
        Recording::open(&self.path("site.sigmf-meta"), told)
    }

    /// The line with which opening is refused, file names without the folder.
    pub(crate) fn refusal(&self, told: Told) -> String {
        self.line(&self.open(told).expect_err("refused"))
    }

    pub(crate) fn line(&self, error: &CaptureError) -> String {
        let line = error.to_string();
        assert!(!line.contains('\n'), "{line}");
        line.replace(&format!("{}/", self.0.path().display()), "")
    }
}

/// Metadata of a `ci8` recording of 1000 samples a second.
pub(crate) fn meta(captures: Value) -> Value {
    json!({
        "global": {"core:datatype": "ci8", "core:sample_rate": 1000, "core:version": "1.0.0"},
        "captures": captures,
        "annotations": [],
    })
}

/// The same with one more or another key in `global`.
pub(crate) fn meta_with(key: &str, value: Value) -> Value {
    let mut meta = meta(json!([{"core:sample_start": 0, "core:frequency": 433e6}]));
    meta["global"][key] = value;
    meta
}
