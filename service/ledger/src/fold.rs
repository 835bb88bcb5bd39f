//! Folding records and outcomes into window summaries. The same code serves the writer, which
//! folds as things come, and the verification, which folds everything anew.

use std::collections::HashMap;
use std::collections::hash_map::Entry;
use std::sync::Arc;

use kilter_drift::{Detail, DriftError, Frame, ScoredRecord, Summary};
use kilter_model::{Coder, Design, ModelFile};

use crate::error::LedgerError;
use crate::types::{NewRecord, ShadowScore, Stream};

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
    pub(crate) fingerprint: String,
    pub(crate) frame: Frame,
    pub(crate) segments: Vec<String>,
    coder: Coder,
    design: Design,
}

impl FoldedVersion {
    /// From the text of a model file.
    pub(crate) fn new(number: i64, file: &str) -> Result<Self, LedgerError> {
        let model =
            ModelFile::from_json(file).map_err(|error| LedgerError::damaged("a model file", error))?;
        Self::of_model(number, model)
    }

    /// From a model file that was read.
    pub(crate) fn of_model(number: i64, model: ModelFile) -> Result<Self, LedgerError> {
        let design = Design::of_model(&model).map_err(|error| LedgerError::damaged("a model file", error))?;
        let frame = Frame::new(&model).map_err(|error| LedgerError::damaged("a model file", error))?;
        Ok(Self {
            number,
            fingerprint: model.fingerprint,
            frame,
            coder: Coder::new(&model.fields),
            design,
            segments: model.monitor.segments,
        })
    }

    /// The terms of a record without the intercept: where the records have moved in them, the
    /// training uncertainty of the model counts for more. Empty for inputs that have no terms; a
    /// summary takes these records without them.
    pub(crate) fn terms(&self, inputs: &[f64]) -> Vec<f64> {
        if inputs.len() != self.design.fields().len() {
            return Vec::new();
        }
        let (mut values, mut dense) = (vec![0.0; inputs.len()], vec![0.0; self.design.dense().len()]);
        let mut terms = vec![0.0; self.design.terms().len()];
        self.coder.values_of(inputs, &mut values);
        self.design.fill_row(&values, &mut dense, &mut terms);
        terms.remove(0);
        if terms.iter().all(|term| term.is_finite()) { terms } else { Vec::new() }
    }

    /// Index of a category.
    pub(crate) fn category(&self, name: &str) -> Option<usize> {
        self.frame.categories().iter().position(|category| category == name)
    }
}

/// A record as one version scored it.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Case<'a> {
    pub(crate) id: &'a str,
    pub(crate) time: i64,
    pub(crate) log_odds: &'a [f64],
    pub(crate) inputs: &'a [f64],
    pub(crate) segments: &'a [String],
}

impl<'a> Case<'a> {
    pub(crate) fn of_record(record: &'a NewRecord) -> Self {
        Self {
            id: &record.id,
            time: record.time,
            log_odds: &record.log_odds,
            inputs: &record.inputs,
            segments: &record.segments,
        }
    }

    pub(crate) fn of_shadow(id: &'a str, time: i64, score: &'a ShadowScore) -> Self {
        Self { id, time, log_odds: &score.log_odds, inputs: &score.inputs, segments: &score.segments }
    }

    pub(crate) fn day(&self) -> i64 {
        day_of(self.time)
    }

    /// Hours from the record to its outcome.
    fn delay_in_hours(&self, observed_at: i64) -> f64 {
        (observed_at - self.time) as f64 / MICROS_PER_HOUR
    }
}

/// Something that happens to a window.
#[derive(Debug, Clone, Copy)]
pub(crate) enum Event {
    /// The record was scored.
    Scored,
    /// The record was deleted, when it has no outcome any more.
    Deleted,
    /// Its outcome became known.
    Outcome { category: usize, observed_at: i64 },
    /// A former outcome was withdrawn.
    Withdrawn { category: usize, observed_at: i64 },
}

impl Event {
    /// Whether the terms of the record take part.
    pub(crate) fn needs_terms(self) -> bool {
        matches!(self, Self::Outcome { .. } | Self::Withdrawn { .. })
    }
}

fn apply(
    summary: &mut Summary,
    frame: &Frame,
    case: &Case,
    terms: &[f64],
    event: Event,
) -> Result<(), DriftError> {
    let record = ScoredRecord { log_odds: case.log_odds, inputs: case.inputs, terms };
    match event {
        Event::Scored => summary.add_scored(frame, &record, 1.0),
        Event::Deleted => summary.remove_scored(frame, &record, 1.0),
        Event::Outcome { category, observed_at } => {
            summary.add_outcome(frame, &record, category, case.delay_in_hours(observed_at), 1.0)
        }
        Event::Withdrawn { category, observed_at } => {
            summary.remove_outcome(frame, &record, category, case.delay_in_hours(observed_at), 1.0)
        }
    }
}

/// Numbers of the streams of one version.
#[derive(Debug, Default)]
pub(crate) struct Streams {
    all: Option<i64>,
    /// For each segment field its values.
    values: HashMap<String, HashMap<String, i64>>,
}

/// A stream that a record belongs to, in words that need not be copied.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum StreamName<'a> {
    All,
    Segment { field: &'a str, value: &'a str },
}

impl StreamName<'_> {
    pub(crate) fn detail(self) -> Detail {
        if self == StreamName::All { Detail::Full } else { Detail::Light }
    }

    pub(crate) fn to_stream(self) -> Stream {
        match self {
            StreamName::All => Stream::All,
            StreamName::Segment { field, value } => {
                Stream::Segment { field: field.to_owned(), value: value.to_owned() }
            }
        }
    }
}

impl Streams {
    pub(crate) fn insert(&mut self, stream: Stream, number: i64) {
        match stream {
            Stream::All => self.all = Some(number),
            Stream::Segment { field, value } => {
                self.values.entry(field).or_default().insert(value, number);
            }
        }
    }

    /// The streams of a case, each with its number where it has one already.
    pub(crate) fn of<'a>(
        &self,
        version: &'a FoldedVersion,
        case: &Case<'a>,
    ) -> Vec<(StreamName<'a>, Option<i64>)> {
        let segments = version.segments.iter().zip(case.segments).map(|(field, value)| {
            let value = if value.is_empty() { NO_VALUE } else { value.as_str() };
            let (value, number) = self.place(field, value);
            (StreamName::Segment { field, value }, number)
        });
        std::iter::once((StreamName::All, self.all)).chain(segments).collect()
    }

    /// The value that a value is counted under.
    fn place<'a>(&self, field: &str, value: &'a str) -> (&'a str, Option<i64>) {
        let Some(known) = self.values.get(field) else { return (value, None) };
        if let Some(number) = known.get(value) {
            return (value, Some(*number));
        }
        let own = known.len() - usize::from(known.contains_key(OTHER_SEGMENTS));
        if own < MOST_SEGMENT_VALUES {
            (value, None)
        } else {
            (OTHER_SEGMENTS, known.get(OTHER_SEGMENTS).copied())
        }
    }
}

/// Stream and day of a summary.
pub(crate) type WindowKey = (i64, i64);

/// A summary at hand.
#[derive(Debug)]
struct Window {
    summary: Summary,
    changed: bool,
}

/// Summaries at hand, those that were changed marked.
#[derive(Debug, Default)]
pub(crate) struct Windows {
    windows: HashMap<WindowKey, Window>,
    changed: Vec<WindowKey>,
}

impl Windows {
    /// Folds an event of a case into a window. `load` fetches a summary that is not at hand.
    pub(crate) fn fold(
        &mut self,
        (stream, detail): (i64, Detail),
        version: &FoldedVersion,
        case: &Case,
        terms: &[f64],
        event: Event,
        load: impl FnOnce(WindowKey) -> Result<Option<Summary>, LedgerError>,
    ) -> Result<(), LedgerError> {
        let key = (stream, case.day());
        let window = match self.windows.entry(key) {
            Entry::Occupied(entry) => entry.into_mut(),
            Entry::Vacant(entry) => {
                let summary = load(key)?.unwrap_or_else(|| Summary::new(&version.frame, detail));
                entry.insert(Window { summary, changed: false })
            }
        };
        if !window.changed {
            window.changed = true;
            self.changed.push(key);
        }
        apply(&mut window.summary, &version.frame, case, terms, event)
            .map_err(|source| LedgerError::Summary { id: case.id.to_owned(), source: Arc::new(source) })
    }

    /// The changed summaries, in the order of their keys.
    pub(crate) fn changed(&mut self) -> impl Iterator<Item = (WindowKey, &Summary)> {
        self.changed.sort_unstable();
        let windows = &self.windows;
        self.changed.iter().filter_map(|key| windows.get(key).map(|window| (*key, &window.summary)))
    }

    /// What was changed is on disk.
    pub(crate) fn committed(&mut self) {
        for key in self.changed.drain(..) {
            if let Some(window) = self.windows.get_mut(&key) {
                window.changed = false;
            }
        }
    }

    /// What was changed is forgotten.
    pub(crate) fn rolled_back(&mut self) {
        for key in self.changed.drain(..) {
            self.windows.remove(&key);
        }
    }

    pub(crate) fn remove(&mut self, key: WindowKey) -> Option<Summary> {
        self.windows.remove(&key).map(|window| window.summary)
    }

    pub(crate) fn keys(&self) -> impl Iterator<Item = WindowKey> {
        self.windows.keys().copied()
    }

    pub(crate) fn len(&self) -> usize {
        self.windows.len()
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

    #[test]
    fn values_beyond_the_two_hundredth_share_a_stream() {
        let mut streams = Streams::default();
        let segment = |value: &str| Stream::Segment { field: "depot".into(), value: value.into() };
        for number in 0..MOST_SEGMENT_VALUES {
            let value = format!("depot {number}");
            assert_eq!(streams.place("depot", &value), (value.as_str(), None));
            streams.insert(segment(&value), number as i64);
        }
        assert_eq!(streams.place("depot", "one more"), (OTHER_SEGMENTS, None));
        streams.insert(segment(OTHER_SEGMENTS), 1000);
        assert_eq!(streams.place("depot", "one more"), (OTHER_SEGMENTS, Some(1000)));
        assert_eq!(streams.place("depot", "depot 7"), ("depot 7", Some(7)));
        assert_eq!(streams.place("round", "one more"), ("one more", None));
    }
}
