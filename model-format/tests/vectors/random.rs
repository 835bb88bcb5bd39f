//! Random models of all kinds of fields, and random records for them, some of them spoilt.

use std::collections::BTreeMap;

use kilter_model::{
    Design, Field, FlagField, Form, LevelsField, MISSING_LEVEL, Means, MissingFlag, MissingNumber, ModelFile,
    NumberField, Outcome, Spline,
};
use serde_json::{Map, Value, json};

use crate::vector;

/// The generator SplitMix64 (Steele, Lea and Flood 2014): the same numbers everywhere.
pub(crate) struct Random(pub(crate) u64);

impl Random {
    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Uniform from `low` to `high`.
    pub(crate) fn uniform(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * (self.next() >> 11) as f64 / (1u64 << 53) as f64
    }

    fn below(&mut self, count: usize) -> usize {
        (self.next() % count as u64) as usize
    }

    fn chance(&mut self, probability: f64) -> bool {
        self.uniform(0.0, 1.0) < probability
    }

    fn pick<'a, T>(&mut self, of: &'a [T]) -> &'a T {
        &of[self.below(of.len())]
    }
}

/// A sealed model with two to eight categories, one to six fields and up to three interactions.
pub(crate) fn model(random: &mut Random) -> ModelFile {
    let categories: Vec<String> = (0..2 + random.below(7)).map(|i| format!("category {i}")).collect();
    let reference = random.pick(&categories).clone();
    let fields: Vec<Field> = (0..=random.below(6)).map(|index| field(random, index)).collect();
    let mut interactions: Vec<[String; 2]> = Vec::new();
    for first in 0..fields.len() {
        for second in 0..first {
            if interactions.len() < 3 && random.chance(0.4) {
                interactions.push([fields[first].name().to_owned(), fields[second].name().to_owned()]);
            }
        }
    }
    let design = Design::new(&fields, &interactions).unwrap();
    let coefficients = categories
        .iter()
        .filter(|category| **category != reference)
        .map(|category| {
            let row = design.terms().iter().map(|_| random.uniform(-1.5, 1.5)).collect();
            (category.clone(), row)
        })
        .collect();
    let mut model = ModelFile {
        name: "random".into(),
        outcome: Outcome { field: "result".into(), categories, reference },
        terms: design.term_names(),
        fields,
        interactions,
        coefficients,
        ..vector("forms").model
    };
    model.seal().unwrap();
    model
}

fn field(random: &mut Random, index: usize) -> Field {
    match random.below(4) {
        0 => Field::Flag(FlagField {
            name: format!("flag {index}"),
            missing: *random.pick(&[
                MissingFlag::Refuse,
                MissingFlag::Value(true),
                MissingFlag::Value(false),
            ]),
        }),
        1 => Field::Levels(levels(random, index)),
        _ => Field::Number(number(random, index)),
    }
}

fn levels(random: &mut Random, index: usize) -> LevelsField {
    let mut levels: Vec<String> = (0..=random.below(6)).map(|level| format!("level {level}")).collect();
    if random.chance(0.3) {
        levels.push(MISSING_LEVEL.into());
    }
    let policies = ["refuse", "reference", levels[levels.len() - 1].as_str()].map(String::from);
    let merged = if random.chance(0.5) {
        BTreeMap::from([("rare".into(), levels[0].clone())])
    } else {
        BTreeMap::new()
    };
    LevelsField {
        name: format!("levels {index}"),
        reference: random.pick(&levels).clone(),
        unseen: random.pick(&policies).clone(),
        missing: random.pick(&policies).clone(),
        levels,
        merged,
    }
}

fn number(random: &mut Random, index: usize) -> NumberField {
    let mut knot = random.uniform(-2.0, 0.0);
    let mut knots = vec![knot];
    for _ in 0..2 + random.below(4) {
        knot += random.uniform(0.1, 1.5);
        knots.push(knot);
    }
    let forms = [
        Form::AsIs,
        Form::Log,
        Form::Log1p,
        Form::Polynomial(1 + random.below(4) as u32),
        Form::Spline(Spline { knots }),
    ];
    let form = random.pick(&forms).clone();
    let means = Means { means: (0..form.columns()).map(|_| random.uniform(-1.0, 1.0)).collect() };
    let missing = [
        MissingNumber::Refuse,
        MissingNumber::Value(random.uniform(0.1, 2.0)),
        MissingNumber::MeanAndFlag(means),
    ];
    NumberField {
        name: format!("number {index}"),
        unit: None,
        form,
        range: if random.chance(0.3) { Some([-1.5, 2.5]) } else { None },
        missing: random.pick(&missing).clone(),
        observed: None,
    }
}

/// A record for a model: one cell in twelve is missing, in the wrong form or out of place.
pub(crate) fn record(random: &mut Random, model: &ModelFile) -> Value {
    let mut record = Map::new();
    for field in &model.fields {
        let cell = if random.chance(1.0 / 12.0) {
            random.pick(&[Value::Null, json!(""), json!("odd"), json!(7), json!(0.5), json!([])]).clone()
        } else {
            sound_cell(random, field)
        };
        if !random.chance(0.05) {
            record.insert(field.name().to_owned(), cell);
        }
    }
    Value::Object(record)
}

fn sound_cell(random: &mut Random, field: &Field) -> Value {
    match field {
        Field::Flag(_) => json!(random.chance(0.5)),
        Field::Levels(_) if random.chance(0.1) => json!(*random.pick(&["rare", "unknown", "Level 0"])),
        Field::Levels(levels) => json!(random.pick(&levels.levels)),
        Field::Number(_) if random.chance(0.1) => json!(random.below(4)),
        Field::Number(number) if matches!(number.form, Form::Log) => json!(random.uniform(0.0, 3.0)),
        Field::Number(_) => json!(random.uniform(-1.2, 3.0)),
    }
}
