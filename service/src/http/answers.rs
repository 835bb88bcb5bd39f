//! Answers to posted records and outcomes.

use serde::ser::SerializeMap;
use serde::{Serialize, Serializer};

use super::media::Media;
use crate::scoring::{ScoredRecords, Version};

/// The answer to posted records.
#[derive(Debug, Serialize)]
pub(crate) struct RecordsAnswer<'a> {
    model: &'a str,
    version: &'a str,
    scored: Vec<ScoredAnswer<'a>>,
    refused: Vec<RefusedAnswer<'a>>,
}

/// One scored record.
#[derive(Debug, Serialize)]
struct ScoredAnswer<'a> {
    id: &'a str,
    probabilities: Probabilities<'a>,
    top: &'a str,
    notes: Vec<&'a str>,
    /// The ledger had the id already: the record is answered but not counted again.
    #[serde(skip_serializing_if = "is_false")]
    repeated: bool,
}

/// One refused record.
#[derive(Debug, Serialize)]
pub(crate) struct RefusedAnswer<'a> {
    /// Place in the request, from 0.
    position: usize,
    #[serde(skip_serializing_if = "Option::is_none")]
    id: Option<&'a str>,
    field: &'a str,
    reason: &'a str,
}

/// Probabilities under the names of their categories.
#[derive(Debug)]
struct Probabilities<'a> {
    categories: &'a [String],
    values: &'a [f64],
}

impl Serialize for Probabilities<'_> {
    fn serialize<S: Serializer>(&self, target: S) -> Result<S::Ok, S::Error> {
        let mut map = target.serialize_map(Some(self.values.len()))?;
        for (category, value) in self.categories.iter().zip(self.values) {
            map.serialize_entry(category, value)?;
        }
        map.end()
    }
}

#[expect(clippy::trivially_copy_pass_by_ref, reason = "serde passes fields by reference")]
fn is_false(value: &bool) -> bool {
    !value
}

impl<'a> RecordsAnswer<'a> {
    /// The answer to a scored batch. `ids` has an id for every row; `repeated` says for every row
    /// whether the ledger had its id already.
    pub(crate) fn new(
        version: &'a Version,
        records: &'a ScoredRecords,
        ids: &'a [String],
        repeated: &[bool],
    ) -> Self {
        let categories = &version.model.outcome.categories;
        let scored = records.rows().map(|row| ScoredAnswer {
            id: &ids[row],
            probabilities: Probabilities { categories, values: records.scored.probabilities_of(row) },
            top: &categories[records.scored.top_of(row)],
            notes: records.notes[row].split("; ").filter(|note| !note.is_empty()).collect(),
            repeated: repeated[row],
        });
        Self {
            model: &version.model.name,
            version: version.fingerprint(),
            scored: scored.collect(),
            refused: refused_answers(records),
        }
    }

    /// The answer as bytes: one document, or one line per record.
    pub(crate) fn to_bytes(&self, media: Media) -> Result<Vec<u8>, serde_json::Error> {
        if media == Media::Json {
            return serde_json::to_vec(self);
        }
        let mut lines = Vec::new();
        for record in &self.scored {
            serde_json::to_writer(&mut lines, record)?;
            lines.push(b'\n');
        }
        for record in &self.refused {
            serde_json::to_writer(&mut lines, record)?;
            lines.push(b'\n');
        }
        Ok(lines)
    }
}

/// The refused records of a batch.
pub(crate) fn refused_answers(records: &ScoredRecords) -> Vec<RefusedAnswer<'_>> {
    records
        .refused()
        .iter()
        .map(|refusal| RefusedAnswer {
            position: refusal.row,
            id: records.heads[refusal.row].id.as_deref(),
            field: &refusal.field,
            reason: &refusal.reason,
        })
        .collect()
}

/// The answer to posted outcomes.
#[derive(Debug, Default, Serialize)]
pub(crate) struct OutcomesAnswer {
    /// Outcomes of known records.
    pub(crate) matched: usize,
    /// Outcomes that wait for their record.
    pub(crate) waiting: usize,
    /// Outcomes that were known already.
    pub(crate) repeated: usize,
    /// Outcomes that replaced a former one.
    pub(crate) corrected: usize,
    /// Outcomes that were not taken in.
    pub(crate) refused: Vec<RefusedOutcome>,
}

/// An outcome that was not taken in.
#[derive(Debug, Serialize)]
pub(crate) struct RefusedOutcome {
    /// Place in the request, from 0.
    pub(crate) position: usize,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub(crate) id: Option<String>,
    pub(crate) field: String,
    pub(crate) reason: String,
}
