//! Which columns a version needs from a record, whatever the record comes in.

use kilter_model::{Batch, CellKind, Column, ColumnSpec, Field, MISSING_TIME, ModelFile, Scorer};

/// The columns of a record and their places.
#[derive(Debug, Clone)]
pub(crate) struct RecordLayout {
    specs: Vec<ColumnSpec>,
    id: usize,
    time: usize,
    segments: Vec<usize>,
}

/// What a record carries beside its fields.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct RecordHead {
    /// Its id; `None` where it carries none.
    pub(crate) id: Option<String>,
    /// Its time, microseconds since 1970; `None` where it carries none.
    pub(crate) time: Option<i64>,
    /// One value for each segment field of the model, empty where it carries none.
    pub(crate) segments: Vec<String>,
}

impl RecordLayout {
    /// The layout of a version: its fields first, then id, time and those segment fields that are
    /// no fields of the model.
    pub(crate) fn new(model: &ModelFile, scorer: &Scorer) -> Self {
        let mut specs = scorer.column_specs();
        let mut place = |name: &str, kind| {
            specs.iter().position(|spec| spec.name == name && spec.kind == kind).unwrap_or_else(|| {
                specs.push(ColumnSpec { name: name.to_owned(), kind, required: false });
                specs.len() - 1
            })
        };
        let id = place(&model.record.id, CellKind::Text);
        let time = place(&model.record.time, CellKind::Time);
        let segments = model.monitor.segments.iter().map(|name| place(name, CellKind::Text)).collect();
        Self { specs, id, time, segments }
    }

    /// The columns that a reader must deliver.
    pub(crate) fn specs(&self) -> &[ColumnSpec] {
        &self.specs
    }

    /// Id, time and segments of a row.
    pub(crate) fn head(&self, batch: &Batch, row: usize) -> RecordHead {
        let text = |column: usize| {
            batch
                .columns
                .get(column)
                .and_then(Column::texts)
                .and_then(|texts| texts.get(row))
                .map(str::to_owned)
        };
        let time = batch.columns.get(self.time).and_then(Column::times).map(|times| times[row]);
        RecordHead {
            id: text(self.id),
            time: time.filter(|time| *time != MISSING_TIME),
            segments: self.segments.iter().map(|&column| text(column).unwrap_or_default()).collect(),
        }
    }
}

/// Why a model cannot be served although its file is sound: a name that stands for two things.
pub(crate) fn conflict(model: &ModelFile) -> Option<String> {
    let field = |name: &str| model.fields.iter().find(|field| field.name() == name);
    if let Some(Field::Number(_) | Field::Flag(_)) = field(&model.record.id) {
        return Some(format!("`{}` is the id of a record and a number or flag field", model.record.id));
    }
    if field(&model.record.time).is_some() {
        return Some(format!("`{}` is the time of a record and a field", model.record.time));
    }
    let wrong = |segment: &&String| matches!(field(segment), Some(Field::Number(_) | Field::Flag(_)));
    let segment = model.monitor.segments.iter().find(wrong)?;
    Some(format!("segment `{segment}` is a number or flag field; segments are texts"))
}
