//! Metrics for scraping. Labels are bounded: names of models, versions, categories and fields, and
//! fixed words; never ids or free text.

use prometheus::{
    Encoder, GaugeVec, HistogramOpts, HistogramVec, IntCounterVec, IntGauge, IntGaugeVec, Opts, Registry,
    TextEncoder,
};

/// All metrics of the service, each with its help text beside it.
#[derive(Debug, Clone)]
pub(crate) struct Metrics {
    registry: Registry,
    /// Records scored, by way: `http` or `drop`.
    pub(crate) records_scored: IntCounterVec,
    /// Records refused, by reason in one word.
    pub(crate) records_refused: IntCounterVec,
    /// Outcomes taken in, by what became of them.
    pub(crate) outcomes: IntCounterVec,
    /// Time from a request or file to its answer.
    pub(crate) score_seconds: HistogramVec,
    /// Mean probability per category in the current period.
    pub(crate) predicted_share: GaugeVec,
    /// Observed share per category in the current period.
    pub(crate) observed_share: GaugeVec,
    /// Standardised gap between observed and predicted mix.
    pub(crate) mix_gap_z: GaugeVec,
    /// Mean log-loss of matured records.
    pub(crate) log_loss: GaugeVec,
    /// Mean log-loss that the model itself expects on them.
    pub(crate) log_loss_expected: GaugeVec,
    /// Mean log-loss at the fit.
    pub(crate) log_loss_fitted: GaugeVec,
    /// Common calibration slope; 1 is right, below 1 is too sure.
    pub(crate) calibration_slope: GaugeVec,
    /// Debiased shift index of each field.
    pub(crate) field_shift: GaugeVec,
    /// Share of matured records with an outcome.
    pub(crate) outcome_coverage: GaugeVec,
    /// Records that wait for their outcome.
    pub(crate) ledger_waiting_records: IntGauge,
    /// Files of drop folders, by what became of them.
    pub(crate) drop_files: IntCounterVec,
}

/// Registers metrics one after another.
struct Registrar<'a> {
    registry: &'a Registry,
}

impl Registrar<'_> {
    fn counter(&self, name: &str, help: &str, labels: &[&str]) -> Result<IntCounterVec, prometheus::Error> {
        let metric = IntCounterVec::new(Opts::new(name, help), labels)?;
        self.registry.register(Box::new(metric.clone()))?;
        Ok(metric)
    }

    fn gauge(&self, name: &str, help: &str, labels: &[&str]) -> Result<GaugeVec, prometheus::Error> {
        let metric = GaugeVec::new(Opts::new(name, help), labels)?;
        self.registry.register(Box::new(metric.clone()))?;
        Ok(metric)
    }
}

impl Metrics {
    /// Registers all metrics in a registry of their own.
    ///
    /// # Errors
    /// Two metrics of one name: a mistake in this file.
    pub(crate) fn new() -> Result<Self, prometheus::Error> {
        let registry = Registry::new_custom(Some("kilter".into()), None)?;
        let add = Registrar { registry: &registry };
        let version = ["model", "version"];
        let category = ["model", "version", "category"];
        // From half a millisecond, where a single record is answered, to the request's time limit.
        let buckets =
            vec![0.0005, 0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 10.0, 30.0];
        let seconds = HistogramOpts::new("score_seconds", "Time from a request or file to its answer");
        let score_seconds = HistogramVec::new(seconds.buckets(buckets), &["model", "way"])?;
        registry.register(Box::new(score_seconds.clone()))?;
        let waiting = IntGauge::new("ledger_waiting_records", "Records that wait for their outcome")?;
        registry.register(Box::new(waiting.clone()))?;
        let build = IntGaugeVec::new(
            Opts::new("build_info", "1, labelled with the program's version"),
            &["version"],
        )?;
        registry.register(Box::new(build.clone()))?;
        build.with_label_values(&[env!("CARGO_PKG_VERSION")]).set(1);
        let metrics = Self {
            records_scored: add.counter(
                "records_scored_total",
                "Records scored",
                &["model", "version", "way"],
            )?,
            records_refused: add.counter("records_refused_total", "Records refused", &["model", "reason"])?,
            outcomes: add.counter("outcomes_total", "Outcomes taken in", &["model", "state"])?,
            score_seconds,
            predicted_share: add.gauge("predicted_share", "Mean probability of the category", &category)?,
            observed_share: add.gauge("observed_share", "Observed share of the category", &category)?,
            mix_gap_z: add.gauge(
                "mix_gap_z",
                "Gap of observed and predicted mix in standard errors",
                &category,
            )?,
            log_loss: add.gauge("log_loss", "Mean log-loss of matured records in nats", &version)?,
            log_loss_expected: add.gauge(
                "log_loss_expected",
                "Mean log-loss that the model expects",
                &version,
            )?,
            log_loss_fitted: add.gauge("log_loss_fitted", "Mean log-loss at the fit", &version)?,
            calibration_slope: add.gauge(
                "calibration_slope",
                "Common slope; below 1 is too sure",
                &version,
            )?,
            field_shift: add.gauge(
                "field_shift",
                "Debiased shift index of a field",
                &["model", "version", "field"],
            )?,
            outcome_coverage: add.gauge(
                "outcome_coverage",
                "Share of matured records with outcome",
                &version,
            )?,
            ledger_waiting_records: waiting,
            drop_files: add.counter("drop_files_total", "Files of drop folders", &["model", "state"])?,
            registry: registry.clone(),
        };
        Ok(metrics)
    }

    /// All metrics in the text format for scraping, and its content type.
    ///
    /// # Errors
    /// A metric that cannot be written.
    pub(crate) fn text(&self) -> Result<(String, String), prometheus::Error> {
        let encoder = TextEncoder::new();
        let mut text = Vec::new();
        encoder.encode(&self.registry.gather(), &mut text)?;
        Ok((encoder.format_type().to_owned(), String::from_utf8_lossy(&text).into_owned()))
    }
}
