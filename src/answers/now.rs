//! Answers about now: the node, its channels, the newest spectrum, its health.
//!
//! Everything here comes from memory and never waits for the database. A verdict that is too old is
//! served as `unknown`, never as the `idle` that it once was.

use axum::Json;
use axum::extract::rejection::PathRejection;
use axum::extract::{Path, State};
use axum::http::Uri;
use serde::Serialize;

use super::AppState;
use super::figures::{self, decibels, moment};
use super::problem::Problem;
use super::query::Parameters;
use crate::detection::availability::Refusal;
use crate::detection::plan::{Band, Channel, LevelRef, Plan};
use crate::detection::standing::ChannelStanding;
use crate::detection::time::Stamp;
use crate::detection::verdict::{self, Reason};

/// Hexadecimal digits of the configuration's SHA-256 that are served.
const CONFIGURATION_DIGITS: usize = 12;

#[derive(Serialize)]
pub(super) struct NodeAnswer {
    site: String,
    node: String,
    version: String,
    started: String,
    now: String,
    simulated: bool,
    source: String,
    configuration: String,
    level_ref: &'static str,
    receiver: ReceiverAnswer,
    bands: Vec<BandAnswer>,
}

#[derive(Serialize)]
struct ReceiverAnswer {
    centre_hz: f64,
    sample_rate_hz: f64,
    usable_bandwidth_hz: f64,
}

#[derive(Serialize)]
struct BandAnswer {
    id: String,
    pfa: f64,
    pd: f64,
    protection_level_db: Option<f64>,
    dwell_s: f64,
    slice_s: f64,
    check_time_s: f64,
    hold_off_s: f64,
    max_age_s: f64,
    channels: usize,
}

/// `GET /v1/node`
pub(super) async fn node(
    State(state): State<AppState>,
    uri: Uri,
) -> Result<Json<NodeAnswer>, Problem> {
    Parameters::read(&uri, &[])?;
    let (node, plan) = (&state.node, &state.plan);
    Ok(Json(NodeAnswer {
        site: node.site.clone(),
        node: node.node.clone(),
        version: node.version.clone(),
        started: moment(node.started),
        now: moment((state.clock)().utc),
        simulated: node.simulated,
        source: node.source.clone(),
        configuration: node.configuration_sha256.chars().take(CONFIGURATION_DIGITS).collect(),
        level_ref: plan.level_ref.as_str(),
        receiver: ReceiverAnswer {
            centre_hz: plan.receiver.centre_hz,
            sample_rate_hz: plan.receiver.sample_rate_hz,
            usable_bandwidth_hz: plan.receiver.usable_bandwidth_hz,
        },
        bands: band_answers(plan),
    }))
}

fn band_answers(plan: &Plan) -> Vec<BandAnswer> {
    let answer = |(band_index, band): (usize, &Band)| BandAnswer {
        id: band.id.clone(),
        pfa: band.pfa,
        pd: band.pd,
        protection_level_db: decibels(band.protection_level_db),
        dwell_s: band.dwell_s,
        slice_s: band.slice_s,
        check_time_s: figures::nanos_as_seconds(band.policy.check_time_ns),
        hold_off_s: figures::nanos_as_seconds(band.policy.hold_off_ns),
        max_age_s: figures::nanos_as_seconds(band.policy.max_age_ns),
        channels: plan.channels.iter().filter(|channel| channel.band_index == band_index).count(),
    };
    plan.bands.iter().enumerate().map(answer).collect()
}

#[derive(Serialize)]
pub(super) struct ChannelsAnswer {
    now: String,
    level_ref: &'static str,
    channels: Vec<ChannelAnswer>,
}

#[derive(Serialize)]
pub(super) struct ChannelAnswer {
    id: String,
    band: String,
    centre_hz: f64,
    bandwidth_hz: f64,
    protected: bool,
    verdict: &'static str,
    own: bool,
    reasons: Vec<&'static str>,
    since: Option<String>,
    time: Option<String>,
    age_s: Option<f64>,
    power_db: Option<f64>,
    floor_db: Option<f64>,
    threshold_db: Option<f64>,
    sensitivity_db: Option<f64>,
    margin_db: Option<f64>,
    last_detection: Option<String>,
}

/// `GET /v1/channels`
pub(super) async fn channels(
    State(state): State<AppState>,
    uri: Uri,
) -> Result<Json<ChannelsAnswer>, Problem> {
    let parameters = Parameters::read(&uri, &["band"])?;
    let plan = &state.plan;
    let band_index = match parameters.one("band")? {
        None => None,
        Some(id) => Some(band_index(plan, id)?),
    };
    let (live, now) = state.live_and_now();
    let channels = plan
        .channels
        .iter()
        .zip(&live.standing.channels)
        .filter(|(channel, _)| band_index.is_none_or(|index| channel.band_index == index))
        .map(|(channel, standing)| channel_answer(plan, channel, standing, now))
        .collect();
    Ok(Json(ChannelsAnswer { now: moment(now.utc), level_ref: plan.level_ref.as_str(), channels }))
}

fn band_index(plan: &Plan, id: &str) -> Result<usize, Problem> {
    plan.bands.iter().position(|band| band.id == id).ok_or_else(|| {
        let known: Vec<&str> = plan.bands.iter().map(|band| band.id.as_str()).collect();
        Problem::bad_value("band", id, &known.join(", "))
    })
}

/// `GET /v1/channels/{id}`
pub(super) async fn channel(
    State(state): State<AppState>,
    id: Result<Path<String>, PathRejection>,
    uri: Uri,
) -> Result<Json<ChannelAnswer>, Problem> {
    Parameters::read(&uri, &[])?;
    // A path that is no text names no channel.
    let Path(id) = id.map_err(|_rejection| Problem::no_such_channel(uri.path()))?;
    let plan = &state.plan;
    let index = plan
        .channels
        .iter()
        .position(|channel| channel.id == id)
        .ok_or_else(|| Problem::no_such_channel(&id))?;
    let (live, now) = state.live_and_now();
    let standing = &live.standing.channels[index];
    Ok(Json(channel_answer(plan, &plan.channels[index], standing, now)))
}

/// What can be said of one channel now.
fn channel_answer(
    plan: &Plan,
    channel: &Channel,
    standing: &ChannelStanding,
    now: Stamp,
) -> ChannelAnswer {
    let band = plan.band_of(channel);
    let unknown = ChannelAnswer {
        id: channel.id.clone(),
        band: band.id.clone(),
        centre_hz: channel.centre_hz,
        bandwidth_hz: channel.bandwidth_hz,
        protected: channel.protected,
        verdict: verdict::State::Unknown.as_str(),
        own: false,
        reasons: vec![Reason::NotObserved.as_str()],
        since: None,
        time: None,
        age_s: None,
        power_db: None,
        floor_db: None,
        threshold_db: None,
        sensitivity_db: None,
        margin_db: None,
        last_detection: standing.last_detection.map(|stamp| moment(stamp.utc)),
    };
    let (Some(verdict), Some(age_ns)) = (standing.verdict, standing.age_ns(now)) else {
        return unknown;
    };
    let max_age_ns = band.policy.max_age_ns;
    let observed = ChannelAnswer {
        time: Some(moment(standing.start.utc)),
        age_s: (age_ns >= 0).then(|| figures::nanos_as_seconds(age_ns)),
        ..unknown
    };
    // The same half-open rule as for offers. The levels of a stale verdict are left out: they would
    // draw an idle channel where nobody knows.
    if !(0..max_age_ns).contains(&age_ns) {
        let expired = standing.end.plus_nanos(max_age_ns);
        return ChannelAnswer {
            reasons: vec![Refusal::Stale.as_str()],
            since: (age_ns >= 0).then(|| moment(expired.utc)),
            ..observed
        };
    }
    let levels = verdict.levels;
    ChannelAnswer {
        verdict: verdict.state.as_str(),
        own: verdict.own(),
        reasons: verdict.reasons.iter().map(Reason::as_str).collect(),
        since: Some(moment(standing.since.utc)),
        power_db: levels.and_then(|levels| decibels(levels.power_db)),
        floor_db: levels.and_then(|levels| decibels(levels.floor_db)),
        threshold_db: levels.and_then(|levels| decibels(levels.threshold_db)),
        sensitivity_db: levels.and_then(|levels| decibels(levels.sensitivity_db)),
        margin_db: levels.and_then(|levels| decibels(levels.threshold_db - levels.power_db)),
        ..observed
    }
}

#[derive(Serialize)]
pub(super) struct SpectrumAnswer {
    time: String,
    start_hz: f64,
    step_hz: f64,
    level_ref: &'static str,
    power_db: Vec<Option<f64>>,
}

/// `GET /v1/spectrum`
pub(super) async fn spectrum(
    State(state): State<AppState>,
    uri: Uri,
) -> Result<Json<Option<SpectrumAnswer>>, Problem> {
    Parameters::read(&uri, &[])?;
    let live = state.live.borrow().clone();
    // A dwell that could not be measured has no spectrum.
    let Some(report) = live.newest.as_ref().filter(|report| !report.spectrum.is_empty()) else {
        return Ok(Json(None));
    };
    let receiver = &state.plan.receiver;
    let bins = report.spectrum.len();
    let step_hz = receiver.sample_rate_hz / bins as f64;
    Ok(Json(Some(SpectrumAnswer {
        time: moment(report.start.utc),
        start_hz: receiver.centre_hz - (bins / 2) as f64 * step_hz,
        step_hz,
        // The spectrum is kept in full scale whatever the plan's levels refer to.
        level_ref: LevelRef::Dbfs.as_str(),
        power_db: report
            .spectrum
            .iter()
            .map(|power| decibels(10.0 * f64::from(*power).log10()))
            .collect(),
    })))
}

#[derive(Serialize)]
pub(super) struct HealthAnswer {
    status: &'static str,
    now: String,
    problems: Vec<String>,
    #[serde(flatten)]
    health: super::health::Health,
}

/// `GET /v1/health`
pub(super) async fn health(
    State(state): State<AppState>,
    uri: Uri,
) -> Result<Json<HealthAnswer>, Problem> {
    Parameters::read(&uri, &[])?;
    let health = (state.health)();
    let problems = health.problems();
    let status = if problems.is_empty() { "well" } else { "impaired" };
    Ok(Json(HealthAnswer { status, now: moment((state.clock)().utc), problems, health }))
}
