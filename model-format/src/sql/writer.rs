//! Log-odds in SQL.

use super::SqlError;
use super::words::{identifier, literal, number, sum};
use crate::design::{DenseColumn, Design, Term};
use crate::file::{Field, FlagField, Form, LevelsField, MissingFlag, MissingNumber, ModelFile, NumberField};
use crate::scorer::{Block, NO_TERM, blocks};

/// What the expressions are written from.
pub(super) struct Writer<'a> {
    design: Design,
    blocks: Vec<Block>,
    /// For each field the terms that are made of it alone.
    own_terms: Vec<Vec<usize>>,
    /// For each category its coefficients, or `None` for the reference category.
    coefficients: Vec<Option<&'a [f64]>>,
    /// For each field its column in SQL, converted to what it is compared or computed with.
    columns: Vec<String>,
}

impl<'a> Writer<'a> {
    pub(super) fn new(model: &'a ModelFile) -> Result<Self, SqlError> {
        let design = Design::of_model(model)?;
        let row = |category: &String| model.coefficients.get(category).map(Vec::as_slice);
        let mut own_terms = vec![Vec::new(); model.fields.len()];
        for (index, term) in design.terms().iter().enumerate() {
            if let [field] = term.fields[..] {
                own_terms[field].push(index);
            }
        }
        Ok(Self {
            own_terms,
            blocks: blocks(&design),
            coefficients: model.outcome.categories.iter().map(row).collect(),
            columns: model.fields.iter().map(column).collect::<Result<_, _>>()?,
            design,
        })
    }

    /// Log-odds of a category against another, or against the reference category; `NULL` where the
    /// record is refused. `plus` stands between the parts of the sum.
    pub(super) fn log_odds(
        &self,
        category: usize,
        against: Option<usize>,
        plus: &str,
    ) -> Result<String, SqlError> {
        let slopes = self.slopes(category, against)?;
        // The sum starts with a floating-point number, so that engines with exact decimal numbers
        // do not compute with those.
        let mut parts = vec![format!("CAST({} AS DOUBLE PRECISION)", number(slopes[0]))];
        for field in 0..self.design.fields().len() {
            parts.push(self.main_effect(field, &slopes)?);
        }
        for block in self.blocks.iter().filter(|block| block.dense.len() + block.level_fields.len() == 2) {
            parts.push(self.interaction(block, &slopes)?);
        }
        Ok(sum(&parts, plus))
    }

    /// The coefficients of all terms for the log-odds of a category against another.
    fn slopes(&self, category: usize, against: Option<usize>) -> Result<Vec<f64>, SqlError> {
        let of = |category: usize, term: usize| {
            self.coefficients[category].and_then(|row| row.get(term)).copied().unwrap_or(0.0)
        };
        let slope = |(index, term): (usize, &Term)| {
            let slope = of(category, index) - against.map_or(0.0, |against| of(against, index));
            let error = || SqlError::Coefficients { term: term.name.clone() };
            if slope.is_finite() { Ok(slope) } else { Err(error()) }
        };
        self.design.terms().iter().enumerate().map(slope).collect()
    }

    /// What a field adds by itself. Every field is written, also one without a term, because it may
    /// refuse the record.
    fn main_effect(&self, index: usize, slopes: &[f64]) -> Result<String, SqlError> {
        let own: Vec<f64> = self.own_terms[index].iter().map(|&term| slopes[term]).collect();
        match &self.design.fields()[index] {
            Field::Number(field) => {
                let columns = field.form.columns();
                let x = &self.columns[index];
                let missing = match &field.missing {
                    MissingNumber::Refuse => None,
                    MissingNumber::Value(value) => {
                        Some(total(&own, |basis| field.form.column(basis, *value)))
                    }
                    MissingNumber::MeanAndFlag(means) => {
                        Some(total(&own[..columns], |basis| means.means[basis]) + own[columns])
                    }
                };
                Ok(guarded(field, x, &slope_times_columns(field, &own[..columns], x), missing))
            }
            Field::Flag(field) => Ok(self.flag_case(index, field, own[0])),
            Field::Levels(field) => {
                let reference = field.levels.iter().position(|level| *level == field.reference);
                let mut own = own.iter();
                let values: Vec<String> = (0..field.levels.len())
                    .map(|level| if Some(level) == reference { None } else { own.next() })
                    .map(|slope| number(slope.copied().unwrap_or(0.0)))
                    .collect();
                self.level_case(index, field, &values)
            }
        }
    }

    /// The terms of an interaction that share their columns: a product of columns times a
    /// coefficient, which the levels select.
    fn interaction(&self, block: &Block, slopes: &[f64]) -> Result<String, SqlError> {
        let slope = |cell: usize| match block.terms[cell] {
            NO_TERM => number(0.0),
            term => number(slopes[term as usize]),
        };
        let mut factors = vec![match block.level_fields[..] {
            [] => slope(0),
            [(field, levels)] => {
                let values: Vec<String> = (0..levels).map(slope).collect();
                self.levels_of(field, &values)?
            }
            [(first, rows), (second, levels), ..] => {
                let row = |row: usize| {
                    let values: Vec<String> = (0..levels).map(|level| slope(row * levels + level)).collect();
                    let nothing = number(0.0);
                    // The row of a reference level; what to refuse, the field's own part has said.
                    if values.iter().all(|value| *value == nothing) {
                        return Ok(nothing);
                    }
                    self.levels_of(second, &values)
                };
                self.levels_of(first, &(0..rows).map(row).collect::<Result<Vec<_>, _>>()?)?
            }
        }];
        factors.extend(block.dense.iter().map(|&column| self.dense(&self.design.dense()[column])));
        Ok(factors.join(" * "))
    }

    /// The value of one column of a number or a flag.
    fn dense(&self, column: &DenseColumn) -> String {
        let (DenseColumn::Basis { field, .. }
        | DenseColumn::MissingFlag { field }
        | DenseColumn::Flag { field }) = column;
        match (&self.design.fields()[*field], column) {
            (Field::Number(number), DenseColumn::Basis { basis, .. }) => {
                let missing = match &number.missing {
                    MissingNumber::Refuse => None,
                    MissingNumber::Value(value) => Some(number.form.column(*basis, *value)),
                    MissingNumber::MeanAndFlag(means) => Some(means.means[*basis]),
                };
                let x = &self.columns[*field];
                guarded(number, x, &column_of(&number.form, *basis, x), missing)
            }
            (Field::Flag(flag), _) => self.flag_case(*field, flag, 1.0),
            _ => number(0.0),
        }
    }

    fn flag_case(&self, index: usize, field: &FlagField, if_true: f64) -> String {
        let (as_true, as_false) = match field.missing {
            MissingFlag::Refuse => ("", ""),
            MissingFlag::Value(true) => (", ''", ""),
            MissingFlag::Value(false) => ("", ", ''"),
        };
        let text = &self.columns[index];
        format!(
            "CASE WHEN {text} IN ('true', 'yes', '1'{as_true}) THEN {} \
             WHEN {text} IN ('false', 'no', '0'{as_false}) THEN {} END",
            number(if_true),
            number(0.0)
        )
    }

    fn levels_of(&self, index: usize, values: &[String]) -> Result<String, SqlError> {
        match &self.design.fields()[index] {
            Field::Levels(field) => self.level_case(index, field, values),
            Field::Number(_) | Field::Flag(_) => Ok(number(0.0)),
        }
    }

    /// The value that belongs to the level of a record.
    fn level_case(&self, index: usize, field: &LevelsField, values: &[String]) -> Result<String, SqlError> {
        let position = |name: &str| field.levels.iter().position(|level| level == name);
        let stand_in = |policy: &str| match policy {
            "refuse" => None,
            "reference" => position(&field.reference),
            level => position(level),
        };
        let value = |level: Option<usize>| level.map_or("NULL", |level| values[level].as_str());
        let listed = field.levels.iter().map(String::as_str).zip(values.iter().map(String::as_str));
        let merged = field.merged.iter().map(|(rare, into)| (rare.as_str(), value(position(into))));
        let known = listed.chain(merged).filter(|(name, _)| !name.is_empty());
        let when = |(name, value)| Ok(format!(" WHEN {} THEN {value}", literal(name)?));
        Ok(format!(
            "CASE {} WHEN '' THEN {}{} ELSE {} END",
            self.columns[index],
            value(stand_in(&field.missing)),
            known.map(when).collect::<Result<String, SqlError>>()?,
            value(stand_in(&field.unseen))
        ))
    }
}

/// The column of a field, as what it is read as: texts are never `NULL`, but empty.
fn column(field: &Field) -> Result<String, SqlError> {
    let name = identifier(field.name())?;
    let text = |longest: usize| format!("COALESCE(CAST({name} AS VARCHAR({longest})), '')");
    Ok(match field {
        Field::Number(_) => format!("CAST({name} AS DOUBLE PRECISION)"),
        // One longer than `false`, so that a longer text is not cut to one that is known.
        Field::Flag(_) => format!("LOWER({})", text("false".len() + 1)),
        Field::Levels(levels) => {
            let known = levels.levels.iter().chain(levels.merged.keys());
            text(known.map(|level| level.chars().count()).max().unwrap_or(0) + 1)
        }
    })
}

/// An expression of a number column: `then` where the number can be used, `missing` where it is
/// missing, else `NULL`.
fn guarded(field: &NumberField, x: &str, then: &str, missing: Option<f64>) -> String {
    let from = |low: f64| match field.form {
        Form::Log if low <= 0.0 => format!("{x} > {}", number(0.0)),
        Form::Log1p if low <= -1.0 => format!("{x} > {}", number(-1.0)),
        _ => format!("{x} >= {}", number(low)),
    };
    let usable = match (field.range, &field.form) {
        (Some([low, high]), _) => format!("{} AND {x} <= {}", from(low), number(high)),
        (None, Form::Log | Form::Log1p) => from(-f64::MAX),
        (None, Form::AsIs | Form::Polynomial(_) | Form::Spline(_)) => {
            return match missing {
                Some(value) => format!("CASE WHEN {x} IS NULL THEN {} ELSE {then} END", number(value)),
                None => then.to_owned(),
            };
        }
    };
    let otherwise =
        missing.map_or_else(String::new, |value| format!(" WHEN {x} IS NULL THEN {}", number(value)));
    format!("CASE WHEN {usable} THEN {then}{otherwise} END")
}

/// The sum of all columns of a number, each times its slope.
fn slope_times_columns(field: &NumberField, slopes: &[f64], x: &str) -> String {
    if let Form::Polynomial(_) = field.form {
        // Horner's rule: no power overflows or underflows by itself.
        let (last, rest) = slopes.split_last().map_or((0.0, slopes), |(last, rest)| (*last, rest));
        let inner = rest
            .iter()
            .rev()
            .fold(number(last), |inner, slope| format!("({} + {x} * {inner})", number(*slope)));
        return format!("{x} * {inner}");
    }
    let parts: Vec<String> = slopes
        .iter()
        .enumerate()
        .map(|(basis, slope)| format!("{} * {}", number(*slope), column_of(&field.form, basis, x)))
        .collect();
    sum(&parts, " + ")
}

/// One column of a form, for a number that the form can take.
fn column_of(form: &Form, basis: usize, x: &str) -> String {
    match form {
        Form::AsIs => x.to_owned(),
        Form::Log => format!("LN({x})"),
        Form::Log1p => format!("LN({} + {x})", number(1.0)),
        Form::Polynomial(_) => vec![x; basis + 1].join(" * "),
        Form::Spline(_) if basis == 0 => x.to_owned(),
        Form::Spline(spline) => {
            let knots = &spline.knots;
            let (first, before, last) = (knots[0], knots[knots.len() - 2], knots[knots.len() - 1]);
            let knot = knots[basis - 1];
            let scale = 1.0 / ((last - first) * (last - first));
            let cube = |knot: f64, scale: f64| {
                let above = format!("({x} - {})", number(knot));
                format!("{} * {above} * {above} * {above}", number(scale))
            };
            let (rising, bent) = (cube(knot, scale), cube(before, -scale * (last - knot) / (last - before)));
            let (end, slope) = (form.column(basis, last), form.derivative(basis, last));
            format!(
                "CASE WHEN {x} <= {} THEN {} WHEN {x} <= {} THEN {rising} WHEN {x} <= {} THEN {rising} + {bent} \
                 ELSE {} + {} * ({x} - {}) END",
                number(knot),
                number(0.0),
                number(before),
                number(last),
                number(end),
                number(slope),
                number(last)
            )
        }
    }
}

fn total(slopes: &[f64], value: impl Fn(usize) -> f64) -> f64 {
    slopes.iter().enumerate().map(|(basis, slope)| slope * value(basis)).sum()
}
