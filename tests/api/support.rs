//! The invented node that the tests ask, and how they ask it.

use std::sync::Arc;

use axum::Router;
use axum::body::{Body, to_bytes};
use axum::http::{HeaderMap, Method, Request, StatusCode};
use serde_json::{Value, json};
use tokio::sync::watch;
use tower::ServiceExt;

use fallowband::answers::{
    AppState, CaptureHealth, CaptureState, DetectionHealth, Health, HistoryHealth, HistoryState,
    Live, NodeInfo, app,
};
use fallowband::detection::plan::{
    Band, Channel, FloorEstimator, FloorSettings, FloorTrend, LevelRef, Plan, Policy, Receiver,
    SpectrumSettings,
};
use fallowband::detection::standing::Standing;
use fallowband::detection::time::{NANOS_PER_SECOND, Stamp, Utc};
use fallowband::detection::verdict::{DwellReport, Levels, Reason, Reasons, State, Verdict};
use fallowband::detection::window::Window;

/// 2026-03-01T06:00:00Z, when the invented node starts; its monotonic clock then stands at 1000 s.
pub(crate) const START: Stamp =
    Stamp { utc: Utc(1_772_344_800 * NANOS_PER_SECOND), monotonic_ns: 1000 * NANOS_PER_SECOND };

pub(crate) const MILLISECOND_NS: i64 = NANOS_PER_SECOND / 1000;

/// Dwells of 0.5 s follow each other without a gap.
pub(crate) const DWELL_NS: i64 = 500 * MILLISECOND_NS;

pub(crate) fn at(millis: i64) -> Stamp {
    START.plus_nanos(millis * MILLISECOND_NS)
}

pub(crate) fn band(id: &str, max_age_s: i64) -> Band {
    Band {
        id: id.to_string(),
        pfa: 1e-4,
        pd: 0.9,
        protection_level_db: -92.0,
        dwell_s: 0.5,
        slice_s: 0.01,
        policy: Policy {
            check_time_ns: 2 * NANOS_PER_SECOND,
            hold_off_ns: 60 * NANOS_PER_SECOND,
            max_age_ns: max_age_s * NANOS_PER_SECOND,
        },
    }
}

/// S01 to S04 are 12.5 kHz wide, S04 is protected; K01 of a second band is 25 kHz wide.
pub(crate) fn plan() -> Plan {
    let channel = |id: &str, band_index, centre_hz, bandwidth_hz| Channel {
        id: id.to_string(),
        band_index,
        centre_hz,
        bandwidth_hz,
        protected: id == "S04",
    };
    Plan {
        receiver: Receiver {
            centre_hz: 168e6,
            sample_rate_hz: 240_000.0,
            usable_bandwidth_hz: 200_000.0,
            dc_guard_hz: 0.0,
        },
        spectrum: SpectrumSettings { window: Window::Hann, overlap: 0.5, transform_length: 1024 },
        floor: FloorSettings { estimator: FloorEstimator::CellAveraging, trend: FloorTrend::Flat },
        level_ref: LevelRef::Dbfs,
        bands: vec![band("saltmarsh", 1), band("creek", 5)],
        channels: vec![
            channel("S01", 0, 167.9500e6, 12_500.0),
            channel("S02", 0, 167.9625e6, 12_500.0),
            channel("S03", 0, 167.9750e6, 12_500.0),
            channel("S04", 0, 167.9875e6, 12_500.0),
            channel("K01", 1, 168.0500e6, 25_000.0),
        ],
    }
}

pub(crate) fn verdict(channel_index: usize, state: State, reasons: Reasons) -> Verdict {
    let power_db = if state == State::Occupied { -70.004 } else { -101.258 };
    let levels =
        Levels { power_db, floor_db: -101.3, threshold_db: -98.111, sensitivity_db: -97.0 };
    Verdict { channel_index, state, reasons, levels: Some(levels) }
}

/// Five seconds of dwells, the last one ending at [`END_MS`]: S01 and the protected S04 idle, S02
/// occupied until the last two dwells, S03 insensitive, K01 idle for the last dwell only.
pub(crate) fn scripted(sequence: u64) -> DwellReport {
    let s02 = if sequence < 8 { State::Occupied } else { State::Idle };
    let k01 = if sequence < 9 { State::Occupied } else { State::Idle };
    DwellReport {
        sequence,
        start: START.plus_nanos(sequence as i64 * DWELL_NS),
        observed_ns: DWELL_NS,
        verdicts: vec![
            verdict(0, State::Idle, Reasons::NONE),
            verdict(1, s02, Reasons::NONE),
            verdict(2, State::Unknown, Reasons::one(Reason::Insensitive)),
            verdict(3, State::Idle, Reasons::NONE),
            verdict(4, k01, Reasons::NONE),
        ],
        slice_power_db: Vec::new(),
        spectrum: vec![1e-9, 0.0, 1e-10, f32::NAN],
    }
}

/// When the last of the scripted dwells ends, after [`START`] (ms).
pub(crate) const END_MS: i64 = 5000;

pub(crate) fn well() -> Health {
    Health {
        capture: CaptureHealth {
            state: CaptureState::Running,
            samples: 1_200_000,
            lost_samples: 0,
            gaps: 0,
            blocks_dropped: 0,
            late: 0,
            clock_steps: 0,
            last_sample_age_s: Some(0.0123),
            last_loss_age_s: None,
        },
        detection: DetectionHealth { dwells: 10, last_dwell_age_s: Some(0.25), late_after_s: 5.0 },
        history: HistoryHealth {
            state: HistoryState::Writing,
            path_name: "history.sqlite3".to_string(),
            last_commit_age_s: None,
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

/// The state after `dwells` scripted dwells, as seen at `now`.
pub(crate) fn state(dwells: u64, now: Stamp) -> AppState {
    let plan = plan();
    let mut standing = Standing::new(&plan);
    let mut newest = None;
    for sequence in 0..dwells {
        let report = scripted(sequence);
        standing.observe(&report);
        newest = Some(Arc::new(report));
    }
    let (_sender, live) = watch::channel(Arc::new(Live { standing, newest }));
    AppState {
        node: Arc::new(NodeInfo {
            site: "Quern Mill".to_string(),
            node: "quern-mill-1".to_string(),
            version: "0.1.0".to_string(),
            started: START.utc,
            simulated: true,
            source: "scene lower_saltmarsh".to_string(),
            configuration_sha256: "0123456789abcdef".repeat(4),
        }),
        plan: Arc::new(plan),
        live,
        health: Arc::new(well),
        reader: None,
        clock: Arc::new(move || now),
    }
}

/// The service a quarter of a second after the last scripted dwell.
pub(crate) fn service() -> Router {
    app(state(10, at(END_MS + 250)))
}

pub(crate) struct Answer {
    pub(crate) status: StatusCode,
    pub(crate) headers: HeaderMap,
    pub(crate) text: String,
}

impl Answer {
    pub(crate) fn header(&self, name: &str) -> &str {
        self.headers.get(name).map_or("", |value| value.to_str().unwrap())
    }

    pub(crate) fn json(&self) -> Value {
        serde_json::from_str(&self.text).unwrap()
    }
}

pub(crate) async fn send(
    service: &Router,
    method: Method,
    uri: &str,
    body: &'static str,
) -> Answer {
    let request = Request::builder().method(method).uri(uri).body(Body::from(body)).unwrap();
    let response = service.clone().oneshot(request).await.unwrap();
    let (parts, body) = response.into_parts();
    let text = String::from_utf8(to_bytes(body, 1 << 20).await.unwrap().to_vec()).unwrap();
    Answer { status: parts.status, headers: parts.headers, text }
}

pub(crate) async fn get(service: &Router, uri: &str) -> Answer {
    send(service, Method::GET, uri, "").await
}

/// The answer's JSON, having checked that all is well with it.
pub(crate) async fn get_json(service: &Router, uri: &str) -> Value {
    let answer = get(service, uri).await;
    assert_eq!(answer.status, StatusCode::OK, "{uri}: {}", answer.text);
    assert_eq!(answer.header("content-type"), "application/json", "{uri}");
    assert_eq!(answer.header("cache-control"), "no-store", "{uri}");
    answer.json()
}

/// The problem's JSON, having checked that it is one.
pub(crate) async fn get_problem(service: &Router, uri: &str, status: u16) -> Value {
    let answer = get(service, uri).await;
    assert_eq!(answer.status.as_u16(), status, "{uri}: {}", answer.text);
    assert_eq!(answer.header("content-type"), "application/problem+json", "{uri}");
    let problem = answer.json();
    assert_eq!(problem["status"], json!(status), "{uri}");
    assert_eq!(problem["type"], json!(format!("/problems/{}", problem["code"].as_str().unwrap())));
    problem
}
