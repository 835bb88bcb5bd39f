//! The design: how the fields of a record become the terms of a model.
//!
//! Number columns ("dense") and levels are kept apart, so that nothing is ever expanded into a
//! matrix of zeros and ones. A term is the product of at most two dense columns and at most two
//! levels; the intercept is the empty product.

use std::collections::HashMap;

use crate::batch::{CellKind, ColumnSpec};
use crate::file::{Field, Form, INTERCEPT, MissingFlag, MissingNumber, ModelFile, NumberField};
use crate::limits::LARGEST_TERMS;

mod size;

use size::check_size;

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
    /// More terms than a model may have.
    #[error(
        "the fields and interactions make {found} terms, and a model may have {LARGEST_TERMS}; `{most}` alone \
         makes {its_terms}: merge levels, lower the degree or leave it out"
    )]
    TooManyTerms {
        /// How many terms there would be.
        found: u64,
        /// The field or interaction that makes the most.
        most: String,
        /// How many it makes.
        its_terms: u64,
    },
    /// Names of terms that no model file could hold.
    #[error(
        "the names of the terms would take {found} bytes, more than a model file may have; shorten levels"
    )]
    TooLongNames {
        /// How many bytes there would be.
        found: u64,
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

impl DenseColumn {
    /// Index of the field that the column is of.
    pub fn field(&self) -> usize {
        match *self {
            Self::Basis { field, .. } | Self::MissingFlag { field } | Self::Flag { field } => field,
        }
    }
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
    /// [`DesignError`] where interactions or reference levels name what is not there, and where
    /// there would be more than [`LARGEST_TERMS`]; the last is found before anything is made.
    pub fn new(fields: &[Field], interactions: &[[String; 2]]) -> Result<Self, DesignError> {
        let pairs = interacting(fields, interactions)?;
        check_size(fields, &pairs)?;
        let mut design =
            Self { fields: fields.to_vec(), dense: Vec::new(), level_fields: Vec::new(), terms: Vec::new() };
        design.terms.push(Term { name: INTERCEPT.into(), ..Term::default() });
        let mut terms_of_field = Vec::with_capacity(fields.len());
        for (index, field) in fields.iter().enumerate() {
            let start = design.terms.len();
            let terms = design.field_terms(index, field)?;
            design.terms.extend(terms);
            terms_of_field.push(start..design.terms.len());
        }
        for (first, second) in pairs {
            let (first, second) = (terms_of_field[first].clone(), terms_of_field[second].clone());
            let products = design.products(&design.terms[first], &design.terms[second]);
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

    /// One dense column for several records, from their usable values of its field.
    ///
    /// # Shapes
    /// `values` and `slots`: one per record.
    pub(crate) fn fill_dense_column(&self, column: usize, values: &[f64], slots: &mut [f64]) {
        match self.dense[column] {
            DenseColumn::Basis { field, basis } if self.is_plain(field, basis) => {
                slots.copy_from_slice(values);
            }
            DenseColumn::Basis { field, basis } => {
                for (slot, value) in slots.iter_mut().zip(values) {
                    *slot = self.basis(field, basis, *value);
                }
            }
            DenseColumn::MissingFlag { .. } => {
                for (slot, value) in slots.iter_mut().zip(values) {
                    *slot = f64::from(u8::from(value.is_nan()));
                }
            }
            DenseColumn::Flag { .. } => slots.copy_from_slice(values),
        }
    }

    /// Whether a column is the number itself.
    fn is_plain(&self, field: usize, basis: usize) -> bool {
        let Field::Number(number) = &self.fields[field] else { return false };
        basis == 0
            && !matches!(number.form, Form::Log | Form::Log1p)
            && !matches!(number.missing, MissingNumber::MeanAndFlag(_))
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
        let right: Vec<&Term> = self.without_missing_flags(right).collect();
        self.without_missing_flags(left).flat_map(|l| right.iter().map(move |r| product(l, r))).collect()
    }

    fn without_missing_flags<'a>(&self, terms: &'a [Term]) -> impl Iterator<Item = &'a Term> {
        terms.iter().filter(|term| !self.is_missing_flag(term))
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

/// Indices of the fields of each interaction.
fn interacting(fields: &[Field], interactions: &[[String; 2]]) -> Result<Vec<(usize, usize)>, DesignError> {
    let mut positions = HashMap::new();
    for (index, field) in fields.iter().enumerate() {
        positions.entry(field.name()).or_insert(index);
    }
    let position = |name: &String| {
        positions.get(name.as_str()).copied().ok_or_else(|| DesignError::UnknownField(name.clone()))
    };
    let pair = |[first, second]: &[String; 2]| {
        let pair = (position(first)?, position(second)?);
        if pair.0 == pair.1 { Err(DesignError::WithItself(first.clone())) } else { Ok(pair) }
    };
    interactions.iter().map(pair).collect()
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::file::{FlagField, LevelsField, Means};

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

    #[test]
    fn designs_beyond_the_limits_are_refused_before_they_are_made() {
        let many = |name: &str, count: usize, padding: usize| {
            Field::Levels(LevelsField {
                name: name.into(),
                levels: (0..count).map(|level| format!("{level:padding$}")).collect(),
                reference: format!("{:padding$}", 0),
                merged: std::collections::BTreeMap::new(),
                unseen: "refuse".into(),
                missing: "refuse".into(),
            })
        };
        let pair = [["street".into(), "depot".into()]];
        let crossed = Design::new(&[many("street", 30_001, 1), many("depot", 30_001, 1)], &pair);
        let Err(DesignError::TooManyTerms { found, most, its_terms }) = crossed else {
            panic!("{crossed:?}")
        };
        assert_eq!((found, most.as_str(), its_terms), (900_060_001, "street:depot", 900_000_000));
        let powers = Design::new(&[number("rain", Form::Polynomial(u32::MAX), MissingNumber::Refuse)], &[]);
        let Err(DesignError::TooManyTerms { found, most, .. }) = powers else { panic!("{powers:?}") };
        assert_eq!((found, most.as_str()), (1 + u64::from(u32::MAX), "rain"));
        let long = Design::new(&[many("street", 300, 10_000), many("depot", 300, 10_000)], &pair);
        assert!(matches!(long, Err(DesignError::TooLongNames { .. })), "names of 1.8 GB are not made");
    }
}
