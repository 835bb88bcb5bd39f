//! Errors of the service as problem documents (RFC 9457). One function gives every error its
//! status, type and words.

use axum::http::{HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use kilter_ledger::LedgerError;

use serde::Serialize;

use crate::config::Scope;

/// Why a request was not answered as asked.
#[derive(Debug)]
pub(crate) enum ApiError {
    /// No model of that name.
    UnknownModel { name: String, near_miss: Option<String> },
    /// No such route.
    UnknownRoute,
    /// A route that does not know the method.
    WrongMethod,
    /// The body is not what its content type says.
    BadBody(String),
    /// A content type that the route does not read.
    UnsupportedMedia { found: String },
    /// None of the kinds that `Accept` asks for can be given.
    NotAcceptable { asked: String },
    /// The body is larger than allowed.
    TooLarge { limit: usize },
    /// A parameter of the address is wrong.
    BadParameter { name: &'static str, reason: String },
    /// `strict=true`, and records were refused.
    RecordsRefused { refused: serde_json::Value },
    /// A model file that cannot be published.
    BadModelFile(String),
    /// No token, or one that is not known.
    Unauthorized,
    /// The token lacks a scope.
    Forbidden { scope: Scope },
    /// Too much to do at the moment.
    Busy,
    /// The request took longer than allowed.
    TooSlow,
    /// The ledger or the program failed.
    Internal(anyhow::Error),
}

/// A problem document.
#[derive(Debug, Serialize)]
struct Problem {
    #[serde(rename = "type")]
    kind: String,
    title: &'static str,
    status: u16,
    detail: String,
    #[serde(skip_serializing_if = "Option::is_none")]
    refused: Option<serde_json::Value>,
}

impl ApiError {
    /// Status, type and title. Exhaustive on purpose: a new error does not compile without them.
    fn kind(&self) -> (StatusCode, &'static str, &'static str) {
        match self {
            Self::UnknownModel { .. } => (StatusCode::NOT_FOUND, "unknown-model", "No such model"),
            Self::UnknownRoute => (StatusCode::NOT_FOUND, "unknown-route", "No such route"),
            Self::WrongMethod => (StatusCode::METHOD_NOT_ALLOWED, "wrong-method", "Not with this method"),
            Self::BadBody(_) => (StatusCode::BAD_REQUEST, "bad-body", "The body could not be read"),
            Self::UnsupportedMedia { .. } => {
                (StatusCode::UNSUPPORTED_MEDIA_TYPE, "unsupported-media", "Content type not read here")
            }
            Self::NotAcceptable { .. } => {
                (StatusCode::NOT_ACCEPTABLE, "not-acceptable", "Cannot answer in that kind")
            }
            Self::TooLarge { .. } => (StatusCode::PAYLOAD_TOO_LARGE, "too-large", "The body is too large"),
            Self::BadParameter { .. } => (StatusCode::BAD_REQUEST, "bad-parameter", "A parameter is wrong"),
            Self::RecordsRefused { .. } => {
                (StatusCode::UNPROCESSABLE_ENTITY, "records-refused", "Records were refused")
            }
            Self::BadModelFile(_) => {
                (StatusCode::UNPROCESSABLE_ENTITY, "bad-model-file", "The model file has faults")
            }
            Self::Unauthorized => (StatusCode::UNAUTHORIZED, "unauthorized", "A token is needed"),
            Self::Forbidden { .. } => (StatusCode::FORBIDDEN, "forbidden", "The token does not allow this"),
            Self::Busy => (StatusCode::SERVICE_UNAVAILABLE, "busy", "Too much to do at the moment"),
            Self::TooSlow => (StatusCode::REQUEST_TIMEOUT, "too-slow", "The request took too long"),
            Self::Internal(_) => (StatusCode::INTERNAL_SERVER_ERROR, "internal", "The service failed"),
        }
    }

    fn detail(&self) -> String {
        match self {
            Self::UnknownModel { name, near_miss: Some(near) } => {
                format!("no model named `{name}` is published; did you mean `{near}`?")
            }
            Self::UnknownModel { name, near_miss: None } => format!("no model named `{name}` is published"),
            Self::UnknownRoute => "there is no such route; the README lists them".into(),
            Self::WrongMethod => "this route does not know that method".into(),
            Self::BadBody(reason) | Self::BadModelFile(reason) => reason.clone(),
            Self::UnsupportedMedia { found } => format!(
                "content type `{found}` is not read here; send `application/json` or `application/x-ndjson`"
            ),
            Self::NotAcceptable { asked } => format!(
                "`Accept: {asked}` asks for none of `application/json` and `application/x-ndjson`"
            ),
            Self::TooLarge { limit } => format!("the body is larger than {limit} bytes; send it in parts"),
            Self::BadParameter { name, reason } => format!("`{name}`: {reason}"),
            Self::RecordsRefused { .. } => "nothing was scored, because `strict=true` was asked for".into(),
            Self::Unauthorized => "send a known token as `Authorization: Bearer …`".into(),
            Self::Forbidden { scope } => format!("this needs the scope `{}`", scope.name()),
            Self::Busy => "nothing was taken in; try again in a moment".into(),
            Self::TooSlow => "it was given up; it may have been taken in, and the same ids sent again are not counted twice".into(),
            Self::Internal(_) => "the cause is in the service's log".into(),
        }
    }
}

impl Scope {
    /// The scope as the configuration names it.
    pub(crate) fn name(self) -> &'static str {
        match self {
            Self::Score => "score",
            Self::Observe => "observe",
            Self::Publish => "publish",
            Self::Read => "read",
        }
    }
}

impl IntoResponse for ApiError {
    fn into_response(self) -> Response {
        let (status, kind, title) = self.kind();
        if let Self::Internal(cause) = &self {
            tracing::error!(cause = format!("{cause:#}"), "a request failed");
        }
        let detail = self.detail();
        let (busy, unauthorized) = (matches!(self, Self::Busy), matches!(self, Self::Unauthorized));
        let refused = if let Self::RecordsRefused { refused } = self { Some(refused) } else { None };
        let kind = format!("urn:kilter:problem:{kind}");
        let problem = Problem { kind, title, status: status.as_u16(), detail, refused };
        let body = serde_json::to_vec(&problem).unwrap_or_default();
        let mut response = (status, body).into_response();
        let headers = response.headers_mut();
        headers.insert(header::CONTENT_TYPE, HeaderValue::from_static("application/problem+json"));
        if busy {
            headers.insert(header::RETRY_AFTER, HeaderValue::from_static("1"));
        }
        if unauthorized {
            headers.insert(header::WWW_AUTHENTICATE, HeaderValue::from_static("Bearer"));
        }
        response
    }
}

impl From<LedgerError> for ApiError {
    fn from(error: LedgerError) -> Self {
        match error {
            LedgerError::Busy => Self::Busy,
            error => Self::Internal(error.into()),
        }
    }
}
