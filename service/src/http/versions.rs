//! `POST /models/{name}/versions`: publishes a model file.

use axum::Json;
use axum::body::Bytes;
use axum::extract::rejection::BytesRejection;
use axum::extract::{Path, State};
use axum::http::{HeaderMap, StatusCode};
use kilter_ledger::VersionState;
use serde::Serialize;

use super::app::Shared;
use super::problem::ApiError;
use super::whole_body;
use crate::config::Scope;
use crate::scoring::Version;

/// What was published.
#[derive(Debug, Serialize)]
pub(super) struct Published {
    model: String,
    version: String,
}

pub(super) async fn publish(
    State(app): Shared,
    Path(name): Path<String>,
    headers: HeaderMap,
    body: Result<Bytes, BytesRejection>,
) -> Result<(StatusCode, Json<Published>), ApiError> {
    let caller = app.tokens.admit(&headers, Scope::Publish)?;
    let body = whole_body(&app, body)?;
    let text = String::from_utf8(body.to_vec())
        .map_err(|error| ApiError::BadBody(format!("the model file is not UTF-8: {error}")))?;
    let version = Version::new(text).map_err(|error| ApiError::BadModelFile(error.to_string()))?;
    if version.model.name != name {
        return Err(ApiError::BadModelFile(format!(
            "the file is of model `{}`, the route of `{name}`",
            version.model.name
        )));
    }
    let published = Published { model: name, version: version.fingerprint().to_owned() };
    let task = tokio::task::spawn_blocking(move || {
        app.registry.publish(&version, VersionState::Live, &caller.0, app.clock.now())
    });
    task.await.map_err(|error| ApiError::Internal(error.into()))?.map_err(ApiError::Internal)?;
    Ok((StatusCode::CREATED, Json(published)))
}
