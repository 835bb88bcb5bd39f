//! Documents to read: models, drift, metrics, health.

use axum::Json;
use axum::extract::rejection::QueryRejection;
use axum::extract::{Path, Query, State};
use axum::http::{HeaderMap, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::{Deserialize, Serialize};

use super::app::{App, Shared};
use super::live_version;
use super::problem::ApiError;
use crate::config::Scope;
use crate::monitor::{DriftReport, Question, Span, drift as drift_report};

/// The models of the service.
#[derive(Debug, Serialize)]
pub(super) struct ModelList {
    models: Vec<ListedModel>,
}

/// One model.
#[derive(Debug, Serialize)]
struct ListedModel {
    name: String,
    purpose: String,
    live: String,
}

pub(super) async fn models(State(app): Shared, headers: HeaderMap) -> Result<Json<ModelList>, ApiError> {
    app.tokens.admit(&headers, Scope::Read)?;
    let listed = |version: &crate::scoring::Version| ListedModel {
        name: version.model.name.clone(),
        purpose: version.model.purpose.clone(),
        live: version.fingerprint().to_owned(),
    };
    Ok(Json(ModelList { models: app.registry.all_live().iter().map(|version| listed(version)).collect() }))
}

pub(super) async fn model_file(
    State(app): Shared,
    Path(name): Path<String>,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    app.tokens.admit(&headers, Scope::Read)?;
    let version = live_version(&app, &name)?;
    let tag = format!("\"{}\"", version.fingerprint());
    if headers.get(header::IF_NONE_MATCH).is_some_and(|known| known.as_bytes() == tag.as_bytes()) {
        return Ok(StatusCode::NOT_MODIFIED.into_response());
    }
    let tag = HeaderValue::from_str(&tag).map_err(|error| ApiError::Internal(error.into()))?;
    let json = HeaderValue::from_static("application/json");
    Ok(([(header::CONTENT_TYPE, json), (header::ETAG, tag)], version.text.clone()).into_response())
}

/// Parameters of a drift report.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub(super) struct DriftParameters {
    from: Option<String>,
    to: Option<String>,
    by: Option<String>,
}

pub(super) async fn drift(
    State(app): Shared,
    Path(name): Path<String>,
    parameters: Result<Query<DriftParameters>, QueryRejection>,
    headers: HeaderMap,
) -> Result<Json<DriftReport>, ApiError> {
    app.tokens.admit(&headers, Scope::Read)?;
    Ok(Json(report(&app, &name, parameters).await?))
}

/// The drift report that an address asks for.
pub(super) async fn report(
    app: &std::sync::Arc<App>,
    name: &str,
    parameters: Result<Query<DriftParameters>, QueryRejection>,
) -> Result<DriftReport, ApiError> {
    let Query(parameters) = parameters
        .map_err(|rejection| ApiError::BadParameter { name: "query", reason: rejection.body_text() })?;
    let span = Span::parse(parameters.from.as_deref(), parameters.to.as_deref())
        .map_err(|(name, reason)| ApiError::BadParameter { name, reason })?;
    let version = live_version(app, name)?;
    let segments = &version.model.monitor.segments;
    if let Some(by) = &parameters.by
        && !segments.contains(by)
    {
        let reason = format!("`{by}` is no segment field of the model; it has `{}`", segments.join("`, `"));
        return Err(ApiError::BadParameter { name: "by", reason });
    }
    let app = app.clone();
    let answer = tokio::task::spawn_blocking(move || {
        let now = app.clock.now();
        let question = Question { model: &version.model, span, by: parameters.by.as_deref(), now };
        drift_report(app.registry.ledger(), &question)
    });
    answer.await.map_err(|error| ApiError::Internal(error.into()))?.map_err(ApiError::Internal)
}

pub(super) async fn metrics(State(app): Shared, headers: HeaderMap) -> Result<Response, ApiError> {
    app.tokens.admit(&headers, Scope::Read)?;
    let (content_type, text) = app.metrics.text().map_err(|error| ApiError::Internal(error.into()))?;
    Ok(([(header::CONTENT_TYPE, content_type)], text).into_response())
}

/// The process runs.
pub(super) async fn alive() -> &'static str {
    "alive\n"
}

/// Models are loaded and the ledger answers.
pub(super) async fn ready(State(app): Shared) -> Response {
    let ledger = app.registry.ledger().clone();
    match tokio::task::spawn_blocking(move || ledger.waiting_records()).await {
        Ok(Ok(_)) => "ready\n".into_response(),
        _ => (StatusCode::SERVICE_UNAVAILABLE, "the ledger does not answer\n").into_response(),
    }
}
