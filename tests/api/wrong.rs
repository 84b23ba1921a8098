//! Everything that goes wrong comes back as problem details that name the fault.

use axum::http::{Method, StatusCode};
use serde_json::json;

use crate::support::{get_problem, send, service};

#[tokio::test]
async fn an_unknown_query_key_is_named_together_with_those_that_are_known() {
    assert_eq!(
        get_problem(&service(), "/v1/availability?chanel=S01", 400).await,
        json!({
            "type": "/problems/unknown_key", "title": "Unknown query key", "status": 400,
            "detail": "\"chanel\" is not known here; allowed: bandwidth_hz, count, channel.",
            "code": "unknown_key", "field": "chanel",
        })
    );
    for path in ["node", "channels/S01", "spectrum", "health"] {
        let problem = get_problem(&service(), &format!("/v1/{path}?x=1"), 400).await;
        assert_eq!(problem["detail"], json!("\"x\" is not known here; allowed: none."));
    }
}

#[tokio::test]
async fn a_value_that_cannot_be_taken_is_given_back_with_what_is_allowed() {
    let service = service();
    for (uri, field, detail) in [
        (
            "/v1/channels?band=marsh",
            "band",
            "band: \"marsh\" was given; allowed: saltmarsh, creek.",
        ),
        (
            "/v1/availability?channel=S99",
            "channel",
            "channel: \"S99\" was given; allowed: the id of a channel of the plan, as listed by \
             /v1/channels.",
        ),
        (
            "/v1/availability?count=0",
            "count",
            "count: \"0\" was given; allowed: a whole number from 1 up.",
        ),
        (
            "/v1/availability?bandwidth_hz=NaN",
            "bandwidth_hz",
            "bandwidth_hz: \"NaN\" was given; allowed: a number above 0, at most 25000 (the \
             widest channel asked for).",
        ),
        (
            "/v1/availability?bandwidth_hz=20000&channel=S01",
            "bandwidth_hz",
            "bandwidth_hz: \"20000\" was given; allowed: a number above 0, at most 12500 (the \
             widest channel asked for).",
        ),
    ] {
        let problem = get_problem(&service, uri, 400).await;
        assert_eq!(problem["code"], json!("bad_value"), "{uri}");
        assert_eq!(problem["field"], json!(field), "{uri}");
        assert_eq!(problem["detail"], json!(detail), "{uri}");
    }
}

#[tokio::test]
async fn a_key_given_twice_is_an_error_and_not_a_guess() {
    let problem = get_problem(&service(), "/v1/availability?channel=S01&channel=S02", 400).await;
    assert_eq!(problem["code"], json!("repeated_key"));
    assert_eq!(problem["field"], json!("channel"));
}

#[tokio::test]
async fn a_channel_that_is_not_in_the_plan_is_not_found() {
    assert_eq!(
        get_problem(&service(), "/v1/channels/S99", 404).await,
        json!({
            "type": "/problems/no_such_channel", "title": "No such channel", "status": 404,
            "detail": "The plan has no channel \"S99\"; /v1/channels lists all channels.",
            "code": "no_such_channel",
        })
    );
    // A path that is no text names no channel either.
    let problem = get_problem(&service(), "/v1/channels/%FF", 404).await;
    assert_eq!(problem["code"], json!("no_such_channel"));
}

#[tokio::test]
async fn a_path_that_leads_nowhere_is_a_problem_too() {
    for path in ["/v1", "/v1/channels/", "/v2/node", "/web/index.html", "//"] {
        let problem = get_problem(&service(), path, 404).await;
        assert_eq!(problem["code"], json!("not_found"), "{path}");
    }
    // What is given back of an overlong path is cut.
    let long = format!("/{}", "x".repeat(1000));
    let problem = get_problem(&service(), &long, 404).await;
    assert!(problem["detail"].as_str().unwrap().len() < 120, "{problem}");
}

#[tokio::test]
async fn only_get_and_head_are_answered() {
    let service = service();
    for path in ["/v1/node", "/v1/channels/S01", "/v1/health", "/"] {
        for method in [Method::POST, Method::PUT, Method::DELETE, Method::OPTIONS] {
            let answer = send(&service, method.clone(), path, "{}").await;
            assert_eq!(answer.status, StatusCode::METHOD_NOT_ALLOWED, "{method} {path}");
            assert_eq!(answer.header("allow"), "GET,HEAD", "{method} {path}");
            assert_eq!(answer.header("content-type"), "application/problem+json");
            assert_eq!(answer.json()["code"], json!("method_not_allowed"));
        }
        let head = send(&service, Method::HEAD, path, "").await;
        assert_eq!((head.status, head.text.as_str()), (StatusCode::OK, ""), "{path}");
        // A body with a GET is not looked at.
        let odd = send(&service, Method::GET, path, "not wanted").await;
        assert_eq!(odd.status, StatusCode::OK, "{path}");
    }
}
