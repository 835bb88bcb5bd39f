//! A day computed anew from its raw records, to be compared with what is stored.

use kilter_drift::Summary;

use crate::compare::difference;
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion, Streams, WindowKey, Windows};
use crate::types::{RawOutcome, Stream, VerifyDifference};

/// A day as its raw records give it.
#[derive(Debug)]
pub(crate) struct Recomputed {
    day: i64,
    windows: Windows,
    /// Records and outcomes that were found.
    counts: [i64; 2],
    differences: Vec<VerifyDifference>,
}

impl Recomputed {
    pub(crate) fn new(day: i64) -> Self {
        Self { day, windows: Windows::default(), counts: [0; 2], differences: Vec::new() }
    }

    /// A record was found.
    pub(crate) fn count(&mut self, has_outcome: bool) {
        self.counts[0] += 1;
        self.counts[1] += i64::from(has_outcome);
    }

    /// Folds a record as a version scored it, with its outcome, into the streams that have numbers.
    pub(crate) fn fold(
        &mut self,
        version: &FoldedVersion,
        streams: &Streams,
        case: &Case,
        outcome: Option<&RawOutcome>,
    ) -> Result<(), LedgerError> {
        let outcome = outcome.and_then(|outcome| {
            let category = version.category(&outcome.category)?;
            Some(Event::Outcome { category, observed_at: outcome.observed_at })
        });
        let terms = if outcome.is_some() { version.terms(case.inputs) } else { Vec::new() };
        for (name, stream) in streams.of(version, case) {
            let Some(stream) = stream else {
                let reason = format!("record `{}` is in no summary", case.id);
                self.differ(&version.fingerprint, name.to_stream(), reason);
                continue;
            };
            for event in std::iter::once(Event::Scored).chain(outcome) {
                self.windows.fold((stream, name.detail()), version, case, &terms, event, |_| Ok(None))?;
            }
        }
        Ok(())
    }

    /// Compares the numbers of records and outcomes with those that were counted as they came.
    pub(crate) fn compare_counts(&mut self, counted: [i64; 2]) {
        let found = self.counts;
        if counted != found {
            let reason = format!(
                "{} records with {} outcomes are counted, {} with {} are there",
                counted[0], counted[1], found[0], found[1]
            );
            self.differ("", Stream::All, reason);
        }
    }

    /// Compares the summary of a stream; what is not asked for is not stored.
    pub(crate) fn compare(&mut self, number: i64, fingerprint: &str, stream: Stream, stored: &Summary) {
        let reason = match self.windows.remove((number, self.day)) {
            Some(computed) => difference(stored, &computed),
            None if stored.is_empty() => None,
            None => Some("there are no records for it".to_owned()),
        };
        if let Some(reason) = reason {
            self.differ(fingerprint, stream, reason);
        }
    }

    /// Streams that have records, but whose summaries were not compared.
    pub(crate) fn left(&self) -> Vec<i64> {
        self.windows.keys().map(|(stream, _): WindowKey| stream).collect()
    }

    /// A stream that has records has no summary.
    pub(crate) fn not_stored(&mut self, fingerprint: &str, stream: Stream) {
        self.differ(fingerprint, stream, "is not stored".to_owned());
    }

    /// The summaries of all streams that have records.
    pub(crate) fn summaries(&mut self) -> impl Iterator<Item = (WindowKey, &Summary)> {
        self.windows.changed()
    }

    pub(crate) fn into_differences(self) -> Vec<VerifyDifference> {
        self.differences
    }

    fn differ(&mut self, fingerprint: &str, stream: Stream, reason: String) {
        let difference = VerifyDifference { version: fingerprint.to_owned(), day: self.day, stream, reason };
        self.differences.push(difference);
    }
}
