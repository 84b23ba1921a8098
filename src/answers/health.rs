//! Whether the node is well, in figures and in plain sentences.
//!
//! Counts run since the program started; a problem is about the present. A count that rose once,
//! months ago, does not keep the node impaired for ever.

use serde::Serialize;

use super::figures;

/// Capture is silent when no sample came for this long (s). Receivers deliver many blocks a second,
/// so this is far beyond any jitter. Our own choice.
const SILENT_AFTER_S: f64 = 5.0;

/// A loss of samples stays a problem for this long (s). Our own choice.
const LOSS_REMEMBERED_S: f64 = 60.0;

/// History is late when nothing was committed for this long (s). Our own choice: many times the
/// interval at which the writer commits.
const COMMIT_LATE_AFTER_S: f64 = 60.0;

/// What capture is doing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum CaptureState {
    /// Samples are arriving, or are waited for.
    Running,
    /// The recording or scene has come to its end.
    Ended,
    /// The source failed and is not being read.
    Failed,
}

/// How the samples come in.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct CaptureHealth {
    /// What it is doing.
    pub state: CaptureState,
    /// Samples taken since the start.
    pub samples: u64,
    /// Samples known to be lost since the start.
    pub lost_samples: u64,
    /// Gaps between blocks since the start, not counting the first block's.
    pub gaps: u64,
    /// Blocks dropped since the start because detection was behind.
    pub blocks_dropped: u64,
    /// Time since the newest sample (s); `None` before the first.
    #[serde(serialize_with = "as_seconds")]
    pub last_sample_age_s: Option<f64>,
    /// Time since samples or blocks were last lost (s); `None` if never. Not served as a figure.
    #[serde(skip)]
    pub last_loss_age_s: Option<f64>,
}

/// How dwells come out.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct DetectionHealth {
    /// Dwells decided since the start.
    pub dwells: u64,
    /// Time since the newest dwell's end (s); `None` before the first.
    #[serde(serialize_with = "as_seconds")]
    pub last_dwell_age_s: Option<f64>,
    /// Age from which the newest dwell is late (s): the longest `max_age` of the plan. Not served.
    #[serde(skip)]
    pub late_after_s: f64,
}

/// What history is doing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum HistoryState {
    /// Runs and rollups are being written.
    Writing,
    /// Nothing is written: there is no history, or the writer gave up.
    Stopped,
}

/// How history is kept.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct HistoryHealth {
    /// What it is doing.
    pub state: HistoryState,
    /// Name of the file, without the folders it lies in.
    pub path_name: String,
    /// Time since the newest commit (s); `None` before the first.
    #[serde(serialize_with = "as_seconds")]
    pub last_commit_age_s: Option<f64>,
    /// Commits that failed since the start.
    pub failed_commits: u64,
    /// Size of the file (bytes).
    pub bytes: u64,
}

/// The health of the whole node at one moment.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Health {
    /// How the samples come in.
    pub capture: CaptureHealth,
    /// How dwells come out.
    pub detection: DetectionHealth,
    /// How history is kept.
    pub history: HistoryHealth,
}

impl Health {
    /// What is wrong at present, one plain sentence each; empty when the node is well.
    pub fn problems(&self) -> Vec<String> {
        [self.capture.problem(), self.capture.loss(), self.late_dwells(), self.history.problem()]
            .into_iter()
            .flatten()
            .collect()
    }

    /// Dwells that stay away although samples arrive; without samples, capture has said enough.
    fn late_dwells(&self) -> Option<String> {
        if self.capture.state != CaptureState::Running || self.capture.problem().is_some() {
            return None;
        }
        let limit_s = self.detection.late_after_s;
        match self.detection.last_dwell_age_s {
            Some(age_s) if reached(age_s, limit_s) => Some(format!(
                "No dwell was decided for {age_s:.1} s (limit {limit_s:.1} s): verdicts are stale \
                 and served as unknown."
            )),
            _ => None,
        }
    }
}

impl CaptureHealth {
    fn problem(&self) -> Option<String> {
        match (self.state, self.last_sample_age_s) {
            (CaptureState::Failed, _) => Some(
                "Capture has failed: no samples arrive and every channel turns unknown."
                    .to_string(),
            ),
            (CaptureState::Ended, _) => Some(
                "Capture has ended: no more samples arrive and every channel turns unknown."
                    .to_string(),
            ),
            (CaptureState::Running, None) => Some("No sample has arrived yet.".to_string()),
            (CaptureState::Running, Some(age_s)) if reached(age_s, SILENT_AFTER_S) => {
                Some(format!("No sample has arrived for {age_s:.1} s."))
            }
            (CaptureState::Running, Some(_)) => None,
        }
    }

    fn loss(&self) -> Option<String> {
        let age_s = self.last_loss_age_s.filter(|age_s| *age_s < LOSS_REMEMBERED_S)?;
        Some(format!(
            "Samples were lost {age_s:.0} s ago (since the start: lost samples {}, gaps {}, \
             dropped blocks {}).",
            self.lost_samples, self.gaps, self.blocks_dropped
        ))
    }
}

impl HistoryHealth {
    fn problem(&self) -> Option<String> {
        match (self.state, self.last_commit_age_s) {
            (HistoryState::Stopped, _) => {
                Some("History is not being written; answers about now still hold.".to_string())
            }
            (HistoryState::Writing, Some(age_s)) if reached(age_s, COMMIT_LATE_AFTER_S) => {
                Some(format!(
                    "History was last committed {age_s:.0} s ago (failed commits since the \
                     start: {}).",
                    self.failed_commits
                ))
            }
            (HistoryState::Writing, None) if self.failed_commits > 0 => Some(format!(
                "History has not been committed yet (failed commits: {}).",
                self.failed_commits
            )),
            (HistoryState::Writing, _) => None,
        }
    }
}

/// Whether an age has reached a limit (s); an age that is no number has, since nothing is known.
fn reached(age_s: f64, limit_s: f64) -> bool {
    age_s >= limit_s || age_s.is_nan()
}

/// Serialises an age rounded to 0.001 s; null for none and for what is no number.
fn as_seconds<S: serde::Serializer>(
    value_s: &Option<f64>,
    serializer: S,
) -> Result<S::Ok, S::Error> {
    value_s.and_then(figures::seconds).serialize(serializer)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn well() -> Health {
        Health {
            capture: CaptureHealth {
                state: CaptureState::Running,
                samples: 48_000_000,
                lost_samples: 0,
                gaps: 0,
                blocks_dropped: 0,
                last_sample_age_s: Some(0.02),
                last_loss_age_s: None,
            },
            detection: DetectionHealth {
                dwells: 100,
                last_dwell_age_s: Some(0.1),
                late_after_s: 1.0,
            },
            history: HistoryHealth {
                state: HistoryState::Writing,
                path_name: "history.sqlite3".to_string(),
                last_commit_age_s: Some(2.0),
                failed_commits: 0,
                bytes: 4096,
            },
        }
    }

    #[test]
    fn a_node_at_work_has_no_problem() {
        assert_eq!(well().problems(), Vec::<String>::new());
    }

    #[test]
    fn an_old_loss_is_a_count_and_a_fresh_one_a_problem() {
        let mut health = well();
        health.capture.lost_samples = 4800;
        health.capture.gaps = 1;
        health.capture.last_loss_age_s = Some(3600.0);
        assert_eq!(health.problems(), Vec::<String>::new());
        health.capture.last_loss_age_s = Some(12.0);
        assert_eq!(
            health.problems(),
            ["Samples were lost 12 s ago (since the start: lost samples 4800, gaps 1, dropped \
              blocks 0)."]
        );
    }

    #[test]
    fn an_ended_capture_is_told_once_and_not_as_late_dwells_too() {
        let mut health = well();
        health.capture.state = CaptureState::Ended;
        health.capture.last_sample_age_s = Some(90.0);
        health.detection.last_dwell_age_s = Some(90.0);
        assert_eq!(
            health.problems(),
            ["Capture has ended: no more samples arrive and every channel turns unknown."]
        );
    }

    #[test]
    fn each_room_that_falls_silent_is_named() {
        let mut health = well();
        health.detection.last_dwell_age_s = Some(2.5);
        health.history.state = HistoryState::Stopped;
        assert_eq!(
            health.problems(),
            [
                "No dwell was decided for 2.5 s (limit 1.0 s): verdicts are stale and served as \
                 unknown.",
                "History is not being written; answers about now still hold.",
            ]
        );
        health.capture.last_sample_age_s = Some(7.0);
        health.history.state = HistoryState::Writing;
        health.history.last_commit_age_s = Some(75.0);
        health.history.failed_commits = 3;
        assert_eq!(
            health.problems(),
            [
                "No sample has arrived for 7.0 s.",
                "History was last committed 75 s ago (failed commits since the start: 3).",
            ]
        );
    }

    #[test]
    fn an_age_that_is_no_number_is_a_problem_and_never_well() {
        let mut health = well();
        health.capture.last_sample_age_s = Some(f64::NAN);
        assert_eq!(health.problems().len(), 1);
    }
}
