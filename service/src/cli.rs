//! The command line.

use std::path::PathBuf;

use clap::{Args, Parser, Subcommand, ValueEnum};

/// Fit, serve and watch category models: multinomial logistic regression in production.
#[derive(Debug, Parser)]
#[command(name = "kilter", version, max_term_width = 100)]
pub(crate) struct Cli {
    #[command(subcommand)]
    pub(crate) command: Command,
}

/// What to do.
#[derive(Debug, Subcommand)]
pub(crate) enum Command {
    /// Play the whole job on the demo data: fit, publish, score, take in outcomes, report drift
    Demo(DemoArgs),
    /// Fit a model by maximum likelihood and write a model file
    Fit(FitArgs),
    /// Show what is in a model file
    Show(ShowArgs),
    /// Compare any two categories: log-odds of A against B with standard errors
    Contrast(ContrastArgs),
    /// Score a file
    Score(ScoreArgs),
    /// Run the HTTP service, the pages, the metrics and the drop folders
    Serve(ServeArgs),
    /// Score what lies in the drop folders once, and end
    Sweep(ConfigArgs),
    /// Take observed outcomes from a file into the ledger
    Observe(ObserveArgs),
    /// Report drift
    Drift(DriftArgs),
    /// Make a model file a version of its name
    Publish(PublishArgs),
    /// List the versions of a model, and who changed them when and why
    Versions(VersionsArgs),
    /// Make a version live
    Promote(PromoteArgs),
    /// Make the version live again that was live before
    Rollback(RollbackArgs),
    /// Look after the ledger
    Ledger(LedgerArgs),
    /// Check model files against schema, arithmetic, fingerprint and signature
    Check(CheckArgs),
    /// Sign model files
    Sign(SignArgs),
    /// Write the probabilities as one standard SQL expression
    Sql(SqlArgs),
    /// Print a JSON Schema
    Schema(SchemaArgs),
}

/// Where the configuration is.
#[derive(Debug, Args)]
pub(crate) struct ConfigArgs {
    /// Configuration file; paths in it are relative to it
    #[arg(long, default_value = "kilter.toml", value_name = "FILE", global = true)]
    pub(crate) config: PathBuf,
}

#[derive(Debug, Args)]
pub(crate) struct DemoArgs {
    /// Folder for the demo's files; it is made, and must be empty or a former demo's
    #[arg(long, default_value = "kilter-demo", value_name = "DIR")]
    pub(crate) dir: PathBuf,
    /// Keep the service and its pages up afterwards
    #[arg(long)]
    pub(crate) serve: bool,
}

#[derive(Debug, Args)]
pub(crate) struct FitArgs {
    /// Plan file (TOML): data, outcome, fields
    pub(crate) plan: PathBuf,
    /// Model file to write [default: NAME.model.json beside the plan]
    #[arg(short, long, value_name = "MODEL")]
    pub(crate) output: Option<PathBuf>,
    /// Write a page to look at: effects, coefficients, calibration, mix, tests and warnings
    #[arg(long, value_name = "HTML")]
    pub(crate) report: Option<PathBuf>,
    /// Write field tests, average marginal effects and goodness of fit as JSON; `-` prints them as text
    #[arg(long, value_name = "JSON")]
    pub(crate) analysis: Option<PathBuf>,
    /// Also test the independence of irrelevant alternatives and fit each category separately against
    /// the reference, in report and analysis; takes many fits
    #[arg(long)]
    pub(crate) diagnose: bool,
}

#[derive(Debug, Args)]
pub(crate) struct ShowArgs {
    /// Model file
    pub(crate) model: PathBuf,
    /// Print JSON
    #[arg(long)]
    pub(crate) json: bool,
}

#[derive(Debug, Args)]
pub(crate) struct ContrastArgs {
    /// Model file
    pub(crate) model: PathBuf,
    /// Category A
    pub(crate) category: String,
    /// Category B, which A is compared against
    pub(crate) against: String,
    /// Print JSON
    #[arg(long)]
    pub(crate) json: bool,
}

#[derive(Debug, Args)]
pub(crate) struct ScoreArgs {
    /// Model file
    pub(crate) model: PathBuf,
    /// File to score (.csv, .csv.gz, .csv.zst, .parquet, .ndjson, .arrow); `-` is standard input (CSV)
    pub(crate) input: PathBuf,
    /// File to write; its extension gives its format [default: standard output, CSV]
    #[arg(short, long, value_name = "OUTPUT")]
    pub(crate) output: Option<PathBuf>,
    /// File for refused rows, each with line, field and reason
    #[arg(long, value_name = "FILE")]
    pub(crate) refused: Option<PathBuf>,
    /// Add an interval for each probability, from the joint covariance of the coefficients
    #[arg(long, value_name = "LEVEL", num_args = 0..=1, default_missing_value = "0.95", require_equals = true)]
    pub(crate) intervals: Option<f64>,
    /// Add what each term adds to the log-odds of category A against category B
    #[arg(long, value_name = "A,B")]
    pub(crate) explain: Option<String>,
    /// Write only the likeliest category, no probabilities
    #[arg(long, conflicts_with = "intervals")]
    pub(crate) top_only: bool,
}

#[derive(Debug, Args)]
pub(crate) struct ServeArgs {
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
    /// Only check the configuration, and end
    #[arg(long)]
    pub(crate) check: bool,
}

#[derive(Debug, Args)]
pub(crate) struct ObserveArgs {
    /// Name of the model
    pub(crate) name: String,
    /// File with the columns `id`, `category` and, if known, `observed_at`
    pub(crate) input: PathBuf,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

#[derive(Debug, Args)]
pub(crate) struct DriftArgs {
    /// Name of the model
    pub(crate) name: String,
    /// First day of the report (record time, UTC) [default: 28 matured days before --to]
    #[arg(long, value_name = "T")]
    pub(crate) from: Option<String>,
    /// Last day of the report, and the day from which maturity is counted [default: today]
    #[arg(long, value_name = "T")]
    pub(crate) to: Option<String>,
    /// Only this segment field
    #[arg(long, value_name = "FIELD")]
    pub(crate) by: Option<String>,
    /// Print JSON
    #[arg(long)]
    pub(crate) json: bool,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

#[derive(Debug, Args)]
pub(crate) struct PublishArgs {
    /// Model file
    pub(crate) model: PathBuf,
    /// What the version does
    #[arg(long = "as", value_enum, default_value = "live")]
    pub(crate) role: Role,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

#[derive(Debug, Args)]
pub(crate) struct VersionsArgs {
    /// Name of the model
    pub(crate) name: String,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

#[derive(Debug, Args)]
pub(crate) struct PromoteArgs {
    /// Name of the model
    pub(crate) name: String,
    /// Fingerprint of the version, or its beginning
    pub(crate) version: String,
    /// Why, for the audit trail
    #[arg(long, default_value = "", value_name = "TEXT")]
    pub(crate) why: String,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

#[derive(Debug, Args)]
pub(crate) struct RollbackArgs {
    /// Name of the model
    pub(crate) name: String,
    /// Why, for the audit trail
    #[arg(long, default_value = "", value_name = "TEXT")]
    pub(crate) why: String,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

#[derive(Debug, Args)]
pub(crate) struct LedgerArgs {
    #[command(subcommand)]
    pub(crate) command: LedgerCommand,
    #[command(flatten)]
    pub(crate) config: ConfigArgs,
}

/// What to do with the ledger.
#[derive(Debug, Subcommand)]
pub(crate) enum LedgerCommand {
    /// Compute all summaries anew from the raw records and compare
    Verify,
    /// Write a consistent copy while the service goes on
    Backup(LedgerBackupArgs),
    /// Make the ledger of a copy; there must be none yet
    Restore(LedgerRestoreArgs),
    /// Move the ledger from its SQLite file to a PostgreSQL data base; stop the service before
    Move(LedgerMoveArgs),
    /// Remove raw records and outcomes by age; summaries stay
    Prune(LedgerPruneArgs),
    /// Write one row per record: id, version, time, probabilities, outcome, observed_at
    Export(LedgerExportArgs),
    /// Forget records by their ids: record, scores, outcome, and their share of the summaries
    Delete(LedgerDeleteArgs),
}

#[derive(Debug, Args)]
pub(crate) struct LedgerBackupArgs {
    /// File to write
    #[arg(short, long, value_name = "FILE")]
    pub(crate) output: PathBuf,
}

#[derive(Debug, Args)]
pub(crate) struct LedgerRestoreArgs {
    /// The copy
    pub(crate) copy: PathBuf,
}

#[derive(Debug, Args)]
pub(crate) struct LedgerMoveArgs {
    /// Address of an empty data base, such as `postgres://kilter@db.example/kilter`
    pub(crate) to: String,
}

#[derive(Debug, Args)]
pub(crate) struct LedgerPruneArgs {
    /// Age up to which records are kept, such as 400d [default: `keep` of the configuration]
    #[arg(long, value_name = "SPAN")]
    pub(crate) keep: Option<String>,
}

#[derive(Debug, Args)]
pub(crate) struct LedgerExportArgs {
    /// Name of the model
    pub(crate) name: String,
    /// File to write; its extension gives its format
    #[arg(short, long, value_name = "FILE")]
    pub(crate) output: PathBuf,
    /// First day of record time [default: all]
    #[arg(long, value_name = "T")]
    pub(crate) from: Option<String>,
    /// Last day of record time [default: all]
    #[arg(long, value_name = "T")]
    pub(crate) to: Option<String>,
    /// Only this version: its fingerprint or the beginning of it
    #[arg(long, value_name = "VERSION")]
    pub(crate) version: Option<String>,
}

#[derive(Debug, Args)]
pub(crate) struct LedgerDeleteArgs {
    /// Name of the model
    pub(crate) name: String,
    /// Ids of the records
    pub(crate) ids: Vec<String>,
    /// File with ids, one per line
    #[arg(long, value_name = "FILE")]
    pub(crate) ids_from: Option<PathBuf>,
    /// Why, for the audit trail
    #[arg(long, default_value = "", value_name = "TEXT")]
    pub(crate) why: String,
}

/// What a version does.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub(crate) enum Role {
    /// It answers
    Live,
    /// It is scored beside the live version on the same records
    Shadow,
}

#[derive(Debug, Args)]
pub(crate) struct CheckArgs {
    /// Model files
    #[arg(required = true)]
    pub(crate) models: Vec<PathBuf>,
    /// File with the public key (64 hexadecimal digits) that the model files must be signed with
    #[arg(long, value_name = "FILE")]
    pub(crate) key: Option<PathBuf>,
}

#[derive(Debug, Args)]
pub(crate) struct SignArgs {
    /// Model files; each is written anew with its signature
    pub(crate) models: Vec<PathBuf>,
    /// File with the secret key (Ed25519, 64 hexadecimal digits)
    #[arg(long, value_name = "FILE")]
    pub(crate) key: PathBuf,
    /// Make a new key: the secret one in the file of --key, the public one beside it in FILE.public
    #[arg(long)]
    pub(crate) new_key: bool,
}

#[derive(Debug, Args)]
pub(crate) struct SqlArgs {
    /// Model file
    pub(crate) model: PathBuf,
    /// Write a whole query over this table instead of the expression alone
    #[arg(long, value_name = "TABLE")]
    pub(crate) from: Option<String>,
}

#[derive(Debug, Args)]
pub(crate) struct SchemaArgs {
    /// Which schema
    #[arg(value_enum)]
    pub(crate) of: SchemaOf,
}

/// What a schema describes.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub(crate) enum SchemaOf {
    /// The model file
    Model,
    /// The plan file
    Plan,
    /// The configuration file
    Config,
}
