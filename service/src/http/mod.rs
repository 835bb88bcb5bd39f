//! The HTTP service.

mod access;
mod answers;
mod app;
mod documents;
mod media;
mod outcomes;
mod pages;
mod problem;
mod records;
mod serve;
#[cfg(test)]
mod tests;
mod versions;

pub(crate) use app::App;
pub(crate) use serve::serve;

use std::sync::Arc;

use axum::body::Bytes;
use axum::extract::rejection::BytesRejection;
use axum::http::StatusCode;
use kilter_ledger::{Job, LedgerError, Reply};

use self::problem::ApiError;
use crate::scoring::Version;

/// The live version of a model, or why there is none.
fn live_version(app: &App, name: &str) -> Result<Arc<Version>, ApiError> {
    app.registry.live(name).ok_or_else(|| {
        let names: Vec<String> = app.registry.all_live().iter().map(|v| v.model.name.clone()).collect();
        let near_miss = kilter_model::near_miss(name, &names).map(str::to_owned);
        ApiError::UnknownModel { name: name.to_owned(), near_miss }
    })
}

/// A body that was read whole, or why it was not.
fn whole_body(app: &App, body: Result<Bytes, BytesRejection>) -> Result<Bytes, ApiError> {
    body.map_err(|rejection| match rejection.status() {
        StatusCode::PAYLOAD_TOO_LARGE => ApiError::TooLarge { limit: app.config.service.largest_body },
        _ => ApiError::BadBody(rejection.body_text()),
    })
}

/// Writes a job to the ledger and waits, without holding a thread, until it is on disk.
async fn on_disk(app: &App, job: Job) -> Result<Reply, ApiError> {
    let (answer, wait) = tokio::sync::oneshot::channel();
    app.registry.ledger().submit(job, move |reply| {
        // A client that has gone does not wait for the answer any more.
        let _ = answer.send(reply);
    })?;
    Ok(wait.await.map_err(|_| LedgerError::Closed)??)
}
