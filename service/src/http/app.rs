//! The state of the service and its routes.

use std::sync::Arc;
use std::time::Instant;

use axum::Router;
use axum::extract::{DefaultBodyLimit, Request, State};
use axum::middleware::{self, Next};
use axum::response::{IntoResponse, Response};
use axum::routing::{get, post};
use tokio::sync::Semaphore;

use super::access::Tokens;
use super::problem::ApiError;
use super::{documents, outcomes, pages, records, versions};
use crate::clock::Clock;
use crate::config::Config;
use crate::metrics::Metrics;
use crate::monitored::Monitored;
use crate::registry::Registry;

/// What every handler works with.
#[derive(Debug)]
pub(crate) struct App {
    pub(crate) config: Config,
    pub(crate) registry: Registry,
    pub(crate) metrics: Metrics,
    pub(crate) tokens: Tokens,
    pub(crate) clock: Clock,
    pub(crate) monitored: Monitored,
    in_flight: Arc<Semaphore>,
}

/// The state as handlers get it.
pub(crate) type Shared = State<Arc<App>>;

impl App {
    /// The state of a service.
    pub(crate) fn new(config: Config, registry: Registry, metrics: Metrics, clock: Clock) -> Self {
        let in_flight = Arc::new(Semaphore::new(config.service.requests_in_flight));
        let tokens = Tokens::new(&config.token);
        Self { config, registry, metrics, tokens, clock, monitored: Monitored::default(), in_flight }
    }
}

/// All routes, as a value: tests call it without a socket.
pub(crate) fn router(app: Arc<App>) -> Router {
    let limited = Router::new()
        .route("/", get(pages::overview))
        .route("/view/{name}", get(pages::model))
        .route("/models", get(documents::models))
        .route("/models/{name}", get(documents::model_file))
        .route("/models/{name}/drift", get(documents::drift))
        .route("/models/{name}/records", post(records::post))
        .route("/models/{name}/outcomes", post(outcomes::post))
        .route("/models/{name}/versions", post(versions::publish))
        .layer(DefaultBodyLimit::max(app.config.service.largest_body))
        .layer(middleware::from_fn_with_state(app.clone(), within_limits));
    Router::new()
        .route("/metrics", get(documents::metrics))
        .route("/alive", get(documents::alive))
        .route("/ready", get(documents::ready))
        .merge(limited)
        .fallback(async || ApiError::UnknownRoute)
        .method_not_allowed_fallback(async || ApiError::WrongMethod)
        .layer(middleware::from_fn(log_request))
        .with_state(app)
}

/// Answers 503 at once where too many requests are being answered, and 408 where one takes too long.
async fn within_limits(State(app): Shared, request: Request, next: Next) -> Response {
    let Ok(_place) = app.in_flight.try_acquire() else { return ApiError::Busy.into_response() };
    let longest = app.config.service.request_time.0;
    match tokio::time::timeout(longest, next.run(request)).await {
        Ok(response) => response,
        Err(_) => ApiError::TooSlow.into_response(),
    }
}

/// One line per request: method, path, status, time. Never a body, never a token.
async fn log_request(request: Request, next: Next) -> Response {
    let (method, path) = (request.method().clone(), request.uri().path().to_owned());
    let start = Instant::now();
    let response = next.run(request).await;
    let status = response.status().as_u16();
    tracing::debug!(%method, path, status, elapsed_ms = start.elapsed().as_secs_f64() * 1e3, "answered");
    response
}
