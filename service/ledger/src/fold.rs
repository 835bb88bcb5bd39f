//! Folding records and outcomes into window summaries. The same code serves the writer, which
//! folds as things come, and the verification, which folds everything anew.

use std::collections::{BTreeMap, HashMap, HashSet};
use std::sync::Arc;

use kilter_drift::{Detail, DriftError, Frame, ScoredRecord, Summary};
use kilter_model::{Coder, Design, ModelFile};

use crate::error::LedgerError;
use crate::types::Stream;

/// Values of one segment field that have summaries of their own; later ones share one.
pub const MOST_SEGMENT_VALUES: usize = 200;
/// The value that later values of a full segment field are counted under.
pub const OTHER_SEGMENTS: &str = "(other)";
/// The value of records that carry none.
const NO_VALUE: &str = "(none)";
const MICROS_PER_DAY: i64 = 86_400_000_000;
const MICROS_PER_HOUR: f64 = 3_600_000_000.0;

/// The UTC day of an instant, counted from 1970-01-01.
pub fn day_of(micros: i64) -> i64 {
    micros.div_euclid(MICROS_PER_DAY)
}

/// A version as the folding needs it.
#[derive(Debug)]
pub(crate) struct FoldedVersion {
    pub(crate) number: i64,
    pub(crate) frame: Frame,
    pub(crate) categories: Vec<String>,
    segments: Vec<String>,
    coder: Coder,
    design: Design,
}

impl FoldedVersion {
    /// From the text of a model file.
    pub(crate) fn new(number: i64, file: &str) -> Result<Self, LedgerError> {
        let damaged = |reason: String| LedgerError::damaged("a model file", reason);
        let model = ModelFile::from_json(file).map_err(|error| damaged(error.to_string()))?;
        let frame = Frame::new(&model).map_err(|error| damaged(error.to_string()))?;
        let design = Design::of_model(&model).map_err(|error| damaged(error.to_string()))?;
        Ok(Self {
            number,
            frame,
            coder: Coder::new(&model.fields),
            design,
            categories: model.outcome.categories,
            segments: model.monitor.segments,
        })
    }

    /// The terms of a record without the intercept: where the records have moved in them, the
    /// training uncertainty of the model counts for more.
    fn terms(&self, inputs: &[f64]) -> Vec<f64> {
        let (mut values, mut dense) = (vec![0.0; inputs.len()], vec![0.0; self.design.dense().len()]);
        let mut terms = vec![0.0; self.design.terms().len()];
        self.coder.values_of(inputs, &mut values);
        self.design.fill_row(&values, &mut dense, &mut terms);
        terms.remove(0);
        terms
    }

    /// Index of a category.
    pub(crate) fn category(&self, name: &str) -> Option<usize> {
        self.categories.iter().position(|category| category == name)
    }
}

/// A record as it is stored.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct StoredRecord {
    pub(crate) id: String,
    pub(crate) version: i64,
    pub(crate) time: i64,
    pub(crate) log_odds: Vec<f64>,
    pub(crate) inputs: Vec<f64>,
    pub(crate) segments: Vec<String>,
}

impl StoredRecord {
    /// Hours from the record to its outcome.
    fn delay_in_hours(&self, observed_at: i64) -> f64 {
        (observed_at - self.time) as f64 / MICROS_PER_HOUR
    }
}

/// Version, day and stream of a summary.
pub(crate) type WindowKey = (i64, i64, Stream);

/// Something that happens to a window.
#[derive(Debug, Clone, Copy)]
pub(crate) enum Event {
    /// The record was scored.
    Scored,
    /// Its outcome became known.
    Outcome { category: usize, observed_at: i64 },
    /// A former outcome was withdrawn.
    Withdrawn { category: usize, observed_at: i64 },
}

/// Summaries at hand, those that were changed marked.
#[derive(Debug, Default)]
pub(crate) struct Windows {
    summaries: HashMap<WindowKey, Summary>,
    changed: HashSet<WindowKey>,
    /// For each version and segment field the values that have summaries of their own.
    values: HashMap<(i64, String), HashSet<String>>,
}

impl Windows {
    /// Puts the known values of a version's segment fields in place.
    pub(crate) fn set_values(&mut self, version: i64, streams: impl IntoIterator<Item = Stream>) {
        for stream in streams {
            if let Stream::Segment { field, value } = stream {
                self.values.entry((version, field)).or_default().insert(value);
            }
        }
    }

    /// Folds an event of a record into its windows. `load` fetches a summary that is not at hand.
    pub(crate) fn fold(
        &mut self,
        version: &FoldedVersion,
        record: &StoredRecord,
        event: Event,
        mut load: impl FnMut(&WindowKey) -> Result<Option<Summary>, LedgerError>,
    ) -> Result<(), LedgerError> {
        let terms = match event {
            Event::Scored => Vec::new(),
            Event::Outcome { .. } | Event::Withdrawn { .. } => version.terms(&record.inputs),
        };
        for stream in self.streams(version, record) {
            let detail = if stream == Stream::All { Detail::Full } else { Detail::Light };
            let key = (version.number, day_of(record.time), stream);
            if !self.summaries.contains_key(&key) {
                let summary = load(&key)?.unwrap_or_else(|| Summary::new(&version.frame, detail));
                self.summaries.insert(key.clone(), summary);
            }
            if let Some(summary) = self.summaries.get_mut(&key) {
                apply(summary, &version.frame, record, &terms, event).map_err(|source| {
                    LedgerError::Summary { id: record.id.clone(), source: Arc::new(source) }
                })?;
            }
            self.changed.insert(key);
        }
        Ok(())
    }

    /// The changed summaries, which are then taken as written.
    pub(crate) fn take_changed(&mut self) -> Vec<(WindowKey, Summary)> {
        let changed = std::mem::take(&mut self.changed);
        changed
            .into_iter()
            .filter_map(|key| self.summaries.get(&key).map(|s| (key.clone(), s.clone())))
            .collect()
    }

    /// All summaries at hand, in the order of their keys.
    pub(crate) fn into_summaries(self) -> BTreeMap<WindowKey, Summary> {
        self.summaries.into_iter().collect()
    }

    /// Number of summaries at hand.
    pub(crate) fn len(&self) -> usize {
        self.summaries.len()
    }

    fn streams(&mut self, version: &FoldedVersion, record: &StoredRecord) -> Vec<Stream> {
        let mut streams = vec![Stream::All];
        for (field, value) in version.segments.iter().zip(&record.segments) {
            let value = if value.is_empty() { NO_VALUE } else { value };
            let known = self.values.entry((version.number, field.clone())).or_default();
            let value = if known.contains(value) || known.len() < MOST_SEGMENT_VALUES {
                value
            } else {
                OTHER_SEGMENTS
            };
            known.insert(value.to_owned());
            streams.push(Stream::Segment { field: field.clone(), value: value.to_owned() });
        }
        streams
    }
}

fn apply(
    summary: &mut Summary,
    frame: &Frame,
    record: &StoredRecord,
    terms: &[f64],
    event: Event,
) -> Result<(), DriftError> {
    let scored = ScoredRecord { log_odds: &record.log_odds, inputs: &record.inputs, terms };
    match event {
        Event::Scored => summary.add_scored(frame, &scored, 1.0),
        Event::Outcome { category, observed_at } => {
            summary.add_outcome(frame, &scored, category, record.delay_in_hours(observed_at), 1.0)
        }
        Event::Withdrawn { category, observed_at } => {
            summary.remove_outcome(frame, &scored, category, record.delay_in_hours(observed_at), 1.0)
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn days_begin_at_midnight_before_1970_too() {
        for (micros, day) in
            [(0, 0), (MICROS_PER_DAY - 1, 0), (MICROS_PER_DAY, 1), (-1, -1), (-MICROS_PER_DAY, -1)]
        {
            assert_eq!(day_of(micros), day, "{micros}");
        }
    }
}
