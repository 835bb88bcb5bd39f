//! The frame of a model version: everything that its summaries are measured in.

use kilter_model::{Baseline, Field, Holdout, ModelFile};

use crate::error::DriftError;

/// Inner edges of the 18 probability bins, the same for every model, so that days, machines and
/// model versions can be added and laid over each other. A value equal to an edge belongs to the
/// upper bin. Finer at both ends, about even on the logit scale.
pub const PROBABILITY_EDGES: [f64; 17] =
    [0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.98, 0.99, 0.995];

/// Number of probability bins.
pub const PROBABILITY_BINS: usize = PROBABILITY_EDGES.len() + 1;

/// How the values of one field are binned.
#[derive(Debug, Clone, PartialEq)]
pub struct FieldLayout {
    /// Name of the field.
    pub name: String,
    /// Its bins.
    pub bins: FieldBins,
}

/// Bins of a field.
#[derive(Debug, Clone, PartialEq)]
pub enum FieldBins {
    /// Bins of a number: a value equal to an edge belongs to the lower bin.
    Number {
        /// Inner edges, ascending.
        edges: Vec<f64>,
        /// Smallest and largest number of the fit.
        observed: Option<[f64; 2]>,
    },
    /// One bin per level, in the order of the model.
    Levels {
        /// The levels.
        levels: Vec<String>,
    },
    /// False and true.
    Flag,
}

impl FieldLayout {
    /// Layout of a model's field. `edges` and `observed` are looked at for numbers only; where
    /// `observed` is absent, the range that stands in the field is taken.
    pub fn new(field: &Field, edges: &[f64], observed: Option<[f64; 2]>) -> Self {
        let bins = match field {
            Field::Number(number) => {
                FieldBins::Number { edges: edges.to_vec(), observed: observed.or(number.observed) }
            }
            Field::Levels(levels) => FieldBins::Levels { levels: levels.levels.clone() },
            Field::Flag(_) => FieldBins::Flag,
        };
        Self { name: field.name().to_owned(), bins }
    }

    /// Number of bins.
    pub fn len(&self) -> usize {
        match &self.bins {
            FieldBins::Number { edges, .. } => edges.len() + 1,
            FieldBins::Levels { levels } => levels.len(),
            FieldBins::Flag => 2,
        }
    }

    /// Whether the field has no bin: levels without a level.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }
}

/// Everything of a model version that summaries are measured in.
#[derive(Debug, Clone, PartialEq)]
pub struct Frame {
    pub(crate) categories: Vec<String>,
    pub(crate) reference: usize,
    pub(crate) fields: Vec<FieldLayout>,
    pub(crate) decile_edges: Vec<f64>,
    pub(crate) terms: usize,
    pub(crate) baseline: Option<Baseline>,
    pub(crate) holdout: Option<Holdout>,
}

impl Frame {
    /// The frame of a model file. A model without baseline has one too: its statistics are shown,
    /// but without the number of training cases they have no p-values.
    ///
    /// # Errors
    /// Lists of the wrong length, edges that do not ascend, numbers that cannot be.
    pub fn new(model: &ModelFile) -> Result<Self, DriftError> {
        let baseline = model.baseline.as_ref();
        if let Some(baseline) = baseline {
            check_length("baseline.fields", baseline.fields.len(), model.fields.len())?;
        }
        let fields = model
            .fields
            .iter()
            .enumerate()
            .map(|(index, field)| match baseline.map(|baseline| &baseline.fields[index]) {
                Some(known) => FieldLayout::new(field, &known.edges, known.observed),
                None => FieldLayout::new(field, &[], None),
            })
            .collect();
        let mut frame = Self::for_fit(
            model.outcome.categories.clone(),
            model.reference_index(),
            fields,
            baseline.map(|baseline| baseline.decile_edges.clone()).unwrap_or_default(),
            model.terms.len().saturating_sub(1),
        )?;
        if let Some(baseline) = baseline {
            frame.check_baseline(baseline)?;
        }
        frame.baseline.clone_from(&model.baseline);
        frame.holdout.clone_from(&model.holdout);
        Ok(frame)
    }

    /// A frame without baseline, for the fit that is about to compute one.
    ///
    /// `decile_edges` are the inner deciles of one minus the probability of the reference category
    /// (at most nine, ascending); `terms` is the number of terms without the intercept.
    ///
    /// # Errors
    /// Fewer than two categories, a reference outside them, edges that do not ascend.
    pub fn for_fit(
        categories: Vec<String>,
        reference: usize,
        fields: Vec<FieldLayout>,
        decile_edges: Vec<f64>,
        terms: usize,
    ) -> Result<Self, DriftError> {
        if categories.len() < 2 {
            return Err(DriftError::TooFewCategories { found: categories.len() });
        }
        if reference >= categories.len() {
            return Err(DriftError::Reference { reference, categories: categories.len() });
        }
        check_ascending("decile_edges", "baseline", &decile_edges)?;
        for field in &fields {
            if let FieldBins::Number { edges, .. } = &field.bins {
                check_ascending("edges", &field.name, edges)?;
            }
        }
        Ok(Self { categories, reference, fields, decile_edges, terms, baseline: None, holdout: None })
    }

    /// Names of the categories, in model order.
    pub fn categories(&self) -> &[String] {
        &self.categories
    }

    /// Index of the reference category.
    pub fn reference(&self) -> usize {
        self.reference
    }

    /// The fields, in model order.
    pub fn fields(&self) -> &[FieldLayout] {
        &self.fields
    }

    /// Number of terms without the intercept.
    pub fn terms(&self) -> usize {
        self.terms
    }

    /// Number of training cases N, where it is known.
    pub fn training_cases(&self) -> Option<f64> {
        self.baseline.as_ref().map(|baseline| baseline.cases)
    }

    /// The slope to be expected on new records: a fitted model is a little too extreme.
    pub fn expected_slope(&self) -> f64 {
        self.baseline.as_ref().map_or(1.0, |baseline| baseline.expected_slope)
    }

    /// The baseline of the model, where it has one.
    pub fn baseline(&self) -> Option<&Baseline> {
        self.baseline.as_ref()
    }

    /// Indices of the categories but the reference, in model order.
    pub(crate) fn compared(&self) -> impl Iterator<Item = usize> + Clone {
        let reference = self.reference;
        (0..self.categories.len()).filter(move |category| *category != reference)
    }

    fn check_baseline(&self, baseline: &Baseline) -> Result<(), DriftError> {
        let categories = self.categories.len();
        check_number("baseline.cases", baseline.cases, baseline.cases > 0.0, "must be above 0")?;
        let slope = baseline.expected_slope;
        check_number("baseline.expected_slope", slope, slope > 0.0, "must be above 0")?;
        for (what, found, needed) in [
            ("baseline.mix", baseline.mix.len(), categories),
            ("baseline.variance", baseline.variance.len(), categories),
            ("baseline.mean_probability", baseline.mean_probability.len(), categories),
            (
                "baseline.probability_covariance",
                baseline.probability_covariance.len(),
                categories * categories,
            ),
            ("baseline.probability_histogram", baseline.probability_histogram.len(), categories),
        ] {
            check_length(what, found, needed)?;
        }
        for histogram in &baseline.probability_histogram {
            check_length("baseline.probability_histogram", histogram.len(), PROBABILITY_BINS)?;
        }
        for (layout, field) in self.fields.iter().zip(&baseline.fields) {
            check_length("baseline.fields.counts", field.counts.len(), layout.len())?;
        }
        if !baseline.term_means.is_empty() {
            check_length("baseline.term_means", baseline.term_means.len(), self.terms)?;
            let lower = self.terms * (self.terms + 1) / 2;
            check_length("baseline.term_covariance", baseline.term_covariance.len(), lower)?;
        }
        Ok(())
    }
}

pub(crate) fn check_length(what: &'static str, found: usize, needed: usize) -> Result<(), DriftError> {
    if found == needed { Ok(()) } else { Err(DriftError::Length { what, found, needed }) }
}

pub(crate) fn check_number(
    what: &'static str,
    value: f64,
    good: bool,
    needed: &'static str,
) -> Result<(), DriftError> {
    if good && value.is_finite() { Ok(()) } else { Err(DriftError::Number { what, value, needed }) }
}

fn check_ascending(what: &'static str, owner: &str, values: &[f64]) -> Result<(), DriftError> {
    let good = values.iter().all(|value| value.is_finite()) && values.is_sorted_by(|a, b| a < b);
    if good { Ok(()) } else { Err(DriftError::NotAscending { what, owner: owner.to_owned() }) }
}
