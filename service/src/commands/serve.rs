//! `kilter serve`: the HTTP service, the pages, the metrics, the drop folders.

use std::io::IsTerminal;
use std::sync::Arc;

use anyhow::Context;
use tokio::net::TcpListener;
use tokio::signal::unix::{SignalKind, signal};

use crate::cli::ServeArgs;
use crate::clock::Clock;
use crate::commands::{ledger_url, open_registry};
use crate::config::{Config, LogFormat};
use crate::exit::Done;
use crate::http::{App, serve};
use crate::metrics::Metrics;
use crate::terminal::say;

pub(crate) fn run(arguments: &ServeArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    ledger_url(&config)?;
    if arguments.check {
        say(format_args!("{}: sound", arguments.config.config.display()))?;
        return Ok(Done::Well);
    }
    start_logging(&config);
    let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build()?;
    runtime.block_on(until_told_to_stop(config))?;
    Ok(Done::Well)
}

async fn until_told_to_stop(config: Config) -> anyhow::Result<()> {
    let address = config.service.listen;
    let open = config.token.is_empty();
    let registry = open_registry(&config)?;
    let app = Arc::new(App::new(config, registry, Metrics::new()?, Clock::System));
    let listener =
        TcpListener::bind(address).await.with_context(|| format!("could not listen on {address}"))?;
    let (mut end, mut interrupt) = (signal(SignalKind::terminate())?, signal(SignalKind::interrupt())?);
    let stop = async move {
        tokio::select! {
            _ = end.recv() => {}
            _ = interrupt.recv() => {}
        }
    };
    let access = if open {
        "\nno tokens are configured: this machine only, and everyone on it may do everything"
    } else {
        ""
    };
    let greeting = format!("listening on http://{}/{access}", listener.local_addr()?);
    if let Err(error) = say(greeting) {
        // Nobody reads standard output; that does not keep the service from its work.
        tracing::warn!(%error, "standard output is closed");
    }
    serve(app, listener, stop).await
}

fn start_logging(config: &Config) {
    let builder = tracing_subscriber::fmt()
        .with_max_level(config.service.log.as_tracing())
        .with_writer(std::io::stderr)
        .with_ansi(std::io::stderr().is_terminal())
        .with_target(false);
    let started = match config.service.log_format {
        LogFormat::Text => builder.try_init(),
        LogFormat::Json => builder.json().try_init(),
    };
    if let Err(error) = started {
        eprintln!("logging could not be started: {error}");
    }
}
