//! `POST /models/{name}/records`: records in, probabilities out.

use std::sync::Arc;
use std::time::Instant;

use axum::body::Bytes;
use axum::extract::rejection::BytesRejection;
use axum::extract::{Path, Query, State};
use axum::http::{HeaderMap, header};
use axum::response::{IntoResponse, Response};
use kilter_ledger::{Job, Records, Reply};
use kilter_model::{Batch, ColumnSpec, RecordReader};
use serde::Deserialize;
use uuid::Uuid;

use super::answers::{RecordsAnswer, refused_answers};
use super::app::{App, Shared};
use super::media::Media;
use super::problem::ApiError;
use super::{live_version, on_disk, whole_body};
use crate::config::Scope;
use crate::scoring::{ScoredRecords, Version, refusal_in_a_word};

/// Parameters of the address.
#[derive(Debug, Default, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub(super) struct Parameters {
    /// Refuse the whole request where a record is refused.
    strict: bool,
}

pub(super) async fn post(
    State(app): Shared,
    Path(name): Path<String>,
    parameters: Result<Query<Parameters>, axum::extract::rejection::QueryRejection>,
    headers: HeaderMap,
    body: Result<Bytes, BytesRejection>,
) -> Result<Response, ApiError> {
    let start = Instant::now();
    app.tokens.admit(&headers, Scope::Score)?;
    let Query(parameters) = parameters
        .map_err(|rejection| ApiError::BadParameter { name: "query", reason: rejection.body_text() })?;
    let version = live_version(&app, &name)?;
    let media = Media::of_body(&headers)?;
    let answer_media = Media::of_answer(&headers, media)?;
    let body = whole_body(&app, body)?;
    let batch = read_batch(version.layout.specs(), media, &body)?;
    let records = version.score(&batch);
    count_refused(&app, &version, &records);
    if parameters.strict && !records.refused().is_empty() {
        let refused =
            serde_json::to_value(refused_answers(&records)).map_err(|e| ApiError::Internal(e.into()))?;
        return Err(ApiError::RecordsRefused { refused });
    }
    let now = app.clock.now();
    let ids: Vec<String> = records
        .heads
        .iter()
        .map(|head| head.id.clone().unwrap_or_else(|| Uuid::now_v7().to_string()))
        .collect();
    let repeated = keep(&app, &version, &records, &ids, now).await?;
    let answer = RecordsAnswer::new(&version, &records, &ids, &repeated)
        .to_bytes(answer_media)
        .map_err(|error| ApiError::Internal(error.into()))?;
    let fresh =
        repeated.iter().zip(&records.usable).filter(|(repeated, usable)| **usable && !**repeated).count();
    let labels = [version.model.name.as_str(), version.fingerprint(), "http"];
    app.metrics.records_scored.with_label_values(&labels).inc_by(fresh as u64);
    app.metrics.score_seconds.with_label_values(&[labels[0], "http"]).observe(start.elapsed().as_secs_f64());
    Ok(([(header::CONTENT_TYPE, answer_media.content_type())], answer).into_response())
}

/// Reads a body into columns, straight from its bytes.
pub(super) fn read_batch(specs: &[ColumnSpec], media: Media, body: &[u8]) -> Result<Batch, ApiError> {
    let mut reader = RecordReader::new(specs);
    match media {
        Media::Json => reader.push_document(body).map_err(|error| {
            ApiError::BadBody(format!("the body is no JSON document of records: {error}"))
        })?,
        Media::Ndjson => body
            .split(|byte| *byte == b'\n')
            .filter(|line| !line.trim_ascii().is_empty())
            .for_each(|line| reader.push_line(line)),
    }
    Ok(reader.finish())
}

/// Keeps the scored records in the ledger; says for every row whether its id was there already.
async fn keep(
    app: &Arc<App>,
    version: &Version,
    records: &ScoredRecords,
    ids: &[String],
    now: i64,
) -> Result<Vec<bool>, ApiError> {
    let mut repeated = vec![false; ids.len()];
    let rows: Vec<usize> = records.rows().collect();
    if rows.is_empty() {
        return Ok(repeated);
    }
    let kept = rows.iter().map(|&row| records.new_record(row, ids[row].clone(), now)).collect();
    let job = Job::Records(Records {
        model: version.model.name.clone(),
        version: version.fingerprint().to_owned(),
        received: now,
        records: kept,
    });
    if let Reply::Records(states) = on_disk(app, job).await? {
        rows.into_iter().zip(states).for_each(|(row, state)| repeated[row] = state);
    }
    Ok(repeated)
}

fn count_refused(app: &App, version: &Version, records: &ScoredRecords) {
    for refusal in records.refused() {
        let labels = [version.model.name.as_str(), refusal_in_a_word(refusal)];
        app.metrics.records_refused.with_label_values(&labels).inc();
    }
}
