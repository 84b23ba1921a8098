//! The page: the files of `web/`, embedded, so that one binary is the whole program.
//!
//! Nothing is read from disk while running and nothing is fetched from anywhere else.

use axum::Router;
use axum::http::header;
use axum::routing::get;

/// One embedded file.
struct File {
    /// Where it is served.
    path: &'static str,
    /// Its media type.
    media_type: &'static str,
    /// What is in it.
    text: &'static str,
}

const HTML: &str = "text/html; charset=utf-8";

/// Every file of the page.
#[rustfmt::skip]
const FILES: &[File] = &[
    File { path: "/", media_type: HTML, text: include_str!("../../web/index.html") },
];

/// Routes to the page's files. They may be kept by a browser and are asked for anew each time, so
/// that a node that was brought up to date never runs an old script.
pub(super) fn routes<S: Clone + Send + Sync + 'static>() -> Router<S> {
    FILES.iter().fold(Router::new(), |router, file| {
        let headers =
            [(header::CONTENT_TYPE, file.media_type), (header::CACHE_CONTROL, "no-cache")];
        router.route(file.path, get(move || async move { (headers, file.text) }))
    })
}
