//! What the values of a plan mean together: from the document to the checked plan.

use std::collections::HashSet;

use kilter_model::check::is_model_name;
use kilter_model::{FlagField, MISSING_LEVEL, MissingFlag, Monitor, StandardErrors};

use super::document::{
    DataDocument, FieldDocument, FieldKind, FitDocument, FormDocument, HoldoutDocument, MissingDocument,
    OutcomeDocument, PlanDocument, RidgeDocument, Scalar,
};
use super::error::{Objection, Step};
use super::{
    BiasReductionPlan, DataPlan, FieldPlan, FitPlan, FormPlan, HoldoutPlan, LevelsPlan, MissingLevelPlan,
    MissingNumberPlan, NumberPlan, OutcomePlan, Plan, RarePlan, RidgePlan,
};

type Checked<'a, T> = Result<T, Objection<'a>>;

/// Largest degree of a polynomial.
const LARGEST_DEGREE: u32 = 10;
/// Numbers of knots for which the usual quantiles are tabulated (Harrell 2001).
const KNOTS: std::ops::RangeInclusive<u32> = 3..=7;

/// Checks a document.
pub(super) fn plan(document: &PlanDocument) -> Checked<'_, Plan> {
    if !is_model_name(&document.name) {
        let reason = format!(
            "`{}` cannot name a model: use up to 64 letters, digits, `-`, `_` and `.`, not starting with `.`",
            document.name
        );
        return Err(Objection::new([Step::Key("name")], reason));
    }
    let data = data(&document.data)?;
    let outcome = outcome(&document.outcome)?;
    let fields = fields(document)?;
    Ok(Plan {
        name: document.name.clone(),
        purpose: document.purpose.clone(),
        cautions: document.cautions.clone(),
        fit: fit(&document.fit, &data)?,
        interactions: interactions(document)?,
        monitor: monitor(document)?,
        data,
        outcome,
        fields,
    })
}

fn data(document: &DataDocument) -> Checked<'_, DataPlan> {
    let at = |key| [Step::Key("data"), Step::Key(key)];
    if document.files.is_empty() {
        return Err(Objection::new(at("files"), "names no file"));
    }
    for (key, column) in [
        ("id", &document.id),
        ("time", &document.time),
        ("count", &document.count),
        ("weight", &document.weight),
        ("cluster", &document.cluster),
    ] {
        if column.as_ref().is_some_and(String::is_empty) {
            return Err(Objection::new(at(key), "is empty; leave the key out"));
        }
    }
    Ok(DataPlan {
        files: document.files.clone(),
        id: document.id.clone(),
        time: document.time.clone(),
        count: document.count.clone(),
        weight: document.weight.clone(),
        cluster: document.cluster.clone(),
        holdout: document
            .holdout
            .map(|holdout| self::holdout(holdout, document.time.is_some()))
            .transpose()?,
    })
}

fn holdout<'a>(document: HoldoutDocument, has_time: bool) -> Checked<'a, HoldoutPlan> {
    let place = [Step::Key("data"), Step::Key("holdout")];
    let share_of = |key, share: f64| {
        if share > 0.0 && share < 1.0 {
            return Ok(share);
        }
        let [data, holdout] = place;
        Err(Objection::new([data, holdout, Step::Key(key)], format!("{share}, need above 0 and below 1")))
    };
    match (document.latest, document.share, document.seed) {
        (Some(_), None, None) if !has_time => {
            Err(Objection::new(place, "`latest` needs the column of the time: add `data.time`"))
        }
        (Some(latest), None, None) => Ok(HoldoutPlan::Latest(share_of("latest", latest)?)),
        (None, Some(share), seed) => {
            Ok(HoldoutPlan::Share { share: share_of("share", share)?, seed: seed.unwrap_or(0) })
        }
        _ => Err(Objection::new(place, "need either `latest`, or `share` with or without `seed`")),
    }
}

fn outcome(document: &OutcomeDocument) -> Checked<'_, OutcomePlan> {
    let at = |key| [Step::Key("outcome"), Step::Key(key)];
    if let Some(categories) = &document.categories {
        if categories.len() < 2 {
            return Err(Objection::new(
                at("categories"),
                format!("{} categories, need at least 2", categories.len()),
            ));
        }
        if let Some(twice) = first_repeated(categories) {
            return Err(Objection::new(at("categories"), format!("category `{twice}` stands twice")));
        }
        if let Some(reference) = document.reference.as_ref().filter(|r| !categories.contains(r)) {
            let reason = format!("`{reference}` is not among the categories: {}", list(categories));
            return Err(Objection::new(at("reference"), reason).near(reference, categories));
        }
    }
    Ok(OutcomePlan {
        field: document.field.clone(),
        reference: document.reference.clone(),
        categories: document.categories.clone(),
    })
}

fn fields(document: &PlanDocument) -> Checked<'_, Vec<FieldPlan>> {
    let mut names = HashSet::new();
    let mut fields = Vec::with_capacity(document.field.len());
    for (index, field) in document.field.iter().enumerate() {
        let name_place = [Step::Key("field"), Step::Index(index), Step::Key("name")];
        if field.name.is_empty() {
            return Err(Objection::new(name_place, "is empty"));
        }
        if !names.insert(&field.name) {
            return Err(Objection::new(name_place, format!("field `{}` stands twice", field.name)));
        }
        let used_as = roles(document).into_iter().find(|(_, column)| *column == Some(&field.name));
        if let Some((role, _)) = used_as {
            let reason = format!("`{}` is the {role} and cannot be an input as well", field.name);
            return Err(Objection::new(name_place, reason));
        }
        fields.push(FieldCheck { index, field }.field()?);
    }
    Ok(fields)
}

/// Columns that say something about the outcome or the weight of a row, so that an input made of
/// them would be a mistake.
fn roles(document: &PlanDocument) -> [(&'static str, Option<&String>); 4] {
    [
        ("outcome", Some(&document.outcome.field)),
        ("count", document.data.count.as_ref()),
        ("sampling weight", document.data.weight.as_ref()),
        ("id", document.data.id.as_ref()),
    ]
}

/// Checks one field.
struct FieldCheck<'a> {
    index: usize,
    field: &'a FieldDocument,
}

impl<'a> FieldCheck<'a> {
    fn objection(&self, key: &'static str, reason: impl Into<String>) -> Objection<'a> {
        Objection::new([Step::Key("field"), Step::Index(self.index), Step::Key(key)], reason)
    }

    fn field(&self) -> Checked<'a, FieldPlan> {
        self.only_own_keys()?;
        match self.field.kind {
            FieldKind::Number => self.number().map(FieldPlan::Number),
            FieldKind::Levels => self.levels().map(FieldPlan::Levels),
            FieldKind::Flag => self.flag().map(FieldPlan::Flag),
        }
    }

    fn only_own_keys(&self) -> Checked<'a, ()> {
        let FieldDocument { unit, form, range, levels, reference, rare, unseen, .. } = self.field;
        for (key, present, kind, of_kind) in [
            ("unit", unit.is_some(), FieldKind::Number, "number"),
            ("form", form.is_some(), FieldKind::Number, "number"),
            ("range", range.is_some(), FieldKind::Number, "number"),
            ("levels", levels.is_some(), FieldKind::Levels, "levels"),
            ("reference", reference.is_some(), FieldKind::Levels, "levels"),
            ("rare", rare.is_some(), FieldKind::Levels, "levels"),
            ("unseen", unseen.is_some(), FieldKind::Levels, "levels"),
        ] {
            if present && self.field.kind != kind {
                return Err(self.objection(key, format!("belongs to fields of kind `{of_kind}` only")));
            }
        }
        Ok(())
    }

    fn number(&self) -> Checked<'a, NumberPlan> {
        let form = self.form()?;
        if let Some([low, high]) = self.field.range
            && (low > high || low.is_nan() || high.is_nan())
        {
            return Err(self.objection("range", format!("[{low}, {high}]: the first is above the second")));
        }
        let missing = match self.field.missing {
            None | Some(MissingDocument::Refuse) => MissingNumberPlan::Refuse,
            Some(MissingDocument::MeanAndFlag) => MissingNumberPlan::MeanAndFlag,
            Some(MissingDocument::Value(Scalar::Number(value))) => self.stand_in(value, form)?,
            Some(_) => {
                let reason = "a missing number can be `refuse`, `{ value = 0 }` or `mean-and-flag`";
                return Err(self.objection("missing", reason));
            }
        };
        let FieldDocument { name, unit, range, .. } = self.field.clone();
        Ok(NumberPlan { name, unit, form, range, missing })
    }

    fn form(&self) -> Checked<'a, FormPlan> {
        Ok(match self.field.form {
            None | Some(FormDocument::AsIs) => FormPlan::AsIs,
            Some(FormDocument::Log) => FormPlan::Log,
            Some(FormDocument::Log1p) => FormPlan::Log1p,
            Some(FormDocument::Polynomial(degree)) if (2..=LARGEST_DEGREE).contains(&degree) => {
                FormPlan::Polynomial(degree)
            }
            Some(FormDocument::Polynomial(degree)) => {
                let reason = format!("polynomial of degree {degree}, need 2 to {LARGEST_DEGREE}");
                return Err(self.objection("form", reason));
            }
            Some(FormDocument::Spline(knots)) if KNOTS.contains(&knots) => FormPlan::Spline(knots),
            Some(FormDocument::Spline(knots)) => {
                let reason = format!("spline with {knots} knots, need {} to {}", KNOTS.start(), KNOTS.end());
                return Err(self.objection("form", reason));
            }
        })
    }

    /// The number used for missing ones must itself be usable.
    fn stand_in(&self, value: f64, form: FormPlan) -> Checked<'a, MissingNumberPlan> {
        let outside = self.field.range.is_some_and(|[low, high]| !(low..=high).contains(&value));
        let reason = match form {
            _ if !value.is_finite() => "is not finite",
            _ if outside => "is outside `range`",
            FormPlan::Log if value <= 0.0 => "has no logarithm",
            FormPlan::Log1p if value <= -1.0 => "has no logarithm when one is added",
            _ => return Ok(MissingNumberPlan::Value(value)),
        };
        Err(self.objection("missing", format!("{value} {reason}")))
    }

    fn levels(&self) -> Checked<'a, LevelsPlan> {
        let field = self.field;
        self.level_names()?;
        let missing = match field.missing {
            None | Some(MissingDocument::Refuse) => MissingLevelPlan::Refuse,
            Some(MissingDocument::Reference) => MissingLevelPlan::Reference,
            Some(MissingDocument::Level) => MissingLevelPlan::Level,
            Some(_) => {
                return Err(
                    self.objection("missing", "a missing level can be `refuse`, `reference` or `level`")
                );
            }
        };
        Ok(LevelsPlan {
            name: field.name.clone(),
            levels: field.levels.clone(),
            reference: field.reference.clone(),
            rare: field.rare.as_ref().map(|rare| RarePlan { below: rare.below, into: rare.into.clone() }),
            unseen: field.unseen.clone().unwrap_or_else(|| "refuse".into()),
            missing,
        })
    }

    fn level_names(&self) -> Checked<'a, ()> {
        let field = self.field;
        let Some(levels) = &field.levels else { return Ok(()) };
        if let Some(twice) = first_repeated(levels) {
            return Err(self.objection("levels", format!("level `{twice}` stands twice")));
        }
        if levels.len() < 2 {
            return Err(self.objection("levels", format!("{} levels, need at least 2", levels.len())));
        }
        let into = field.rare.as_ref().map(|rare| &rare.into);
        let known = |name: &String| levels.contains(name) || into == Some(name);
        if let Some(reference) = field.reference.as_ref().filter(|name| !known(name)) {
            let reason = format!("`{reference}` is not among the levels: {}", list(levels));
            return Err(self.objection("reference", reason).near(reference, levels));
        }
        let policy = |name: &String| ["refuse", "reference", MISSING_LEVEL].contains(&name.as_str());
        if let Some(unseen) = field.unseen.as_ref().filter(|name| !policy(name) && !known(name)) {
            let reason = format!(
                "`{unseen}` is neither `refuse` nor `reference` nor one of the levels: {}",
                list(levels)
            );
            return Err(self.objection("unseen", reason).near(unseen, levels));
        }
        Ok(())
    }

    fn flag(&self) -> Checked<'a, FlagField> {
        let missing = match self.field.missing {
            None | Some(MissingDocument::Refuse) => MissingFlag::Refuse,
            Some(MissingDocument::Value(Scalar::Flag(value))) => MissingFlag::Value(value),
            Some(_) => {
                return Err(
                    self.objection("missing", "a missing flag can be `refuse` or `{ value = false }`")
                );
            }
        };
        Ok(FlagField { name: self.field.name.clone(), missing })
    }
}

fn interactions(document: &PlanDocument) -> Checked<'_, Vec<[String; 2]>> {
    let names: Vec<String> = document.field.iter().map(|field| field.name.clone()).collect();
    let mut seen = HashSet::new();
    for (index, interaction) in document.interaction.iter().enumerate() {
        let place = [Step::Key("interaction"), Step::Index(index), Step::Key("fields")];
        let [first, second] = &interaction.fields;
        if let Some(unknown) = interaction.fields.iter().find(|name| !names.contains(name)) {
            let reason = format!("`{unknown}` is no field of the plan");
            return Err(Objection::new(place, reason).near(unknown, &names));
        }
        if first == second {
            let reason =
                format!("`{first}` cannot interact with itself; give it a polynomial or spline form");
            return Err(Objection::new(place, reason));
        }
        if !seen.insert(if first < second { [first, second] } else { [second, first] }) {
            return Err(Objection::new(place, format!("`{first}` and `{second}` stand here twice")));
        }
    }
    Ok(document.interaction.iter().map(|interaction| interaction.fields.clone()).collect())
}

fn fit<'a>(document: &FitDocument, data: &DataPlan) -> Checked<'a, FitPlan> {
    let at = |key| [Step::Key("fit"), Step::Key(key)];
    let weighted = data.weight.is_some();
    let ridge = match document.ridge {
        None => RidgePlan::Penalty(0.0),
        Some(RidgeDocument::CrossValidate) => RidgePlan::CrossValidate,
        Some(RidgeDocument::Penalty(penalty)) if penalty >= 0.0 && penalty.is_finite() => {
            RidgePlan::Penalty(penalty)
        }
        Some(RidgeDocument::Penalty(penalty)) => {
            return Err(Objection::new(
                at("ridge"),
                format!("{penalty}, need 0 or more, or `cross-validate`"),
            ));
        }
    };
    let penalised = ridge != RidgePlan::Penalty(0.0);
    let standard_errors = match document.standard_errors {
        Some(StandardErrors::Robust | StandardErrors::Cluster) if penalised => {
            let reason = "a penalised fit has standard errors of kind `model` only";
            return Err(Objection::new(at("standard_errors"), reason));
        }
        None if weighted && !penalised => StandardErrors::Robust,
        None => StandardErrors::Model,
        Some(StandardErrors::Model) if weighted && !penalised => {
            let reason = "`model` does not hold with sampling weights: use `robust` or `cluster`";
            return Err(Objection::new(at("standard_errors"), reason));
        }
        Some(StandardErrors::Cluster) if data.cluster.is_none() => {
            let reason = "`cluster` needs the column of the clusters: add `data.cluster`";
            return Err(Objection::new(at("standard_errors"), reason));
        }
        Some(kind) => kind,
    };
    let bias_reduction = document.bias_reduction.unwrap_or_default();
    if bias_reduction != BiasReductionPlan::Never {
        let reason = match standard_errors {
            _ if penalised => "bias reduction and a ridge penalty exclude each other",
            _ if weighted => "bias reduction is not defined with sampling weights",
            StandardErrors::Model => return Ok(FitPlan { ridge, bias_reduction, standard_errors }),
            StandardErrors::Robust | StandardErrors::Cluster => {
                "a bias-reduced fit has standard errors of kind `model` only"
            }
        };
        return Err(Objection::new(at("bias_reduction"), reason));
    }
    Ok(FitPlan { ridge, bias_reduction, standard_errors })
}

fn monitor(document: &PlanDocument) -> Checked<'_, Monitor> {
    for (index, segment) in document.monitor.segments.iter().enumerate() {
        let place = [Step::Key("monitor"), Step::Key("segments"), Step::Index(index)];
        // A segment need not be a field of the model: a record may carry it beside its fields.
        let field = document.field.iter().find(|field| field.name == *segment);
        if field.is_some_and(|field| field.kind != FieldKind::Levels) {
            let reason = format!("`{segment}` is a number or a flag; segments are levels or other texts");
            return Err(Objection::new(place, reason));
        }
    }
    Ok(Monitor {
        segments: document.monitor.segments.clone(),
        maturity_days: document.monitor.maturity.map(|maturity| maturity.days),
    })
}

fn first_repeated(names: &[String]) -> Option<&String> {
    let mut seen = HashSet::new();
    names.iter().find(|name| !seen.insert(*name))
}

fn list(names: &[String]) -> String {
    names.iter().map(|name| format!("`{name}`")).collect::<Vec<_>>().join(", ")
}
