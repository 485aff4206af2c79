//! The page's own files, embedded: it asks nothing of any other host.

use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use sha2::{Digest, Sha256};

use super::problem::Problem;

/// Path, type and text of every file.
pub(super) const FILES: &[(&str, &str, &str)] = &[
    ("/", HTML, include_str!("../../../page/index.html")),
    ("/page.css", CSS, include_str!("../../../page/page.css")),
    ("/icon.svg", SVG, include_str!("../../../page/icon.svg")),
    ("/js/main.js", JS, include_str!("../../../page/js/main.js")),
    ("/js/api.js", JS, include_str!("../../../page/js/api.js")),
    (
        "/js/units.js",
        JS,
        include_str!("../../../page/js/units.js"),
    ),
    (
        "/js/words.js",
        JS,
        include_str!("../../../page/js/words.js"),
    ),
    ("/js/dom.js", JS, include_str!("../../../page/js/dom.js")),
    ("/js/plan.js", JS, include_str!("../../../page/js/plan.js")),
    (
        "/js/strip.js",
        JS,
        include_str!("../../../page/js/strip.js"),
    ),
    (
        "/js/dialog.js",
        JS,
        include_str!("../../../page/js/dialog.js"),
    ),
    (
        "/js/gauge.js",
        JS,
        include_str!("../../../page/js/gauge.js"),
    ),
    (
        "/js/alarms.js",
        JS,
        include_str!("../../../page/js/alarms.js"),
    ),
    (
        "/js/keeping.js",
        JS,
        include_str!("../../../page/js/keeping.js"),
    ),
];

const HTML: &str = "text/html; charset=utf-8";
const CSS: &str = "text/css; charset=utf-8";
const JS: &str = "text/javascript; charset=utf-8";
const SVG: &str = "image/svg+xml";

/// Serves the file of a path, or tells that it has not changed.
pub(super) fn file(path: &str, asked: &HeaderMap) -> Response {
    let Some((_, kind, text)) = FILES.iter().find(|(name, ..)| *name == path) else {
        return Problem::missing(format!("there is nothing at {path}")).into_response();
    };
    let tag: String = Sha256::digest(text.as_bytes())
        .iter()
        .take(12)
        .map(|byte| format!("{byte:02x}"))
        .collect();
    let tag = format!("\"{tag}\"");
    let known = asked
        .get(header::IF_NONE_MATCH)
        .is_some_and(|v| v.as_bytes() == tag.as_bytes());
    let mut response = if known {
        StatusCode::NOT_MODIFIED.into_response()
    } else {
        (*text).into_response()
    };
    let headers = response.headers_mut();
    headers.insert(header::CONTENT_TYPE, HeaderValue::from_static(kind));
    headers.insert(header::CACHE_CONTROL, HeaderValue::from_static("no-cache"));
    if let Ok(tag) = HeaderValue::from_str(&tag) {
        headers.insert(header::ETAG, tag);
    }
    response
}
