//! The one scorer: probabilities of the categories for coded records.
//!
//! Files, posted records and the evaluation of a fit all come here, so the same record has the
//! same probabilities to the last bit wherever it was scored.

use std::collections::HashMap;

use crate::batch::{Batch, ColumnSpec, Refusal};
use crate::coding::{Coded, Coder};
use crate::design::{Design, DesignError};
use crate::file::ModelFile;
use crate::kernel::{AddColumn, BLOCK_ROWS, Softmax};

/// A model file made ready to score.
#[derive(Debug, Clone)]
pub struct Scorer {
    coder: Coder,
    design: Design,
    categories: usize,
    reference: usize,
    /// Coefficients, terms x (J-1): the log-odds that each term adds, side by side.
    by_term: Vec<f64>,
    blocks: Vec<Block>,
}

/// Terms that share their dense columns and level fields: one product of dense columns times one
/// row of coefficients, looked up by the levels of the record.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Block {
    /// The dense columns that are multiplied.
    pub(crate) dense: Vec<usize>,
    /// Fields whose levels select the row, and the number of levels of each.
    pub(crate) level_fields: Vec<(usize, usize)>,
    /// For each combination of levels the term that applies; `NO_TERM` where none does.
    pub(crate) terms: Vec<u32>,
}

/// Where no term applies in a [`Block`].
pub(crate) const NO_TERM: u32 = u32::MAX;

/// Scored records of one batch.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Scored {
    /// Number of categories J.
    pub categories: usize,
    /// Log-odds of each category but the reference against the reference, rows x (J-1), in model
    /// order. NaN in refused rows.
    pub log_odds: Vec<f64>,
    /// Probabilities, rows x J, in model order; each row sums to one. NaN in refused rows.
    pub probabilities: Vec<f64>,
    /// The coded records: inputs, refused rows, notes.
    pub coded: Coded,
}

impl Scored {
    /// Probabilities of one row.
    pub fn probabilities_of(&self, row: usize) -> &[f64] {
        &self.probabilities[row * self.categories..(row + 1) * self.categories]
    }

    /// Log-odds of one row against the reference category.
    pub fn log_odds_of(&self, row: usize) -> &[f64] {
        let compared = self.categories - 1;
        &self.log_odds[row * compared..(row + 1) * compared]
    }

    /// Index of the likeliest category of a row; the first of equals.
    pub fn top_of(&self, row: usize) -> usize {
        let probabilities = self.probabilities_of(row);
        let mut top = 0;
        for (category, probability) in probabilities.iter().enumerate() {
            if *probability > probabilities[top] {
                top = category;
            }
        }
        top
    }
}

impl Scorer {
    /// Compiles a checked model file.
    ///
    /// # Errors
    /// [`DesignError`] where fields and interactions make no design. The numbers of terms and
    /// coefficients are the business of [`crate::check()`]; a file that passes it can be scored.
    pub fn new(model: &ModelFile) -> Result<Self, DesignError> {
        let design = Design::of_model(model)?;
        let rows: Vec<&[f64]> = model
            .compared_categories()
            .map(|category| model.coefficients.get(category).map_or(&[][..], Vec::as_slice))
            .collect();
        let coefficient = |term: usize, row: &&[f64]| row.get(term).copied().unwrap_or(0.0);
        let by_term = (0..design.terms().len())
            .flat_map(|term| rows.iter().map(move |row| coefficient(term, row)))
            .collect();
        Ok(Self {
            coder: Coder::new(&model.fields),
            blocks: blocks(&design),
            design,
            categories: model.outcome.categories.len(),
            reference: model.reference_index(),
            by_term,
        })
    }

    /// The columns that a batch must have, in order; further columns may follow.
    pub fn column_specs(&self) -> Vec<ColumnSpec> {
        self.design.column_specs()
    }

    /// The design that records are coded into.
    pub fn design(&self) -> &Design {
        &self.design
    }

    /// Number of categories J.
    pub fn categories(&self) -> usize {
        self.categories
    }

    /// Index of the reference category.
    pub fn reference(&self) -> usize {
        self.reference
    }

    /// Scores all records of a batch.
    pub fn score(&self, batch: &Batch) -> Scored {
        let coded = self.coder.code(batch);
        let mut scored = Scored {
            categories: self.categories,
            log_odds: vec![f64::NAN; coded.rows * (self.categories - 1)],
            probabilities: vec![f64::NAN; coded.rows * self.categories],
            coded,
        };
        let usable = scored.coded.usable();
        let mut room = Room::new(self, scored.coded.rows.min(BLOCK_ROWS));
        let mut beyond = Vec::new();
        for first in (0..scored.coded.rows).step_by(BLOCK_ROWS) {
            let rows = first..(first + BLOCK_ROWS).min(scored.coded.rows);
            room.take(rows.len());
            self.score_block(&scored.coded.values, first, &mut room);
            for row in rows.filter(|&row| usable[row]) {
                if !scored.take_over(row, row - first, &room) {
                    let reason = "the log-odds of this record are too large to compute".to_owned();
                    beyond.push(Refusal { row, field: String::new(), reason });
                }
            }
        }
        if !beyond.is_empty() {
            scored.coded.refused.extend(beyond);
            scored.coded.refused.sort_by_key(|refusal| refusal.row);
        }
        scored
    }

    /// Log-odds and probabilities of the records of a block, column by column. Records that are
    /// refused are computed along; what comes out for them is not used.
    fn score_block(&self, values: &[Vec<f64>], first: usize, room: &mut Room) {
        let rows = room.rows;
        for (column, dense) in self.design.dense().iter().enumerate() {
            let of_field = &values[dense.field()][first..first + rows];
            self.design.fill_dense_column(column, of_field, &mut room.dense[column * rows..][..rows]);
        }
        let compared = self.categories - 1;
        let odds = &mut room.log_odds[..compared * rows];
        odds.fill(0.0);
        for block in &self.blocks {
            block.fill_factor(&room.dense, &mut room.factor[..rows]);
            if block.level_fields.is_empty() {
                let coefficients = &self.by_term[block.terms[0] as usize * compared..][..compared];
                AddColumn { factor: &room.factor[..rows], coefficients, odds }.run();
                continue;
            }
            for row in 0..rows {
                let term = block.term_of(values, first + row);
                if term == NO_TERM {
                    continue;
                }
                let coefficients = &self.by_term[term as usize * compared..][..compared];
                for (category, coefficient) in coefficients.iter().enumerate() {
                    odds[category * rows + row] += room.factor[row] * coefficient;
                }
            }
        }
        Softmax {
            odds,
            reference: self.reference,
            probabilities: &mut room.probabilities[..self.categories * rows],
            largest: &mut room.largest[..rows],
            sum: &mut room.sum[..rows],
        }
        .run();
    }
}

impl Block {
    /// Products of the dense columns; 1 without any.
    fn fill_factor(&self, dense: &[f64], factor: &mut [f64]) {
        let rows = factor.len();
        factor.fill(1.0);
        for &column in &self.dense {
            for (factor, value) in factor.iter_mut().zip(&dense[column * rows..][..rows]) {
                *factor *= value;
            }
        }
    }

    /// The term that applies to a record.
    fn term_of(&self, values: &[Vec<f64>], row: usize) -> u32 {
        let cell = self
            .level_fields
            .iter()
            .fold(0, |cell, &(field, levels)| cell * levels + values[field][row] as usize);
        self.terms[cell]
    }
}

impl Scored {
    /// Takes a record over from its block; says whether its log-odds are finite.
    fn take_over(&mut self, row: usize, place: usize, room: &Room) -> bool {
        let (categories, compared) = (self.categories, self.categories - 1);
        let log_odds = |category: usize| room.log_odds[category * room.rows + place];
        if !(0..compared).all(|category| log_odds(category).is_finite()) {
            return false;
        }
        for (category, slot) in self.log_odds[row * compared..][..compared].iter_mut().enumerate() {
            *slot = log_odds(category);
        }
        for (category, slot) in self.probabilities[row * categories..][..categories].iter_mut().enumerate() {
            *slot = room.probabilities[category * room.rows + place];
        }
        true
    }
}

/// Room for the columns of a block, used again and again.
struct Room {
    rows: usize,
    dense: Vec<f64>,
    factor: Vec<f64>,
    log_odds: Vec<f64>,
    probabilities: Vec<f64>,
    largest: Vec<f64>,
    sum: Vec<f64>,
}

impl Room {
    fn new(scorer: &Scorer, rows: usize) -> Self {
        let columns = |count: usize| vec![0.0; count * rows];
        Self {
            rows,
            dense: columns(scorer.design.dense().len()),
            factor: columns(1),
            log_odds: columns(scorer.categories - 1),
            probabilities: columns(scorer.categories),
            largest: columns(1),
            sum: columns(1),
        }
    }

    /// Makes ready for a block of so many records.
    fn take(&mut self, rows: usize) {
        self.rows = rows;
    }
}

/// Groups terms that differ only in their levels.
pub(crate) fn blocks(design: &Design) -> Vec<Block> {
    let level_count = |slot: usize| match &design.fields()[design.level_fields()[slot]] {
        crate::file::Field::Levels(levels) => levels.levels.len(),
        _ => 0,
    };
    let mut positions: HashMap<(Vec<usize>, Vec<usize>), usize> = HashMap::new();
    let mut blocks: Vec<Block> = Vec::new();
    for (index, term) in design.terms().iter().enumerate() {
        let slots: Vec<usize> = term.levels.iter().map(|&(slot, _)| slot).collect();
        let position = *positions.entry((term.dense.clone(), slots)).or_insert_with_key(|(dense, slots)| {
            let level_fields: Vec<(usize, usize)> =
                slots.iter().map(|&slot| (design.level_fields()[slot], level_count(slot))).collect();
            let cells = level_fields.iter().map(|&(_, levels)| levels).product();
            blocks.push(Block { dense: dense.clone(), level_fields, terms: vec![NO_TERM; cells] });
            blocks.len() - 1
        });
        let block = &mut blocks[position];
        let cell = term
            .levels
            .iter()
            .zip(&block.level_fields)
            .fold(0, |cell, (&(_, level), &(_, levels))| cell * levels + level as usize);
        block.terms[cell] = index as u32;
    }
    blocks
}

/// Probabilities of all categories from the log-odds against the reference category.
///
/// The largest log-odds (0 for the reference included) is subtracted before exponentials are
/// taken, so nothing overflows; the sum is one up to rounding.
///
/// # Shapes
/// `log_odds`: J-1, model order without the reference; `probabilities`: J, model order.
pub fn probabilities_from_log_odds(log_odds: &[f64], reference: usize, probabilities: &mut [f64]) {
    let (mut largest, mut sum) = ([0.0], [0.0]);
    Softmax { odds: log_odds, reference, probabilities, largest: &mut largest, sum: &mut sum }.run();
}

/// Natural logarithms of the probabilities of all categories: finite for finite log-odds, also
/// where the probability itself underflows to 0.
///
/// # Shapes
/// As [`probabilities_from_log_odds`].
pub fn log_probabilities_from_log_odds(log_odds: &[f64], reference: usize, log_probabilities: &mut [f64]) {
    let largest = log_odds.iter().copied().fold(0.0, f64::max);
    let rest: f64 = log_odds.iter().map(|odds| (odds - largest).exp()).sum();
    let log_sum = largest + ((-largest).exp() + rest).ln();
    let mut compared = log_odds.iter();
    for (category, slot) in log_probabilities.iter_mut().enumerate() {
        let odds = if category == reference { 0.0 } else { compared.next().copied().unwrap_or(0.0) };
        *slot = odds - log_sum;
    }
}

#[cfg(test)]
#[path = "scorer_tests.rs"]
mod tests;
