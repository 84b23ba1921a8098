//! Everything that goes wrong, as problem details (RFC 9457).
//!
//! A problem says what the asker can act on and nothing of the program's insides: what went wrong
//! behind the counter is logged where it happened.

use std::time::Duration;

use axum::http::{HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;

/// Longest piece of an asker's text that is given back (characters).
const ECHO_LENGTH_MAX: usize = 64;

/// One problem, ready to be sent.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct Problem {
    status: StatusCode,
    code: &'static str,
    title: &'static str,
    detail: String,
    field: Option<String>,
}

/// The body of RFC 9457, with the code and the query key as extension members.
#[derive(Serialize)]
struct Body<'a> {
    r#type: String,
    title: &'a str,
    status: u16,
    detail: &'a str,
    code: &'a str,
    #[serde(skip_serializing_if = "Option::is_none")]
    field: Option<&'a str>,
}

impl Problem {
    fn new(status: StatusCode, code: &'static str, title: &'static str, detail: String) -> Problem {
        Problem { status, code, title, detail, field: None }
    }

    fn about(mut self, field: &str) -> Problem {
        self.field = Some(shortened(field));
        self
    }

    /// A query key that the path does not know.
    pub(super) fn unknown_key(key: &str, allowed: &[&str]) -> Problem {
        let allowed = match allowed {
            [] => "none".to_string(),
            keys => keys.join(", "),
        };
        let detail = format!("\"{}\" is not known here; allowed: {allowed}.", shortened(key));
        Problem::new(StatusCode::BAD_REQUEST, "unknown_key", "Unknown query key", detail).about(key)
    }

    /// A query key that was given more than once.
    pub(super) fn repeated_key(key: &str) -> Problem {
        let detail = format!("\"{key}\" was given more than once; give it once.");
        Problem::new(StatusCode::BAD_REQUEST, "repeated_key", "Repeated query key", detail)
            .about(key)
    }

    /// A query key that must be given and was not. `allowed` says what would do.
    pub(super) fn missing_key(key: &str, allowed: &str) -> Problem {
        let detail = format!("\"{key}\" must be given: {allowed}.");
        Problem::new(StatusCode::BAD_REQUEST, "missing_key", "Missing query key", detail).about(key)
    }

    /// A value that cannot be taken. `allowed` says what would do.
    pub(super) fn bad_value(key: &str, given: &str, allowed: &str) -> Problem {
        let detail = format!("{key}: \"{}\" was given; allowed: {allowed}.", shortened(given));
        Problem::new(StatusCode::BAD_REQUEST, "bad_value", "Value not allowed", detail).about(key)
    }

    /// A query string that cannot be read at all.
    pub(super) fn bad_query() -> Problem {
        let detail = "The query string must be key=value pairs joined by \"&\".".to_string();
        Problem::new(StatusCode::BAD_REQUEST, "bad_query", "Unreadable query string", detail)
    }

    /// A path names a channel that is not in the plan.
    pub(super) fn no_such_channel(id: &str) -> Problem {
        let detail = format!(
            "The plan has no channel \"{}\"; /v1/channels lists all channels.",
            shortened(id)
        );
        Problem::new(StatusCode::NOT_FOUND, "no_such_channel", "No such channel", detail)
    }

    /// A path that leads nowhere.
    pub(super) fn not_found(path: &str) -> Problem {
        let detail = format!("Nothing is served at \"{}\".", shortened(path));
        Problem::new(StatusCode::NOT_FOUND, "not_found", "Not found", detail)
    }

    /// A method other than GET and HEAD.
    pub(super) fn method_not_allowed(method: &str) -> Problem {
        let detail = format!("{} was asked; allowed: GET, HEAD.", shortened(method));
        Problem::new(
            StatusCode::METHOD_NOT_ALLOWED,
            "method_not_allowed",
            "Method not allowed",
            detail,
        )
    }

    /// The node keeps no history.
    pub(super) fn no_history() -> Problem {
        let detail = "This node keeps no history at present; answers about now still hold.";
        Problem::new(
            StatusCode::SERVICE_UNAVAILABLE,
            "no_history",
            "No history",
            detail.to_string(),
        )
    }

    /// The history is there and could not be read.
    pub(super) fn history_unreadable() -> Problem {
        let detail = "The history could not be read; the node's log says why.".to_string();
        Problem::new(
            StatusCode::SERVICE_UNAVAILABLE,
            "history_unreadable",
            "History unreadable",
            detail,
        )
    }

    /// The answer took too long.
    pub(super) fn timeout(limit: Duration) -> Problem {
        let limit_s = limit.as_secs_f64();
        let detail = format!("No answer within {limit_s} s; ask for a shorter range.");
        Problem::new(StatusCode::SERVICE_UNAVAILABLE, "timeout", "Took too long", detail)
    }
}

/// At most [`ECHO_LENGTH_MAX`] characters of what was asked.
fn shortened(text: &str) -> String {
    match text.char_indices().nth(ECHO_LENGTH_MAX) {
        Some((end, _)) => format!("{}…", &text[..end]),
        None => text.to_string(),
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response {
        let body = Body {
            r#type: format!("/problems/{}", self.code),
            title: self.title,
            status: self.status.as_u16(),
            detail: &self.detail,
            code: self.code,
            field: self.field.as_deref(),
        };
        let text = serde_json::to_string(&body).expect("strings and a number are always JSON");
        let media_type = HeaderValue::from_static("application/problem+json");
        (self.status, [(header::CONTENT_TYPE, media_type)], text).into_response()
    }
}
