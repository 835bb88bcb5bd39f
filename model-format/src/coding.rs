//! Records coded: typed cells become one number per field, policies for missing and unseen values
//! are applied, and what cannot be used is refused with its reason.

use std::collections::HashMap;

use crate::batch::{Batch, Column, MISSING_CODE, MISSING_FLAG, Refusal, TextColumn};
use crate::cells::shorten;
use crate::file::{
    Field, FlagField, Form, LevelsField, MISSING_LEVEL, MissingFlag, MissingNumber, NumberField,
};

/// How an unseen level is written in [`Coded::inputs`].
pub const UNSEEN: f64 = -1.0;

/// Codes batches for one list of fields.
#[derive(Debug, Clone)]
pub struct Coder {
    fields: Vec<Field>,
    /// For each field with levels: text to level.
    levels: Vec<HashMap<String, u32>>,
}

/// A remark on a record that was scored all the same.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Note {
    /// Row in the batch.
    pub row: usize,
    /// The remark.
    pub text: String,
}

/// Records as numbers.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Coded {
    /// Number of rows.
    pub rows: usize,
    /// For each field its values as they came: the number; the index of the level or [`UNSEEN`];
    /// 0 or 1 of a flag; NaN where missing.
    pub inputs: Vec<Vec<f64>>,
    /// For each field its values as they are used, after the policies for missing and unseen
    /// values. NaN only where a missing number has a term of its own.
    pub values: Vec<Vec<f64>>,
    /// Rows that cannot be used, ascending, each with its first reason.
    pub refused: Vec<Refusal>,
    /// Remarks, ascending by row.
    pub notes: Vec<Note>,
}

impl Coded {
    /// For each row whether it can be used.
    pub fn usable(&self) -> Vec<bool> {
        let mut usable = vec![true; self.rows];
        for refusal in &self.refused {
            usable[refusal.row] = false;
        }
        usable
    }

    /// Values of one row as they are used, one per field.
    pub fn value_row(&self, row: usize) -> Vec<f64> {
        self.values.iter().map(|column| column[row]).collect()
    }

    /// Values of one row as they came, one per field.
    pub fn input_row(&self, row: usize) -> Vec<f64> {
        self.inputs.iter().map(|column| column[row]).collect()
    }

    /// Remarks on each row, joined by semicolons; empty where there are none.
    pub fn notes_by_row(&self) -> Vec<String> {
        let mut texts = vec![String::new(); self.rows];
        for note in &self.notes {
            if !texts[note.row].is_empty() {
                texts[note.row].push_str("; ");
            }
            texts[note.row].push_str(&note.text);
        }
        texts
    }
}

/// One field of a batch being coded.
struct FieldCode<'a> {
    inputs: Vec<f64>,
    values: Vec<f64>,
    refused: &'a mut Vec<Refusal>,
    notes: &'a mut Vec<Note>,
}

impl Coder {
    /// A coder for fields.
    pub fn new(fields: &[Field]) -> Self {
        let levels = fields
            .iter()
            .map(|field| match field {
                Field::Levels(levels) => level_index(levels),
                Field::Number(_) | Field::Flag(_) => HashMap::new(),
            })
            .collect();
        Self { fields: fields.to_vec(), levels }
    }

    /// Codes a batch whose first columns are the fields, in order, as
    /// [`crate::Design::column_specs`] asks for them. Further columns are not looked at.
    ///
    /// A column of another kind than its field needs is refused in every row.
    pub fn code(&self, batch: &Batch) -> Coded {
        let mut refused = Vec::new();
        let mut notes = Vec::new();
        let mut coded = Coded { rows: batch.rows, ..Coded::default() };
        for cell in batch.bad_cells.iter().filter(|cell| self.concerns(&cell.field)) {
            refused.push(Refusal { row: cell.row, field: cell.field.clone(), reason: cell.reason.clone() });
        }
        for (index, field) in self.fields.iter().enumerate() {
            let mut code = FieldCode {
                inputs: Vec::with_capacity(batch.rows),
                values: Vec::with_capacity(batch.rows),
                refused: &mut refused,
                notes: &mut notes,
            };
            match (field, batch.columns.get(index)) {
                (Field::Number(number), Some(Column::Number(cells))) => code.numbers(number, cells),
                (Field::Levels(levels), Some(Column::Text(texts))) => {
                    code.texts(levels, &self.levels[index], texts);
                }
                (Field::Flag(flag), Some(Column::Flag(flags))) => code.flags(flag, flags),
                _ => code.absent(field.name(), batch.rows),
            }
            coded.inputs.push(code.inputs);
            coded.values.push(code.values);
        }
        coded.refused = first_reasons(refused);
        notes.sort_by_key(|note| note.row);
        coded.notes = notes;
        coded
    }

    /// The values that are used for a record that was coded and scored before, from its inputs.
    ///
    /// # Shapes
    /// `inputs` and `values`: one per field, as a row of [`Coded::inputs`] and [`Coded::values`].
    pub fn values_of(&self, inputs: &[f64], values: &mut [f64]) {
        for (((field, levels), input), value) in self.fields.iter().zip(&self.levels).zip(inputs).zip(values)
        {
            *value = match field {
                Field::Number(number) if input.is_nan() => match number.missing {
                    MissingNumber::Value(value) => value,
                    MissingNumber::Refuse | MissingNumber::MeanAndFlag(_) => f64::NAN,
                },
                Field::Levels(field) if input.is_nan() => stand_in(&field.missing, field, levels),
                Field::Levels(field) if *input == UNSEEN => stand_in(&field.unseen, field, levels),
                Field::Flag(flag) if input.is_nan() => match flag.missing {
                    MissingFlag::Value(value) => f64::from(u8::from(value)),
                    MissingFlag::Refuse => f64::NAN,
                },
                Field::Number(_) | Field::Levels(_) | Field::Flag(_) => *input,
            };
        }
    }

    /// Whether a bad cell makes its row useless: one of a field, or of the whole row.
    fn concerns(&self, field: &str) -> bool {
        field.is_empty() || self.fields.iter().any(|f| f.name() == field)
    }
}

/// One refusal per row, ascending. Bad cells come first in `refused`, so their reason wins over
/// the "is missing" that follows from them.
fn first_reasons(mut refused: Vec<Refusal>) -> Vec<Refusal> {
    refused.sort_by_key(|refusal| refusal.row);
    refused.dedup_by_key(|refusal| refusal.row);
    refused
}

fn level_index(field: &LevelsField) -> HashMap<String, u32> {
    let mut index: HashMap<String, u32> =
        field.levels.iter().enumerate().map(|(i, level)| (level.clone(), i as u32)).collect();
    for (rare, into) in &field.merged {
        if let Some(&level) = index.get(into) {
            index.entry(rare.clone()).or_insert(level);
        }
    }
    index
}

/// The numbers that are used without a word: within the valid and the fitted range, and with the
/// logarithm that the form takes.
fn silent_range(field: &NumberField) -> [f64; 2] {
    let least = match field.form {
        Form::Log => f64::MIN_POSITIVE,
        Form::Log1p => -1.0 + f64::EPSILON,
        Form::AsIs | Form::Polynomial(_) | Form::Spline(_) => f64::MIN,
    };
    let ranges = [field.range, field.observed].into_iter().flatten();
    ranges.fold([least, f64::MAX], |[low, high], range| [low.max(range[0]), high.min(range[1])])
}

impl FieldCode<'_> {
    fn push(&mut self, input: f64, value: f64) {
        self.inputs.push(input);
        self.values.push(value);
    }

    fn refuse(&mut self, field: &str, input: f64, reason: String) {
        let row = self.inputs.len();
        self.refused.push(Refusal { row, field: field.to_owned(), reason });
        self.push(input, f64::NAN);
    }

    fn note(&mut self, text: String) {
        self.notes.push(Note { row: self.inputs.len(), text });
    }

    fn absent(&mut self, field: &str, rows: usize) {
        for _ in 0..rows {
            self.refuse(field, f64::NAN, "has a column of the wrong kind".into());
        }
    }

    fn numbers(&mut self, field: &NumberField, cells: &[f64]) {
        // Mostly there is nothing to say about a whole column.
        let [low, high] = silent_range(field);
        if cells.iter().all(|cell| (low..=high).contains(cell)) {
            self.inputs.extend_from_slice(cells);
            self.values.extend_from_slice(cells);
            return;
        }
        for &cell in cells {
            if cell.is_nan() {
                self.missing_number(field);
            } else {
                self.number(field, cell);
            }
        }
    }

    fn missing_number(&mut self, field: &NumberField) {
        match &field.missing {
            MissingNumber::Refuse => self.refuse(&field.name, f64::NAN, "is missing".into()),
            MissingNumber::Value(value) => {
                self.note(format!("{} is missing; {value} is used", field.name));
                self.push(f64::NAN, *value);
            }
            MissingNumber::MeanAndFlag(_) => {
                self.note(format!("{} is missing", field.name));
                self.push(f64::NAN, f64::NAN);
            }
        }
    }

    fn number(&mut self, field: &NumberField, value: f64) {
        if let Some([low, high]) = field.range
            && !(low..=high).contains(&value)
        {
            return self.refuse(
                &field.name,
                value,
                format!("{value} is outside the valid range {low} to {high}"),
            );
        }
        if let Some(objection) = field.form.objection(value) {
            return self.refuse(&field.name, value, format!("{value} {objection}"));
        }
        if let Some([low, high]) = field.observed
            && !(low..=high).contains(&value)
        {
            let side = if value > high { "above" } else { "below" };
            self.note(format!("{} {value} is {side} the fitted range {low} to {high}", field.name));
        }
        self.push(value, value);
    }

    fn texts(&mut self, field: &LevelsField, index: &HashMap<String, u32>, texts: &TextColumn) {
        let known: Vec<Option<u32>> = texts.dictionary.iter().map(|text| index.get(text).copied()).collect();
        for &code in &texts.codes {
            if code == MISSING_CODE {
                self.missing_level(field, index);
                continue;
            }
            match known[code as usize] {
                Some(level) => self.push(f64::from(level), f64::from(level)),
                None => self.unseen_level(field, index, &texts.dictionary[code as usize]),
            }
        }
    }

    fn missing_level(&mut self, field: &LevelsField, index: &HashMap<String, u32>) {
        match policy_level(&field.missing, field, index) {
            None => self.refuse(&field.name, f64::NAN, "is missing".into()),
            Some(level) => {
                if field.missing != MISSING_LEVEL {
                    let stand_in = &field.levels[level as usize];
                    self.note(format!("{} is missing; '{stand_in}' is used", field.name));
                }
                self.push(f64::NAN, f64::from(level));
            }
        }
    }

    fn unseen_level(&mut self, field: &LevelsField, index: &HashMap<String, u32>, text: &str) {
        let text = shorten(text);
        match policy_level(&field.unseen, field, index) {
            None => {
                let hint = near_miss(&text, &field.levels)
                    .map_or_else(String::new, |n| format!("; did you mean '{n}'?"));
                self.refuse(&field.name, UNSEEN, format!("level '{text}' was not in the fit{hint}"));
            }
            Some(level) => {
                let stand_in = &field.levels[level as usize];
                self.note(format!("{} '{text}' was not in the fit; '{stand_in}' is used", field.name));
                self.push(UNSEEN, f64::from(level));
            }
        }
    }

    fn flags(&mut self, field: &FlagField, flags: &[u8]) {
        for &flag in flags {
            match (flag, field.missing) {
                (MISSING_FLAG, MissingFlag::Refuse) => {
                    self.refuse(&field.name, f64::NAN, "is missing".into());
                }
                (MISSING_FLAG, MissingFlag::Value(value)) => {
                    self.note(format!("{} is missing; {value} is used", field.name));
                    self.push(f64::NAN, f64::from(u8::from(value)));
                }
                (flag, _) => self.push(f64::from(flag), f64::from(flag)),
            }
        }
    }
}

/// The level that a policy names; `None` for `refuse`.
fn policy_level(policy: &str, field: &LevelsField, index: &HashMap<String, u32>) -> Option<u32> {
    match policy {
        "refuse" => None,
        "reference" => index.get(&field.reference).copied(),
        level => index.get(level).copied(),
    }
}

/// The level that a policy names as a value; NaN for `refuse`.
fn stand_in(policy: &str, field: &LevelsField, index: &HashMap<String, u32>) -> f64 {
    policy_level(policy, field, index).map_or(f64::NAN, f64::from)
}

/// The known name nearest to a text, where one is near enough to be a slip.
pub fn near_miss<'a>(text: &str, known: impl IntoIterator<Item = &'a String>) -> Option<&'a str> {
    let folded = text.to_lowercase();
    known
        .into_iter()
        .map(|name| (strsim::damerau_levenshtein(&folded, &name.to_lowercase()), name))
        .filter(|(distance, name)| *distance <= 1 + name.chars().count() / 5)
        .min_by_key(|(distance, _)| *distance)
        .map(|(_, name)| name.as_str())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::batch::{BadCell, TextColumn};
    use crate::file::Form;
    use std::collections::BTreeMap;

    fn weight(missing: MissingNumber) -> Field {
        Field::Number(NumberField {
            name: "weight".into(),
            unit: None,
            form: Form::Log,
            range: Some([-1.0, 70.0]),
            missing,
            observed: Some([0.1, 30.0]),
        })
    }

    fn dwelling(unseen: &str, missing: &str) -> Field {
        Field::Levels(LevelsField {
            name: "dwelling".into(),
            levels: vec!["house".into(), "flat".into(), "other".into()],
            reference: "house".into(),
            merged: BTreeMap::from([("boat".to_owned(), "other".to_owned())]),
            unseen: unseen.into(),
            missing: missing.into(),
        })
    }

    fn texts(values: &[Option<&str>]) -> Column {
        let mut column = TextColumn::default();
        for value in values {
            column.codes.push(value.map_or(MISSING_CODE, |text| {
                column.dictionary.push(text.to_owned());
                column.dictionary.len() as u32 - 1
            }));
        }
        Column::Text(column)
    }

    #[test]
    fn numbers_are_refused_or_noted_with_the_reason() {
        let coder = Coder::new(&[weight(MissingNumber::Refuse)]);
        let cells = vec![1.0, f64::NAN, 71.0, -0.5, 40.0];
        let batch = Batch { rows: 5, columns: vec![Column::Number(cells)], bad_cells: vec![] };
        let coded = coder.code(&batch);
        let reasons: Vec<_> = coded.refused.iter().map(|r| (r.row, r.reason.as_str())).collect();
        assert_eq!(
            reasons,
            [
                (1, "is missing"),
                (2, "71 is outside the valid range -1 to 70"),
                (3, "-0.5 is not above 0, so it has no logarithm"),
            ]
        );
        assert_eq!(
            coded.notes,
            [Note { row: 4, text: "weight 40 is above the fitted range 0.1 to 30".into() }]
        );
        assert_eq!(coded.usable(), [true, false, false, false, true]);
    }

    #[test]
    fn a_bad_cell_wins_over_the_missing_value_it_leaves() {
        let coder = Coder::new(&[weight(MissingNumber::Value(1.0))]);
        let bad = BadCell { row: 0, field: "weight".into(), reason: "`x` is not a number".into() };
        let elsewhere = BadCell { row: 1, field: "remark".into(), reason: "odd".into() };
        let columns = vec![Column::Number(vec![f64::NAN, f64::NAN])];
        let coded = coder.code(&Batch { rows: 2, columns, bad_cells: vec![bad, elsewhere] });
        assert_eq!(coded.refused.len(), 1);
        assert_eq!(coded.refused[0].reason, "`x` is not a number");
        assert_eq!(coded.values[0][1], 1.0);
        assert!(coded.inputs[0][1].is_nan(), "the input stays missing for the monitor");
    }

    #[test]
    fn levels_follow_their_policies() {
        let cells = [Some("flat"), Some("boat"), Some("barge"), None];
        for (unseen, missing, values) in [
            ("reference", "reference", vec![1.0, 2.0, 0.0, 0.0]),
            ("other", "flat", vec![1.0, 2.0, 2.0, 1.0]),
        ] {
            let coder = Coder::new(&[dwelling(unseen, missing)]);
            let coded = coder.code(&Batch { rows: 4, columns: vec![texts(&cells)], bad_cells: vec![] });
            assert_eq!(coded.values[0], values);
            let mut again = [0.0];
            for row in 0..4 {
                coder.values_of(&coded.input_row(row), &mut again);
                assert_eq!(again[0], values[row], "from the inputs");
            }
            assert_eq!(coded.inputs[0][2], UNSEEN);
            assert!(coded.inputs[0][3].is_nan());
            assert_eq!(coded.notes.len(), 2);
        }
        let coder = Coder::new(&[dwelling("refuse", "refuse")]);
        let cells = [Some("Flat"), Some("barge"), None];
        let coded = coder.code(&Batch { rows: 3, columns: vec![texts(&cells)], bad_cells: vec![] });
        let reasons: Vec<_> = coded.refused.iter().map(|r| r.reason.as_str()).collect();
        assert_eq!(
            reasons,
            [
                "level 'Flat' was not in the fit; did you mean 'flat'?",
                "level 'barge' was not in the fit",
                "is missing"
            ]
        );
    }

    #[test]
    fn flags_have_a_missing_value_of_their_own() {
        let flag = |missing| Field::Flag(FlagField { name: "fragile".into(), missing });
        let columns = vec![Column::Flag(vec![0, 1, MISSING_FLAG])];
        let batch = Batch { rows: 3, columns, bad_cells: vec![] };
        assert_eq!(Coder::new(&[flag(MissingFlag::Value(true))]).code(&batch).values[0], [0.0, 1.0, 1.0]);
        assert_eq!(Coder::new(&[flag(MissingFlag::Refuse)]).code(&batch).refused.len(), 1);
    }

    #[test]
    fn near_misses_are_slips_only() {
        let known = ["house".to_owned(), "flat".to_owned()];
        assert_eq!(near_miss("hosue", &known), Some("house"));
        assert_eq!(near_miss("FLAT", &known), Some("flat"));
        assert_eq!(near_miss("barge", &known), None);
    }
}
