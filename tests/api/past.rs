//! Answers about the past, from a real history file written through the history's own writer.

use std::path::Path;
use std::sync::Arc;

use axum::Router;
use serde_json::{Value, json};
use tempfile::TempDir;

use fallowband::answers::app;
use fallowband::detection::time::NANOS_PER_SECOND;
use fallowband::detection::verdict::{DwellReport, Reason, Reasons, State};
use fallowband::history::{History, Identity, Options};

use crate::support::{START, at, get_json, get_problem, plan, service, state, verdict};

const MINUTE_MS: i64 = 60_000;

/// A dwell of S01, from `from_ms` to `to_ms` after 06:00.
fn dwell(from_ms: i64, to_ms: i64, state: State, reasons: Reasons) -> DwellReport {
    DwellReport {
        sequence: 0,
        start: at(from_ms),
        observed_ns: (to_ms - from_ms) * 1_000_000,
        verdicts: vec![verdict(0, state, reasons)],
        slice_power_db: Vec::new(),
        spectrum: Vec::new(),
    }
}

/// 06:05 occupied, 06:10 idle, 06:15 own, 06:20 nobody looks, 06:25 insensitive, 06:27 the end.
fn morning() -> Vec<DwellReport> {
    [
        (5, 10, State::Occupied, Reasons::NONE),
        (10, 15, State::Idle, Reasons::NONE),
        (15, 20, State::Unknown, Reasons::one(Reason::Own)),
        (25, 27, State::Unknown, Reasons::one(Reason::Insensitive)),
    ]
    .map(|(from, to, state, reasons)| dwell(from * MINUTE_MS, to * MINUTE_MS, state, reasons))
    .into()
}

/// Writes the reports to a history in `folder` and serves it, `now_ms` after 06:00.
fn serve_history(folder: &Path, reports: Vec<DwellReport>, now_ms: i64) -> Router {
    let identity = Identity {
        site: "Quern Mill".to_string(),
        node: "quern-mill-1".to_string(),
        program_version: "0.1.0".to_string(),
        configuration_text: String::new(),
    };
    let path = folder.join("history.sqlite3");
    let history = History::open(&path, &identity, &plan(), Options::default()).unwrap();
    for report in reports {
        assert!(history.writer.offer(Arc::new(report)));
    }
    assert_eq!(history.writer.close().failed_commits, 0);
    let mut state = state(0, at(now_ms));
    state.reader = Some(history.reader);
    app(state)
}

fn seconds(value: &Value) -> f64 {
    value.as_f64().unwrap_or_else(|| panic!("{value} is no number"))
}

const SUMS: [&str; 4] = ["occupied_s", "idle_s", "unknown_s", "own_s"];

/// Checks that each stretch and the whole of every channel add up to the elapsed time.
fn assert_adds_up(answer: &Value, elapsed_s: f64) {
    // Figures are whole milliseconds, so only the binary form of such numbers is allowed for.
    let equal = |a: f64, b: f64| (a - b).abs() < 1e-6;
    for channel in answer["channels"].as_array().unwrap() {
        let total = &channel["total"];
        let sum: f64 = SUMS.iter().map(|name| seconds(&total[name])).sum();
        assert!(equal(sum, elapsed_s), "{sum} and not {elapsed_s}: {total}");
        assert!(equal(seconds(&total["elapsed_s"]), elapsed_s), "{total}");
        let stretches = answer["start"].as_array().unwrap().len();
        let lengths: Vec<f64> = (0..stretches)
            .map(|index| SUMS.iter().map(|name| seconds(&channel[name][index])).sum())
            .collect();
        assert!(equal(lengths.iter().sum(), elapsed_s), "{lengths:?} and not {elapsed_s}");
        assert!(
            lengths.iter().skip(1).rev().skip(1).all(|length| equal(*length, 900.0)),
            "{lengths:?}"
        );
    }
}

#[tokio::test]
async fn occupancy_comes_by_quarter_hour_and_ends_now() {
    let folder = TempDir::new().unwrap();
    let service = serve_history(folder.path(), morning(), 40 * MINUTE_MS);
    let answer = get_json(
        &service,
        "/v1/occupancy?channel=S01&resolution=15m&from=2026-03-01T06:00:00Z\
         &to=2026-03-02T00:00:00Z",
    )
    .await;
    assert_eq!(
        answer,
        json!({
            "from": "2026-03-01T06:00:00.000Z", "to": "2026-03-01T06:40:00.000Z",
            "resolution_s": 900,
            "start": ["2026-03-01T06:00:00.000Z", "2026-03-01T06:15:00.000Z",
                      "2026-03-01T06:30:00.000Z"],
            "channels": [{
                "id": "S01",
                "occupied_s": [300.0, 0.0, 0.0], "idle_s": [300.0, 0.0, 0.0],
                "unknown_s": [300.0, 600.0, 600.0], "own_s": [0.0, 300.0, 0.0],
                "observed_s": [600.0, 420.0, 0.0], "occupancy": [0.5, null, null],
                "total": {"occupied_s": 300.0, "idle_s": 300.0, "unknown_s": 1500.0,
                          "own_s": 300.0, "observed_s": 1020.0, "elapsed_s": 2400.0,
                          "occupancy": 0.5, "unknown_share": 0.625},
            }],
        })
    );
    assert_adds_up(&answer, 2400.0);
}

#[tokio::test]
async fn occupancy_comes_by_any_step_that_is_offered() {
    let folder = TempDir::new().unwrap();
    let service = serve_history(folder.path(), morning(), 40 * MINUTE_MS);
    for (resolution, resolution_s, starts) in
        [("1m", 60, 35), ("5m", 300, 7), ("15m", 900, 3), ("1h", 3600, 1)]
    {
        let uri =
            format!("/v1/occupancy?channel=S01&resolution={resolution}&from=2026-03-01T06:05:30Z");
        let answer = get_json(&service, &uri).await;
        assert_eq!(answer["resolution_s"], json!(resolution_s));
        assert_eq!(answer["start"][0], json!("2026-03-01T06:05:30.000Z"));
        assert_eq!(answer["start"].as_array().unwrap().len(), starts, "{resolution}");
        assert_eq!(
            answer["channels"][0]["total"],
            json!({"occupied_s": 270.0, "idle_s": 300.0, "unknown_s": 1200.0, "own_s": 300.0,
                   "observed_s": 990.0, "elapsed_s": 2070.0, "occupancy": 0.473684,
                   "unknown_share": 0.57971}),
            "{resolution}"
        );
    }
    let uri = "/v1/occupancy?channel=S01&resolution=5m&from=2026-03-01T06:00:00Z";
    let answer = get_json(&service, uri).await;
    let channel = &answer["channels"][0];
    assert_eq!(channel["occupied_s"], json!([0.0, 300.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0]));
}

#[tokio::test]
async fn the_sums_add_up_whatever_the_edges_and_a_channel_without_record_is_unknown() {
    let folder = TempDir::new().unwrap();
    // A hundred dwells of 33.333 s that begin at an odd nanosecond, of every kind, every fifth one
    // missing.
    let kinds = [
        (State::Idle, Reasons::NONE),
        (State::Occupied, Reasons::NONE),
        (State::Unknown, Reasons::one(Reason::Own)),
        (State::Unknown, Reasons::one(Reason::Overload)),
    ];
    let length_ns = 33_333_333_333;
    let reports = (0..100)
        .filter(|index| index % 5 != 4)
        .map(|index: i64| {
            let (state, reasons) = kinds[index as usize % kinds.len()];
            DwellReport {
                start: START.plus_nanos(123_456_789 + index * length_ns),
                observed_ns: length_ns,
                ..dwell(0, 1, state, reasons)
            }
        })
        .collect();
    let service = serve_history(folder.path(), reports, 60 * MINUTE_MS);
    for (from, to, elapsed_s) in [
        ("06:00:00Z", "07:00:00Z", 3600.0),
        ("06:00:00.0004Z", "06:47:11.1239Z", 2831.123),
        ("06:14:59.999Z", "06:15:00.001Z", 0.002),
        ("06:20:00Z", "06:20:00.001Z", 0.001),
        ("05:59:59.999Z", "23:00:00Z", 3600.001),
        ("07:00:00%2B01:00", "06:40:00Z", 2400.0),
    ] {
        let uri = format!("/v1/occupancy?from=2026-03-01T{from}&to=2026-03-01T{to}");
        let answer = get_json(&service, &uri).await;
        assert_eq!(answer["channels"].as_array().unwrap().len(), 5, "{uri}");
        assert_adds_up(&answer, elapsed_s);
        for channel in answer["channels"].as_array().unwrap().iter().skip(1) {
            assert_eq!(channel["total"]["unknown_share"], json!(1.0), "{uri}: {channel}");
            assert_eq!(channel["total"]["occupancy"], Value::Null, "{uri}: {channel}");
        }
    }
    // Without a range it is the last 24 h.
    let day = get_json(&service, "/v1/occupancy?channel=S01&channel=K01&channel=S01").await;
    assert_eq!(day["from"], json!("2026-02-28T07:00:00.000Z"));
    assert_eq!(day["channels"].as_array().unwrap().len(), 2);
    assert_adds_up(&day, 86_400.0);
    assert!(seconds(&day["channels"][0]["total"]["idle_s"]) > 600.0, "{day}");
}

#[tokio::test]
async fn runs_tell_the_range_without_holes() {
    let folder = TempDir::new().unwrap();
    let service = serve_history(folder.path(), morning(), 40 * MINUTE_MS);
    let run = |state: &str, from: i64, to: i64, reasons: Value, level: Value| {
        let (power, level_ref) = match level {
            Value::Null => (Value::Null, Value::Null),
            level => (level, json!("dBFS")),
        };
        let level_ref = if reasons == json!(["not_observed"]) { level_ref } else { json!("dBFS") };
        json!({
            "state": state, "start": format!("2026-03-01T06:{from:02}:00.000Z"),
            "end": format!("2026-03-01T06:{to:02}:00.000Z"), "reasons": reasons,
            "power_mean_db": power, "power_max_db": power, "level_ref": level_ref,
        })
    };
    let uri = "/v1/runs?channel=S01&from=2026-03-01T06:00:00Z&to=2026-03-01T06:40:00Z";
    let answer = get_json(&service, uri).await;
    let mut runs = vec![
        run("unknown", 0, 5, json!(["not_observed"]), Value::Null),
        run("occupied", 5, 10, json!([]), json!(-70.0)),
        run("idle", 10, 15, json!([]), Value::Null),
        run("own", 15, 20, json!(["own"]), Value::Null),
        run("unknown", 20, 25, json!(["not_observed"]), Value::Null),
        run("unknown", 25, 27, json!(["insensitive"]), Value::Null),
        run("unknown", 27, 40, json!(["not_observed"]), Value::Null),
    ];
    // The hole between two dwells is itself on the record, with what its levels would refer to.
    runs[4]["level_ref"] = json!("dBFS");
    assert_eq!(answer, json!({"channel": "S01", "runs": runs, "truncated": false}));

    let two = get_json(&service, &format!("{uri}&limit=2")).await;
    assert_eq!(two, json!({"channel": "S01", "runs": &runs[..2], "truncated": true}));
}

#[tokio::test]
async fn a_range_that_cannot_be_answered_says_what_could_be() {
    let folder = TempDir::new().unwrap();
    let service = serve_history(folder.path(), morning(), 40 * MINUTE_MS);
    for (uri, code, field, detail) in [
        (
            "/v1/occupancy?from=yesterday",
            "bad_value",
            "from",
            "from: \"yesterday\" was given; allowed: a time in RFC 3339 such as \
             2026-03-01T06:00:00Z, years 1970 to 2261, with the + of an offset written as %2B.",
        ),
        (
            "/v1/occupancy?from=2026-03-01T06:40:00Z",
            "bad_value",
            "from",
            "from: \"2026-03-01T06:40:00.000Z\" was given; allowed: a time before the end of the \
             range, 2026-03-01T06:40:00.000Z.",
        ),
        (
            "/v1/occupancy?from=2026-01-01T00:00:00Z",
            "bad_value",
            "from",
            "from: \"2026-01-01T00:00:00.000Z\" was given; allowed: at most 744 h at once for 5 \
             channels by 15m, so not before 2026-01-29T06:40:00.000Z.",
        ),
        (
            "/v1/occupancy?resolution=2m",
            "bad_value",
            "resolution",
            "resolution: \"2m\" was given; allowed: 1m, 5m, 15m, 1h.",
        ),
        ("/v1/occupancy?resolution=1m&from=2026-02-28T06:39:59.999Z", "bad_value", "from", ""),
        ("/v1/occupancy?channel=S99", "bad_value", "channel", ""),
        ("/v1/occupancy?bogus=", "unknown_key", "bogus", ""),
        (
            "/v1/runs",
            "missing_key",
            "channel",
            "\"channel\" must be given: the id of a channel of the plan.",
        ),
        ("/v1/runs?channel=S99", "bad_value", "channel", ""),
        (
            "/v1/runs?channel=S01&limit=10001",
            "bad_value",
            "limit",
            "limit: \"10001\" was given; allowed: a whole number from 1 to 10000.",
        ),
        (
            "/v1/runs?channel=S01&to=1970-01-01T00:00:00Z&from=2261-01-01T00:00:00Z",
            "bad_value",
            "from",
            "",
        ),
    ] {
        let problem = get_problem(&service, uri, 400).await;
        assert_eq!(problem["code"], json!(code), "{uri}");
        assert_eq!(problem["field"], json!(field), "{uri}");
        if !detail.is_empty() {
            assert_eq!(problem["detail"], json!(detail), "{uri}");
        }
    }
    // Exactly the longest ranges are answered.
    let day = "/v1/occupancy?resolution=1m&channel=S01&from=2026-02-28T06:40:00Z";
    let day = get_json(&service, day).await;
    assert_eq!(day["start"].as_array().unwrap().len(), 1440);
    let month = get_json(&service, "/v1/occupancy?channel=S01&from=2026-01-29T06:40:00Z").await;
    assert_adds_up(&month, 31.0 * 86_400.0);
}

#[tokio::test]
async fn a_node_without_history_says_so_and_checks_the_question_first() {
    for uri in ["/v1/occupancy", "/v1/runs?channel=S01"] {
        let problem = get_problem(&service(), uri, 503).await;
        assert_eq!(problem["code"], json!("no_history"), "{uri}");
    }
    get_problem(&service(), "/v1/runs?channel=S99", 400).await;
}

#[tokio::test]
async fn a_damaged_history_gives_no_figures_and_shows_nothing_of_itself() {
    let folder = TempDir::new().unwrap();
    let service = serve_history(folder.path(), morning(), 40 * MINUTE_MS);
    let database = rusqlite::Connection::open(folder.path().join("history.sqlite3")).unwrap();
    // A second record of the same time: 06:00 to 06:15 would count twice.
    database
        .execute_batch(
            "INSERT INTO channel (name, band, centre_hz, bandwidth_hz, valid_from_us, valid_to_us)
             VALUES ('S01', 'elsewhere', 1.0, 1.0, 0, 1);",
        )
        .unwrap();
    database
        .execute(
            "INSERT INTO quarter VALUES (last_insert_rowid(), ?1, 0, 900000000, 0, 0, 0)",
            [START.utc.0 / 1000],
        )
        .unwrap();
    let uri = "/v1/occupancy?channel=S01&from=2026-03-01T06:00:00Z";
    let double = get_problem(&service, uri, 503).await;
    assert_eq!(double["code"], json!("history_unreadable"));
    // The rest of the record still answers.
    let rest = get_json(&service, "/v1/occupancy?from=2026-03-01T06:15:00Z").await;
    assert_adds_up(&rest, 25.0 * 60.0);

    database.execute_batch("DROP TABLE quarter; DROP TABLE run;").unwrap();
    for uri in [uri, "/v1/runs?channel=S01"] {
        let problem = get_problem(&service, uri, 503).await;
        assert_eq!(problem["code"], json!("history_unreadable"), "{uri}");
        assert_eq!(
            problem["detail"],
            json!("The history could not be read; the node's log says why.")
        );
    }
    assert_eq!(START.utc.0 % (900 * NANOS_PER_SECOND), 0, "06:00 begins a quarter of an hour");
}
