//! Whether the node is well, in figures and in plain sentences.
//!
//! Counts run since the program started; a problem is about the present. A count that rose once,
//! months ago, does not keep the node impaired for ever.

use serde::Serialize;

use super::figures;

/// Capture is silent when no sample came for this long (s). Receivers deliver many blocks a second,
/// so this is far beyond any jitter. Our own choice.
const SILENT_AFTER_S: f64 = 5.0;

/// A loss, of samples or of history, stays a problem for this long (s). Our own choice.
const LOSS_REMEMBERED_S: f64 = 60.0;

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
    /// How often since the start samples were given up because their delivery had fallen behind.
    pub late: u64,
    /// How often since the start UTC had parted from the monotonic clock, and stamps began anew.
    pub clock_steps: u64,
    /// Time since the newest sample (s); `None` before the first.
    #[serde(serialize_with = "as_seconds")]
    pub last_sample_age_s: Option<f64>,
    /// Time since the last gap, of whatever kind (s); `None` if never. Not served as a figure.
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
    /// Age from which the newest commit is late (s). Not served.
    #[serde(skip)]
    pub late_after_s: f64,
    /// Commits that failed since the start.
    pub failed_commits: u64,
    /// Reports since the start that the writer had no room for; their time is unknown.
    pub dropped_reports: u64,
    /// Runs since the start that waited in too great a number; their time is unknown.
    pub dropped_runs: u64,
    /// Time since one of both was last dropped (s); `None` if never. Not served as a figure.
    #[serde(skip)]
    pub last_drop_age_s: Option<f64>,
    /// Reports since the start that UTC put before the record's end; that part was left out.
    pub clipped_reports: u64,
    /// Time since the last of them (s); `None` if never. Not served as a figure.
    #[serde(skip)]
    pub last_clip_age_s: Option<f64>,
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
        [
            self.capture.problem(),
            self.capture.loss(),
            self.late_dwells(),
            self.history.stopped().or_else(|| self.late_history()),
            self.history.drops(),
            self.history.clips(),
        ]
        .into_iter()
        .flatten()
        .collect()
    }

    /// Commits that stay away although there is something to commit: no dwell since the newest one,
    /// or only dwells before the record's end, leave nothing to do.
    fn late_history(&self) -> Option<String> {
        let age_s = self.history.last_commit_age_s?;
        let waiting_s = age_s - self.detection.last_dwell_age_s.unwrap_or(age_s);
        let late = reached(waiting_s, self.history.late_after_s) && self.history.clips().is_none();
        late.then(|| {
            format!(
                "History was last committed {age_s:.0} s ago (failed commits since the start: {}).",
                self.history.failed_commits
            )
        })
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
        let age_s = fresh(self.last_loss_age_s)?;
        Some(format!(
            "There was a gap in the samples {age_s:.0} s ago (since the start: lost samples {}, \
             gaps {}, dropped blocks {}, late {}, clock steps {}).",
            self.lost_samples, self.gaps, self.blocks_dropped, self.late, self.clock_steps
        ))
    }
}

impl HistoryHealth {
    fn stopped(&self) -> Option<String> {
        (self.state == HistoryState::Stopped)
            .then(|| "History is not being written; answers about now still hold.".to_string())
    }

    fn drops(&self) -> Option<String> {
        let age_s = fresh(self.last_drop_age_s)?;
        Some(format!(
            "History could not keep up {age_s:.0} s ago, and some of it is unknown (since the \
             start: dropped reports {}, dropped runs {}).",
            self.dropped_reports, self.dropped_runs
        ))
    }

    fn clips(&self) -> Option<String> {
        let age_s = fresh(self.last_clip_age_s)?;
        Some(format!(
            "The clock was behind the end of the history {age_s:.0} s ago, and what it repeated \
             was left out (reports since the start: {}).",
            self.clipped_reports
        ))
    }
}

/// The age of a loss (s) that is still a problem.
fn fresh(age_s: Option<f64>) -> Option<f64> {
    age_s.filter(|age_s| *age_s < LOSS_REMEMBERED_S)
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
                late: 0,
                clock_steps: 0,
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
                late_after_s: 70.0,
                failed_commits: 0,
                dropped_reports: 0,
                dropped_runs: 0,
                last_drop_age_s: None,
                clipped_reports: 0,
                last_clip_age_s: None,
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
            ["There was a gap in the samples 12 s ago (since the start: lost samples 4800, gaps \
              1, dropped blocks 0, late 0, clock steps 0)."]
        );
    }

    #[test]
    fn history_that_is_lost_or_left_out_is_a_problem_while_it_is_fresh() {
        let mut health = well();
        (health.history.dropped_reports, health.history.dropped_runs) = (3, 5);
        health.history.clipped_reports = 7;
        assert_eq!(health.problems(), Vec::<String>::new());
        health.history.last_drop_age_s = Some(4.0);
        health.history.last_clip_age_s = Some(9.0);
        // While reports are left out there may be nothing to commit.
        health.history.last_commit_age_s = Some(700.0);
        assert_eq!(
            health.problems(),
            [
                "History could not keep up 4 s ago, and some of it is unknown (since the start: \
                 dropped reports 3, dropped runs 5).",
                "The clock was behind the end of the history 9 s ago, and what it repeated was \
                 left out (reports since the start: 7).",
            ]
        );
    }

    #[test]
    fn an_ended_capture_is_told_once_and_not_as_late_dwells_too() {
        let mut health = well();
        health.capture.state = CaptureState::Ended;
        health.capture.last_sample_age_s = Some(90.0);
        health.detection.last_dwell_age_s = Some(90.0);
        // Nothing has come to commit since.
        health.history.last_commit_age_s = Some(85.0);
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
        health.detection.last_dwell_age_s = Some(0.1);
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
