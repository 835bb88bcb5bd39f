//! The demo: the whole job on the invented stops of Quillhaven Parcels, through the very commands
//! and routes that its users have.

mod client;
mod quillhaven;

use std::fs;
use std::net::SocketAddr;
use std::ops::Range;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::{Duration, SystemTime};

use anyhow::{Context, bail};
use serde_json::Value;
use tokio::net::TcpListener;

use self::client::Client;
use self::quillhaven::{Chapter, PLAN, Quillhaven, STORY, Stop, csv, outcomes_csv};
use crate::cli::{ConfigArgs, FitArgs, ObserveArgs, PublishArgs, Role};
use crate::clock::Clock;
use crate::commands;
use crate::config::Config;
use crate::http::{App, serve};
use crate::metrics::Metrics;
use crate::terminal::say;

/// The seed of the demo's stops.
const SEED: u64 = 11;
/// The mark of a folder that a demo made, and may therefore make anew.
const MARK: &str = ".kilter-demo";
/// Days after a chapter until its last outcomes are known.
const MATURITY_DAYS: u32 = 5;

const CONFIG: &str = "\
[service]
listen = \"127.0.0.1:8787\"
[models]
folder = \"models\"
[ledger]
url = \"sqlite:ledger.db\"
[[drop]]
model = \"attempt\"
folder = \"drop/attempt\"
every = \"10s\"
";

/// Plays the story of Quillhaven Parcels in a folder; with `stay`, the service stays up afterwards.
///
/// # Errors
/// Where any step of the job fails.
pub(crate) fn play(folder: &Path, stay: bool) -> anyhow::Result<()> {
    prepare(folder)?;
    let round = Quillhaven::new(SEED)?;
    say(format_args!("Quillhaven Parcels, an invented parcel round. Files are in {}.\n", folder.display()))?;
    fit_and_publish(folder, &round)?;
    let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build()?;
    runtime.block_on(play_with_service(folder.to_owned(), round, stay))
}

/// Makes the folder anew, unless it holds anything that no demo made.
fn prepare(folder: &Path) -> anyhow::Result<()> {
    let is_empty = fs::read_dir(folder).map_or(true, |mut entries| entries.next().is_none());
    if !is_empty {
        if !folder.join(MARK).exists() {
            bail!(
                "`{}` is not empty and no former demo's folder; choose another with --dir",
                folder.display()
            );
        }
        fs::remove_dir_all(folder).with_context(|| format!("could not clear `{}`", folder.display()))?;
    }
    write(&folder.join(MARK), "Made by `kilter demo`, which may make this folder anew.\n")?;
    write(&folder.join("plan.toml"), PLAN)?;
    write(&folder.join("kilter.toml"), CONFIG)
}

fn write(path: &Path, text: &str) -> anyhow::Result<()> {
    let folder = path.parent().unwrap_or(Path::new("."));
    fs::create_dir_all(folder)
        .and_then(|()| fs::write(path, text))
        .with_context(|| format!("could not write `{}`", path.display()))
}

fn fit_and_publish(folder: &Path, round: &Quillhaven) -> anyhow::Result<()> {
    let weeks = &STORY[0];
    heading(&format!("{}: {}", weeks.title, dates(round, weeks)))?;
    for (part, days) in [(1, 0..28), (2, 28..56)] {
        let stops: Vec<Stop> = days.flat_map(|day| round.day(day)).collect();
        write(&folder.join(format!("attempts-{part}.csv")), &csv(&stops, true))?;
    }
    // Something to score by hand, with two rows that cannot be: a level that was never seen, and
    // a weight that is no number.
    let mut by_hand = csv(&round.day(60)[..20], false);
    by_hand.push_str("S-odd-1,2026-05-01T09:00:00Z,1.5,20,12,0,4,barge,morning,0,Quayside\n");
    by_hand.push_str("S-odd-2,2026-05-01T09:00:00Z,heavy,20,12,0,4,house,morning,0,Quayside\n");
    write(&folder.join("stops.csv"), &by_hand)?;
    let output = folder.join("attempt.model.json");
    commands::fit::run(&FitArgs {
        plan: folder.join("plan.toml"),
        output: Some(output.clone()),
        report: Some(folder.join("fit.html")),
        analysis: None,
        diagnose: false,
    })?;
    commands::publish::run(&PublishArgs { model: output, role: Role::Live, config: config_of(folder) })?;
    Ok(())
}

fn config_of(folder: &Path) -> ConfigArgs {
    ConfigArgs { config: folder.join("kilter.toml") }
}

async fn play_with_service(folder: PathBuf, round: Quillhaven, stay: bool) -> anyhow::Result<()> {
    let config = Config::read(&folder.join("kilter.toml"))?;
    let registry = commands::open_registry(&config)?;
    // To play, any free port will do; the service that stays up listens where it is configured to.
    let listen = if stay { config.service.listen } else { SocketAddr::from(([127, 0, 0, 1], 0)) };
    let listener =
        TcpListener::bind(listen).await.with_context(|| format!("could not listen on {listen}"))?;
    let address = listener.local_addr()?;
    let app = Arc::new(App::new(config, registry, Metrics::new()?, Clock::System));
    let (stop, stopped) = tokio::sync::oneshot::channel::<()>();
    let service = tokio::spawn(serve(app, listener, async move {
        // An error means that the other end has gone: the demo is over then too.
        let _ = stopped.await;
    }));
    let story = tokio::task::spawn_blocking(move || tell_story(&folder, &round, &Client::new(address)));
    let told = story.await?;
    if stay && told.is_ok() {
        say(format_args!("The service stays up: http://{address}/ (end it with Ctrl-C)"))?;
        tokio::signal::ctrl_c().await?;
    }
    drop(stop);
    service.await??;
    told
}

/// The chapters after the fit, one after another, each with its report.
fn tell_story(folder: &Path, round: &Quillhaven, client: &Client) -> anyhow::Result<()> {
    for (number, chapter) in STORY.iter().enumerate().skip(1) {
        let days = chapter.first..chapter.first + chapter.days;
        // The three ways in, in turn.
        let way = [Way::Json, Way::Drop, Way::Lines][number % 3];
        let counts = play_chapter(folder, round, client, days, way)?;
        heading(&format!("{}: {}", chapter.title, dates(round, chapter)))?;
        say(format_args!(
            "{} stops {}, {} outcomes taken in",
            counts.records,
            way.in_words(),
            counts.outcomes
        ))?;
        report(client, round, chapter)?;
    }
    Ok(())
}

/// A way in for records.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Way {
    /// Posted as JSON, outcomes too.
    Json,
    /// Posted as NDJSON, outcomes as JSON.
    Lines,
    /// Dropped as files, outcomes from a file.
    Drop,
}

impl Way {
    fn in_words(self) -> &'static str {
        match self {
            Self::Json => "posted as JSON",
            Self::Lines => "posted as NDJSON",
            Self::Drop => "dropped as files",
        }
    }
}

#[derive(Debug, Default)]
struct Counts {
    records: usize,
    outcomes: usize,
}

/// Day by day: the stops of the day are scored, then the outcomes that have become known.
fn play_chapter(
    folder: &Path,
    round: &Quillhaven,
    client: &Client,
    days: Range<u32>,
    way: Way,
) -> anyhow::Result<Counts> {
    let mut counts = Counts::default();
    let mut waiting: Vec<Stop> = Vec::new();
    for day in days.start..days.end + MATURITY_DAYS {
        if days.contains(&day) {
            let stops = round.day(day);
            counts.records += stops.len();
            score(folder, client, &stops, &round.date(day), way)?;
            waiting.extend(stops);
        }
        let evening = round.midnight(day + 1);
        let (known, later): (Vec<Stop>, Vec<Stop>) =
            waiting.into_iter().partition(|stop| stop.known_at < evening);
        waiting = later;
        counts.outcomes += known.len();
        observe(folder, client, &known, &round.date(day), way)?;
    }
    Ok(counts)
}

fn score(folder: &Path, client: &Client, stops: &[Stop], date: &str, way: Way) -> anyhow::Result<()> {
    const ROUTE: &str = "/models/attempt/records";
    match way {
        Way::Json => {
            let records: Vec<Value> = stops.iter().map(Stop::json).collect();
            client.post(ROUTE, "application/json", &Value::from(records).to_string())?;
        }
        Way::Lines => {
            let lines: String = stops.iter().map(|stop| format!("{}\n", stop.json())).collect();
            client.post(ROUTE, "application/x-ndjson", &lines)?;
        }
        Way::Drop => {
            let drop = folder.join("drop/attempt");
            let aside = drop.join(format!("stops-{date}.csv"));
            write(&aside, &csv(stops, false))?;
            fs::create_dir_all(drop.join("incoming"))?;
            // As a sender's file that was written a while ago and is now put into place: a fresh
            // one would be waited for until it has settled.
            let rested = SystemTime::now() - Duration::from_secs(10);
            fs::File::options().write(true).open(&aside)?.set_modified(rested)?;
            fs::rename(&aside, drop.join("incoming").join(format!("stops-{date}.csv")))?;
            return sweep(folder);
        }
    }
    Ok(())
}

fn sweep(folder: &Path) -> anyhow::Result<()> {
    let config = Config::read(&folder.join("kilter.toml"))?;
    let registry = commands::open_registry(&config)?;
    for drop in &config.drop {
        let place = config.resolve(&drop.folder);
        crate::drop_folder::DropFolder::new(drop, place).sweep(&registry, &Metrics::new()?, Clock::System)?;
    }
    Ok(())
}

fn observe(folder: &Path, client: &Client, stops: &[Stop], date: &str, way: Way) -> anyhow::Result<()> {
    if stops.is_empty() {
        return Ok(());
    }
    if way == Way::Drop {
        let path = folder.join(format!("outcomes/outcomes-{date}.csv"));
        write(&path, &outcomes_csv(stops))?;
        let arguments = ObserveArgs { name: "attempt".into(), input: path, config: config_of(folder) };
        commands::observe::take_in(&arguments)?;
        return Ok(());
    }
    let outcomes: Vec<Value> = stops.iter().map(Stop::outcome).collect();
    client.post("/models/attempt/outcomes", "application/json", &Value::from(outcomes).to_string())?;
    Ok(())
}

/// What the monitor says of a chapter, in its own sentences.
fn report(client: &Client, round: &Quillhaven, chapter: &Chapter) -> anyhow::Result<()> {
    let (from, to) = (round.date(chapter.first), round.date(chapter.first + chapter.days - 1));
    let text = client.get(&format!("/models/attempt/drift?from={from}&to={to}"))?;
    let report: Value = serde_json::from_str(&text).context("the drift report is no JSON")?;
    for finding in report["findings"].as_array().into_iter().flatten() {
        let word = |key: &str| finding[key].as_str().unwrap_or_default().to_owned();
        say(format_args!("  {:<7} {}", word("severity"), word("sentence")))?;
    }
    say("")?;
    Ok(())
}

fn heading(text: &str) -> std::io::Result<()> {
    say(format_args!("── {text}"))
}

fn dates(round: &Quillhaven, chapter: &Chapter) -> String {
    format!("{} to {}", round.date(chapter.first), round.date(chapter.first + chapter.days - 1))
}
