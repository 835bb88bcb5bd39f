//! Versions: published, promoted, rolled back, retired; each with a line in the audit trail.

use super::names::live_number;
use super::work::one;
use super::writing::Writing;
use crate::acts::{Line, PROMOTED, PUBLISHED_LIVE, RETIRED, ROLLED_BACK, check_file, deletion, publication};
use crate::codes::without_nul;
use crate::error::LedgerError;
use crate::types::{Act, VersionChange, VersionRow, VersionState};

impl Writing<'_, '_> {
    pub(super) fn publish(&mut self, version: &VersionRow, who: &str) -> Result<(), LedgerError> {
        check_file(version)?;
        let model = self.model(&version.model)?;
        let from = live_number(&mut self.work, model)?;
        if version.state == VersionState::Live {
            self.retire_live(model)?;
        } else if self.is_of(from, &version.fingerprint)? {
            return Err(LedgerError::LiveVersion {
                model: version.model.clone(),
                version: version.fingerprint.clone(),
            });
        }
        self.work.execute(
            "INSERT INTO version (model, fingerprint, file, state, published_at) VALUES ($1, $2, $3, $4, $5) \
             ON CONFLICT (model, fingerprint) DO UPDATE SET state = excluded.state",
            &[&model, &version.fingerprint, &version.file, &version.state.name(), &version.published_at],
        )?;
        self.cache.names.versions_changed();
        let to = self.version_of((model, &version.model), &version.fingerprint)?.number;
        let act = Act { at: version.published_at, who: who.to_owned(), why: String::new() };
        self.write_line(&act, &Line { model, what: publication(version.state), from, to: Some(to) })
    }

    pub(super) fn change_version(
        &mut self,
        model_name: &str,
        change: &VersionChange,
        act: &Act,
    ) -> Result<VersionRow, LedgerError> {
        let model = self.model(model_name)?;
        let from = live_number(&mut self.work, model)?;
        let (what, to, state) = match change {
            VersionChange::Promote(fingerprint) => {
                let to = self.version_of((model, model_name), fingerprint)?.number;
                (PROMOTED, to, VersionState::Live)
            }
            VersionChange::Rollback => (ROLLED_BACK, self.former_live(model_name, from)?, VersionState::Live),
            VersionChange::Retire(fingerprint) => {
                let to = self.version_of((model, model_name), fingerprint)?.number;
                if Some(to) == from {
                    return Err(LedgerError::LiveVersion {
                        model: model_name.to_owned(),
                        version: fingerprint.clone(),
                    });
                }
                (RETIRED, to, VersionState::Retired)
            }
        };
        if state == VersionState::Live {
            self.retire_live(model)?;
        }
        self.work.execute("UPDATE version SET state = $1 WHERE number = $2", &[&state.name(), &to])?;
        self.cache.names.versions_changed();
        self.write_line(act, &Line { model, what, from, to: Some(to) })?;
        self.version_row(model_name, to, state)
    }

    pub(super) fn write_deletion(
        &mut self,
        model: i64,
        act: &Act,
        deleted: usize,
    ) -> Result<(), LedgerError> {
        self.write_line(act, &Line { model, what: &deletion(deleted), from: None, to: None })
    }

    fn write_line(&mut self, act: &Act, line: &Line) -> Result<(), LedgerError> {
        self.work.execute(
            "INSERT INTO audit (at, who, why, what, model, from_version, to_version) \
             VALUES ($1, $2, $3, $4, $5, $6, $7)",
            &[
                &act.at,
                &without_nul(&act.who),
                &without_nul(&act.why),
                &line.what,
                &line.model,
                &line.from,
                &line.to,
            ],
        )?;
        Ok(())
    }

    /// Whether a version has a fingerprint.
    fn is_of(&mut self, version: Option<i64>, fingerprint: &str) -> Result<bool, LedgerError> {
        let row = self.work.query_one(
            "SELECT EXISTS (SELECT 1 FROM version WHERE number = $1 AND fingerprint = $2)",
            &[&version, &fingerprint],
        )?;
        Ok(row.try_get(0)?)
    }

    fn retire_live(&mut self, model: i64) -> Result<(), LedgerError> {
        self.work.execute(
            "UPDATE version SET state = 'retired' WHERE model = $1 AND state = 'live'",
            &one(&model),
        )?;
        Ok(())
    }

    /// The version that was live before the live version became so. Going back is not counted, so
    /// going back twice goes back two versions and not to and fro.
    fn former_live(&mut self, model: &str, live: Option<i64>) -> Result<i64, LedgerError> {
        let row = self.work.query_opt(
            "SELECT from_version FROM audit WHERE to_version = $1 AND from_version <> $1 \
             AND what IN ($2, $3) ORDER BY number DESC LIMIT 1",
            &[&live, &PUBLISHED_LIVE, &PROMOTED],
        )?;
        let row = row.ok_or_else(|| LedgerError::NoFormerVersion { model: model.to_owned() })?;
        Ok(row.try_get(0)?)
    }

    fn version_row(
        &mut self,
        model: &str,
        number: i64,
        state: VersionState,
    ) -> Result<VersionRow, LedgerError> {
        let row = self.work.query_one(
            "SELECT fingerprint, file, published_at FROM version WHERE number = $1",
            &one(&number),
        )?;
        Ok(VersionRow {
            model: model.to_owned(),
            fingerprint: row.try_get(0)?,
            file: row.try_get(1)?,
            state,
            published_at: row.try_get(2)?,
        })
    }
}
