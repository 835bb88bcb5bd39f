//! Files that workers have taken up.

use super::writing::Writing;
use crate::codes::{with_nul, without_nul};
use crate::error::LedgerError;
use crate::types::{FileEntry, FileStart};

impl Writing<'_, '_> {
    pub(super) fn begin_file(&mut self, file: &FileStart) -> Result<Option<FileEntry>, LedgerError> {
        let model = self.model(&file.model)?;
        let known = self.work.query_opt(
            "SELECT name, claim, result, started, finished FROM file WHERE model = $1 AND sha256 = $2",
            &[&model, &file.sha256],
        )?;
        if let Some(row) = known {
            return Ok(Some(FileEntry {
                name: with_nul(row.try_get(0)?),
                claim: with_nul(row.try_get(1)?),
                result: with_nul(row.try_get(2)?),
                started: row.try_get(3)?,
                finished: row.try_get(4)?,
            }));
        }
        let [name, claim, result] = [&file.name, &file.claim, &file.result].map(|text| without_nul(text));
        self.work.execute(
            "INSERT INTO file (model, sha256, name, claim, result, started) VALUES ($1, $2, $3, $4, $5, $6)",
            &[&model, &file.sha256, &name, &claim, &result, &file.started],
        )?;
        Ok(None)
    }

    pub(super) fn finish_file(
        &mut self,
        model: &str,
        sha256: &str,
        finished: i64,
    ) -> Result<(), LedgerError> {
        let model = self.model(model)?;
        self.work.execute(
            "UPDATE file SET finished = $1 WHERE model = $2 AND sha256 = $3",
            &[&finished, &model, &sha256],
        )?;
        Ok(())
    }
}
