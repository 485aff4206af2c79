//! The list of paths.

use std::net::SocketAddr;
use std::sync::Arc;
use std::time::Duration;

use axum::body::Body;
use axum::extract::{ConnectInfo, Request, State};
use axum::http::{HeaderValue, StatusCode, header};
use axum::middleware::{self, Next};
use axum::response::{IntoResponse, Response};
use axum::routing::{get, post};
use axum::{Json, Router};
use serde_json::json;

use super::asking::Asking;
use super::guard::{Guard, Who};
use super::problem::Problem;
use super::{alarms, files, metrics, plan, series, stream};
use crate::record::Stamp;

/// Longest body of a request \[bytes\].
const LONGEST: usize = 16 * 1024;
/// How long a body may take to come.
const BODY: Duration = Duration::from_secs(10);
/// Age of the keeper's state beyond which the daemon is not ready \[µs\]; it is shown every minute.
const STALE: i64 = 5 * 60 * Stamp::SECOND;

/// What may come in with the page: nothing but its own files, which run nothing from elsewhere and sit in no frame.
const POLICY: &str = "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data:; connect-src 'self'; \
base-uri 'none'; form-action 'none'; frame-ancestors 'none'";

/// The description of all paths, as OpenAPI.
pub(super) const OPENAPI: &str = include_str!("openapi.json");

/// Every path, with its guard.
pub(super) fn router(asking: Arc<Asking>, guard: Arc<Guard>) -> Router {
    let data = Router::new()
        .route("/api/v1/site", get(plan::site))
        .route("/api/v1/snapshot", get(plan::snapshot))
        .route("/api/v1/alarms", get(alarms::list))
        .route("/api/v1/alarms/{id}", get(alarms::one))
        .route("/api/v1/history", get(alarms::history))
        .route("/api/v1/departures", get(series::departures))
        .route("/api/v1/gauges/{name}/series", get(series::gauge))
        .route("/api/v1/channels/{name}/readings", get(series::channel))
        .route("/api/v1/events", get(stream::events))
        .route("/metrics", get(metrics::metrics))
        .route_layer(middleware::from_fn(readers_only));
    let changes = Router::new()
        .route("/api/v1/alarms/{id}/{act}", post(alarms::act))
        .route("/api/v1/who", get(alarms::who));
    let open = Router::new()
        .route("/alive", get(|| async { "alive\n" }))
        .route("/ready", get(ready))
        .route("/api/v1/openapi.json", get(openapi))
        .fallback(page);
    data.merge(changes)
        .merge(open)
        .with_state(asking)
        .layer(middleware::from_fn_with_state(guard, admit))
}

/// Lets a request pass to its path with the name of who makes it, and closes the answer to strangers' pages.
async fn admit(State(guard): State<Arc<Guard>>, request: Request, next: Next) -> Response {
    let (mut parts, body) = request.into_parts();
    let peer = parts
        .extensions
        .get::<ConnectInfo<SocketAddr>>()
        .map(|c| c.0);
    let admitted = match peer {
        Some(peer) => guard.admit(&parts, peer),
        None => Err(Problem::wrong("who asks is not known")),
    };
    let mut response = match admitted {
        Ok(who) => {
            parts.extensions.insert(who);
            match whole(body).await {
                Ok(body) => next.run(Request::from_parts(parts, body)).await,
                Err(problem) => problem.into_response(),
            }
        }
        Err(problem) => problem.into_response(),
    };
    let headers = response.headers_mut();
    for (name, value) in [
        (header::CONTENT_SECURITY_POLICY, POLICY),
        (header::X_CONTENT_TYPE_OPTIONS, "nosniff"),
        (header::REFERRER_POLICY, "no-referrer"),
        (header::X_FRAME_OPTIONS, "DENY"),
    ] {
        headers.insert(name, HeaderValue::from_static(value));
    }
    headers
        .entry(header::CACHE_CONTROL)
        .or_insert(HeaderValue::from_static("no-store"));
    response
}

/// A body as a whole, within its size and time.
async fn whole(body: Body) -> Result<Body, Problem> {
    match tokio::time::timeout(BODY, axum::body::to_bytes(body, LONGEST)).await {
        Ok(Ok(bytes)) => Ok(Body::from(bytes)),
        Ok(Err(_)) => Err(Problem::new(
            StatusCode::PAYLOAD_TOO_LARGE,
            format!("a body of at most {LONGEST} bytes is taken"),
        )),
        Err(_) => Err(Problem::new(
            StatusCode::REQUEST_TIMEOUT,
            "the body did not come in time",
        )),
    }
}

async fn readers_only(request: Request, next: Next) -> Response {
    let may = match request.extensions().get::<Who>() {
        Some(who) => who.reads(),
        None => Who::Stranger.reads(),
    };
    match may {
        Ok(()) => next.run(request).await,
        Err(problem) => problem.into_response(),
    }
}

async fn page(request: Request) -> Response {
    if request.uri().path().starts_with("/api/") {
        return Problem::missing("there is no such path; /api/v1/openapi.json lists them")
            .into_response();
    }
    files::file(request.uri().path(), request.headers())
}

async fn openapi() -> Response {
    ([(header::CONTENT_TYPE, "application/json")], OPENAPI).into_response()
}

/// Whether the daemon does its job: it processes its journal, and lately said so.
async fn ready(State(asking): State<Arc<Asking>>) -> Response {
    let age = Stamp::now().0.saturating_sub(asking.shown().0);
    // A replay's clock is its log's.
    let ready = asking.replay || age < STALE;
    let status = if ready {
        StatusCode::OK
    } else {
        StatusCode::SERVICE_UNAVAILABLE
    };
    let watch = asking.look().await.health.watch.clone();
    let body = json!({ "ready": ready, "shown": asking.shown(), "watch_blind_because": watch });
    (status, Json(body)).into_response()
}
