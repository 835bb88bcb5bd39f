//! Reading what is committed, on a connection of its own.

use std::cell::RefCell;
use std::ops::ControlFlow;
use std::path::Path;
use std::time::{Duration, Instant};

use super::address::PostgresAddress;
use super::apart::{apart, visit_apart};
use super::questions::{
    audit_lines, counts_of, former_of, model_of, record_of, version_of, version_rows, windows,
};
use super::session::{Role, Session, lost};
use super::verify::stream_of;
use super::{raw, verify};
use crate::codes::without_nul;
use crate::error::LedgerError;
use crate::store::Reader;
use crate::types::{
    AuditEntry, Counts, RawOutcome, RawPair, RawRecord, Stream, VerifyDifference, VersionRow, VersionState,
    WindowSummary,
};

/// A reader of the data base.
pub(super) struct PostgresReader {
    address: PostgresAddress,
    patience: Duration,
    session: RefCell<Session>,
}

impl PostgresReader {
    pub(super) fn connect(address: &PostgresAddress, patience: Duration) -> Result<Self, LedgerError> {
        let session = RefCell::new(apart(|| Session::connect(address, Role::Reader, patience))?);
        Ok(Self { address: address.clone(), patience, session })
    }

    /// Asks a question, again on a new connection where the old one was lost.
    fn ask<T: Send>(
        &self,
        question: impl FnMut(&mut Session) -> Result<T, LedgerError> + Send,
    ) -> Result<T, LedgerError> {
        let session = &mut *self.session.borrow_mut();
        let (address, patience) = (&self.address, self.patience);
        apart(move || ask(session, address, patience, question))
    }

    /// Visits something; once anything was visited it cannot be asked again.
    fn visit<T: Send>(
        &self,
        visit: &mut dyn FnMut(T) -> ControlFlow<()>,
        mut visits: impl FnMut(&mut Session, &mut dyn FnMut(T) -> ControlFlow<()>) -> Result<(), LedgerError>
        + Send,
    ) -> Result<(), LedgerError> {
        let session = &mut *self.session.borrow_mut();
        let (address, patience) = (&self.address, self.patience);
        visit_apart(visit, move |visit| {
            let mut visited = false;
            let mut failure = None;
            ask(session, address, patience, |session| {
                let result = visits(session, &mut |item| {
                    visited = true;
                    visit(item)
                });
                match result {
                    Err(error) if visited => {
                        failure = Some(error);
                        Ok(())
                    }
                    result => result,
                }
            })?;
            failure.map_or(Ok(()), Err)
        })
    }
}

fn ask<T>(
    session: &mut Session,
    address: &PostgresAddress,
    patience: Duration,
    mut question: impl FnMut(&mut Session) -> Result<T, LedgerError>,
) -> Result<T, LedgerError> {
    let begun = Instant::now();
    loop {
        match question(session) {
            Err(error) if lost(&error) && begun.elapsed() < patience => {
                *session = Session::connect(address, Role::Reader, patience)?;
            }
            answer => return answer,
        }
    }
}

impl Reader for PostgresReader {
    fn another(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(Self::connect(&self.address, self.patience)?))
    }

    fn versions(&self, state: Option<VersionState>) -> Result<Vec<VersionRow>, LedgerError> {
        self.ask(|session| version_rows(session, state))
    }

    fn audit(&self, model: &str) -> Result<Vec<AuditEntry>, LedgerError> {
        self.ask(|session| audit_lines(session, model))
    }

    fn streams(&self, model: &str, version: &str) -> Result<Vec<Stream>, LedgerError> {
        self.ask(|session| {
            let rows = session.query(
                "SELECT field, value FROM stream JOIN version ON version.number = stream.version \
                 JOIN model ON model.number = version.model WHERE name = $1 AND fingerprint = $2 \
                 ORDER BY field COLLATE \"C\", value COLLATE \"C\"",
                &[&without_nul(model), &without_nul(version)],
            )?;
            rows.iter().map(|row| stream_of(row, 0)).collect()
        })
    }

    fn summaries(
        &self,
        model: &str,
        version: &str,
        stream: Option<&Stream>,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError> {
        self.ask(|session| match version_of(session, model, version)? {
            Some((_, version)) => windows(session, version, stream, days),
            None => Ok(Vec::new()),
        })
    }

    fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError> {
        self.ask(|session| {
            let Some((_, version)) = version_of(session, model, version)? else { return Ok(None) };
            let rows = session.query(
                "SELECT min(day), max(day) FROM stream JOIN summary ON summary.stream = stream.number \
                 WHERE stream.version = $1 AND field = ''",
                &[&version],
            )?;
            let Some(row) = rows.first() else { return Ok(None) };
            let (first, last): (Option<i64>, Option<i64>) = (row.try_get(0)?, row.try_get(1)?);
            Ok(first.zip(last).map(|(first, last)| [first, last]))
        })
    }

    fn waiting_records(&self) -> Result<u64, LedgerError> {
        self.ask(|session| {
            let rows = session.query(
                "SELECT coalesce(sum(records - matched), 0)::bigint FROM day \
                 WHERE day >= (SELECT horizon FROM state)",
                &[],
            )?;
            let waiting: i64 = rows.first().map_or(Ok(0), |row| row.try_get(0))?;
            Ok(waiting.cast_unsigned())
        })
    }

    fn counts(&self, model: &str) -> Result<Counts, LedgerError> {
        self.ask(|session| counts_of(session, model))
    }

    fn records(
        &self,
        model: &str,
        version: &str,
        period: [i64; 2],
        visit: &mut dyn FnMut(RawRecord) -> ControlFlow<()>,
    ) -> Result<(), LedgerError> {
        self.visit(visit, |session, visit| match version_of(session, model, version)? {
            Some(numbers) => raw::visit_records(session, numbers, period, visit),
            None => Ok(()),
        })
    }

    fn pairs(
        &self,
        model: &str,
        version: &str,
        shadow: &str,
        period: [i64; 2],
        visit: &mut dyn FnMut(RawPair) -> ControlFlow<()>,
    ) -> Result<(), LedgerError> {
        self.visit(visit, |session, visit| {
            let numbers = version_of(session, model, version)?;
            let (Some(numbers), Some((_, shadow))) = (numbers, version_of(session, model, shadow)?) else {
                return Ok(());
            };
            raw::visit_pairs(session, numbers, shadow, period, visit)
        })
    }

    fn record(&self, model: &str, id: &str) -> Result<Option<RawRecord>, LedgerError> {
        self.ask(|session| match model_of(session, model)? {
            Some(model) => record_of(session, model, id),
            None => Ok(None),
        })
    }

    fn former_outcomes(&self, model: &str, id: &str) -> Result<Vec<RawOutcome>, LedgerError> {
        self.ask(|session| match model_of(session, model)? {
            Some(model) => former_of(session, model, id),
            None => Ok(Vec::new()),
        })
    }

    fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError> {
        self.ask(verify::verify)
    }

    fn backup(&self, _path: &Path) -> Result<(), LedgerError> {
        Err(LedgerError::CopiedOtherwise)
    }
}
