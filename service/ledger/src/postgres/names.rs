//! Numbers of names: what the writer keeps at hand of models, versions, categories, streams and
//! partitions.

use std::collections::hash_map::Entry;
use std::collections::{HashMap, HashSet};
use std::sync::Arc;

use super::partitions::Partitioned;
use super::work::{Work, one};
use crate::codes::{stream_columns, stream_from_columns, with_nul, without_nul};
use crate::error::LedgerError;
use crate::fold::{FoldedVersion, StreamName, Streams};

/// Numbers of names, looked up once. To be forgotten when a transaction is rolled back.
#[derive(Debug, Default)]
pub(super) struct Names {
    models: HashMap<String, i64>,
    numbers: HashMap<(i64, String), i64>,
    versions: HashMap<i64, Arc<FoldedVersion>>,
    live: HashMap<i64, Option<i64>>,
    categories: HashMap<(i64, String), i64>,
    categories_by_number: HashMap<i64, Arc<str>>,
    streams: HashMap<i64, Streams>,
    has_shadows: Option<bool>,
    pub(super) partitions: Option<HashSet<(Partitioned, i64)>>,
    /// Whether the transaction under way has changed what others keep at hand, too.
    pub(super) changed: bool,
}

impl Names {
    /// Others have changed names. What has a number keeps it.
    pub(super) fn changed_by_others(&mut self) {
        self.live.clear();
        self.streams.clear();
        self.has_shadows = None;
        self.partitions = None;
    }

    /// Number of a model, which gets one where it has none yet.
    pub(super) fn model(&mut self, work: &mut Work, name: &str) -> Result<i64, LedgerError> {
        if let Some(&number) = self.models.get(name) {
            return Ok(number);
        }
        let text = without_nul(name);
        let number = match work.query_opt("SELECT number FROM model WHERE name = $1", &one(&text))? {
            Some(row) => row.try_get(0)?,
            None => work
                .query_one("INSERT INTO model (name) VALUES ($1) RETURNING number", &one(&text))?
                .try_get(0)?,
        };
        self.models.insert(name.to_owned(), number);
        Ok(number)
    }

    /// Number of a version.
    pub(super) fn version_number(
        &mut self,
        work: &mut Work,
        (model, name): (i64, &str),
        fingerprint: &str,
    ) -> Result<i64, LedgerError> {
        let key = (model, fingerprint.to_owned());
        if let Some(&number) = self.numbers.get(&key) {
            return Ok(number);
        }
        let number = work
            .query_opt(
                "SELECT number FROM version WHERE model = $1 AND fingerprint = $2",
                &[&model, &without_nul(fingerprint)],
            )?
            .ok_or_else(|| LedgerError::UnknownVersion {
                model: name.to_owned(),
                version: fingerprint.to_owned(),
            })?
            .try_get(0)?;
        self.numbers.insert(key, number);
        Ok(number)
    }

    /// A version by its number, its streams looked up.
    pub(super) fn version(
        &mut self,
        work: &mut Work,
        number: i64,
    ) -> Result<Arc<FoldedVersion>, LedgerError> {
        if let Entry::Vacant(entry) = self.streams.entry(number) {
            let rows =
                work.query("SELECT number, field, value FROM stream WHERE version = $1", &one(&number))?;
            let mut streams = Streams::default();
            for row in rows {
                let stream = stream_from_columns(with_nul(row.try_get(1)?), with_nul(row.try_get(2)?));
                streams.insert(stream, row.try_get(0)?);
            }
            entry.insert(streams);
        }
        if let Some(version) = self.versions.get(&number) {
            return Ok(version.clone());
        }
        let file: String =
            work.query_one("SELECT file FROM version WHERE number = $1", &one(&number))?.try_get(0)?;
        let version = Arc::new(FoldedVersion::new(number, &file)?);
        self.versions.insert(number, version.clone());
        Ok(version)
    }

    /// The live version of a model.
    pub(super) fn live(
        &mut self,
        work: &mut Work,
        model: i64,
    ) -> Result<Option<Arc<FoldedVersion>>, LedgerError> {
        let number = if let Some(&number) = self.live.get(&model) {
            number
        } else {
            let number = live_number(work, model)?;
            self.live.insert(model, number);
            number
        };
        number.map(|number| self.version(work, number)).transpose()
    }

    /// Versions do something else now.
    pub(super) fn versions_changed(&mut self) {
        self.live.clear();
        self.changed = true;
    }

    /// Number of a category, which gets one where it has none yet.
    pub(super) fn category(&mut self, work: &mut Work, model: i64, name: &str) -> Result<i64, LedgerError> {
        let key = (model, name.to_owned());
        if let Some(&number) = self.categories.get(&key) {
            return Ok(number);
        }
        let text = without_nul(name);
        let found =
            work.query_opt("SELECT number FROM category WHERE model = $1 AND name = $2", &[&model, &text])?;
        let number = match found {
            Some(row) => row.try_get(0)?,
            None => work
                .query_one(
                    "INSERT INTO category (model, name) VALUES ($1, $2) RETURNING number",
                    &[&model, &text],
                )?
                .try_get(0)?,
        };
        self.categories.insert(key, number);
        Ok(number)
    }

    /// Name of a category.
    pub(super) fn category_name(&mut self, work: &mut Work, number: i64) -> Result<Arc<str>, LedgerError> {
        if let Some(name) = self.categories_by_number.get(&number) {
            return Ok(name.clone());
        }
        let row = work.query_one("SELECT name FROM category WHERE number = $1", &one(&number))?;
        let name: Arc<str> = with_nul(row.try_get(0)?).into();
        self.categories_by_number.insert(number, name.clone());
        Ok(name)
    }

    /// Streams of a version that was looked up.
    pub(super) fn streams(&mut self, version: i64) -> &mut Streams {
        self.streams.entry(version).or_default()
    }

    /// Gives a stream a number.
    pub(super) fn add_stream(
        &mut self,
        work: &mut Work,
        version: i64,
        name: StreamName,
    ) -> Result<i64, LedgerError> {
        let stream = name.to_stream();
        let (field, value) = stream_columns(&stream);
        let number = work
            .query_one(
                "INSERT INTO stream (version, field, value) VALUES ($1, $2, $3) RETURNING number",
                &[&version, &without_nul(field), &without_nul(value)],
            )?
            .try_get(0)?;
        self.streams(version).insert(stream, number);
        self.changed = true;
        Ok(number)
    }

    /// Whether shadow versions have scored anything; most ledgers need not look for it then.
    pub(super) fn has_shadows(&mut self, work: &mut Work) -> Result<bool, LedgerError> {
        if let Some(known) = self.has_shadows {
            return Ok(known);
        }
        let found = work.query_one("SELECT EXISTS (SELECT 1 FROM shadow_score)", &[])?.try_get(0)?;
        self.has_shadows = Some(found);
        Ok(found)
    }

    /// Shadow versions have scored something.
    pub(super) fn note_shadows(&mut self) {
        if self.has_shadows != Some(true) {
            self.has_shadows = Some(true);
            self.changed = true;
        }
    }
}

/// Number of the live version of a model.
pub(super) fn live_number(work: &mut Work, model: i64) -> Result<Option<i64>, LedgerError> {
    let row =
        work.query_opt("SELECT number FROM version WHERE model = $1 AND state = 'live'", &one(&model))?;
    Ok(row.map(|row| row.try_get(0)).transpose()?)
}
