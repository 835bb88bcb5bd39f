//! A connection: made with patience, set up the same way every time, its statements prepared once.

use std::collections::HashMap;
use std::error::Error as _;
use std::fmt::Write as _;
use std::time::{Duration, Instant};

use postgres::config::SslMode;
use postgres::tls::{MakeTlsConnect, TlsConnect};
use postgres::types::ToSql;
use postgres::{Client, Config, Error, GenericClient, NoTls, Row, Socket, Statement};

use super::address::PostgresAddress;
use super::encryption;
use crate::error::LedgerError;

/// What values are bound to a statement.
pub(super) type Parameters<'a> = &'a [&'a (dyn ToSql + Sync)];

/// Pauses between attempts grow from the first to the last of these.
const FIRST_PAUSE: Duration = Duration::from_millis(20);
const LONGEST_PAUSE: Duration = Duration::from_secs(1);
/// How long one attempt to connect may take.
const CONNECT_TIMEOUT: Duration = Duration::from_secs(5);
/// A peer that is gone without a word is noticed after about half a minute.
const KEEPALIVE_IDLE: Duration = Duration::from_secs(10);
const KEEPALIVE_INTERVAL: Duration = Duration::from_secs(5);
const KEEPALIVE_RETRIES: u32 = 3;
const UNACKNOWLEDGED: Duration = Duration::from_secs(30);

/// Every commit is on the disk of the server before it is acknowledged, whatever the server's own
/// setting is. A writer that stops answering in the middle of a transaction must not hold up the
/// others for ever. Compiling queries costs more than it gains here.
const SET_UP: &str = "\
    SET search_path = kilter; SET client_min_messages = warning; SET jit = off; \
    SET lock_timeout = '30s'; SET tcp_keepalives_idle = 10; SET tcp_keepalives_interval = 5; \
    SET tcp_keepalives_count = 3; \
    SELECT set_config('synchronous_commit', 'on', false) WHERE current_setting('synchronous_commit') = 'off';";

/// The writer looks up single rows by their keys, however many they are.
const SET_UP_WRITER: &str = "\
    SET idle_in_transaction_session_timeout = '60s'; SET enable_seqscan = off; SET enable_hashjoin = off; \
    SET enable_mergejoin = off;";

/// What a connection is for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Role {
    Writer,
    Reader,
}

/// Statements of a connection that are prepared.
#[derive(Default)]
pub(super) struct Statements(HashMap<&'static str, Statement>);

impl Statements {
    pub(super) fn prepared(
        &mut self,
        client: &mut impl GenericClient,
        sql: &'static str,
    ) -> Result<Statement, LedgerError> {
        if let Some(statement) = self.0.get(sql) {
            return Ok(statement.clone());
        }
        let statement = client.prepare(sql)?;
        self.0.insert(sql, statement.clone());
        Ok(statement)
    }
}

/// A connection.
pub(super) struct Session {
    /// Taken out when the session is dropped.
    client: Option<Client>,
    statements: Statements,
}

impl Session {
    /// Connects. A server that does not answer, or is starting, is tried again until `patience` is
    /// over.
    pub(super) fn connect(
        address: &PostgresAddress,
        role: Role,
        patience: Duration,
    ) -> Result<Self, LedgerError> {
        let refused = |reason| LedgerError::Connect { ledger: address.to_string(), reason };
        let config = with_timeouts(address.config());
        let client = if config.get_ssl_mode() == SslMode::Require {
            let tls = encryption::connector(address.roots()).map_err(refused)?;
            with_patience(patience, || connect_once(&config, tls.clone(), role))
        } else {
            with_patience(patience, || connect_once(&config, NoTls, role))
        };
        let client = client.map_err(|error| refused(describe(&error)))?;
        Ok(Self { client: Some(client), statements: Statements::default() })
    }

    /// The connection and its statements.
    pub(super) fn parts(&mut self) -> Result<(&mut Client, &mut Statements), LedgerError> {
        let client = self.client.as_mut().ok_or(LedgerError::Closed)?;
        Ok((client, &mut self.statements))
    }

    pub(super) fn query(
        &mut self,
        sql: &'static str,
        parameters: Parameters,
    ) -> Result<Vec<Row>, LedgerError> {
        let (client, statements) = self.parts()?;
        let statement = statements.prepared(client, sql)?;
        Ok(client.query(&statement, parameters)?)
    }
}

impl Drop for Session {
    /// Closing a connection waits for the server, which must not happen in a task of an
    /// asynchronous program; a thread of its own may wait.
    fn drop(&mut self) {
        let Some(client) = self.client.take() else { return };
        let closing = std::thread::Builder::new().name("ledger-closing".into()).spawn(move || drop(client));
        if let Err(error) = closing {
            tracing::warn!(%error, "a connection to the ledger's data base could not be closed: {error}");
        }
    }
}

fn connect_once<T>(config: &Config, tls: T, role: Role) -> Result<Client, Error>
where
    T: MakeTlsConnect<Socket, TlsConnect: Send, Stream: Send> + Send + 'static,
    <T::TlsConnect as TlsConnect<Socket>>::Future: Send,
{
    let mut client = config.connect(tls)?;
    client.batch_execute(SET_UP)?;
    if role == Role::Writer {
        client.batch_execute(SET_UP_WRITER)?;
    }
    Ok(client)
}

/// Timeouts where the address does not say otherwise.
fn with_timeouts(config: &Config) -> Config {
    let mut config = config.clone();
    if config.get_connect_timeout().is_none() {
        config.connect_timeout(CONNECT_TIMEOUT);
    }
    if config.get_tcp_user_timeout().is_none() {
        config.tcp_user_timeout(UNACKNOWLEDGED);
    }
    if config.get_keepalives_interval().is_none() {
        config.keepalives_idle(KEEPALIVE_IDLE);
        config.keepalives_interval(KEEPALIVE_INTERVAL);
        config.keepalives_retries(KEEPALIVE_RETRIES);
    }
    if config.get_application_name().is_none() {
        config.application_name("kilter");
    }
    // Encryption that is only preferred protects from nobody, and could not be verified.
    if config.get_ssl_mode() == SslMode::Prefer {
        config.ssl_mode(SslMode::Disable);
    }
    config
}

/// Repeats what fails because the server cannot be reached, with growing pauses.
fn with_patience<T>(patience: Duration, mut attempt: impl FnMut() -> Result<T, Error>) -> Result<T, Error> {
    let begun = Instant::now();
    let mut pause = FIRST_PAUSE;
    loop {
        match attempt() {
            Err(error) if is_lost(&error) && begun.elapsed() + pause < patience => {
                std::thread::sleep(pause);
                pause = (pause * 2).min(LONGEST_PAUSE);
            }
            other => return other,
        }
    }
}

/// Whether an error says that there is no connection any more, or that there was none.
pub(super) fn is_lost(error: &Error) -> bool {
    // SQLSTATE class 08 is connection failures, 57P01 to 57P03 a server that stops or starts, 25P03 a
    // transaction that was idle for too long; 53300 says that there are too many connections.
    let code = error.code().map(postgres::error::SqlState::code);
    error.is_closed()
        || error.source().is_some_and(<dyn std::error::Error>::is::<std::io::Error>)
        || code.is_some_and(|code| {
            code.starts_with("08") || ["57P01", "57P02", "57P03", "25P03", "53300"].contains(&code)
        })
}

/// Whether an error says so.
pub(super) fn lost(error: &LedgerError) -> bool {
    matches!(error, LedgerError::Database(error) if is_lost(error))
}

/// Whether an error says that the server could not do what any request needs.
pub(crate) fn is_of_the_server(error: &Error) -> bool {
    // 55P03: another writer did not end; 57014: the server was told to stop what it was doing.
    is_lost(error) || error.code().is_some_and(|code| ["55P03", "57014"].contains(&code.code()))
}

/// Whether a transaction failed for no reason of its own and may be tried again.
pub(super) fn is_chance(error: &Error) -> bool {
    // Serialisation failures and deadlocks.
    error.code().is_some_and(|code| ["40001", "40P01"].contains(&code.code()))
}

/// What an error says. Details are left out: they may quote values of rows.
pub(crate) fn describe(error: &Error) -> String {
    if let Some(error) = error.as_db_error() {
        return format!("{} (SQLSTATE {})", error.message(), error.code().code());
    }
    let mut text = error.to_string();
    let mut source = error.source();
    while let Some(cause) = source {
        // Writing to a text cannot fail.
        let _ = write!(text, ": {cause}");
        source = cause.source();
    }
    text
}
