//! Runs the service until it is told to stop: listener, drop folders, monitor.

use std::future::Future;
use std::sync::Arc;
use std::time::Duration;

use anyhow::Context;
use tokio::net::TcpListener;
use tokio::sync::watch;

use super::app::{App, router};
use crate::config::DropConfig;
use crate::drop_folder::DropFolder;
use crate::retention::first_day_kept;

/// How often what other processes published, and new outcomes, are looked for.
const LOOK_EVERY: Duration = Duration::from_secs(2);
/// How often raw records are looked for that are older than what is kept.
const PRUNE_EVERY: Duration = Duration::from_hours(24);

/// Serves until `stop` is ready; then finishes what was accepted.
///
/// # Errors
/// Where the socket fails.
pub(crate) async fn serve(
    app: Arc<App>,
    listener: TcpListener,
    stop: impl Future<Output = ()> + Send + 'static,
) -> anyhow::Result<()> {
    let (stopping, stopped) = watch::channel(false);
    for version in app.registry.all_live() {
        app.monitored.mark(&version.model.name);
    }
    let mut tasks = vec![tokio::spawn(keep_current(app.clone(), stopped.clone()))];
    if let Some(keep) = app.config.ledger.keep {
        tasks.push(tokio::spawn(prune_regularly(app.clone(), keep.0, stopped.clone())));
    }
    for drop in app.config.drop.clone() {
        tasks.push(tokio::spawn(sweep_regularly(app.clone(), drop, stopped.clone())));
    }
    let graceful = async move {
        stop.await;
        tracing::info!("stopping: finishing what was accepted");
        // Tasks that have ended already do not listen any more.
        let _ = stopping.send(true);
    };
    axum::serve(listener, router(app)).with_graceful_shutdown(graceful).await.context("the socket failed")?;
    for task in tasks {
        task.await.context("a task of the service failed")?;
    }
    Ok(())
}

/// Waits for a while, or less where the service stops; says whether to go on.
async fn wait(stopped: &mut watch::Receiver<bool>, time: Duration) -> bool {
    tokio::time::timeout(time, stopped.wait_for(|stop| *stop)).await.is_err()
}

/// Follows what other processes publish, and computes figures where outcomes came.
async fn keep_current(app: Arc<App>, mut stopped: watch::Receiver<bool>) {
    loop {
        let current = app.clone();
        let looked = tokio::task::spawn_blocking(move || {
            if let Err(error) = current.registry.refresh() {
                tracing::error!(cause = format!("{error:#}"), "published versions could not be taken over");
            }
            current.monitored.update(&current.registry, &current.metrics, current.clock.now());
        });
        if let Err(error) = looked.await {
            tracing::error!(%error, "the monitor failed");
        }
        if !wait(&mut stopped, LOOK_EVERY).await {
            return;
        }
    }
}

/// Removes raw records and outcomes that are older than what is kept.
async fn prune_regularly(app: Arc<App>, kept: Duration, mut stopped: watch::Receiver<bool>) {
    loop {
        let current = app.clone();
        let before = first_day_kept(app.clock.now(), kept);
        let pruned = tokio::task::spawn_blocking(move || current.registry.ledger().prune(before)).await;
        match pruned {
            Ok(Ok(pruned)) if pruned.records + pruned.outcomes > 0 => {
                tracing::info!(records = pruned.records, outcomes = pruned.outcomes, "removed by age");
            }
            Ok(Ok(_)) => {}
            Ok(Err(error)) => tracing::error!(%error, "old records could not be removed"),
            Err(error) => tracing::error!(%error, "removing old records failed"),
        }
        if !wait(&mut stopped, PRUNE_EVERY).await {
            return;
        }
    }
}

/// Sweeps a drop folder again and again.
async fn sweep_regularly(app: Arc<App>, drop: DropConfig, mut stopped: watch::Receiver<bool>) {
    let every = drop.every.0;
    loop {
        let (current, config) = (app.clone(), drop.clone());
        let swept = tokio::task::spawn_blocking(move || {
            let folder = DropFolder::new(&config, current.config.resolve(&config.folder));
            folder.sweep(&current.registry, &current.metrics, current.clock)
        });
        match swept.await {
            Ok(Ok(swept)) if swept.files > 0 => {
                tracing::info!(
                    model = drop.model,
                    files = swept.files,
                    refused_rows = swept.refused_rows,
                    "swept"
                );
                app.monitored.mark(&drop.model);
            }
            Ok(Ok(_)) => {}
            Ok(Err(error)) => {
                tracing::error!(
                    model = drop.model,
                    cause = format!("{error:#}"),
                    "a drop folder could not be swept"
                );
            }
            Err(error) => tracing::error!(model = drop.model, %error, "a sweep failed"),
        }
        if !wait(&mut stopped, every).await {
            return;
        }
    }
}
