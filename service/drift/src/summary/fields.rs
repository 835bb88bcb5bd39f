//! The part of a summary about one field: where its values fell.

use serde::{Deserialize, Serialize};

use crate::error::DriftError;
use crate::frame::{FieldBins, FieldLayout};
use crate::sums::{check_counts, combine_counts, count, holds};

/// Counts of one field over scored records.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct FieldPart {
    /// Records in each bin, missing and unseen ones left out.
    pub(crate) bins: Vec<f64>,
    /// Records without the value.
    pub(crate) missing: f64,
    /// Records with a level that the model does not know.
    pub(crate) unseen: f64,
    /// Records with a number outside the range of the fit.
    pub(crate) outside: f64,
}

/// Where a value falls.
enum Place {
    Missing,
    Unseen,
    Bin { bin: usize, outside: bool },
}

impl FieldPart {
    pub(crate) fn new(layout: &FieldLayout) -> Self {
        Self { bins: vec![0.0; layout.len()], missing: 0.0, unseen: 0.0, outside: 0.0 }
    }

    /// Records with a value that has a bin.
    pub(crate) fn binned(&self) -> f64 {
        self.bins.iter().sum()
    }

    /// Records of any kind.
    pub(crate) fn total(&self) -> f64 {
        self.binned() + self.missing + self.unseen
    }

    pub(crate) fn check_removal(&self, bins: &FieldBins, value: f64, weight: f64) -> Result<(), DriftError> {
        let enough = match place(bins, value) {
            Place::Missing => holds(self.missing, -weight),
            Place::Unseen => holds(self.unseen, -weight),
            Place::Bin { bin, outside } => {
                holds(self.bins[bin], -weight) && (!outside || holds(self.outside, -weight))
            }
        };
        if enough { Ok(()) } else { Err(DriftError::Negative { part: "fields" }) }
    }

    pub(crate) fn fold(&mut self, bins: &FieldBins, value: f64, weight: f64) {
        match place(bins, value) {
            Place::Missing => count(&mut self.missing, weight),
            Place::Unseen => count(&mut self.unseen, weight),
            Place::Bin { bin, outside } => {
                count(&mut self.bins[bin], weight);
                if outside {
                    count(&mut self.outside, weight);
                }
            }
        }
    }

    pub(crate) fn check_combine(&self, other: &Self, sign: f64) -> Result<(), DriftError> {
        check_counts(&self.bins, &other.bins, sign, "fields.bins")?;
        let mine = [self.missing, self.unseen, self.outside];
        check_counts(&mine, &[other.missing, other.unseen, other.outside], sign, "fields")
    }

    pub(crate) fn combine(&mut self, other: &Self, sign: f64) {
        combine_counts(&mut self.bins, &other.bins, sign);
        count(&mut self.missing, sign * other.missing);
        count(&mut self.unseen, sign * other.unseen);
        count(&mut self.outside, sign * other.outside);
    }
}

fn place(bins: &FieldBins, value: f64) -> Place {
    if value.is_nan() {
        return Place::Missing;
    }
    match bins {
        FieldBins::Number { edges, observed } => Place::Bin {
            bin: edges.partition_point(|edge| *edge < value),
            outside: observed.is_some_and(|[smallest, largest]| value < smallest || value > largest),
        },
        FieldBins::Levels { levels } => level(value, levels.len()),
        FieldBins::Flag => level(value, 2),
    }
}

fn level(value: f64, levels: usize) -> Place {
    if value >= 0.0 && value < levels as f64 {
        Place::Bin { bin: value as usize, outside: false }
    } else {
        Place::Unseen
    }
}
