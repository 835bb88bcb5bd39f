//! Which numbers belong to which day.

use rusqlite::{Connection, params};

use super::index::Kind;
use crate::error::LedgerError;

/// Consecutive numbers of one day of one model.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Span {
    kind: Kind,
    model: i64,
    day: i64,
    first: i64,
    last: i64,
    /// Whether the table has it as it is.
    written: bool,
}

/// Spans that grow. The last one of each kind is kept over transactions, because what comes next is
/// mostly of the same day.
#[derive(Debug, Default)]
pub(crate) struct Spans {
    records: Option<Span>,
    outcomes: Option<Span>,
    /// Spans of the transaction under way that are at their end.
    ended: Vec<Span>,
}

impl Spans {
    /// A number belongs to a day.
    pub(crate) fn cover(&mut self, kind: Kind, model: i64, day: i64, number: i64) {
        let growing = match kind {
            Kind::Record => &mut self.records,
            Kind::Outcome => &mut self.outcomes,
        };
        match growing {
            Some(span) if (span.model, span.day, span.last + 1) == (model, day, number) => {
                span.last = number;
                span.written = false;
            }
            _ => {
                let span = Span { kind, model, day, first: number, last: number, written: false };
                self.ended.extend(growing.replace(span).filter(|span| !span.written));
            }
        }
    }

    /// Writes what the table has not.
    pub(crate) fn write(&mut self, connection: &Connection) -> Result<(), LedgerError> {
        let mut statement = connection.prepare_cached(
            "INSERT INTO span (kind, model, day, first, last) VALUES (?, ?, ?, ?, ?) \
             ON CONFLICT DO UPDATE SET last = max(last, excluded.last)",
        )?;
        let growing = [&mut self.records, &mut self.outcomes].into_iter().flatten();
        for span in self.ended.iter_mut().chain(growing).filter(|span| !span.written) {
            statement.execute(params![span.kind.code(), span.model, span.day, span.first, span.last])?;
            span.written = true;
        }
        self.ended.clear();
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_in_order_make_one_span_for_each_day() {
        let mut spans = Spans::default();
        for (day, number) in [(1, 1), (1, 2), (2, 3), (2, 4), (2, 5), (1, 6), (1, 8)] {
            spans.cover(Kind::Record, 7, day, number);
        }
        spans.cover(Kind::Outcome, 7, 1, 3);
        let ended: Vec<_> = spans.ended.iter().map(|span| (span.day, span.first, span.last)).collect();
        assert_eq!(ended, [(1, 1, 2), (2, 3, 5), (1, 6, 6)]);
        assert_eq!(spans.records.map(|span| (span.first, span.last)), Some((8, 8)));
        assert_eq!(spans.outcomes.map(|span| (span.first, span.last)), Some((3, 3)));
    }
}
