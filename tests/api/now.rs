//! Answers about now, by expected JSON.

use std::sync::Arc;

use serde_json::{Value, json};

use fallowband::answers::{HistoryState, app};

use crate::support::{END_MS, MILLISECOND_NS, START, at, get_json, service, state, well};

#[tokio::test]
async fn the_node_says_who_it_is_and_what_it_watches() {
    let band = |id: &str, max_age_s: f64, channels: usize| {
        json!({"id": id, "pfa": 1e-4, "pd": 0.9, "protection_level_db": -92.0, "dwell_s": 0.5,
               "slice_s": 0.01, "check_time_s": 2.0, "hold_off_s": 60.0, "max_age_s": max_age_s,
               "channels": channels})
    };
    assert_eq!(
        get_json(&service(), "/v1/node").await,
        json!({
            "site": "Quern Mill", "node": "quern-mill-1", "version": "0.1.0",
            "started": "2026-03-01T06:00:00.000Z", "now": "2026-03-01T06:00:05.250Z",
            "simulated": true, "source": "scene lower_saltmarsh", "configuration": "0123456789ab",
            "level_ref": "dBFS",
            "receiver": {"centre_hz": 168e6, "sample_rate_hz": 240e3, "usable_bandwidth_hz": 200e3},
            "bands": [band("saltmarsh", 1.0, 4), band("creek", 5.0, 1)],
        })
    );
}

#[tokio::test]
async fn channels_stand_as_their_newest_verdicts_say() {
    let answer = get_json(&service(), "/v1/channels").await;
    assert_eq!(answer["now"], json!("2026-03-01T06:00:05.250Z"));
    assert_eq!(answer["level_ref"], json!("dBFS"));
    assert_eq!(
        answer["channels"][1],
        json!({
            "id": "S02", "band": "saltmarsh", "centre_hz": 167_962_500.0, "bandwidth_hz": 12_500.0,
            "protected": false, "verdict": "idle", "own": false, "reasons": [],
            "since": "2026-03-01T06:00:04.000Z", "time": "2026-03-01T06:00:04.500Z", "age_s": 0.25,
            "power_db": -101.26, "floor_db": -101.3, "threshold_db": -98.11,
            "sensitivity_db": -97.0, "margin_db": 3.15,
            "last_detection": "2026-03-01T06:00:04.000Z",
        })
    );
    let verdicts: Vec<&str> = answer["channels"]
        .as_array()
        .unwrap()
        .iter()
        .map(|channel| channel["verdict"].as_str().unwrap())
        .collect();
    assert_eq!(verdicts, ["idle", "idle", "unknown", "idle", "idle"]);
    assert_eq!(answer["channels"][2]["reasons"], json!(["insensitive"]));
    assert_eq!(answer["channels"][3]["protected"], json!(true));

    let one = get_json(&service(), "/v1/channels/S02").await;
    assert_eq!(one, answer["channels"][1]);
    let creek = get_json(&service(), "/v1/channels?band=creek").await;
    assert_eq!(creek["channels"], json!([answer["channels"][4]]));
}

#[tokio::test]
async fn a_channel_that_nobody_has_looked_at_is_unknown() {
    let service = app(state(0, at(0)));
    assert_eq!(
        get_json(&service, "/v1/channels/S01").await,
        json!({
            "id": "S01", "band": "saltmarsh", "centre_hz": 167.95e6, "bandwidth_hz": 12_500.0,
            "protected": false, "verdict": "unknown", "own": false, "reasons": ["not_observed"],
            "since": null, "time": null, "age_s": null, "power_db": null, "floor_db": null,
            "threshold_db": null, "sensitivity_db": null, "margin_db": null,
            "last_detection": null,
        })
    );
    let answer = get_json(&service, "/v1/availability?channel=S01").await;
    assert_eq!(answer["offers"], json!([]));
    assert_eq!(answer["refusals"], json!([{"channel": "S01", "reasons": ["stale"]}]));
    assert_eq!(get_json(&service, "/v1/spectrum").await, Value::Null);
}

#[tokio::test]
async fn a_verdict_as_old_as_the_limit_is_unknown_and_never_idle() {
    // The limit of S01's band is 1 s: one millisecond younger is idle, exactly that old is not.
    let fresh = get_json(&app(state(10, at(END_MS + 999))), "/v1/channels/S01").await;
    assert_eq!(fresh["verdict"], json!("idle"));
    let service = app(state(10, at(END_MS + 1000)));
    assert_eq!(
        get_json(&service, "/v1/channels/S01").await,
        json!({
            "id": "S01", "band": "saltmarsh", "centre_hz": 167.95e6, "bandwidth_hz": 12_500.0,
            "protected": false, "verdict": "unknown", "own": false, "reasons": ["stale"],
            "since": "2026-03-01T06:00:06.000Z", "time": "2026-03-01T06:00:04.500Z", "age_s": 1.0,
            "power_db": null, "floor_db": null, "threshold_db": null, "sensitivity_db": null,
            "margin_db": null, "last_detection": null,
        })
    );
    // K01's band allows 5 s.
    assert_eq!(get_json(&service, "/v1/channels/K01").await["verdict"], json!("idle"));
    let offers = get_json(&service, "/v1/availability").await;
    assert_eq!(offers["offers"], json!([]));
}

#[tokio::test]
async fn a_clock_that_runs_behind_the_evidence_makes_it_unknown() {
    let answer = get_json(&app(state(10, at(END_MS - 1))), "/v1/channels/S01").await;
    assert_eq!(answer["verdict"], json!("unknown"));
    assert_eq!(answer["reasons"], json!(["stale"]));
    assert_eq!(answer["age_s"], Value::Null);
}

#[tokio::test]
async fn a_channel_long_idle_is_offered_and_all_others_are_refused_with_reasons() {
    assert_eq!(
        get_json(&service(), "/v1/availability").await,
        json!({
            "now": "2026-03-01T06:00:05.250Z",
            "offers": [{
                "channel": "S01", "band": "saltmarsh", "centre_hz": 167.95e6,
                "bandwidth_hz": 12_500.0, "valid_until": "2026-03-01T06:00:06.000Z",
                "valid_for_ms": 750, "sequence": 9, "evidence_age_ms": 250, "idle_for_s": 5.0,
                "margin_db": 3.15, "sensitivity_db": -97.0, "protection_level_db": -92.0,
            }],
            "refusals": [
                {"channel": "S02", "reasons": ["check_time", "hold_off"]},
                {"channel": "S03", "reasons": ["unknown", "insensitive"]},
                {"channel": "S04", "reasons": ["protected"]},
                {"channel": "K01", "reasons": ["check_time", "hold_off"]},
            ],
            "notice": "A measurement is no licence to transmit. A sensor cannot hear a hidden \
                       transmitter; the regulator's rules and the licence come first.",
        })
    );
    // While S02 still is occupied.
    let earlier = get_json(&app(state(8, at(4000))), "/v1/availability?channel=S02").await;
    assert_eq!(
        earlier["refusals"],
        json!([{"channel": "S02", "reasons": ["occupied", "hold_off"]}])
    );
}

#[tokio::test]
async fn a_protected_channel_is_never_offered_however_long_it_is_idle() {
    let service = app(state(10_000, at(10_000 * 500 + 1)));
    let answer = get_json(&service, "/v1/availability").await;
    let offered: Vec<&Value> =
        answer["offers"].as_array().unwrap().iter().map(|offer| &offer["channel"]).collect();
    // By idle time: S01 from the start, S02 and K01 from 4.0 s and 4.5 s on.
    assert_eq!(offered, ["S01", "S02", "K01"]);
    let asked = get_json(&service, "/v1/availability?channel=S04").await;
    assert_eq!(asked["offers"], json!([]));
    assert_eq!(asked["refusals"], json!([{"channel": "S04", "reasons": ["protected"]}]));

    let wide = get_json(&service, "/v1/availability?bandwidth_hz=20000").await;
    assert_eq!(wide["offers"][0]["channel"], json!("K01"));
    assert_eq!((&wide["offers"][1], &wide["refusals"]), (&Value::Null, &json!([])));
    let two = get_json(&service, "/v1/availability?count=2").await;
    assert_eq!(two["offers"].as_array().unwrap().len(), 2);
}

#[tokio::test]
async fn an_offer_in_its_last_millisecond_is_stale() {
    let last = START.plus_nanos((END_MS + 1000) * MILLISECOND_NS - 1);
    let answer = get_json(&app(state(10, last)), "/v1/availability?channel=S01").await;
    assert_eq!(answer["offers"], json!([]));
    assert_eq!(answer["refusals"], json!([{"channel": "S01", "reasons": ["stale"]}]));
}

#[tokio::test]
async fn the_spectrum_is_the_newest_dwells_and_what_is_no_number_is_null() {
    assert_eq!(
        get_json(&service(), "/v1/spectrum").await,
        json!({
            "time": "2026-03-01T06:00:04.500Z", "start_hz": 167_880_000.0, "step_hz": 60_000.0,
            "level_ref": "dBFS", "power_db": [-90.0, null, -100.0, null],
        })
    );
}

#[tokio::test]
async fn health_answers_with_figures_and_plain_sentences() {
    let mut expected = json!({
        "status": "well", "now": "2026-03-01T06:00:05.250Z", "problems": [],
        "capture": {"state": "running", "samples": 1_200_000, "lost_samples": 0, "gaps": 0,
                    "blocks_dropped": 0, "late": 0, "clock_steps": 0,
                    "last_sample_age_s": 0.012},
        "detection": {"dwells": 10, "last_dwell_age_s": 0.25},
        "history": {"state": "writing", "path_name": "history.sqlite3", "last_commit_age_s": null,
                    "failed_commits": 0, "dropped_reports": 0, "dropped_runs": 0,
                    "clipped_reports": 0, "bytes": 4096},
    });
    assert_eq!(get_json(&service(), "/v1/health").await, expected);

    let mut impaired = state(10, at(END_MS + 250));
    impaired.health = Arc::new(|| {
        let mut health = well();
        health.history.state = HistoryState::Stopped;
        health
    });
    expected["status"] = json!("impaired");
    expected["problems"] = json!(["History is not being written; answers about now still hold."]);
    expected["history"]["state"] = json!("stopped");
    assert_eq!(get_json(&app(impaired), "/v1/health").await, expected);
}
