//! Coded rows in pieces of a fixed size.

/// Rows per chunk, whatever the batches of the source: sums are taken chunk by chunk, so this
/// number is part of the last digits of every result.
pub(crate) const CHUNK_ROWS: usize = 16_384;

/// One field of a chunk.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum ChunkColumn {
    /// Numbers, and flags as 0 and 1; NaN where a number with a missing flag is missing.
    Numbers(Vec<f64>),
    /// Levels.
    Levels(Vec<u32>),
}

/// Coded rows.
#[derive(Debug, Clone, PartialEq, Default)]
pub(crate) struct Chunk {
    /// One column per field.
    pub(crate) fields: Vec<ChunkColumn>,
    /// Category of each row.
    pub(crate) category: Vec<u32>,
    /// Cases that each row stands for.
    pub(crate) count: Vec<f64>,
    /// Weight of each row: its cases times its sampling weight.
    pub(crate) weight: Vec<f64>,
    /// Cluster of each row; empty where the plan names none.
    pub(crate) cluster: Vec<u64>,
    /// What each row is drawn by.
    pub(crate) key: Vec<u64>,
}

impl Chunk {
    pub(crate) fn rows(&self) -> usize {
        self.category.len()
    }

    /// Bytes that the rows take.
    pub(crate) fn bytes(&self) -> usize {
        let field = |column: &ChunkColumn| match column {
            ChunkColumn::Numbers(_) => 8,
            ChunkColumn::Levels(_) => 4,
        };
        let per_row = 4 + 3 * 8 + 8 * usize::from(!self.cluster.is_empty());
        self.rows() * (per_row + self.fields.iter().map(field).sum::<usize>())
    }

    /// Numbers of a field; empty for a field of levels.
    pub(crate) fn numbers(&self, field: usize) -> &[f64] {
        match &self.fields[field] {
            ChunkColumn::Numbers(numbers) => numbers,
            ChunkColumn::Levels(_) => &[],
        }
    }

    /// Levels of a field; empty for a number or flag.
    pub(crate) fn levels(&self, field: usize) -> &[u32] {
        match &self.fields[field] {
            ChunkColumn::Levels(levels) => levels,
            ChunkColumn::Numbers(_) => &[],
        }
    }

    /// Some of the rows, in the order given.
    pub(crate) fn selected(&self, rows: &[usize]) -> Self {
        fn pick<T: Copy>(values: &[T], rows: &[usize]) -> Vec<T> {
            rows.iter().filter_map(|&row| values.get(row).copied()).collect()
        }
        let field = |column: &ChunkColumn| match column {
            ChunkColumn::Numbers(numbers) => ChunkColumn::Numbers(pick(numbers, rows)),
            ChunkColumn::Levels(levels) => ChunkColumn::Levels(pick(levels, rows)),
        };
        Self {
            fields: self.fields.iter().map(field).collect(),
            category: pick(&self.category, rows),
            count: pick(&self.count, rows),
            weight: pick(&self.weight, rows),
            cluster: pick(&self.cluster, rows),
            key: pick(&self.key, rows),
        }
    }

    /// Adds the rows of another chunk of the same fields.
    pub(crate) fn append(&mut self, other: Self) {
        for (own, other) in self.fields.iter_mut().zip(other.fields) {
            match (own, other) {
                (ChunkColumn::Numbers(own), ChunkColumn::Numbers(other)) => own.extend(other),
                (ChunkColumn::Levels(own), ChunkColumn::Levels(other)) => own.extend(other),
                _ => {}
            }
        }
        self.category.extend(other.category);
        self.count.extend(other.count);
        self.weight.extend(other.weight);
        self.cluster.extend(other.cluster);
        self.key.extend(other.key);
    }

    /// The rows of some categories, which are numbered anew in the order given.
    pub(crate) fn of_categories(&self, categories: &[usize]) -> Self {
        let number = |row: &usize| categories.iter().position(|&known| known == self.category[*row] as usize);
        let rows: Vec<usize> = (0..self.rows()).filter(|row| number(row).is_some()).collect();
        let mut selected = self.selected(&rows);
        selected.category = rows.iter().filter_map(number).map(|category| category as u32).collect();
        selected
    }
}
