//! `kilter serve`: the HTTP service, the pages, the metrics, the drop folders.

use std::io::Write;
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

pub(crate) fn run(arguments: &ServeArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    ledger_url(&config)?;
    if arguments.check {
        println!("{}: sound", arguments.config.config.display());
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
    println!("listening on http://{}/", listener.local_addr()?);
    if open {
        println!("no tokens are configured: this machine only, and everyone on it may do everything");
    }
    // Whoever started the service may wait for these lines.
    std::io::stdout().flush()?;
    serve(app, listener, stop).await
}

fn start_logging(config: &Config) {
    let builder = tracing_subscriber::fmt()
        .with_max_level(config.service.log.as_tracing())
        .with_writer(std::io::stderr)
        .with_target(false);
    let started = match config.service.log_format {
        LogFormat::Text => builder.try_init(),
        LogFormat::Json => builder.json().try_init(),
    };
    if let Err(error) = started {
        eprintln!("logging could not be started: {error}");
    }
}
