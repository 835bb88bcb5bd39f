//! Numbers of names: what the writer keeps at hand of models, versions, categories and streams.

use std::collections::HashMap;
use std::sync::Arc;

use rusqlite::{Connection, OptionalExtension, params};

use crate::codes::{stream_columns, stream_from_columns};
use crate::error::LedgerError;
use crate::fold::{FoldedVersion, StreamName, Streams};

/// Numbers of names, looked up once. To be forgotten when a transaction is rolled back, and when
/// others have written.
#[derive(Debug, Default)]
pub(crate) struct Names {
    models: HashMap<String, i64>,
    numbers: HashMap<(i64, String), i64>,
    versions: HashMap<i64, Arc<FoldedVersion>>,
    live: HashMap<i64, Option<i64>>,
    categories: HashMap<(i64, String), i64>,
    categories_by_number: HashMap<i64, Arc<str>>,
    streams: HashMap<i64, Streams>,
    has_shadows: Option<bool>,
}

impl Names {
    /// Number of a model, which gets one where it has none yet.
    pub(crate) fn model(&mut self, connection: &Connection, name: &str) -> Result<i64, LedgerError> {
        if let Some(&number) = self.models.get(name) {
            return Ok(number);
        }
        connection.execute("INSERT INTO model (name) VALUES (?) ON CONFLICT DO NOTHING", [name])?;
        let number =
            connection.query_row("SELECT number FROM model WHERE name = ?", [name], |row| row.get(0))?;
        self.models.insert(name.to_owned(), number);
        Ok(number)
    }

    /// Number of a version.
    pub(crate) fn version_number(
        &mut self,
        connection: &Connection,
        (model, name): (i64, &str),
        fingerprint: &str,
    ) -> Result<i64, LedgerError> {
        let key = (model, fingerprint.to_owned());
        if let Some(&number) = self.numbers.get(&key) {
            return Ok(number);
        }
        let number = connection
            .query_row(
                "SELECT number FROM version WHERE model = ? AND fingerprint = ?",
                params![key.0, key.1],
                |row| row.get(0),
            )
            .optional()?
            .ok_or_else(|| LedgerError::UnknownVersion {
                model: name.to_owned(),
                version: fingerprint.to_owned(),
            })?;
        self.numbers.insert(key, number);
        Ok(number)
    }

    /// A version by its number.
    pub(crate) fn version(
        &mut self,
        connection: &Connection,
        number: i64,
    ) -> Result<Arc<FoldedVersion>, LedgerError> {
        if let Some(version) = self.versions.get(&number) {
            return Ok(version.clone());
        }
        let version = Arc::new(load_version(connection, number)?);
        self.streams.insert(number, load_streams(connection, number)?);
        self.versions.insert(number, version.clone());
        Ok(version)
    }

    /// The live version of a model.
    pub(crate) fn live(
        &mut self,
        connection: &Connection,
        model: i64,
    ) -> Result<Option<Arc<FoldedVersion>>, LedgerError> {
        let number = if let Some(&number) = self.live.get(&model) {
            number
        } else {
            let number = live_number(connection, model)?;
            self.live.insert(model, number);
            number
        };
        number.map(|number| self.version(connection, number)).transpose()
    }

    /// The live version is to be looked up anew.
    pub(crate) fn forget_live(&mut self) {
        self.live.clear();
    }

    /// Number of a category, which gets one where it has none yet.
    pub(crate) fn category(
        &mut self,
        connection: &Connection,
        model: i64,
        name: &str,
    ) -> Result<i64, LedgerError> {
        let key = (model, name.to_owned());
        if let Some(&number) = self.categories.get(&key) {
            return Ok(number);
        }
        connection.execute(
            "INSERT INTO category (model, name) VALUES (?, ?) ON CONFLICT DO NOTHING",
            params![model, name],
        )?;
        let number = connection.query_row(
            "SELECT number FROM category WHERE model = ? AND name = ?",
            params![model, name],
            |row| row.get(0),
        )?;
        self.categories.insert(key, number);
        Ok(number)
    }

    /// Name of a category.
    pub(crate) fn category_name(
        &mut self,
        connection: &Connection,
        number: i64,
    ) -> Result<Arc<str>, LedgerError> {
        if let Some(name) = self.categories_by_number.get(&number) {
            return Ok(name.clone());
        }
        let name: Arc<str> = category_name(connection, number)?.into();
        self.categories_by_number.insert(number, name.clone());
        Ok(name)
    }

    /// Streams of a version that was looked up.
    pub(crate) fn streams(&mut self, version: i64) -> &mut Streams {
        self.streams.entry(version).or_default()
    }

    /// Gives a stream a number.
    pub(crate) fn add_stream(
        &mut self,
        connection: &Connection,
        version: i64,
        name: StreamName,
    ) -> Result<i64, LedgerError> {
        let stream = name.to_stream();
        let (field, value) = stream_columns(&stream);
        connection
            .prepare_cached("INSERT INTO stream (version, field, value) VALUES (?, ?, ?)")?
            .execute(params![version, field, value])?;
        let number = connection.last_insert_rowid();
        self.streams(version).insert(stream, number);
        Ok(number)
    }

    /// Whether shadow versions have scored anything; most ledgers need not look for it then.
    pub(crate) fn has_shadows(&mut self, connection: &Connection) -> Result<bool, LedgerError> {
        if let Some(known) = self.has_shadows {
            return Ok(known);
        }
        let found =
            connection.query_row("SELECT EXISTS (SELECT 1 FROM shadow_score)", [], |row| row.get(0))?;
        self.has_shadows = Some(found);
        Ok(found)
    }

    /// Shadow versions have scored something.
    pub(crate) fn note_shadows(&mut self) {
        self.has_shadows = Some(true);
    }
}

/// Number of the live version of a model.
pub(crate) fn live_number(connection: &Connection, model: i64) -> Result<Option<i64>, LedgerError> {
    Ok(connection
        .query_row("SELECT number FROM version WHERE model = ? AND state = 'live'", [model], |row| row.get(0))
        .optional()?)
}

/// Name of a category.
pub(crate) fn category_name(connection: &Connection, number: i64) -> Result<String, LedgerError> {
    Ok(connection
        .prepare_cached("SELECT name FROM category WHERE number = ?")?
        .query_row([number], |row| row.get(0))?)
}

pub(crate) fn load_version(connection: &Connection, number: i64) -> Result<FoldedVersion, LedgerError> {
    let file: String =
        connection.query_row("SELECT file FROM version WHERE number = ?", [number], |row| row.get(0))?;
    FoldedVersion::new(number, &file)
}

pub(crate) fn load_streams(connection: &Connection, version: i64) -> Result<Streams, LedgerError> {
    let mut streams = Streams::default();
    let mut statement =
        connection.prepare_cached("SELECT number, field, value FROM stream WHERE version = ?")?;
    let mut rows = statement.query([version])?;
    while let Some(row) = rows.next()? {
        streams.insert(stream_from_columns(row.get(1)?, row.get(2)?), row.get(0)?);
    }
    Ok(streams)
}
