//! Files that workers have taken up.

use rusqlite::{OptionalExtension, params};

use super::writing::Writing;
use crate::error::LedgerError;
use crate::types::{FileEntry, FileStart};

impl Writing<'_> {
    pub(super) fn begin_file(&mut self, file: &FileStart) -> Result<Option<FileEntry>, LedgerError> {
        let model = self.model(&file.model)?;
        let entry = |row: &rusqlite::Row| {
            Ok(FileEntry {
                name: row.get(0)?,
                claim: row.get(1)?,
                result: row.get(2)?,
                started: row.get(3)?,
                finished: row.get(4)?,
            })
        };
        let known = self
            .transaction
            .query_row(
                "SELECT name, claim, result, started, finished FROM file WHERE model = ? AND sha256 = ?",
                params![model, file.sha256],
                entry,
            )
            .optional()?;
        if known.is_none() {
            self.transaction.execute(
                "INSERT INTO file (model, sha256, name, claim, result, started) VALUES (?, ?, ?, ?, ?, ?)",
                params![model, file.sha256, file.name, file.claim, file.result, file.started],
            )?;
        }
        Ok(known)
    }

    pub(super) fn finish_file(
        &mut self,
        model: &str,
        sha256: &str,
        finished: i64,
    ) -> Result<(), LedgerError> {
        let model = self.model(model)?;
        self.transaction.execute(
            "UPDATE file SET finished = ? WHERE model = ? AND sha256 = ?",
            params![finished, model, sha256],
        )?;
        Ok(())
    }
}
