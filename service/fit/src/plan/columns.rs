//! The columns that a plan needs from a table.

use kilter_model::{CellKind, ColumnSpec, MissingFlag};

use super::{FieldPlan, MissingLevelPlan, MissingNumberPlan, Plan};

/// Where the columns of a plan stand in its batches.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ColumnPlaces {
    /// Number of fields: they are the first columns, in the order of the plan.
    pub fields: usize,
    /// The observed category.
    pub outcome: usize,
    /// How many equal records a row stands for.
    pub count: Option<usize>,
    /// The sampling weight.
    pub weight: Option<usize>,
    /// The cluster.
    pub cluster: Option<usize>,
    /// The id.
    pub id: Option<usize>,
    /// The time.
    pub time: Option<usize>,
}

impl Plan {
    /// The columns that a reader must deliver: the fields in order, then the outcome, then count,
    /// weight, cluster, id and time as far as the plan names them.
    pub fn column_specs(&self) -> Vec<ColumnSpec> {
        let mut specs: Vec<ColumnSpec> = self.fields.iter().map(field_spec).collect();
        let mut add =
            |name: &str, kind| specs.push(ColumnSpec { name: name.to_owned(), kind, required: true });
        add(&self.outcome.field, CellKind::Text);
        for (name, kind) in self.optional_columns() {
            if let Some(name) = name {
                add(name, kind);
            }
        }
        specs
    }

    /// Where these columns stand.
    pub fn column_places(&self) -> ColumnPlaces {
        let fields = self.fields.len();
        let mut next = fields;
        let [count, weight, cluster, id, time] = self.optional_columns().map(|(name, _)| {
            name.map(|_| {
                next += 1;
                next
            })
        });
        ColumnPlaces { fields, outcome: fields, count, weight, cluster, id, time }
    }

    fn optional_columns(&self) -> [(Option<&str>, CellKind); 5] {
        let data = &self.data;
        [
            (data.count.as_deref(), CellKind::Number),
            (data.weight.as_deref(), CellKind::Number),
            (data.cluster.as_deref(), CellKind::Text),
            (data.id.as_deref(), CellKind::Text),
            (data.time.as_deref(), CellKind::Time),
        ]
    }
}

fn field_spec(field: &FieldPlan) -> ColumnSpec {
    let (kind, required) = match field {
        FieldPlan::Number(number) => (CellKind::Number, number.missing == MissingNumberPlan::Refuse),
        FieldPlan::Levels(levels) => (CellKind::Text, levels.missing == MissingLevelPlan::Refuse),
        FieldPlan::Flag(flag) => (CellKind::Flag, flag.missing == MissingFlag::Refuse),
    };
    ColumnSpec { name: field.name().to_owned(), kind, required }
}
