//! Which versions answer: the live versions of the ledger, compiled.

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::sync::{Arc, PoisonError, RwLock};

use anyhow::Context;
use kilter_ledger::{Act, Job, Ledger, Reply, VersionChange, VersionRow, VersionState};

use crate::durable::write_durably;
use crate::pages::short_version;
use crate::scoring::Version;

/// The live versions, by name of the model.
pub(crate) struct Registry {
    ledger: Ledger,
    folder: PathBuf,
    live: RwLock<BTreeMap<String, Arc<Version>>>,
}

impl std::fmt::Debug for Registry {
    fn fmt(&self, f: &mut std::fmt::Formatter) -> std::fmt::Result {
        f.debug_struct("Registry").field("folder", &self.folder).finish_non_exhaustive()
    }
}

impl Registry {
    /// The registry of a ledger and a models folder, with the live versions compiled.
    ///
    /// # Errors
    /// Where the ledger cannot be read, or holds a live version that this build cannot serve.
    pub(crate) fn open(ledger: Ledger, folder: PathBuf) -> anyhow::Result<Self> {
        let registry = Self { ledger, folder, live: RwLock::default() };
        registry.refresh()?;
        Ok(registry)
    }

    /// The ledger.
    pub(crate) fn ledger(&self) -> &Ledger {
        &self.ledger
    }

    /// The live version of a model.
    pub(crate) fn live(&self, model: &str) -> Option<Arc<Version>> {
        self.live.read().unwrap_or_else(PoisonError::into_inner).get(model).cloned()
    }

    /// All live versions, by name of the model.
    pub(crate) fn all_live(&self) -> Vec<Arc<Version>> {
        self.live.read().unwrap_or_else(PoisonError::into_inner).values().cloned().collect()
    }

    /// Takes over what other processes have published. A version that is unchanged is not compiled
    /// again.
    pub(crate) fn refresh(&self) -> anyhow::Result<()> {
        let rows = self.ledger.versions(Some(VersionState::Live))?;
        let mut live = BTreeMap::new();
        for row in rows {
            let known = self.live(&row.model).filter(|version| version.fingerprint() == row.fingerprint);
            let version = match known {
                Some(version) => version,
                None => Arc::new(
                    Version::new(row.file)
                        .with_context(|| format!("the live version of `{}` cannot be served", row.model))?,
                ),
            };
            live.insert(row.model, version);
        }
        *self.live.write().unwrap_or_else(PoisonError::into_inner) = live;
        Ok(())
    }

    /// Publishes a compiled version: a copy in the models folder first, then the ledger.
    pub(crate) fn publish(
        &self,
        version: &Version,
        state: VersionState,
        who: &str,
        now: i64,
    ) -> anyhow::Result<()> {
        let model = &version.model;
        let path = self.path_of(&model.name, version.fingerprint());
        write_durably(&path, version.text.as_bytes())
            .with_context(|| format!("could not keep a copy as `{}`", path.display()))?;
        let row = VersionRow {
            model: model.name.clone(),
            fingerprint: model.fingerprint.clone(),
            file: version.text.clone(),
            state,
            published_at: now,
        };
        self.ledger.write(Job::Publish { version: row, who: who.to_owned() })?;
        self.refresh()
    }

    /// Changes what a version does, and follows it.
    ///
    /// # Errors
    /// Where the ledger cannot be written, or the change is not possible.
    pub(crate) fn change(&self, model: &str, change: VersionChange, act: Act) -> anyhow::Result<VersionRow> {
        let reply = self.ledger.write(Job::ChangeVersion { model: model.to_owned(), change, act })?;
        self.refresh()?;
        match reply {
            Reply::Changed(version) => Ok(version),
            _ => anyhow::bail!("the ledger gave no answer to the change"),
        }
    }

    fn path_of(&self, model: &str, fingerprint: &str) -> PathBuf {
        Path::new(&self.folder).join(model).join(format!("{}.model.json", short_version(fingerprint)))
    }
}
