//! Answers over HTTP: what stands now, what may be used, what was last week like, and the page.
//!
//! It only reads. Now is answered from memory; the past comes from the history's own readers on
//! threads that may block. It never turns `unknown` into `idle` and never sends its insides.

mod figures;
mod health;
mod listener;
mod now;
mod offers;
mod page;
mod past;
mod problem;
mod query;

use std::sync::Arc;
use std::time::Duration;

use axum::Router;
use axum::extract::{Request, State};
use axum::http::{HeaderName, HeaderValue, Method, Uri, header};
use axum::middleware::{self, Next};
use axum::response::{IntoResponse, Response};
use axum::routing::get;
use tokio::net::TcpListener;
use tokio::sync::{oneshot, watch};

pub use health::{
    CaptureHealth, CaptureState, DetectionHealth, Health, HistoryHealth, HistoryState,
};

use crate::detection::plan::Plan;
use crate::detection::standing::Standing;
use crate::detection::time::{Stamp, Utc};
use crate::detection::verdict::DwellReport;
use crate::history::Reader;
use problem::Problem;

/// A request is answered within this or not at all.
const REQUEST_TIME_MAX: Duration = Duration::from_secs(10);

/// Open requests are given this long once shutdown has begun.
const SHUTDOWN_GRACE: Duration = Duration::from_secs(1);

/// Sent with every answer. Scripts, styles and figures come from the node itself or not at all.
const HEADERS: [(HeaderName, HeaderValue); 4] = [
    (
        header::CONTENT_SECURITY_POLICY,
        HeaderValue::from_static(
            "default-src 'none'; script-src 'self'; style-src 'self'; connect-src 'self'; \
             img-src 'self' data:; base-uri 'none'; form-action 'none'; frame-ancestors 'none'",
        ),
    ),
    (header::X_CONTENT_TYPE_OPTIONS, HeaderValue::from_static("nosniff")),
    (header::REFERRER_POLICY, HeaderValue::from_static("no-referrer")),
    (
        HeaderName::from_static("cross-origin-resource-policy"),
        HeaderValue::from_static("same-origin"),
    ),
];

/// Who answers, and on what.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NodeInfo {
    /// Name of the site.
    pub site: String,
    /// Name of the node, unique among the operator's nodes.
    pub node: String,
    /// Version of the program.
    pub version: String,
    /// When the program started.
    pub started: Utc,
    /// Whether the samples are made up.
    pub simulated: bool,
    /// Where the samples come from, in words.
    pub source: String,
    /// SHA-256 of the configuration (64 hexadecimal digits).
    pub configuration_sha256: String,
}

/// The newest of everything, replaced as a whole after each dwell.
#[derive(Clone, Debug)]
pub struct Live {
    /// Where every channel of the plan stands.
    pub standing: Standing,
    /// The newest dwell; `None` before the first.
    pub newest: Option<Arc<DwellReport>>,
}

/// What the answers are made from. Cloning it copies a few pointers.
#[derive(Clone)]
pub struct AppState {
    /// Who answers.
    pub node: Arc<NodeInfo>,
    /// What is watched.
    pub plan: Arc<Plan>,
    /// The newest verdicts.
    pub live: watch::Receiver<Arc<Live>>,
    /// Reads the health of the node at this moment. Must not block.
    pub health: Arc<dyn Fn() -> Health + Send + Sync>,
    /// Reads the history; `None` when the node keeps none.
    pub reader: Option<Reader>,
    /// The clock that stamps the samples.
    pub clock: Arc<dyn Fn() -> Stamp + Send + Sync>,
}

impl AppState {
    /// The newest verdicts, and then the time: a clock read first could be older than the evidence.
    fn live_and_now(&self) -> (Arc<Live>, Stamp) {
        let live = self.live.borrow().clone();
        (live, (self.clock)())
    }
}

/// The whole service. Being a plain value, it is tested without a socket.
///
/// # Panics
/// If the standing in `state.live` is of another plan than `state.plan`.
pub fn app(state: AppState) -> Router {
    assert_eq!(
        state.plan.channels.len(),
        state.live.borrow().standing.channels.len(),
        "standing of another plan"
    );
    Router::new()
        .route("/v1/node", get(now::node))
        .route("/v1/channels", get(now::channels))
        .route("/v1/channels/{id}", get(now::channel))
        .route("/v1/availability", get(offers::offers))
        .route("/v1/occupancy", get(past::occupancy))
        .route("/v1/runs", get(past::runs))
        .route("/v1/spectrum", get(now::spectrum))
        .route("/v1/health", get(now::health))
        .merge(page::routes())
        .fallback(|uri: Uri| async move { Problem::not_found(uri.path()) })
        .method_not_allowed_fallback(|method: Method| async move {
            Problem::method_not_allowed(method.as_str())
        })
        .layer(middleware::from_fn_with_state(REQUEST_TIME_MAX, bound_and_label))
        .with_state(state)
}

/// Bounds the time that a request may take and puts the common headers on its answer.
async fn bound_and_label(State(limit): State<Duration>, request: Request, next: Next) -> Response {
    let mut response = match tokio::time::timeout(limit, next.run(request)).await {
        Ok(response) => response,
        Err(_elapsed) => Problem::timeout(limit).into_response(),
    };
    let headers = response.headers_mut();
    headers.extend(HEADERS);
    // The page's files bring their own rule; everything else is about a moment that has passed.
    headers.entry(header::CACHE_CONTROL).or_insert(HeaderValue::from_static("no-store"));
    response
}

/// Serves until `shutdown` completes, and then for at most a second the requests that are
/// being answered. Connections that are merely kept alive are closed at once.
pub async fn serve(
    listener: TcpListener,
    state: AppState,
    shutdown: impl Future<Output = ()> + Send + 'static,
) {
    let (closing, closed) = oneshot::channel::<()>();
    let signal = async move {
        shutdown.await;
        drop(closing);
    };
    let served =
        axum::serve(listener::Bounded::new(listener, listener::CONNECTIONS_MAX), app(state))
            .with_graceful_shutdown(signal)
            .into_future();
    let overdue = async move {
        // An error is the word: the sender was dropped, shutdown has begun.
        let _closing_dropped = closed.await;
        tokio::time::sleep(SHUTDOWN_GRACE).await;
    };
    tokio::select! {
        // Never an error: failures to accept are waited out by the listener.
        _result = served => {}
        () = overdue => tracing::info!("requests still open were abandoned at shutdown"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use axum::body::{Body, to_bytes};
    use axum::http::StatusCode;
    use tower::ServiceExt;

    #[tokio::test]
    async fn an_answer_that_takes_too_long_is_a_problem_with_the_common_headers() {
        let limit = Duration::from_millis(10);
        let service = Router::new()
            .route("/never", get(std::future::pending::<()>))
            .layer(middleware::from_fn_with_state(limit, bound_and_label));
        let request = Request::builder().uri("/never").body(Body::empty()).unwrap();
        let response = service.oneshot(request).await.unwrap();
        assert_eq!(response.status(), StatusCode::SERVICE_UNAVAILABLE);
        assert_eq!(response.headers()[header::CACHE_CONTROL], "no-store");
        let body = to_bytes(response.into_body(), 1 << 12).await.unwrap();
        let problem: serde_json::Value = serde_json::from_slice(&body).unwrap();
        assert_eq!(problem["code"], "timeout");
        assert_eq!(problem["detail"], "No answer within 0.01 s; ask for a shorter range.");
    }
}
