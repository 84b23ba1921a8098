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
const CSS: &str = "text/css; charset=utf-8";
const SCRIPT: &str = "text/javascript; charset=utf-8";
const DRAWING: &str = "image/svg+xml";

/// Every file of the page.
#[rustfmt::skip]
const FILES: &[File] = &[
    File { path: "/", media_type: HTML, text: include_str!("../../web/index.html") },
    File { path: "/detail.js", media_type: SCRIPT, text: include_str!("../../web/detail.js") },
    File { path: "/dom.js", media_type: SCRIPT, text: include_str!("../../web/dom.js") },
    File { path: "/feed.js", media_type: SCRIPT, text: include_str!("../../web/feed.js") },
    File { path: "/icon.svg", media_type: DRAWING, text: include_str!("../../web/icon.svg") },
    File { path: "/lately.js", media_type: SCRIPT, text: include_str!("../../web/lately.js") },
    File { path: "/media.css", media_type: CSS, text: include_str!("../../web/media.css") },
    File { path: "/page.css", media_type: CSS, text: include_str!("../../web/page.css") },
    File { path: "/page.js", media_type: SCRIPT, text: include_str!("../../web/page.js") },
    File { path: "/record.js", media_type: SCRIPT, text: include_str!("../../web/record.js") },
    File { path: "/sheet.js", media_type: SCRIPT, text: include_str!("../../web/sheet.js") },
    File { path: "/text.js", media_type: SCRIPT, text: include_str!("../../web/text.js") },
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
