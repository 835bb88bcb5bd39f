//! Tests of the pass over the rows, against the plain formulas.

use super::*;
use crate::chunk::ChunkColumn;
use crate::layout::Scaling;
use crate::split::draw;
use kilter_model::{
    Design, Field, FlagField, Form, LevelsField, Means, MissingFlag, MissingNumber, NumberField,
};

fn number(name: &str, form: Form, missing: MissingNumber) -> Field {
    Field::Number(NumberField { name: name.into(), unit: None, form, range: None, missing, observed: None })
}

fn levels(name: &str, count: usize, reference: usize) -> Field {
    Field::Levels(LevelsField {
        name: name.into(),
        levels: (0..count).map(|level| level.to_string()).collect(),
        reference: reference.to_string(),
        merged: std::collections::BTreeMap::new(),
        unseen: "refuse".into(),
        missing: "refuse".into(),
    })
}

/// A fraction of one that is the same in every run.
fn fraction(number: usize) -> f64 {
    (draw(number as u64, 3) >> 11) as f64 * 0.5f64.powi(53)
}

fn example() -> (Design, Scaling, Chunk) {
    let means = Means { means: vec![0.4, 0.3] };
    let fields = [
        number("a", Form::Polynomial(2), MissingNumber::MeanAndFlag(means)),
        levels("g", 4, 1),
        Field::Flag(FlagField { name: "f".into(), missing: MissingFlag::Refuse }),
        levels("h", 3, 0),
        number("b", Form::AsIs, MissingNumber::Refuse),
    ];
    let interactions = [["a", "g"], ["g", "h"], ["b", "f"], ["a", "b"]].map(|pair| pair.map(String::from));
    let design = Design::new(&fields, &interactions).unwrap();
    let rows = 600;
    let column = |salt: usize, map: &dyn Fn(f64) -> f64| -> Vec<f64> {
        (0..rows).map(|row| map(fraction(row * 16 + salt))).collect()
    };
    let codes = |salt: usize, count: f64| -> Vec<u32> {
        column(salt, &|u| u * count).iter().map(|u| *u as u32).collect()
    };
    let chunk = Chunk {
        fields: vec![
            ChunkColumn::Numbers(column(0, &|u| if u < 0.1 { f64::NAN } else { u })),
            ChunkColumn::Levels(codes(1, 4.0)),
            ChunkColumn::Numbers(column(2, &|u| (u * 2.0).floor())),
            ChunkColumn::Levels(codes(3, 3.0)),
            ChunkColumn::Numbers(column(4, &|u| 3.0 * u - 1.0)),
        ],
        category: codes(5, 4.0),
        count: vec![1.0; rows],
        weight: column(6, &|u| 0.5 + u),
        ..Chunk::default()
    };
    let scaling = Scaling {
        centre: design.dense().iter().map(centre_of).collect(),
        scale: design.dense().iter().map(|column| if centre_of(column) == 0.0 { 1.0 } else { 0.7 }).collect(),
    };
    (design, scaling, chunk)
}

/// Means of the missing values, so that these become 0.
fn centre_of(column: &kilter_model::DenseColumn) -> f64 {
    match column {
        kilter_model::DenseColumn::Basis { field: 0, basis } => [0.4, 0.3][*basis],
        kilter_model::DenseColumn::Basis { .. } => 0.5,
        _ => 0.0,
    }
}

/// The standardised row in the order of the design, term by term from its definition.
fn standardised_row(design: &Design, scaling: &Scaling, chunk: &Chunk, row: usize) -> Vec<f64> {
    let values: Vec<f64> = chunk
        .fields
        .iter()
        .map(|column| match column {
            ChunkColumn::Numbers(numbers) => numbers[row],
            ChunkColumn::Levels(levels) => f64::from(levels[row]),
        })
        .collect();
    let mut dense = vec![0.0; design.dense().len()];
    design.fill_dense(&values, &mut dense);
    for (index, value) in dense.iter_mut().enumerate() {
        *value = (*value - scaling.centre[index]) / scaling.scale[index];
    }
    let holds = |&(slot, level): &(usize, u32)| values[design.level_fields()[slot]] == f64::from(level);
    design
        .terms()
        .iter()
        .map(|term| {
            let product: f64 = term.dense.iter().map(|&column| dense[column]).product();
            if term.levels.iter().all(holds) { product } else { 0.0 }
        })
        .collect()
}

/// The formulas of the module's documentation, row by row, with the information as
/// `w p_j (1[j = k] - p_k) x x'`.
#[test]
fn sums_equal_the_plain_formulas() {
    let (design, scaling, chunk) = example();
    let keep: Vec<bool> = (0..design.terms().len()).map(|term| term % 7 != 6).collect();
    let layout = Layout::new(&design, &scaling, &keep);
    let (p, m) = (layout.terms(), 3);
    let point: Vec<f64> = (0..p * m).map(|index| fraction(100_000 + index) - 0.5).collect();
    let coefficients = Coefficients::from_vector(&point, p, m);
    let mut sums = Sums::new(&layout, m, Order::Information);
    add_chunk(&mut sums, &mut Workspace::default(), &layout, &coefficients, &chunk, Order::Information);

    let (mut value, mut gradient, mut information) = (0.0, vec![0.0; p * m], Mat::<f64>::zeros(p * m, p * m));
    for row in 0..chunk.rows() {
        let all = standardised_row(&design, &scaling, &chunk, row);
        let x: Vec<f64> = layout.order().iter().map(|&term| all[term]).collect();
        let eta: Vec<f64> = (0..m).map(|j| x.iter().zip(&point[j * p..]).map(|(x, b)| x * b).sum()).collect();
        let total = 1.0 + eta.iter().map(|eta: &f64| eta.exp()).sum::<f64>();
        let probability: Vec<f64> = eta.iter().map(|eta| eta.exp() / total).collect();
        let (weight, observed) = (chunk.weight[row], chunk.category[row] as usize);
        let log_odds = if observed == 0 { 0.0 } else { eta[observed - 1] };
        value += weight * (log_odds - total.ln());
        for j in 0..m {
            let residual = f64::from(u8::from(observed == j + 1)) - probability[j];
            for a in 0..p {
                gradient[j * p + a] += weight * residual * x[a];
                for k in 0..m {
                    let curvature = probability[j] * (f64::from(u8::from(j == k)) - probability[k]);
                    for b in 0..p {
                        information[(j * p + a, k * p + b)] += weight * curvature * x[a] * x[b];
                    }
                }
            }
        }
    }
    let close = |what: &str, found: f64, wanted: f64| {
        assert!((found - wanted).abs() < 1e-10, "{what}: {found} {wanted}");
    };
    close("value", sums.log_likelihood(), value);
    for (index, (found, wanted)) in sums.gradient().iter().zip(&gradient).enumerate() {
        close(&format!("gradient {index}"), *found, *wanted);
    }
    let found = sums.information();
    for row in 0..p * m {
        for column in 0..p * m {
            close(&format!("information {row} {column}"), found[(row, column)], information[(row, column)]);
        }
    }
}
