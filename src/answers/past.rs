//! Answers about the past: occupancy by steps of time, and runs.
//!
//! The history is read on threads that may block, a few questions at a time. Time without a record
//! is unknown, and the four sums always add up to the elapsed time.

use axum::extract::State;
use axum::http::{Uri, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use tokio::sync::Semaphore;

use super::AppState;
use super::figures::{self, NANOS_PER_DAY, NANOS_PER_MILLISECOND, decibels, moment};
use super::problem::Problem;
use super::query::{Parameters, channel_index};
use crate::detection::time::{NANOS_PER_SECOND, Utc};
use crate::detection::verdict::Reason;
use crate::history::{ChannelColumns, Column, Reader, RunList, RunRow, Sums};

/// A step by which occupancy can be told.
struct Step {
    /// As it is asked for.
    word: &'static str,
    /// Length (s).
    length_s: i64,
    /// Longest range of one question (days): short steps are summed from runs, which takes longer.
    days_max: i64,
}

const STEPS: [Step; 4] = [
    Step { word: "1m", length_s: 60, days_max: 1 },
    Step { word: "5m", length_s: 300, days_max: 7 },
    Step { word: "15m", length_s: 900, days_max: 31 },
    Step { word: "1h", length_s: 3600, days_max: 31 },
];

/// The step when nothing else is asked for.
const STEP_DEFAULT: &str = "15m";

/// Steps times channels that one answer may hold: a week of 500 channels by quarters of an hour is
/// 336,000. An answer takes some hundred bytes of memory for each while it is made.
const CELLS_MAX: i64 = 400_000;

/// Runs in an answer when nothing else is asked for, and at most.
const RUNS_DEFAULT: usize = 1000;
const RUNS_MAX: usize = 10_000;

/// Questions to the history that are worked on at once; further ones wait their turn, within the
/// time that a request may take. It bounds memory, and leaves the node's cores to the detector.
static QUESTIONS: Semaphore = Semaphore::const_new(2);

/// A half-open range in whole milliseconds, `from` before `to`, `to` not after now.
#[derive(Clone, Copy)]
struct Range {
    from: Utc,
    to: Utc,
}

impl Step {
    fn read(parameters: &Parameters) -> Result<&'static Step, Problem> {
        let word = parameters.one("resolution")?.unwrap_or(STEP_DEFAULT);
        STEPS.iter().find(|step| step.word == word).ok_or_else(|| {
            let words = STEPS.map(|step| step.word);
            Problem::bad_value("resolution", word, &words.join(", "))
        })
    }
}

impl Range {
    /// Reads `from` and `to`. Without them it is the last 24 h; `to` in the future is now.
    fn read(parameters: &Parameters, now: Utc) -> Result<Range, Problem> {
        let cut = |utc: Utc| Utc(utc.0 - utc.0.rem_euclid(NANOS_PER_MILLISECOND));
        let to = cut(parameters.moment("to")?.map_or(now, |to| to.min(now)));
        let from = match parameters.moment("from")? {
            Some(from) => cut(from),
            None => to.plus_nanos(-NANOS_PER_DAY),
        };
        if from < to {
            return Ok(Range { from, to });
        }
        let allowed = format!("a time before the end of the range, {}", moment(to));
        Err(Problem::bad_value("from", &moment(from), &allowed))
    }

    fn length_ns(self) -> i64 {
        self.to.nanos_since(self.from)
    }

    /// Refuses a range that is too long for so many channels by such steps.
    fn bounded(self, channels: usize, step: &Step) -> Result<Range, Problem> {
        let steps_max = CELLS_MAX / channels.max(1) as i64;
        let longest_ns =
            (steps_max * step.length_s * NANOS_PER_SECOND).min(step.days_max * NANOS_PER_DAY);
        if self.length_ns() <= longest_ns {
            return Ok(self);
        }
        let allowed = format!(
            "at most {} h at once for {channels} channels by {}, so not before {}",
            longest_ns / (3600 * NANOS_PER_SECOND),
            step.word,
            moment(self.to.plus_nanos(-longest_ns)),
        );
        Err(Problem::bad_value("from", &moment(self.from), &allowed))
    }
}

/// `GET /v1/occupancy`
pub(super) async fn occupancy(
    State(state): State<AppState>,
    uri: Uri,
) -> Result<Response, Problem> {
    let parameters = Parameters::read(&uri, &["from", "to", "channel", "resolution"])?;
    let step = Step::read(&parameters)?;
    let plan = &state.plan;
    let mut names: Vec<String> = Vec::new();
    for id in parameters.all("channel") {
        channel_index(plan, "channel", id)?;
        if !names.iter().any(|name| name == id) {
            names.push(id.to_string());
        }
    }
    if names.is_empty() {
        names = plan.channels.iter().map(|channel| channel.id.clone()).collect();
    }
    let now = (state.clock)().utc;
    let range = Range::read(&parameters, now)?.bounded(names.len(), step)?;
    ask(&state, move |reader| {
        let channels = reader
            .columns(Some(&names), range.from, range.to, now, step.length_s * 1_000_000)
            .map_err(|error| error.to_string())?;
        occupancy_answer(range, step, &channels)
    })
    .await
}

/// `GET /v1/runs`
pub(super) async fn runs(State(state): State<AppState>, uri: Uri) -> Result<Response, Problem> {
    let parameters = Parameters::read(&uri, &["channel", "from", "to", "limit"])?;
    let Some(channel) = parameters.one("channel")?.map(str::to_string) else {
        return Err(Problem::missing_key("channel", "the id of a channel of the plan"));
    };
    channel_index(&state.plan, "channel", &channel)?;
    let limit = parameters
        .number(
            "limit",
            |limit| (1..=RUNS_MAX).contains(limit),
            &format!("a whole number from 1 to {RUNS_MAX}"),
        )?
        .unwrap_or(RUNS_DEFAULT);
    let now = (state.clock)().utc;
    let range = Range::read(&parameters, now)?;
    ask(&state, move |reader| {
        let list = reader
            .runs(&channel, range.from, range.to, now, limit)
            .map_err(|error| error.to_string())?;
        Ok(runs_answer(channel, &list))
    })
    .await
}

/// Puts a question to the history and writes the answer, both on a thread that may block. What the
/// question says of its failure goes to the log, not to the asker.
async fn ask<T: Serialize>(
    state: &AppState,
    question: impl FnOnce(&Reader) -> Result<T, String> + Send + 'static,
) -> Result<Response, Problem> {
    let reader = state.reader.clone().ok_or_else(Problem::no_history)?;
    let permit = QUESTIONS.acquire().await.expect("the semaphore is never closed");
    let work = tokio::task::spawn_blocking(move || {
        // Held until the work is done, even if nobody waits for it any more.
        let _permit = permit;
        question(&reader).map(|answer| {
            serde_json::to_string(&answer).expect("names, numbers and lists are always JSON")
        })
    });
    match work.await {
        Ok(Ok(text)) => Ok(([(header::CONTENT_TYPE, "application/json")], text).into_response()),
        Ok(Err(message)) => {
            tracing::warn!("a question to the history failed: {message}");
            Err(Problem::history_unreadable())
        }
        Err(error) => {
            tracing::error!(%error, "a question to the history did not end");
            Err(Problem::history_unreadable())
        }
    }
}

#[derive(Serialize)]
struct OccupancyAnswer {
    from: String,
    to: String,
    resolution_s: i64,
    start: Vec<String>,
    channels: Vec<ChannelOccupancy>,
}

#[derive(Default, Serialize)]
struct ChannelOccupancy {
    id: String,
    occupied_s: Vec<f64>,
    idle_s: Vec<f64>,
    unknown_s: Vec<f64>,
    own_s: Vec<f64>,
    observed_s: Vec<f64>,
    occupancy: Vec<Option<f64>>,
    total: Total,
}

#[derive(Default, Serialize)]
struct Total {
    occupied_s: f64,
    idle_s: f64,
    unknown_s: f64,
    own_s: f64,
    observed_s: f64,
    elapsed_s: f64,
    occupancy: Option<f64>,
    unknown_share: Option<f64>,
}

/// # Errors
/// If the sums do not add up: then the record is damaged, and no figure made of it is given out.
fn occupancy_answer(
    range: Range,
    step: &Step,
    channels: &[ChannelColumns],
) -> Result<OccupancyAnswer, String> {
    let starts = |channel: &ChannelColumns| {
        channel.columns.iter().map(|column| moment(column.start)).collect()
    };
    Ok(OccupancyAnswer {
        from: moment(range.from),
        to: moment(range.to),
        resolution_s: step.length_s,
        start: channels.first().map(starts).unwrap_or_default(),
        channels: channels
            .iter()
            .map(|channel| channel_occupancy(channel, range))
            .collect::<Result<_, _>>()?,
    })
}

fn channel_occupancy(channel: &ChannelColumns, range: Range) -> Result<ChannelOccupancy, String> {
    let astray =
        |start| format!("channel {}: sums from {} do not add up", channel.channel, moment(start));
    let mut columns = ChannelOccupancy { id: channel.channel.clone(), ..Default::default() };
    let mut total = Sums::default();
    for Column { start, end, sums } in &channel.columns {
        if sums.represented_us() * 1000 != end.nanos_since(*start) {
            return Err(astray(*start));
        }
        let [occupied_s, idle_s, unknown_s, own_s] = four_sums(sums);
        columns.occupied_s.push(occupied_s);
        columns.idle_s.push(idle_s);
        columns.unknown_s.push(unknown_s);
        columns.own_s.push(own_s);
        columns.observed_s.push(figures::nanos_as_seconds(sums.observed_us * 1000));
        columns.occupancy.push(occupied_share(sums));
        total.occupied_us += sums.occupied_us;
        total.idle_us += sums.idle_us;
        total.unknown_us += sums.unknown_us;
        total.own_us += sums.own_us;
        total.observed_us += sums.observed_us;
    }
    if total.represented_us() * 1000 != range.length_ns() {
        return Err(astray(range.from));
    }
    let [occupied_s, idle_s, unknown_s, own_s] = four_sums(&total);
    columns.total = Total {
        occupied_s,
        idle_s,
        unknown_s,
        own_s,
        observed_s: figures::nanos_as_seconds(total.observed_us * 1000),
        elapsed_s: figures::nanos_as_seconds(range.length_ns()),
        occupancy: occupied_share(&total),
        unknown_share: figures::share(total.unknown_us as f64 / total.represented_us() as f64),
    };
    Ok(columns)
}

/// Occupied, idle, unknown and own time (s), rounded so that they add up to the whole.
fn four_sums(sums: &Sums) -> [f64; 4] {
    figures::parts_as_seconds(
        [sums.occupied_us, sums.idle_us, sums.unknown_us, sums.own_us].map(|us| us * 1000),
    )
}

/// Occupied / (occupied + idle); `None` where neither was found: nothing over nothing is no number.
fn occupied_share(sums: &Sums) -> Option<f64> {
    figures::share(sums.occupied_us as f64 / (sums.occupied_us + sums.idle_us) as f64)
}

#[derive(Serialize)]
struct RunsAnswer {
    channel: String,
    runs: Vec<RunAnswer>,
    truncated: bool,
}

#[derive(Serialize)]
struct RunAnswer {
    state: &'static str,
    start: String,
    end: String,
    reasons: Vec<&'static str>,
    power_mean_db: Option<f64>,
    power_max_db: Option<f64>,
    level_ref: Option<String>,
}

fn runs_answer(channel: String, list: &RunList) -> RunsAnswer {
    let answer = |run: &RunRow| RunAnswer {
        state: run.state.as_str(),
        start: moment(run.start),
        end: moment(run.end),
        reasons: run.reasons.iter().map(Reason::as_str).collect(),
        power_mean_db: run.power_mean_db.and_then(decibels),
        power_max_db: run.power_max_db.and_then(decibels),
        level_ref: run.level_ref.clone(),
    };
    RunsAnswer { channel, runs: list.runs.iter().map(answer).collect(), truncated: list.truncated }
}
