//! The router without a socket.

use std::sync::Arc;

use axum::body::{Body, to_bytes};
use axum::http::{Request, StatusCode, header};
use kilter_ledger::{Ledger, LedgerUrl, Settings, VersionState, day_of};
use serde_json::Value;
use tower::ServiceExt;

use super::app::{App, router};
use crate::clock::Clock;
use crate::config::Config;
use crate::metrics::Metrics;
use crate::registry::Registry;
use crate::scoring::Version;

/// Noon of 2026-03-05, UTC.
const NOON: i64 = 1_772_712_000_000_000;

fn app(folder: &std::path::Path, change: impl FnOnce(&mut Config)) -> Arc<App> {
    let url = LedgerUrl::Sqlite(folder.join("ledger.db"));
    let ledger = Ledger::open(&url, Settings::default()).unwrap();
    let registry = Registry::open(ledger, folder.join("models")).unwrap();
    let truth = include_str!("../../../demo-data/truth.model.json").to_owned();
    registry.publish(&Version::new(truth).unwrap(), VersionState::Live, "test", NOON).unwrap();
    let mut config = Config::default();
    change(&mut config);
    Arc::new(App::new(config, registry, Metrics::new().unwrap(), Clock::Fixed(NOON)))
}

fn post(path: &str, body: &'static str) -> Request<Body> {
    Request::post(path).header(header::CONTENT_TYPE, "application/json").body(Body::from(body)).unwrap()
}

async fn answer(app: &Arc<App>, request: Request<Body>) -> (StatusCode, Value) {
    let response = router(app.clone()).oneshot(request).await.unwrap();
    let status = response.status();
    let body = to_bytes(response.into_body(), 1 << 20).await.unwrap();
    (status, serde_json::from_slice(&body).unwrap_or(Value::Null))
}

const STOP: &str = r#"{"weight_kg": 1.2, "item_value": 35, "hours_since_dispatch": 20, "rain_mm": 0, "depot_km": 7.5,
    "dwelling": "house", "time_band": "morning", "previous_attempts": 0, "depot": "Quayside"}"#;

#[tokio::test]
async fn a_record_without_id_and_time_gets_both() {
    let folder = tempfile::tempdir().unwrap();
    let app = app(folder.path(), |_| {});
    let (status, body) = answer(&app, post("/models/attempt/records", STOP)).await;
    assert_eq!(status, StatusCode::OK, "{body}");
    let id = body["scored"][0]["id"].as_str().unwrap();
    assert_eq!(uuid::Uuid::parse_str(id).unwrap().get_version_num(), 7);
    let version = app.registry.live("attempt").unwrap();
    let today = day_of(NOON);
    let windows = app.registry.ledger().summaries("attempt", version.fingerprint(), [today, today]).unwrap();
    assert_eq!(windows.len(), 2, "all records, and those of the depot");
}

#[tokio::test]
async fn limits_are_answered_and_take_nothing_in() {
    let folder = tempfile::tempdir().unwrap();
    let app = app(folder.path(), |config| config.service.requests_in_flight = 0);
    let response = router(app.clone()).oneshot(post("/models/attempt/records", STOP)).await.unwrap();
    assert_eq!(response.status(), StatusCode::SERVICE_UNAVAILABLE);
    assert_eq!(response.headers()[header::RETRY_AFTER], "1");
    assert_eq!(app.registry.ledger().waiting_records().unwrap(), 0);
    // Health and metrics answer all the same.
    let alive = router(app).oneshot(Request::get("/alive").body(Body::empty()).unwrap()).await.unwrap();
    assert_eq!(alive.status(), StatusCode::OK);
}

#[tokio::test]
async fn publishing_by_http_checks_the_file_and_the_name() {
    let folder = tempfile::tempdir().unwrap();
    let app = app(folder.path(), |_| {});
    let truth = include_str!("../../../demo-data/truth.model.json");
    let (status, body) = answer(&app, post("/models/other/versions", truth)).await;
    assert_eq!(status, StatusCode::UNPROCESSABLE_ENTITY);
    assert!(body["detail"].as_str().unwrap().contains("`attempt`"), "{body}");
    let (status, _) = answer(&app, post("/models/attempt/versions", "{}")).await;
    assert_eq!(status, StatusCode::UNPROCESSABLE_ENTITY);
    let (status, body) = answer(&app, post("/models/attempt/versions", truth)).await;
    assert_eq!((status, body["model"].as_str()), (StatusCode::CREATED, Some("attempt")));
}

#[tokio::test]
async fn a_token_opens_only_what_its_scopes_say() {
    let folder = tempfile::tempdir().unwrap();
    let app = app(folder.path(), |config| {
        // SHA-256 of "open sesame", computed with sha256sum.
        let hash = "sha256:41ef4bb0b23661e66301aac36066912dac037827b4ae63a7b1165a5aa93ed4eb".into();
        let scopes = vec![crate::config::Scope::Score];
        config.token.push(crate::config::TokenConfig { name: "planner".into(), hash, scopes });
    });
    assert_eq!(answer(&app, post("/models/attempt/records", STOP)).await.0, StatusCode::UNAUTHORIZED);
    for (path, status) in
        [("/models/attempt/records", StatusCode::OK), ("/models/attempt/outcomes", StatusCode::FORBIDDEN)]
    {
        let mut request = post(path, STOP);
        let token = header::HeaderValue::from_static("Bearer open sesame");
        request.headers_mut().insert(header::AUTHORIZATION, token);
        assert_eq!(answer(&app, request).await.0, status, "{path}");
    }
}
