//! A transaction with the statements of its connection.

use postgres::types::ToSql;
use postgres::{Row, Transaction};

use super::copy::Copy;
use super::session::{Parameters, Statements};
use crate::error::LedgerError;

/// A transaction with the statements of its connection.
pub(super) struct Work<'a, 'c> {
    transaction: &'a mut Transaction<'c>,
    statements: &'a mut Statements,
}

impl<'a, 'c> Work<'a, 'c> {
    pub(super) fn new(transaction: &'a mut Transaction<'c>, statements: &'a mut Statements) -> Self {
        Self { transaction, statements }
    }

    pub(super) fn query(
        &mut self,
        sql: &'static str,
        parameters: Parameters,
    ) -> Result<Vec<Row>, LedgerError> {
        let statement = self.statements.prepared(self.transaction, sql)?;
        Ok(self.transaction.query(&statement, parameters)?)
    }

    pub(super) fn query_opt(
        &mut self,
        sql: &'static str,
        parameters: Parameters,
    ) -> Result<Option<Row>, LedgerError> {
        let statement = self.statements.prepared(self.transaction, sql)?;
        Ok(self.transaction.query_opt(&statement, parameters)?)
    }

    pub(super) fn query_one(
        &mut self,
        sql: &'static str,
        parameters: Parameters,
    ) -> Result<Row, LedgerError> {
        let statement = self.statements.prepared(self.transaction, sql)?;
        Ok(self.transaction.query_one(&statement, parameters)?)
    }

    pub(super) fn execute(&mut self, sql: &'static str, parameters: Parameters) -> Result<u64, LedgerError> {
        let statement = self.statements.prepared(self.transaction, sql)?;
        Ok(self.transaction.execute(&statement, parameters)?)
    }

    /// Runs statements that define tables.
    pub(super) fn define(&mut self, sql: &str) -> Result<(), LedgerError> {
        Ok(self.transaction.batch_execute(sql)?)
    }

    /// Runs statements that define tables, unless somebody keeps them from it; whether it was done.
    pub(super) fn try_to_define(&mut self, sql: &str) -> Result<bool, LedgerError> {
        let mut attempt = self.transaction.savepoint("attempt")?;
        match attempt.batch_execute(sql) {
            Ok(()) => {
                attempt.commit()?;
                Ok(true)
            }
            Err(error) if error.code() == Some(&postgres::error::SqlState::LOCK_NOT_AVAILABLE) => {
                attempt.rollback()?;
                Ok(false)
            }
            Err(error) => Err(error.into()),
        }
    }

    /// Starts to send rows, by a statement of the form `COPY … FROM STDIN (FORMAT binary)`.
    pub(super) fn copy(&mut self, sql: &'static str, columns: u16) -> Result<Copy<'_>, LedgerError> {
        let statement = self.statements.prepared(self.transaction, sql)?;
        Ok(Copy::new(self.transaction.copy_in(&statement)?, columns))
    }
}

/// One parameter as a list of them.
pub(super) fn one<T: ToSql + Sync>(parameter: &T) -> [&(dyn ToSql + Sync); 1] {
    [parameter]
}
