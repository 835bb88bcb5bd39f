//! Keeps metrics and the overview up with the ledger: figures are computed when outcomes arrive,
//! not when they are scraped.

use std::collections::{BTreeMap, BTreeSet};
use std::sync::{Mutex, PoisonError};

use crate::metrics::Metrics;
use crate::monitor::{Question, Span, drift, set_metrics};
use crate::registry::Registry;

/// Which models have new outcomes, and what was last found.
#[derive(Debug, Default)]
pub(crate) struct Monitored {
    marked: Mutex<BTreeSet<String>>,
    worst: Mutex<BTreeMap<String, String>>,
}

impl Monitored {
    /// Marks a model whose figures are no longer current.
    pub(crate) fn mark(&self, model: &str) {
        self.marked.lock().unwrap_or_else(PoisonError::into_inner).insert(model.to_owned());
    }

    /// The worst finding of a model when it was last looked at.
    pub(crate) fn worst_finding(&self, model: &str) -> Option<String> {
        self.worst.lock().unwrap_or_else(PoisonError::into_inner).get(model).cloned()
    }

    /// Computes the figures of all marked models anew.
    pub(crate) fn update(&self, registry: &Registry, metrics: &Metrics, now: i64) {
        let marked = std::mem::take(&mut *self.marked.lock().unwrap_or_else(PoisonError::into_inner));
        for name in marked {
            let Some(version) = registry.live(&name) else { continue };
            let question = Question { model: &version.model, span: Span::default(), by: None, now };
            match drift(registry.ledger(), &question) {
                Ok(report) => {
                    set_metrics(metrics, &report);
                    let worst = report.report.findings.first().map(|finding| finding.sentence.clone());
                    let mut known = self.worst.lock().unwrap_or_else(PoisonError::into_inner);
                    known.insert(name, worst.unwrap_or_default());
                }
                Err(error) => {
                    tracing::error!(
                        model = name,
                        cause = format!("{error:#}"),
                        "drift could not be computed"
                    );
                }
            }
        }
        match registry.ledger().waiting_records() {
            Ok(waiting) => metrics.ledger_waiting_records.set(i64::try_from(waiting).unwrap_or(i64::MAX)),
            Err(error) => tracing::error!(%error, "the ledger does not answer"),
        }
    }
}
