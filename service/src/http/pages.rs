//! The pages over HTTP.

use axum::extract::rejection::QueryRejection;
use axum::extract::{Path, Query, State};
use axum::http::HeaderMap;
use axum::response::{Html, IntoResponse, Response};

use super::app::Shared;
use super::documents::{DriftParameters, report};
use super::live_version;
use super::problem::ApiError;
use crate::config::Scope;
use crate::pages::{self, OverviewRow};

/// What a browser may load for a page: only what stands in it.
const POLICY: &str = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'";

pub(super) async fn overview(State(app): Shared, headers: HeaderMap) -> Result<Response, ApiError> {
    app.tokens.admit(&headers, Scope::Read)?;
    let rows: Vec<OverviewRow> = app
        .registry
        .all_live()
        .iter()
        .map(|version| OverviewRow {
            name: version.model.name.clone(),
            purpose: version.model.purpose.clone(),
            version: version.fingerprint().to_owned(),
            worst: app.monitored.worst_finding(&version.model.name),
        })
        .collect();
    Ok(as_page(pages::overview(&rows).into_string()))
}

pub(super) async fn model(
    State(app): Shared,
    Path(name): Path<String>,
    parameters: Result<Query<DriftParameters>, QueryRejection>,
    headers: HeaderMap,
) -> Result<Response, ApiError> {
    app.tokens.admit(&headers, Scope::Read)?;
    let version = live_version(&app, &name)?;
    let report = report(&app, &name, parameters).await?;
    Ok(as_page(pages::model_page(&version.model, &report).into_string()))
}

fn as_page(text: String) -> Response {
    let headers = [
        ("content-security-policy", POLICY),
        ("x-content-type-options", "nosniff"),
        ("referrer-policy", "no-referrer"),
        ("cache-control", "no-store"),
    ];
    (headers, Html(text)).into_response()
}
