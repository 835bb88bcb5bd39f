//! Whether a model file agrees with itself.

use std::collections::HashSet;
use std::fmt;

use serde_json::Value;

use crate::design::Design;
use crate::file::{
    COVARIANCE_ORDER, Covariance, Field, Form, LevelsField, MissingNumber, ModelFile, NumberField,
};
use crate::fingerprint::fingerprint;

/// Something in a model file that cannot be.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Fault {
    /// Where: the path of the key, such as `fields[2].levels`.
    pub place: String,
    /// What was found and what is needed.
    pub reason: String,
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        write!(f, "`{}`: {}", self.place, self.reason)
    }
}

/// Collects faults.
#[derive(Default)]
struct Faults(Vec<Fault>);

impl Faults {
    fn add(&mut self, place: impl Into<String>, reason: impl Into<String>) {
        self.0.push(Fault { place: place.into(), reason: reason.into() });
    }

    fn add_if(&mut self, wrong: bool, place: impl Into<String>, reason: impl Into<String>) {
        if wrong {
            self.add(place, reason);
        }
    }
}

/// All faults of a model file but its fingerprint, in the order of the file.
pub fn check(model: &ModelFile) -> Vec<Fault> {
    let mut faults = Faults::default();
    check_name(model, &mut faults);
    check_outcome(model, &mut faults);
    let mut names = HashSet::new();
    for (index, field) in model.fields.iter().enumerate() {
        let place = format!("fields[{index}]");
        faults.add_if(field.name().is_empty(), format!("{place}.name"), "is empty");
        let twice = !names.insert(field.name());
        faults.add_if(twice, format!("{place}.name"), format!("field `{}` stands twice", field.name()));
        match field {
            Field::Number(number) => check_number(number, &place, &mut faults),
            Field::Levels(levels) => check_levels(levels, &place, &mut faults),
            Field::Flag(_) => {}
        }
    }
    if faults.0.is_empty() {
        check_terms(model, &mut faults);
        check_coefficients(model, &mut faults);
    }
    faults.0
}

/// The fault of a document whose fingerprint is not that of its content.
pub fn check_fingerprint(document: &Value) -> Option<Fault> {
    let written = document.get("fingerprint").and_then(Value::as_str).unwrap_or_default();
    let reason = match fingerprint(document) {
        Ok(computed) if computed == written => return None,
        Ok(computed) => {
            format!(
                "the file says {written}, its content gives {computed}: it was changed after it was written"
            )
        }
        Err(error) => format!("cannot be computed: {error}"),
    };
    Some(Fault { place: "fingerprint".into(), reason })
}

/// Whether a text can name a model: what stands in routes, folders and labels.
pub fn is_model_name(name: &str) -> bool {
    let usable = |c: char| c.is_ascii_alphanumeric() || c == '-' || c == '_' || c == '.';
    !name.is_empty() && name.len() <= 64 && name.chars().all(usable) && !name.starts_with('.')
}

fn check_name(model: &ModelFile, faults: &mut Faults) {
    faults.add_if(
        !is_model_name(&model.name),
        "name",
        format!("`{}`: use up to 64 letters, digits, `-`, `_` and `.`, not starting with `.`", model.name),
    );
}

fn check_outcome(model: &ModelFile, faults: &mut Faults) {
    let categories = &model.outcome.categories;
    let found = categories.len();
    faults.add_if(found < 2, "outcome.categories", format!("{found} categories, need at least 2"));
    let mut seen = HashSet::new();
    for category in categories {
        faults.add_if(category.is_empty(), "outcome.categories", "a category without a name");
        let twice = !seen.insert(category);
        faults.add_if(twice, "outcome.categories", format!("category `{category}` stands twice"));
    }
    faults.add_if(
        !categories.contains(&model.outcome.reference),
        "outcome.reference",
        format!("`{}` is not among the categories", model.outcome.reference),
    );
}

fn check_number(field: &NumberField, place: &str, faults: &mut Faults) {
    let name = &field.name;
    match &field.form {
        Form::Polynomial(degree) => faults.add_if(
            !(1..=10).contains(degree),
            format!("{place}.form"),
            format!("field `{name}`: degree {degree}, need 1 to 10"),
        ),
        Form::Spline(spline) => {
            let ascending = spline.knots.windows(2).all(|pair| pair[0] < pair[1]);
            faults.add_if(
                spline.knots.len() < 3 || !ascending,
                format!("{place}.form.spline.knots"),
                format!("field `{name}`: need at least three knots, ascending"),
            );
        }
        Form::AsIs | Form::Log | Form::Log1p => {}
    }
    match &field.missing {
        MissingNumber::Refuse => {}
        MissingNumber::Value(value) => {
            if let Some(objection) = field.form.objection(*value) {
                faults.add(format!("{place}.missing.value"), format!("field `{name}`: {value} {objection}"));
            }
        }
        MissingNumber::MeanAndFlag(means) => {
            let (found, needed) = (means.means.len(), field.form.columns());
            faults.add_if(
                found != needed,
                format!("{place}.missing.mean-and-flag.means"),
                format!("field `{name}`: {found} means, need {needed}"),
            );
        }
    }
    for (key, pair) in [("range", field.range), ("observed", field.observed)] {
        let upside_down = pair.is_some_and(|[low, high]| low > high);
        faults.add_if(
            upside_down,
            format!("{place}.{key}"),
            format!("field `{name}`: the first is above the second"),
        );
    }
}

fn check_levels(field: &LevelsField, place: &str, faults: &mut Faults) {
    let name = &field.name;
    let mut seen = HashSet::new();
    for level in &field.levels {
        faults.add_if(
            !seen.insert(level.as_str()),
            format!("{place}.levels"),
            format!("field `{name}`: level `{level}` stands twice"),
        );
    }
    faults.add_if(
        !seen.contains(field.reference.as_str()),
        format!("{place}.reference"),
        format!("field `{name}`: `{}` is not among the levels", field.reference),
    );
    for (key, policy) in [("unseen", &field.unseen), ("missing", &field.missing)] {
        faults.add_if(
            policy != "refuse" && policy != "reference" && !seen.contains(policy.as_str()),
            format!("{place}.{key}"),
            format!("field `{name}`: `{policy}` is neither `refuse` nor `reference` nor a level"),
        );
    }
    for (rare, into) in &field.merged {
        faults.add_if(
            !seen.contains(into.as_str()) || seen.contains(rare.as_str()),
            format!("{place}.merged"),
            format!("field `{name}`: `{rare}` into `{into}` needs a level on the right and none on the left"),
        );
    }
}

fn check_terms(model: &ModelFile, faults: &mut Faults) {
    match Design::of_model(model) {
        Err(error) => faults.add("interactions", error.to_string()),
        Ok(design) => {
            let names = design.term_names();
            let differs = names.iter().zip(&model.terms).position(|(needed, found)| needed != found);
            if let Some(at) = differs {
                faults.add(
                    format!("terms[{at}]"),
                    format!("`{}`, but the fields make `{}`", model.terms[at], names[at]),
                );
            } else if names.len() != model.terms.len() {
                faults.add("terms", format!("{} terms, the fields make {}", model.terms.len(), names.len()));
            }
        }
    }
}

fn check_coefficients(model: &ModelFile, faults: &mut Faults) {
    let needed = model.terms.len();
    for category in model.compared_categories() {
        let place = format!("coefficients.{category}");
        match model.coefficients.get(category) {
            None => faults.add(place, "is missing"),
            Some(row) if row.len() != needed => {
                faults.add(place, format!("{} coefficients, need {needed}, one per term", row.len()));
            }
            Some(_) => {}
        }
    }
    for category in model.coefficients.keys() {
        faults.add_if(
            !model.compared_categories().any(|known| known == category),
            format!("coefficients.{category}"),
            "is no category, or the reference category, which has no coefficients",
        );
    }
    if let Some(covariance) = &model.covariance {
        check_covariance(covariance, needed * (model.outcome.categories.len() - 1), faults);
    }
}

fn check_covariance(covariance: &Covariance, size: usize, faults: &mut Faults) {
    faults.add_if(
        covariance.order != COVARIANCE_ORDER,
        "covariance.order",
        format!("`{}`, need `{COVARIANCE_ORDER}`", covariance.order),
    );
    let (found, needed) = (covariance.lower.len(), size * (size + 1) / 2);
    if found != needed {
        return faults.add("covariance.lower", format!("{found} numbers, need {needed}"));
    }
    for index in 0..size {
        let variance = covariance.at(index, index);
        faults.add_if(
            variance < 0.0,
            "covariance.lower",
            format!("variance {variance} of coefficient {index} is below 0"),
        );
    }
}

#[cfg(test)]
pub(crate) mod tests {
    use super::*;
    use crate::file::*;
    use std::collections::BTreeMap;

    /// Programme choice of 200 students by social class and writing score, as published by the
    /// UCLA Statistical Consulting Group (coefficients at the maximum, 8 digits).
    pub(crate) fn programme() -> ModelFile {
        let class = LevelsField {
            name: "ses".into(),
            levels: ["low", "middle", "high"].map(String::from).to_vec(),
            reference: "low".into(),
            merged: BTreeMap::new(),
            unseen: "refuse".into(),
            missing: "refuse".into(),
        };
        let write = NumberField {
            name: "write".into(),
            unit: None,
            form: Form::AsIs,
            range: None,
            missing: MissingNumber::Refuse,
            observed: Some([31.0, 67.0]),
        };
        ModelFile {
            format: FORMAT.into(),
            format_version: FORMAT_VERSION.into(),
            name: "programme".into(),
            purpose: String::new(),
            cautions: vec![],
            record: RecordNames::default(),
            outcome: Outcome {
                field: "prog".into(),
                categories: ["academic", "general", "vocational"].map(String::from).to_vec(),
                reference: "academic".into(),
            },
            fields: vec![Field::Levels(class), Field::Number(write)],
            interactions: vec![],
            terms: ["(intercept)", "ses=middle", "ses=high", "write"].map(String::from).to_vec(),
            coefficients: BTreeMap::from([
                ("general".into(), vec![2.852_186_2, -0.533_291_0, -1.162_832_0, -0.057_928_4]),
                ("vocational".into(), vec![5.218_200_2, 0.291_393_1, -0.982_670_3, -0.113_602_6]),
            ]),
            covariance: None,
            fit: None,
            holdout: None,
            baseline: None,
            monitor: Monitor::default(),
            lineage: Lineage::default(),
            fingerprint: String::new(),
            extra: serde_json::Map::new(),
        }
    }

    #[test]
    fn a_sound_file_has_no_faults() {
        assert_eq!(check(&programme()), []);
    }

    #[test]
    fn each_fault_is_named_with_its_place() {
        type Change = fn(&mut ModelFile);
        let cases: [(&str, &str, Change); 12] = [
            ("name", "`../x`", |m| m.name = "../x".into()),
            ("outcome.categories", "stands twice", |m| m.outcome.categories[1] = "academic".into()),
            ("outcome.reference", "`none` is not among", |m| m.outcome.reference = "none".into()),
            ("fields[1].name", "stands twice", |m| m.fields[1] = m.fields[0].clone()),
            ("fields[0].reference", "`top` is not among", |m| levels(m).reference = "top".into()),
            ("fields[0].unseen", "neither `refuse`", |m| levels(m).unseen = "x".into()),
            ("fields[1].observed", "above the second", |m| number(m).observed = Some([2.0, 1.0])),
            ("fields[1].form.spline.knots", "three knots", |m| {
                number(m).form = Form::Spline(Spline { knots: vec![1.0, 1.0, 2.0] });
            }),
            ("terms[2]", "the fields make `ses=high`", |m| m.terms[2] = "ses=top".into()),
            ("coefficients.general", "3 coefficients, need 4", |m| {
                m.coefficients.get_mut("general").unwrap().pop();
            }),
            ("coefficients.academic", "reference category", |m| {
                m.coefficients.insert("academic".into(), vec![0.0; 4]);
            }),
            ("covariance.lower", "1 numbers, need 36", |m| {
                m.covariance = Some(Covariance { order: COVARIANCE_ORDER.into(), lower: vec![1.0] });
            }),
        ];
        for (place, part, change) in cases {
            let mut model = programme();
            change(&mut model);
            let faults = check(&model);
            let found = faults.iter().any(|f| f.place == place && f.reason.contains(part));
            assert!(found, "{place}: {faults:?}");
        }
    }

    fn levels(model: &mut ModelFile) -> &mut LevelsField {
        let Field::Levels(levels) = &mut model.fields[0] else { panic!("the first field has levels") };
        levels
    }

    fn number(model: &mut ModelFile) -> &mut NumberField {
        let Field::Number(number) = &mut model.fields[1] else { panic!("the second field is a number") };
        number
    }
}
