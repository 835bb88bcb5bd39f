//! `POST /models/{name}/outcomes`: observed categories in.

use axum::Json;
use axum::body::Bytes;
use axum::extract::rejection::BytesRejection;
use axum::extract::{Path, State};
use axum::http::HeaderMap;
use kilter_ledger::{Job, Outcomes, Reply};

use super::answers::{OutcomesAnswer, RefusedOutcome};
use super::app::Shared;
use super::media::Media;
use super::problem::ApiError;
use super::records::read_batch;
use super::{live_version, on_disk, whole_body};
use crate::config::Scope;
use crate::observing::{ReadOutcomes, Tally, outcome_specs};

pub(super) async fn post(
    State(app): Shared,
    Path(name): Path<String>,
    headers: HeaderMap,
    body: Result<Bytes, BytesRejection>,
) -> Result<Json<OutcomesAnswer>, ApiError> {
    app.tokens.admit(&headers, Scope::Observe)?;
    let version = live_version(&app, &name)?;
    let media = Media::of_body(&headers)?;
    let body = whole_body(&app, body)?;
    let batch = read_batch(&outcome_specs(), media, &body)?;
    let read = ReadOutcomes::of(&batch);
    let mut tally = Tally::default();
    tally.refuse_unread(&read);
    if !read.outcomes.is_empty() {
        let job = Job::Outcomes(Outcomes {
            model: version.model.name.clone(),
            received: app.clock.now(),
            outcomes: read.outcomes.clone(),
        });
        if let Reply::Outcomes(states) = on_disk(&app, job).await? {
            tally.add(&read, &states);
        }
    }
    tally.count(&app.metrics, &version.model.name);
    app.monitored.mark(&version.model.name);
    let refused = tally.refused.into_iter().map(|refusal| RefusedOutcome {
        position: refusal.row,
        id: refusal.id,
        field: refusal.field,
        reason: refusal.reason,
    });
    Ok(Json(OutcomesAnswer {
        matched: tally.matched,
        waiting: tally.waiting,
        repeated: tally.repeated,
        corrected: tally.corrected,
        refused: refused.collect(),
    }))
}
