//! The design: how the fields of a record become the terms of a model.
//!
//! Number columns ("dense") and levels are kept apart, so that nothing is ever expanded into a
//! matrix of zeros and ones. A term is the product of at most two dense columns and at most two
//! levels; the intercept is the empty product.

use crate::batch::{CellKind, ColumnSpec};
use crate::file::{Field, Form, INTERCEPT, MissingFlag, MissingNumber, ModelFile, NumberField};

/// Why a design cannot be made from fields and interactions.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum DesignError {
    /// An interaction names a field that is not there.
    #[error("interaction names `{0}`, which is no field of the model")]
    UnknownField(String),
    /// An interaction of a field with itself.
    #[error("field `{0}` cannot interact with itself; give it a polynomial or spline form instead")]
    WithItself(String),
    /// The reference level is no level.
    #[error("field `{field}`: reference level `{level}` is not among its levels")]
    ReferenceLevel {
        /// Name of the field.
        field: String,
        /// The level that is missing.
        level: String,
    },
}

/// One number column of the design.
#[derive(Debug, Clone, PartialEq)]
pub enum DenseColumn {
    /// Column `basis` of the form of number field `field`.
    Basis {
        /// Index of the field.
        field: usize,
        /// Which column of the field's form.
        basis: usize,
    },
    /// 1 where number field `field` is missing, else 0.
    MissingFlag {
        /// Index of the field.
        field: usize,
    },
    /// 1 where flag field `field` is true, else 0.
    Flag {
        /// Index of the field.
        field: usize,
    },
}

/// One term: the product of its dense columns where all of its levels hold, else 0.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Term {
    /// Name of the term, as it stands in the model file.
    pub name: String,
    /// Indices into [`Design::dense`].
    pub dense: Vec<usize>,
    /// Pairs of an index into [`Design::level_fields`] and a level of that field.
    pub levels: Vec<(usize, u32)>,
    /// Indices of the fields that the term is made of.
    pub fields: Vec<usize>,
}

/// How fields become terms.
#[derive(Debug, Clone, PartialEq)]
pub struct Design {
    fields: Vec<Field>,
    dense: Vec<DenseColumn>,
    level_fields: Vec<usize>,
    terms: Vec<Term>,
}

impl Design {
    /// The design of a model file.
    ///
    /// # Errors
    /// [`DesignError`] where interactions or reference levels name what is not there.
    pub fn of_model(model: &ModelFile) -> Result<Self, DesignError> {
        Self::new(&model.fields, &model.interactions)
    }

    /// The design of fields and interactions: the intercept, then the terms of each field in
    /// order, then those of each interaction in order.
    ///
    /// # Errors
    /// [`DesignError`] where interactions or reference levels name what is not there.
    pub fn new(fields: &[Field], interactions: &[[String; 2]]) -> Result<Self, DesignError> {
        let mut design =
            Self { fields: fields.to_vec(), dense: Vec::new(), level_fields: Vec::new(), terms: Vec::new() };
        design.terms.push(Term { name: INTERCEPT.into(), ..Term::default() });
        let mut terms_of_field = Vec::with_capacity(fields.len());
        for (index, field) in fields.iter().enumerate() {
            let terms = design.field_terms(index, field)?;
            design.terms.extend(terms.iter().cloned());
            terms_of_field.push(terms);
        }
        for [first, second] in interactions {
            let position = |name: &String| {
                fields
                    .iter()
                    .position(|f| f.name() == name)
                    .ok_or_else(|| DesignError::UnknownField(name.clone()))
            };
            let (a, b) = (position(first)?, position(second)?);
            if a == b {
                return Err(DesignError::WithItself(first.clone()));
            }
            let products = design.products(&terms_of_field[a], &terms_of_field[b]);
            design.terms.extend(products);
        }
        Ok(design)
    }

    /// The fields, in order.
    pub fn fields(&self) -> &[Field] {
        &self.fields
    }

    /// The number columns.
    pub fn dense(&self) -> &[DenseColumn] {
        &self.dense
    }

    /// Indices of the fields that have levels.
    pub fn level_fields(&self) -> &[usize] {
        &self.level_fields
    }

    /// The terms, the intercept first.
    pub fn terms(&self) -> &[Term] {
        &self.terms
    }

    /// Names of the terms, the intercept first.
    pub fn term_names(&self) -> Vec<String> {
        self.terms.iter().map(|term| term.name.clone()).collect()
    }

    /// The columns that a reader must deliver to code records: one per field, in order.
    pub fn column_specs(&self) -> Vec<ColumnSpec> {
        let spec = |field: &Field| {
            let (kind, required) = match field {
                Field::Number(number) => (CellKind::Number, number.missing == MissingNumber::Refuse),
                Field::Levels(levels) => (CellKind::Text, levels.missing == "refuse"),
                Field::Flag(flag) => (CellKind::Flag, flag.missing == MissingFlag::Refuse),
            };
            ColumnSpec { name: field.name().to_owned(), kind, required }
        };
        self.fields.iter().map(spec).collect()
    }

    /// Values of the dense columns for one record, from its usable values (see
    /// [`crate::coding::Coder`]): one number per field, NaN where a number with a missing flag is
    /// missing.
    ///
    /// # Shapes
    /// `values`: one per field; `dense`: one per dense column.
    pub fn fill_dense(&self, values: &[f64], dense: &mut [f64]) {
        for (column, slot) in self.dense.iter().zip(dense) {
            *slot = match *column {
                DenseColumn::Basis { field, basis } => self.basis(field, basis, values[field]),
                DenseColumn::MissingFlag { field } => f64::from(u8::from(values[field].is_nan())),
                DenseColumn::Flag { field } => values[field],
            };
        }
    }

    /// All terms of one record, the intercept first.
    ///
    /// # Shapes
    /// `values`: one per field; `dense`: scratch, one per dense column; `row`: one per term.
    pub fn fill_row(&self, values: &[f64], dense: &mut [f64], row: &mut [f64]) {
        self.fill_dense(values, dense);
        for (term, slot) in self.terms.iter().zip(row) {
            let holds = |&(level_field, level): &(usize, u32)| {
                values[self.level_fields[level_field]] == f64::from(level)
            };
            *slot = if term.levels.iter().all(holds) {
                term.dense.iter().map(|&column| dense[column]).product()
            } else {
                0.0
            };
        }
    }

    fn basis(&self, field: usize, basis: usize, value: f64) -> f64 {
        match &self.fields[field] {
            Field::Number(number) if value.is_nan() => match &number.missing {
                MissingNumber::MeanAndFlag(means) => means.means[basis],
                _ => f64::NAN,
            },
            Field::Number(number) => number.form.column(basis, value),
            Field::Levels(_) | Field::Flag(_) => value,
        }
    }

    /// Products of the terms of two fields; terms for missing values take no part.
    fn products(&self, left: &[Term], right: &[Term]) -> Vec<Term> {
        let usable = |terms: &[Term]| {
            terms.iter().filter(|term| !self.is_missing_flag(term)).cloned().collect::<Vec<_>>()
        };
        let right = usable(right);
        usable(left).iter().flat_map(|l| right.iter().map(|r| product(l, r))).collect()
    }

    fn is_missing_flag(&self, term: &Term) -> bool {
        term.dense.iter().any(|&column| matches!(self.dense[column], DenseColumn::MissingFlag { .. }))
    }

    fn field_terms(&mut self, index: usize, field: &Field) -> Result<Vec<Term>, DesignError> {
        match field {
            Field::Number(number) => Ok(self.number_terms(index, number)),
            Field::Flag(flag) => {
                self.dense.push(DenseColumn::Flag { field: index });
                Ok(vec![self.dense_term(flag.name.clone(), index)])
            }
            Field::Levels(levels) => {
                let missing_reference = || DesignError::ReferenceLevel {
                    field: levels.name.clone(),
                    level: levels.reference.clone(),
                };
                let reference = levels
                    .levels
                    .iter()
                    .position(|l| *l == levels.reference)
                    .ok_or_else(missing_reference)?;
                let slot = self.level_fields.len();
                self.level_fields.push(index);
                let compared = levels.levels.iter().enumerate().filter(|(level, _)| *level != reference);
                Ok(compared
                    .map(|(level, name)| Term {
                        name: format!("{}={name}", levels.name),
                        dense: Vec::new(),
                        levels: vec![(slot, level as u32)],
                        fields: vec![index],
                    })
                    .collect())
            }
        }
    }

    fn number_terms(&mut self, index: usize, number: &NumberField) -> Vec<Term> {
        let mut terms = Vec::new();
        for basis in 0..number.form.columns() {
            self.dense.push(DenseColumn::Basis { field: index, basis });
            terms.push(self.dense_term(number.form.column_name(&number.name, basis), index));
        }
        if matches!(number.missing, MissingNumber::MeanAndFlag(_)) {
            self.dense.push(DenseColumn::MissingFlag { field: index });
            terms.push(self.dense_term(format!("missing({})", number.name), index));
        }
        terms
    }

    /// The term of the dense column added last.
    fn dense_term(&self, name: String, field: usize) -> Term {
        Term { name, dense: vec![self.dense.len() - 1], levels: Vec::new(), fields: vec![field] }
    }
}

fn product(left: &Term, right: &Term) -> Term {
    let join = |a: &[usize], b: &[usize]| a.iter().chain(b).copied().collect::<Vec<_>>();
    Term {
        name: format!("{}:{}", left.name, right.name),
        dense: join(&left.dense, &right.dense),
        levels: left.levels.iter().chain(&right.levels).copied().collect(),
        fields: join(&left.fields, &right.fields),
    }
}

impl Form {
    /// Number of columns that a number becomes.
    pub fn columns(&self) -> usize {
        match self {
            Self::AsIs | Self::Log | Self::Log1p => 1,
            Self::Polynomial(degree) => *degree as usize,
            Self::Spline(spline) => spline.knots.len().saturating_sub(1),
        }
    }

    /// Name of a column, from the name of the field.
    pub fn column_name(&self, field: &str, basis: usize) -> String {
        match self {
            Self::AsIs => field.to_owned(),
            Self::Log => format!("log({field})"),
            Self::Log1p => format!("log1p({field})"),
            Self::Polynomial(_) | Self::Spline(_) if basis == 0 => field.to_owned(),
            Self::Polynomial(_) => format!("{field}^{}", basis + 1),
            Self::Spline(_) => format!("spline{basis}({field})"),
        }
    }

    /// Value of a column for a number.
    pub fn column(&self, basis: usize, value: f64) -> f64 {
        match self {
            Self::AsIs => value,
            Self::Log => value.ln(),
            Self::Log1p => value.ln_1p(),
            Self::Polynomial(_) => value.powi(basis as i32 + 1),
            Self::Spline(spline) if basis > 0 => restricted_cubic(&spline.knots, basis - 1, value),
            Self::Spline(_) => value,
        }
    }

    /// Derivative of a column with respect to the number.
    pub fn derivative(&self, basis: usize, value: f64) -> f64 {
        match self {
            Self::AsIs => 1.0,
            Self::Log => value.recip(),
            Self::Log1p => (1.0 + value).recip(),
            Self::Polynomial(_) => (basis as f64 + 1.0) * value.powi(basis as i32),
            Self::Spline(spline) if basis > 0 => restricted_cubic_slope(&spline.knots, basis - 1, value),
            Self::Spline(_) => 1.0,
        }
    }

    /// Why a number cannot be used with this form; `None` where it can.
    pub fn objection(&self, value: f64) -> Option<&'static str> {
        match self {
            Self::Log if value <= 0.0 => Some("is not above 0, so it has no logarithm"),
            Self::Log1p if value <= -1.0 => Some("is not above -1, so one plus it has no logarithm"),
            _ => None,
        }
    }
}

/// Nonlinear column `r` of a restricted cubic spline (Stone and Koo 1985; scaled by the squared
/// distance of the outer knots, as Harrell 2001), linear beyond the outer knots.
///
/// From the last knot on it is continued by its tangent: there the cubes would cancel.
fn restricted_cubic(knots: &[f64], r: usize, value: f64) -> f64 {
    let last = knots[knots.len() - 1];
    if value > last {
        return restricted_cubic(knots, r, last) + restricted_cubic_slope(knots, r, last) * (value - last);
    }
    truncated_powers(knots, r, value, 3)
}

fn restricted_cubic_slope(knots: &[f64], r: usize, value: f64) -> f64 {
    3.0 * truncated_powers(knots, r, value.min(knots[knots.len() - 1]), 2)
}

fn truncated_powers(knots: &[f64], r: usize, value: f64, power: i32) -> f64 {
    let (first, before_last, last) = (knots[0], knots[knots.len() - 2], knots[knots.len() - 1]);
    let above = |knot: f64| (value - knot).max(0.0).powi(power);
    let gap = last - before_last;
    let sum = above(knots[r]) - above(before_last) * (last - knots[r]) / gap
        + above(last) * (before_last - knots[r]) / gap;
    sum / ((last - first) * (last - first))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::file::{FlagField, LevelsField, Means, Spline};

    fn number(name: &str, form: Form, missing: MissingNumber) -> Field {
        Field::Number(NumberField {
            name: name.into(),
            unit: None,
            form,
            range: None,
            missing,
            observed: None,
        })
    }

    fn dwelling() -> Field {
        Field::Levels(LevelsField {
            name: "dwelling".into(),
            levels: vec!["flat".into(), "house".into(), "farm".into()],
            reference: "house".into(),
            merged: std::collections::BTreeMap::new(),
            unseen: "refuse".into(),
            missing: "refuse".into(),
        })
    }

    #[test]
    fn terms_stand_in_field_order_with_interactions_last() {
        let fields = [
            number("rain", Form::Polynomial(2), MissingNumber::MeanAndFlag(Means { means: vec![2.0, 5.0] })),
            dwelling(),
            Field::Flag(FlagField { name: "fragile".into(), missing: MissingFlag::Refuse }),
        ];
        let design = Design::new(&fields, &[["rain".into(), "dwelling".into()]]).unwrap();
        assert_eq!(
            design.term_names(),
            [
                "(intercept)",
                "rain",
                "rain^2",
                "missing(rain)",
                "dwelling=flat",
                "dwelling=farm",
                "fragile",
                "rain:dwelling=flat",
                "rain:dwelling=farm",
                "rain^2:dwelling=flat",
                "rain^2:dwelling=farm",
            ]
        );
        let (mut dense, mut row) = (vec![0.0; design.dense().len()], vec![0.0; design.terms().len()]);
        design.fill_row(&[3.0, 2.0, 1.0], &mut dense, &mut row);
        assert_eq!(row, [1.0, 3.0, 9.0, 0.0, 0.0, 1.0, 1.0, 0.0, 3.0, 0.0, 9.0]);
        design.fill_row(&[f64::NAN, 0.0, 0.0], &mut dense, &mut row);
        assert_eq!(row, [1.0, 2.0, 5.0, 1.0, 1.0, 0.0, 0.0, 2.0, 0.0, 5.0, 0.0]);
    }

    #[test]
    fn impossible_designs_are_named() {
        let unknown = Design::new(&[dwelling()], &[["dwelling".into(), "rain".into()]]);
        assert_eq!(unknown, Err(DesignError::UnknownField("rain".into())));
        let same = Design::new(&[dwelling()], &[["dwelling".into(), "dwelling".into()]]);
        assert_eq!(same, Err(DesignError::WithItself("dwelling".into())));
    }

    /// Values computed with Hmisc 4.8 `rcspline.eval(x, knots, inclx = TRUE, norm = 2)` in R 4.2.2.
    #[test]
    fn restricted_cubic_spline_equals_hmisc() {
        let form = Form::Spline(Spline { knots: vec![0.19, 1.765, 3.0, 4.415] });
        assert_eq!(form.columns(), 3);
        for (x, second, third) in [
            (-1.0, 0.0, 0.0),
            (1.0, 0.029_771_562_6, 0.0),
            (2.0, 0.332_186_744_2, 0.000_727_026_4),
            (4.0, 2.931_016_436_4, 0.520_516_024_3),
            (6.0, 6.913_597_633_1, 1.617_066_909_4),
            (9.0, 12.899_396_449_7, 3.267_135_184_3),
        ] {
            assert!((form.column(1, x) - second).abs() < 1e-9, "{x}: {}", form.column(1, x));
            assert!((form.column(2, x) - third).abs() < 1e-9, "{x}: {}", form.column(2, x));
        }
        assert!((form.derivative(1, 3.0) - 1.327_029_165_6).abs() < 1e-9);
        assert!((form.column(1, 1e7) - 19_952_657.7).abs() < 0.1, "far out the tangent keeps its digits");
    }

    #[test]
    fn derivatives_agree_with_differences() {
        let spline = Form::Spline(Spline { knots: vec![0.5, 1.0, 2.0, 4.0, 5.0] });
        for form in [Form::AsIs, Form::Log, Form::Log1p, Form::Polynomial(3), spline] {
            for basis in 0..form.columns() {
                for x in [0.3, 0.9, 1.7, 3.3, 4.9, 6.0] {
                    let h = 1e-5;
                    let difference = (form.column(basis, x + h) - form.column(basis, x - h)) / (2.0 * h);
                    let derivative = form.derivative(basis, x);
                    assert!(
                        (difference - derivative).abs() < 1e-6 * (1.0 + derivative.abs()),
                        "{form:?} {x}"
                    );
                }
            }
        }
    }
}
