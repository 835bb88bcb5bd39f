//! The design as the optimiser sees it: number columns standardised and kept dense, levels kept as
//! indices, terms that are left out struck.
//!
//! Terms have an internal order here: first those without levels ("dense"), then those with levels.
//! Terms that differ in their levels only form a group; in each row at most one term of a group is
//! other than 0.

use kilter_model::{DenseColumn, Design, Field, Form, Term};

use crate::chunk::Chunk;
use crate::moments::Moments;
use crate::vector::Standardise;

/// Rows per block: small enough that a block of columns stays in the processor's cache.
pub(crate) const BLOCK_ROWS: usize = 512;
/// No term of a group applies.
const NO_TERM: u32 = u32::MAX;

/// Smaller scales are taken as this one, so that their reciprocals are numbers.
const SMALLEST_SCALE: f64 = 1e-300;

/// Centre and scale of each dense column of a design.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Scaling {
    pub(crate) centre: Vec<f64>,
    pub(crate) scale: Vec<f64>,
}

impl Scaling {
    /// Means and standard deviations of the columns of number fields; flags stay as they are. A
    /// constant column is centred only, so that it becomes 0.
    ///
    /// `moments` are by field and column of the field's form.
    pub(crate) fn new(design: &Design, moments: &[Vec<Moments>]) -> Self {
        let of = |column: &DenseColumn| match *column {
            DenseColumn::Basis { field, basis } => {
                let moments = &moments[field][basis];
                let constant = moments.least >= moments.most;
                if constant {
                    (moments.least, 1.0)
                } else {
                    (moments.mean, moments.deviation().max(SMALLEST_SCALE))
                }
            }
            DenseColumn::MissingFlag { .. } | DenseColumn::Flag { .. } => (0.0, 1.0),
        };
        let (centre, scale) = design.dense().iter().map(of).unzip();
        Self { centre, scale }
    }
}

/// Terms that differ in their levels only.
#[derive(Debug, Clone)]
struct Group {
    /// Indices of dense columns whose product is the value of the term.
    dense: Vec<usize>,
    /// Fields whose levels choose the term, and how many levels each has.
    level_fields: Vec<(usize, usize)>,
    /// For each combination of levels the internal index of the term, or `NO_TERM`.
    terms: Vec<u32>,
}

/// A design compiled for the optimiser.
#[derive(Debug, Clone)]
pub(crate) struct Layout {
    design: Design,
    scaling: Scaling,
    /// For each dense term the dense columns whose product it is.
    dense_terms: Vec<Vec<usize>>,
    groups: Vec<Group>,
    /// Index of each term in the design, by internal index.
    order: Vec<usize>,
    /// Whether some term is a product, so that the columns are needed beside the terms.
    needs_columns: bool,
}

/// Rows of a chunk under a layout.
#[derive(Debug, Default)]
pub(crate) struct Block {
    pub(crate) rows: usize,
    /// Dense terms: q columns, the rows of each one after another.
    pub(crate) dense: Vec<f64>,
    /// The same row by row; empty where no term has levels.
    pub(crate) by_row: Vec<f64>,
    /// For each row the terms with levels that apply, ascending, with their values: `starts[row]`
    /// to `starts[row + 1]`.
    active: Vec<(u32, f64)>,
    starts: Vec<usize>,
    columns: Vec<f64>,
}

impl Block {
    /// The terms of groups that apply to a row.
    pub(crate) fn active_of(&self, row: usize) -> &[(u32, f64)] {
        &self.active[self.starts[row]..self.starts[row + 1]]
    }

    /// All terms of a row, of which the first q are dense.
    pub(crate) fn fill_row(&self, row: usize, q: usize, x: &mut [f64]) {
        for (slot, column) in x.iter_mut().zip(self.dense.chunks_exact(self.rows)) {
            *slot = column[row];
        }
        x[q..].fill(0.0);
        for &(term, value) in self.active_of(row) {
            x[term as usize] = value;
        }
    }

    /// Squared length of the longest row.
    pub(crate) fn longest_squared(&self) -> f64 {
        let mut squares = vec![0.0; self.rows];
        for column in self.dense.chunks_exact(self.rows) {
            for (square, value) in squares.iter_mut().zip(column) {
                *square += value * value;
            }
        }
        let active = |row: usize| self.active_of(row).iter().map(|(_, value)| value * value).sum::<f64>();
        squares.iter().enumerate().map(|(row, square)| square + active(row)).fold(0.0, f64::max)
    }
}

impl Layout {
    /// The terms of a design for which `keep` holds.
    pub(crate) fn new(design: &Design, scaling: &Scaling, keep: &[bool]) -> Self {
        let kept = || design.terms().iter().enumerate().filter(|&(index, _)| keep[index]);
        let mut layout = Self {
            design: design.clone(),
            scaling: scaling.clone(),
            dense_terms: Vec::new(),
            groups: Vec::new(),
            order: Vec::new(),
            needs_columns: kept().any(|(_, term)| term.dense.len() + term.levels.len() > 1),
        };
        for (index, term) in kept().filter(|(_, term)| term.levels.is_empty()) {
            layout.dense_terms.push(term.dense.clone());
            layout.order.push(index);
        }
        for (index, term) in kept().filter(|(_, term)| !term.levels.is_empty()) {
            layout.add_to_group(term);
            layout.order.push(index);
        }
        layout
    }

    fn add_to_group(&mut self, term: &Term) {
        let level_fields: Vec<(usize, usize)> = term
            .levels
            .iter()
            .map(|&(slot, _)| {
                let field = self.design.level_fields()[slot];
                let levels = match &self.design.fields()[field] {
                    Field::Levels(levels) => levels.levels.len(),
                    Field::Number(_) | Field::Flag(_) => 0,
                };
                (field, levels)
            })
            .collect();
        let same = |group: &Group| group.dense == term.dense && group.level_fields == level_fields;
        let position = self.groups.iter().position(same).unwrap_or_else(|| {
            let cells = level_fields.iter().map(|&(_, levels)| levels).product();
            let group = Group { dense: term.dense.clone(), level_fields, terms: vec![NO_TERM; cells] };
            self.groups.push(group);
            self.groups.len() - 1
        });
        let group = &mut self.groups[position];
        let cell = term
            .levels
            .iter()
            .zip(&group.level_fields)
            .fold(0, |cell, (&(_, level), &(_, levels))| cell * levels + level as usize);
        group.terms[cell] = self.order.len() as u32;
    }

    /// Number of terms p.
    pub(crate) fn terms(&self) -> usize {
        self.order.len()
    }

    /// Number of dense terms q; they come first.
    pub(crate) fn dense_terms(&self) -> usize {
        self.dense_terms.len()
    }

    /// Index of each term in the design.
    pub(crate) fn order(&self) -> &[usize] {
        &self.order
    }

    /// Fills a block with the rows `start..end` of a chunk.
    pub(crate) fn fill(&self, chunk: &Chunk, start: usize, end: usize, block: &mut Block) {
        let rows = end - start;
        block.rows = rows;
        if self.needs_columns {
            self.fill_columns(chunk, start, end, &mut block.columns);
        }
        block.dense.resize(self.dense_terms() * rows, 0.0);
        for (columns, slots) in self.dense_terms.iter().zip(block.dense.chunks_exact_mut(rows)) {
            match columns[..] {
                [] => slots.fill(1.0),
                [column] => self.fill_column(column, chunk, start, end, slots),
                _ => {
                    for (row, slot) in slots.iter_mut().enumerate() {
                        *slot = product(&block.columns, columns, rows, row);
                    }
                }
            }
        }
        self.fill_levels(chunk, start, block, |columns, chosen, row| product(columns, chosen, rows, row));
    }

    /// Fills a block with the derivatives of the terms with respect to a number field, per unit of
    /// the field; 0 where the number is missing.
    pub(crate) fn fill_derivative(
        &self,
        chunk: &Chunk,
        start: usize,
        end: usize,
        field: usize,
        block: &mut Block,
    ) {
        let rows = end - start;
        block.rows = rows;
        self.fill_columns(chunk, start, end, &mut block.columns);
        let mut slopes = vec![0.0; block.columns.len()];
        for (index, column) in self.design.dense().iter().enumerate() {
            let (DenseColumn::Basis { field: own, basis }, Field::Number(number)) =
                (column, &self.design.fields()[field])
            else {
                continue;
            };
            if *own == field {
                let values = &chunk.numbers(field)[start..end];
                for (slot, &value) in slopes[index * rows..][..rows].iter_mut().zip(values) {
                    let slope = number.form.derivative(*basis, value) / self.scaling.scale[index];
                    *slot = if value.is_nan() { 0.0 } else { slope };
                }
            }
        }
        // The product rule: one factor after the other gives way to its slope.
        let derivative = |columns: &[f64], chosen: &[usize], row: usize| -> f64 {
            let of = |position: usize| {
                let factor = |(other, &column): (usize, &usize)| {
                    let source = if other == position { &slopes[..] } else { columns };
                    source[column * rows + row]
                };
                chosen.iter().enumerate().map(factor).product::<f64>()
            };
            (0..chosen.len()).map(of).sum()
        };
        block.dense.clear();
        for columns in &self.dense_terms {
            block.dense.extend((0..rows).map(|row| derivative(&block.columns, columns, row)));
        }
        self.fill_levels(chunk, start, block, derivative);
    }

    /// Fills the terms with levels of a block whose columns and dense terms are filled; `value`
    /// makes the value of a term of all columns, the chosen ones and the row.
    fn fill_levels(
        &self,
        chunk: &Chunk,
        start: usize,
        block: &mut Block,
        value: impl Fn(&[f64], &[usize], usize) -> f64,
    ) {
        let rows = block.rows;
        block.starts.clear();
        block.active.clear();
        block.by_row.clear();
        if self.groups.is_empty() {
            block.starts.resize(rows + 1, 0);
            return;
        }
        let q = self.dense_terms();
        block.by_row.resize(rows * q, 0.0);
        for (term, column) in block.dense.chunks_exact(rows).enumerate() {
            for (row, value) in column.iter().enumerate() {
                block.by_row[row * q + term] = *value;
            }
        }
        for row in 0..rows {
            block.starts.push(block.active.len());
            for group in &self.groups {
                let levels = group.level_fields.iter();
                let cell = levels.fold(0, |cell, &(field, levels)| {
                    cell * levels + chunk.levels(field)[start + row] as usize
                });
                let term = group.terms[cell];
                if term != NO_TERM {
                    block.active.push((term, value(&block.columns, &group.dense, row)));
                }
            }
            let active = &mut block.active[block.starts[row]..];
            if !active.is_sorted_by_key(|&(term, _)| term) {
                active.sort_unstable_by_key(|&(term, _)| term);
            }
        }
        block.starts.push(block.active.len());
    }

    /// Standardised dense columns, column by column.
    fn fill_columns(&self, chunk: &Chunk, start: usize, end: usize, columns: &mut Vec<f64>) {
        let rows = end - start;
        columns.resize(self.design.dense().len() * rows, 0.0);
        for (index, slots) in columns.chunks_exact_mut(rows).enumerate() {
            self.fill_column(index, chunk, start, end, slots);
        }
    }

    /// One standardised dense column.
    fn fill_column(&self, index: usize, chunk: &Chunk, start: usize, end: usize, slots: &mut [f64]) {
        let (centre, factor) = (self.scaling.centre[index], self.scaling.scale[index].recip());
        match self.design.dense()[index] {
            DenseColumn::Basis { field, basis } => {
                let Field::Number(number) = &self.design.fields()[field] else { return };
                let values = &chunk.numbers(field)[start..end];
                if number.form == Form::AsIs {
                    return Standardise { values, centre, factor, column: slots }.run();
                }
                for (slot, &value) in slots.iter_mut().zip(values) {
                    // A missing number takes the mean of the column, which is 0 here.
                    *slot = if value.is_nan() {
                        0.0
                    } else {
                        (number.form.column(basis, value) - centre) * factor
                    };
                }
            }
            DenseColumn::MissingFlag { field } => {
                for (slot, value) in slots.iter_mut().zip(&chunk.numbers(field)[start..end]) {
                    *slot = f64::from(u8::from(value.is_nan()));
                }
            }
            DenseColumn::Flag { field } => slots.copy_from_slice(&chunk.numbers(field)[start..end]),
        }
    }
}

fn product(columns: &[f64], chosen: &[usize], rows: usize, row: usize) -> f64 {
    chosen.iter().map(|&column| columns[column * rows + row]).product()
}
