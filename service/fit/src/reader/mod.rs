//! From batches to chunks: rows are coded, refused or kept out, and gathered.
//!
//! Levels and categories that the plan does not list are numbered in the order of their first
//! appearance among the rows of the fit; [`crate::resolve`] gives them their final numbers.

mod fields;
mod numbering;

use std::ops::ControlFlow;

use kilter_model::cells::shorten;
use kilter_model::{Batch, Coded, Coder, Column, Field, MISSING_LEVEL, MISSING_TIME, TextColumn, near_miss};

use crate::chunk::{CHUNK_ROWS, Chunk, ChunkColumn};
use crate::error::FitError;
use crate::fitted::RefusedRow;
use crate::plan::{ColumnPlaces, FieldPlan, Plan};
use crate::split::{Split, hash_text, row_key};

use fields::{field_before_the_survey, listed_levels};
use numbering::{Interner, LevelNumbers};

/// How many refused rows are kept with their reasons; the rest is counted.
const REFUSED_KEPT: usize = 1000;
/// How many different levels or categories a column may have.
const MOST_LEVELS: usize = 10_000;

/// What was counted on the way.
#[derive(Debug, Clone, Default)]
pub(crate) struct ReadStatistics {
    pub(crate) rows_read: u64,
    pub(crate) refused: Vec<RefusedRow>,
    pub(crate) refused_rows: u64,
    pub(crate) held_out_rows: u64,
    pub(crate) fractional_counts: bool,
    /// Earliest and latest time of the rows of the fit.
    pub(crate) period: Option<[i64; 2]>,
}

/// Turns batches into chunks.
#[derive(Debug)]
pub(crate) struct Reader {
    plan: Plan,
    places: ColumnPlaces,
    split: Split,
    fields: Vec<Field>,
    /// For each field of levels its levels so far.
    levels: Vec<Interner>,
    categories: Interner,
    pending: Chunk,
    statistics: ReadStatistics,
}

/// A row of the fit in its batch.
#[derive(Debug, Clone, Copy)]
struct Kept {
    row: usize,
    category: u32,
    count: f64,
    weight: f64,
    cluster: u64,
    key: u64,
}

impl Reader {
    pub(crate) fn new(plan: &Plan, split: Split) -> Self {
        let levels = plan.fields.iter().map(|field| match field {
            FieldPlan::Levels(levels) => Interner::of(listed_levels(levels)),
            FieldPlan::Number(_) | FieldPlan::Flag(_) => Interner::default(),
        });
        let mut reader = Self {
            places: plan.column_places(),
            fields: plan.fields.iter().map(field_before_the_survey).collect(),
            levels: levels.collect(),
            categories: Interner::of(plan.outcome.categories.clone().unwrap_or_default()),
            plan: plan.clone(),
            split,
            pending: Chunk::default(),
            statistics: ReadStatistics::default(),
        };
        reader.begin();
        reader
    }

    /// Gets ready for another pass over the rows.
    pub(crate) fn begin(&mut self) {
        self.pending = self.empty_chunk();
        self.statistics = ReadStatistics::default();
    }

    pub(crate) fn statistics(&self) -> &ReadStatistics {
        &self.statistics
    }

    pub(crate) fn categories(&self) -> &Interner {
        &self.categories
    }

    pub(crate) fn levels(&self, field: usize) -> &Interner {
        &self.levels[field]
    }

    /// Takes a batch in and hands on the chunks that it fills.
    pub(crate) fn read(
        &mut self,
        batch: &Batch,
        emit: &mut dyn FnMut(Chunk) -> ControlFlow<()>,
    ) -> Result<ControlFlow<()>, FitError> {
        let mut rows = self.code(batch);
        let kept = self.choose(batch, &rows.coded)?;
        self.statistics.rows_read += batch.rows as u64;
        let mut rest = kept.as_slice();
        while !rest.is_empty() {
            let space = CHUNK_ROWS - self.pending.rows();
            let (now, later) = rest.split_at(space.min(rest.len()));
            self.append(&mut rows, now)?;
            rest = later;
            if self.pending.rows() == CHUNK_ROWS {
                let empty = self.empty_chunk();
                if emit(std::mem::replace(&mut self.pending, empty)).is_break() {
                    return Ok(ControlFlow::Break(()));
                }
            }
        }
        Ok(ControlFlow::Continue(()))
    }

    /// The rows of the last chunk.
    pub(crate) fn finish(&mut self) -> Option<Chunk> {
        let empty = self.empty_chunk();
        Some(std::mem::replace(&mut self.pending, empty)).filter(|chunk| chunk.rows() > 0)
    }

    fn empty_chunk(&self) -> Chunk {
        let fields = self.plan.fields.iter().map(|field| match field {
            FieldPlan::Levels(_) => ChunkColumn::Levels(Vec::new()),
            FieldPlan::Number(_) | FieldPlan::Flag(_) => ChunkColumn::Numbers(Vec::new()),
        });
        Chunk { fields: fields.collect(), ..Chunk::default() }
    }

    /// Codes the fields of a batch. The levels of a field that the plan does not list are those of
    /// the batch.
    fn code(&self, batch: &Batch) -> CodedBatch {
        let mut fields = self.fields.clone();
        for (index, field) in fields.iter_mut().enumerate() {
            if let Field::Levels(levels) = field
                && self.discovers(index)
                && let Some(Column::Text(texts)) = batch.columns.get(index)
            {
                let seen = texts.dictionary.iter().cloned();
                levels.levels = Interner::of(seen.chain([MISSING_LEVEL.to_owned()])).into_texts();
            }
        }
        let coded = Coder::new(&fields).code(batch);
        let levels = fields.into_iter().map(|field| match field {
            Field::Levels(levels) => LevelNumbers::of(levels.levels),
            Field::Number(_) | Field::Flag(_) => LevelNumbers::default(),
        });
        CodedBatch { coded, levels: levels.collect() }
    }

    fn discovers(&self, field: usize) -> bool {
        matches!(&self.plan.fields[field], FieldPlan::Levels(levels) if levels.levels.is_none())
    }

    /// The rows of a batch that belong to the fit; counts the others.
    fn choose(&mut self, batch: &Batch, coded: &Coded) -> Result<Vec<Kept>, FitError> {
        let cells = RoleCells::of(batch, &self.places);
        let mut categories =
            LevelNumbers::of(cells.outcome.map_or_else(Vec::new, |texts| texts.dictionary.clone()));
        let mut refusals = coded.refused.iter().peekable();
        let mut bad_cells = batch.bad_cells.iter().peekable();
        let mut kept = Vec::with_capacity(batch.rows);
        for row in 0..batch.rows {
            let number = self.statistics.rows_read + row as u64;
            let id = cells.id.and_then(|texts| texts.get(row));
            let refusal = refusals.next_if(|refusal| refusal.row == row);
            let mut bad_cell = None;
            while let Some(cell) = bad_cells.next_if(|cell| cell.row == row) {
                bad_cell.get_or_insert(cell);
            }
            let reason = match (refusal, bad_cell) {
                (Some(refusal), _) => Some((refusal.field.clone(), refusal.reason.clone())),
                (None, Some(cell)) => Some((cell.field.clone(), cell.reason.clone())),
                (None, None) => self.objection(&cells, row),
            };
            if let Some((field, reason)) = reason {
                self.refuse(RefusedRow { row: number, id: id.map(String::from), field, reason });
                continue;
            }
            let time = cells.time.map(|times| times[row]).filter(|&time| time != MISSING_TIME);
            if self.split.holds_out(number, id, time) {
                self.statistics.held_out_rows += 1;
                continue;
            }
            let count = cells.count.map_or(1.0, |counts| counts[row]);
            let weight = count * cells.weight.map_or(1.0, |weights| weights[row]);
            if weight == 0.0 {
                continue;
            }
            let text = cells.outcome.map_or(0, |texts| texts.codes[row]);
            let category = categories.number(text as usize, &mut self.categories);
            if self.categories.texts().len() > MOST_LEVELS {
                return Err(too_many(&self.plan.outcome.field));
            }
            self.statistics.fractional_counts |= count.fract() != 0.0;
            self.extend_period(time);
            let cluster = cells.cluster.and_then(|texts| texts.get(row)).map_or(0, hash_text);
            kept.push(Kept { row, category, count, weight, cluster, key: row_key(number, id) });
        }
        Ok(kept)
    }

    /// Why a row whose fields are sound cannot be used all the same: field and reason.
    fn objection(&self, cells: &RoleCells, row: usize) -> Option<(String, String)> {
        let data = &self.plan.data;
        let outcome = &self.plan.outcome;
        let of = |name: &str, reason: &str| Some((name.to_owned(), reason.to_owned()));
        let Some(category) = cells.outcome.and_then(|texts| texts.get(row)) else {
            return of(&outcome.field, "is missing");
        };
        if let Some(listed) =
            outcome.categories.as_ref().filter(|listed| !listed.iter().any(|c| c == category))
        {
            let hint = near_miss(category, listed)
                .map_or_else(String::new, |near| format!("; did you mean '{near}'?"));
            let reason = format!("'{}' is not among the categories of the plan{hint}", shorten(category));
            return Some((outcome.field.clone(), reason));
        }
        for (name, numbers) in [(&data.count, cells.count), (&data.weight, cells.weight)] {
            if let (Some(name), Some(numbers)) = (name, numbers) {
                match numbers[row] {
                    value if value.is_nan() => return of(name, "is missing"),
                    value if value < 0.0 => return of(name, &format!("{value} is below 0")),
                    _ => {}
                }
            }
        }
        if let (Some(name), Some(texts)) = (&data.cluster, cells.cluster)
            && texts.get(row).is_none()
        {
            return of(name, "is missing");
        }
        if let (Some(name), Some(times), Split::Latest { .. }) = (&data.time, cells.time, self.split)
            && times[row] == MISSING_TIME
        {
            return of(name, "is missing");
        }
        None
    }

    fn refuse(&mut self, refused: RefusedRow) {
        self.statistics.refused_rows += 1;
        if self.statistics.refused.len() < REFUSED_KEPT {
            self.statistics.refused.push(refused);
        }
    }

    fn extend_period(&mut self, time: Option<i64>) {
        if let Some(time) = time {
            let [first, last] = self.statistics.period.unwrap_or([time, time]);
            self.statistics.period = Some([first.min(time), last.max(time)]);
        }
    }

    /// Appends rows of a batch to the pending chunk.
    fn append(&mut self, rows: &mut CodedBatch, kept: &[Kept]) -> Result<(), FitError> {
        for (index, column) in self.pending.fields.iter_mut().enumerate() {
            let values = &rows.coded.values[index];
            match column {
                ChunkColumn::Numbers(numbers) => numbers.extend(kept.iter().map(|kept| values[kept.row])),
                ChunkColumn::Levels(levels) => {
                    let (local, all) = (&mut rows.levels[index], &mut self.levels[index]);
                    levels.extend(kept.iter().map(|kept| local.number(values[kept.row] as usize, all)));
                }
            }
        }
        if let Some(index) = self.levels.iter().position(|levels| levels.texts().len() > MOST_LEVELS) {
            return Err(too_many(self.plan.fields[index].name()));
        }
        let pending = &mut self.pending;
        pending.category.extend(kept.iter().map(|kept| kept.category));
        pending.count.extend(kept.iter().map(|kept| kept.count));
        pending.weight.extend(kept.iter().map(|kept| kept.weight));
        pending.key.extend(kept.iter().map(|kept| kept.key));
        if self.places.cluster.is_some() {
            pending.cluster.extend(kept.iter().map(|kept| kept.cluster));
        }
        Ok(())
    }
}

fn too_many(column: &str) -> FitError {
    FitError::TooManyLevels { column: column.to_owned(), most: MOST_LEVELS }
}

/// A coded batch.
struct CodedBatch {
    coded: Coded,
    /// For each field of levels the levels that `coded` counts.
    levels: Vec<LevelNumbers>,
}

/// The columns of a batch that are no fields.
struct RoleCells<'a> {
    outcome: Option<&'a TextColumn>,
    count: Option<&'a [f64]>,
    weight: Option<&'a [f64]>,
    cluster: Option<&'a TextColumn>,
    id: Option<&'a TextColumn>,
    time: Option<&'a [i64]>,
}

impl<'a> RoleCells<'a> {
    fn of(batch: &'a Batch, places: &ColumnPlaces) -> Self {
        let column = |place: Option<usize>| place.and_then(|place| batch.columns.get(place));
        Self {
            outcome: column(Some(places.outcome)).and_then(Column::texts),
            count: column(places.count).and_then(Column::numbers),
            weight: column(places.weight).and_then(Column::numbers),
            cluster: column(places.cluster).and_then(Column::texts),
            id: column(places.id).and_then(Column::texts),
            time: column(places.time).and_then(Column::times),
        }
    }
}
