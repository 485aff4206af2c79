//! Errors as RFC 9457 problem details: what, why, and the mend.

use axum::http::{HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde_json::json;

use crate::store::StoreError;

/// An answer that is no success.
#[derive(Debug)]
pub(super) struct Problem {
    status: StatusCode,
    detail: String,
    retry_after: Option<u32>,
}

impl Problem {
    pub(super) fn new(status: StatusCode, detail: impl Into<String>) -> Self {
        Self {
            status,
            detail: detail.into(),
            retry_after: None,
        }
    }

    pub(super) fn wrong(detail: impl Into<String>) -> Self {
        Self::new(StatusCode::BAD_REQUEST, detail)
    }

    pub(super) fn missing(detail: impl Into<String>) -> Self {
        Self::new(StatusCode::NOT_FOUND, detail)
    }

    /// Too much was asked; it may be asked again after some seconds.
    pub(super) fn later(status: StatusCode, detail: impl Into<String>, seconds: u32) -> Self {
        Self {
            status,
            detail: detail.into(),
            retry_after: Some(seconds),
        }
    }
}

impl From<StoreError> for Problem {
    fn from(why: StoreError) -> Self {
        tracing::warn!(%why, "a request could not be answered");
        Self::new(
            StatusCode::SERVICE_UNAVAILABLE,
            "the store cannot be read now; the daemon's log has the reason",
        )
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response {
        let body = json!({
            "title": self.status.canonical_reason().unwrap_or("error"),
            "status": self.status.as_u16(),
            "detail": self.detail,
        });
        let mut response = (self.status, body.to_string()).into_response();
        let headers = response.headers_mut();
        let kind = HeaderValue::from_static("application/problem+json");
        headers.insert(header::CONTENT_TYPE, kind);
        if self.status == StatusCode::UNAUTHORIZED {
            let scheme = HeaderValue::from_static("Bearer realm=\"borewake\"");
            headers.insert(header::WWW_AUTHENTICATE, scheme);
        }
        if let Some(seconds) = self.retry_after {
            headers.insert(header::RETRY_AFTER, HeaderValue::from(seconds));
        }
        response
    }
}
