//! The configuration file `kilter.toml`. It refuses what it does not know.
//!
//! Every plain key is also an environment variable: `KILTER_`, the table, the key, in capitals
//! (`KILTER_SERVICE_LISTEN`). The environment wins.

use std::net::{IpAddr, SocketAddr};
use std::path::{Path, PathBuf};

use anyhow::Context;
use schemars::JsonSchema;
use serde::Deserialize;

use crate::duration::Span;
use crate::exit::WrongUse;

/// The whole configuration.
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub(crate) struct Config {
    /// The HTTP service.
    pub(crate) service: ServiceConfig,
    /// The models folder.
    pub(crate) models: ModelsConfig,
    /// The ledger.
    pub(crate) ledger: LedgerConfig,
    /// Drop folders.
    pub(crate) drop: Vec<DropConfig>,
    /// Tokens of clients. Without any, the service listens on loopback only.
    pub(crate) token: Vec<TokenConfig>,
    /// Folder that relative paths start from: that of the configuration file.
    #[serde(skip)]
    pub(crate) base: PathBuf,
}

/// The HTTP service.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub(crate) struct ServiceConfig {
    /// Address and port to listen on.
    pub(crate) listen: SocketAddr,
    /// Largest body of a request, in bytes; larger ones are answered 413.
    pub(crate) largest_body: usize,
    /// Requests being answered at one time; more are answered 503.
    pub(crate) requests_in_flight: usize,
    /// Longest time for a request; longer ones are answered 408.
    pub(crate) request_time: Span,
    /// What is logged: error, warn, info, debug or trace.
    pub(crate) log: LogLevel,
    /// How it is logged: text or json.
    pub(crate) log_format: LogFormat,
}

impl Default for ServiceConfig {
    fn default() -> Self {
        Self {
            listen: SocketAddr::from(([127, 0, 0, 1], 8787)),
            largest_body: 32 * 1024 * 1024,
            requests_in_flight: 512,
            request_time: Span::from_seconds(30),
            log: LogLevel::Info,
            log_format: LogFormat::Text,
        }
    }
}

/// What is logged.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub(crate) enum LogLevel {
    /// Failures only.
    Error,
    /// And what should be looked at.
    Warn,
    /// And what happened.
    Info,
    /// And how.
    Debug,
    /// Everything.
    Trace,
}

impl LogLevel {
    /// The level as `tracing` knows it.
    pub(crate) fn as_tracing(self) -> tracing::Level {
        match self {
            Self::Error => tracing::Level::ERROR,
            Self::Warn => tracing::Level::WARN,
            Self::Info => tracing::Level::INFO,
            Self::Debug => tracing::Level::DEBUG,
            Self::Trace => tracing::Level::TRACE,
        }
    }
}

/// How it is logged.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub(crate) enum LogFormat {
    /// Lines for people.
    Text,
    /// One JSON object per line.
    Json,
}

/// The models folder.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub(crate) struct ModelsConfig {
    /// Folder in which published model files are kept.
    pub(crate) folder: PathBuf,
}

impl Default for ModelsConfig {
    fn default() -> Self {
        Self { folder: "models".into() }
    }
}

/// The ledger.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub(crate) struct LedgerConfig {
    /// Where the ledger is: `sqlite:` and a path, or an address such as
    /// `postgres://kilter@db.example/kilter`.
    pub(crate) url: String,
    /// How long raw records and outcomes are kept, by record time; summaries stay. For ever, if left
    /// out. The running service removes older ones once a day.
    pub(crate) keep: Option<Span>,
}

impl Default for LedgerConfig {
    fn default() -> Self {
        Self { url: "sqlite:ledger.db".into(), keep: None }
    }
}

/// One drop folder.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(crate) struct DropConfig {
    /// Name of the model that scores the files.
    pub(crate) model: String,
    /// The folder; `incoming`, `working`, `scored`, `refused` and `receipts` are made in it.
    pub(crate) folder: PathBuf,
    /// How often the running service looks for files.
    #[serde(default = "every_minute")]
    pub(crate) every: Span,
    /// Whether a file waits for an empty file of its name with `.done` added.
    #[serde(default)]
    pub(crate) done_mark: bool,
}

fn every_minute() -> Span {
    Span::from_seconds(60)
}

/// The token of one client.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(crate) struct TokenConfig {
    /// Who has it; stands in the audit trail.
    pub(crate) name: String,
    /// `sha256:` and 64 hexadecimal digits of the token.
    pub(crate) hash: String,
    /// What it may be used for.
    pub(crate) scopes: Vec<Scope>,
}

/// What a token may be used for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub(crate) enum Scope {
    /// Post records.
    Score,
    /// Post outcomes.
    Observe,
    /// Publish versions.
    Publish,
    /// Read models, drift, pages and metrics.
    Read,
}

impl Config {
    /// Reads a configuration file, with the environment on top.
    ///
    /// # Errors
    /// A [`WrongUse`] that names the file, the key and what was expected.
    pub(crate) fn read(path: &Path) -> anyhow::Result<Self> {
        let text = std::fs::read_to_string(path).map_err(|error| {
            anyhow::Error::new(WrongUse(format!(
                "could not read configuration `{}`: {error}",
                path.display()
            )))
        })?;
        let environment = std::env::vars().filter(|(key, _)| key.starts_with("KILTER_"));
        let mut config = Self::from_toml(&text, environment)
            .map_err(|reason| WrongUse(format!("configuration `{}`: {reason}", path.display())))?;
        let absolute = std::path::absolute(path)
            .with_context(|| format!("could not find the folder of `{}`", path.display()))?;
        config.base = absolute.parent().map(Path::to_path_buf).unwrap_or_default();
        config.check().map_err(|reason| WrongUse(format!("configuration `{}`: {reason}", path.display())))?;
        Ok(config)
    }

    /// A path of the configuration, seen from where the program runs.
    pub(crate) fn resolve(&self, path: &Path) -> PathBuf {
        self.base.join(path)
    }

    fn from_toml(text: &str, environment: impl Iterator<Item = (String, String)>) -> Result<Self, String> {
        let refusal = |error: toml::de::Error| error.to_string().trim_end().to_owned();
        let mut document: toml::Table = toml::from_str(text).map_err(refusal)?;
        // Reading the text itself first keeps the line numbers in errors.
        toml::from_str::<Self>(text).map_err(refusal)?;
        for (variable, value) in environment {
            set_from_environment(&mut document, &variable, &value);
        }
        document.try_into().map_err(|error: toml::de::Error| {
            format!("with the environment variables `KILTER_…` on top: {}", error.to_string().trim_end())
        })
    }

    fn check(&self) -> Result<(), String> {
        let loopback = match self.service.listen.ip() {
            IpAddr::V4(address) => address.is_loopback(),
            IpAddr::V6(address) => address.is_loopback(),
        };
        if !loopback && self.token.is_empty() {
            return Err(format!(
                "`service.listen` is {}, which others can reach, but there is no [[token]]: \
                 add one, or listen on 127.0.0.1",
                self.service.listen
            ));
        }
        for token in &self.token {
            let digits = token.hash.strip_prefix("sha256:").unwrap_or_default();
            if digits.len() != 64 || !digits.chars().all(|c| c.is_ascii_hexdigit()) {
                return Err(format!(
                    "token `{}`: `hash` must be `sha256:` and 64 hexadecimal digits",
                    token.name
                ));
            }
        }
        for drop in &self.drop {
            if !kilter_model::check::is_model_name(&drop.model) {
                return Err(format!("[[drop]]: `{}` cannot be the name of a model", drop.model));
            }
        }
        Ok(())
    }
}

/// Sets a key from a variable such as `KILTER_SERVICE_LISTEN`. Variables that name no table of
/// the configuration are passed over: container platforms make some of their own.
fn set_from_environment(document: &mut toml::Table, variable: &str, value: &str) {
    const KEYS: [(&str, &[&str]); 3] = [
        ("service", &["listen", "largest_body", "requests_in_flight", "request_time", "log", "log_format"]),
        ("models", &["folder"]),
        ("ledger", &["url", "keep"]),
    ];
    for (table, keys) in KEYS {
        for key in keys {
            if variable.eq_ignore_ascii_case(&format!("KILTER_{table}_{key}")) {
                let entry = document.entry(table).or_insert_with(|| toml::Table::new().into());
                if let Some(entries) = entry.as_table_mut() {
                    let number = value.parse::<i64>().map(toml::Value::from);
                    entries.insert((*key).to_owned(), number.unwrap_or_else(|_| value.into()));
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn read(text: &str, environment: &[(&str, &str)]) -> Result<Config, String> {
        let variables = environment.iter().map(|(key, value)| ((*key).to_owned(), (*value).to_owned()));
        let config = Config::from_toml(text, variables)?;
        config.check().map(|()| config)
    }

    #[test]
    fn an_empty_file_is_the_default() {
        let config = read("", &[]).unwrap();
        assert_eq!(config.service.listen.to_string(), "127.0.0.1:8787");
        assert_eq!(config.ledger.url, "sqlite:ledger.db");
    }

    #[test]
    fn the_environment_wins() {
        let environment = [
            ("KILTER_SERVICE_LISTEN", "127.0.0.1:9000"),
            ("KILTER_SERVICE_LARGEST_BODY", "1024"),
            ("KILTER_SERVICE_PORT_8787_TCP", "tcp://10.0.0.1:8787"),
        ];
        let config = read("[service]\nlisten = \"127.0.0.1:1\"", &environment).unwrap();
        assert_eq!((config.service.listen.port(), config.service.largest_body), (9000, 1024));
    }

    #[test]
    fn what_is_not_known_or_not_safe_is_refused() {
        for (text, part) in [
            ("[service]\nlisten_on = 1", "unknown field `listen_on`"),
            ("[service]\nlisten = \"0.0.0.0:80\"", "no [[token]]"),
            ("[service]\nrequest_time = \"soon\"", "not a span of time"),
            ("[[drop]]\nmodel = \"../x\"\nfolder = \"d\"", "cannot be the name"),
            ("[[token]]\nname = \"a\"\nhash = \"sha256:12\"\nscopes = [\"score\"]", "64 hexadecimal digits"),
            ("[[token]]\nname = \"a\"\nhash = \"x\"\nscopes = [\"all\"]", "unknown variant `all`"),
        ] {
            let refusal = read(text, &[]).unwrap_err();
            assert!(refusal.contains(part), "{text}: {refusal}");
        }
    }
}
