//! Average marginal effects: what a change of one field does to the probabilities, averaged over
//! the rows of the fit, all other fields as they are.

use faer::MatRef;
use kilter_model::Field;
use serde::Serialize;

use crate::analysis::Analysis;
use crate::chunk::{Chunk, ChunkColumn};
use crate::error::FitError;
use crate::layout::{Block, Layout};
use crate::likelihood::{Coefficients, add_linear, for_each_block, products};
use crate::reduce::{Merge, add_all};

/// The change whose effect is averaged.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Change {
    /// Of a number, per unit.
    PerUnit,
    /// From one level, or `false`, to another, or `true`.
    Switch {
        /// The level after.
        to: String,
        /// The level before.
        from: String,
    },
}

/// The average effect of a change of one field on the probability of one category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Effect {
    /// The field.
    pub field: String,
    /// The change.
    pub change: Change,
    /// The category.
    pub category: String,
    /// Average change of its probability.
    pub effect: f64,
    /// Standard error by the delta method, the rows taken as fixed.
    pub standard_error: f64,
}

/// What the rows are changed to before probabilities are averaged.
#[derive(Debug, Clone, Copy)]
enum Version {
    /// Slopes with respect to a number.
    Slope { field: usize },
    /// All rows at one level (0 and 1: false and true of a flag).
    At { field: usize, level: u32 },
}

/// Sums over rows for one version: of each category, and of its derivatives with respect to the
/// coefficients (terms x (J m), row by row).
#[derive(Debug, Clone)]
struct Averages {
    weight: f64,
    effect: Vec<f64>,
    jacobian: Vec<f64>,
}

struct AllAverages(Vec<Averages>);

impl Merge for AllAverages {
    fn merge(&mut self, later: Self) {
        for (sums, later) in self.0.iter_mut().zip(later.0) {
            sums.weight += later.weight;
            add_all(&mut sums.effect, &later.effect);
            add_all(&mut sums.jacobian, &later.jacobian);
        }
    }
}

impl Analysis<'_> {
    /// Average marginal effects of all fields on all categories, in the order of fields, changes
    /// and categories. Over the categories each effect adds up to 0.
    ///
    /// For a number: the average slope, `(1/W) sum_i w_i p_ij (g_ij - sum_k p_ik g_ik)` with
    /// `g_ij` the derivative of the log-odds; rows without the number have slope 0. For a level:
    /// the average probability with all rows at the level less that with all rows at the reference
    /// level, interactions included. One pass over the rows.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read.
    pub fn effects(&mut self) -> Result<Vec<Effect>, FitError> {
        let versions = self.versions();
        let (layout, coefficients) = (&self.solution.layout, self.solution.coefficients());
        let averages = self.table.reduce(|chunk| {
            let of = |version: &Version| Averages::of(*version, layout, &coefficients, chunk);
            AllAverages(versions.iter().map(of).collect())
        })?;
        let Some(AllAverages(averages)) = averages else { return Ok(Vec::new()) };
        let mut effects = Vec::new();
        let mut baseline = 0;
        for (index, version) in versions.iter().enumerate() {
            match *version {
                Version::Slope { field } => {
                    self.add_effects(&mut effects, field, &Change::PerUnit, &averages[index], None);
                }
                Version::At { field, level } => {
                    // The reference level comes first.
                    let starts = matches!(versions.get(index.wrapping_sub(1)), Some(Version::At { field: before, .. }) if *before == field);
                    if !starts {
                        baseline = index;
                        continue;
                    }
                    let Version::At { level: from, .. } = versions[baseline] else { continue };
                    let change =
                        Change::Switch { to: self.level(field, level), from: self.level(field, from) };
                    self.add_effects(
                        &mut effects,
                        field,
                        &change,
                        &averages[index],
                        Some(&averages[baseline]),
                    );
                }
            }
        }
        Ok(effects)
    }

    fn versions(&self) -> Vec<Version> {
        let of_field = |(field, kind): (usize, &Field)| match kind {
            Field::Number(_) => vec![Version::Slope { field }],
            Field::Flag(_) => vec![Version::At { field, level: 0 }, Version::At { field, level: 1 }],
            Field::Levels(levels) => {
                let is_reference = |level: &usize| levels.levels[*level] == levels.reference;
                let all = 0..levels.levels.len();
                let first = all.clone().filter(is_reference);
                let others = all.filter(|level| !is_reference(level));
                first.chain(others).map(|level| Version::At { field, level: level as u32 }).collect()
            }
        };
        self.resolved.fields.iter().enumerate().flat_map(of_field).collect()
    }

    fn level(&self, field: usize, level: u32) -> String {
        match &self.resolved.fields[field] {
            Field::Levels(levels) => levels.levels[level as usize].clone(),
            Field::Number(_) | Field::Flag(_) => (level == 1).to_string(),
        }
    }

    fn add_effects(
        &self,
        effects: &mut Vec<Effect>,
        field: usize,
        change: &Change,
        averages: &Averages,
        baseline: Option<&Averages>,
    ) {
        let m = self.compared();
        let terms = self.solution.layout.terms();
        let difference =
            |pick: &dyn Fn(&Averages) -> f64| (pick(averages) - baseline.map_or(0.0, pick)) / averages.weight;
        for (category, name) in self.resolved.category_names().into_iter().enumerate() {
            let gradient: Vec<f64> = (0..terms * m)
                .map(|index| {
                    let place = (index % terms) * (m + 1) * m + category * m + index / terms;
                    difference(&|averages| averages.jacobian[place])
                })
                .collect();
            let gradient = MatRef::from_column_major_slice(&gradient, terms * m, 1);
            let variance = gradient.transpose() * &self.covariance.matrix * gradient;
            effects.push(Effect {
                field: self.resolved.fields[field].name().to_owned(),
                change: change.clone(),
                category: name.to_owned(),
                effect: difference(&|averages| averages.effect[category]),
                standard_error: variance[(0, 0)].max(0.0).sqrt(),
            });
        }
    }
}

impl Averages {
    fn of(version: Version, layout: &Layout, coefficients: &Coefficients, chunk: &Chunk) -> Self {
        let m = coefficients.compared;
        let mut sums = Self {
            weight: chunk.weight.iter().sum(),
            effect: vec![0.0; m + 1],
            jacobian: vec![0.0; layout.terms() * (m + 1) * m],
        };
        match version {
            Version::Slope { field } => sums.add_slopes(field, layout, coefficients, chunk),
            Version::At { field, level } => {
                sums.add_probabilities(layout, coefficients, &with_level(chunk, field, level));
            }
        }
        sums
    }

    /// Probabilities, and their derivatives `p_j (1[j = r] - p_r) x` in block r.
    fn add_probabilities(&mut self, layout: &Layout, coefficients: &Coefficients, chunk: &Chunk) {
        let m = coefficients.compared;
        let mut columns = Vec::new();
        for_each_block(layout, coefficients, chunk, &mut |rows, block, p| {
            let (n, weight) = (block.rows, &chunk.weight[rows]);
            columns.resize(n * (m + 1) * m, 0.0);
            for j in 0..=m {
                let p_j = &p[j * n..][..n];
                self.effect[j] += weight.iter().zip(p_j).map(|(w, p)| w * p).sum::<f64>();
                for r in 0..m {
                    let p_r = &p[(r + 1) * n..][..n];
                    let own = f64::from(u8::from(j == r + 1));
                    for (i, slot) in columns[(j * m + r) * n..][..n].iter_mut().enumerate() {
                        *slot = weight[i] * p_j[i] * (own - p_r[i]);
                    }
                }
            }
            add_linear(&mut self.jacobian, block, &columns, layout);
        });
    }

    /// Slopes `e_j = p_j (g_j - gbar)`, with `g_j` the slope of the log-odds and `gbar` its mean
    /// over the categories, and their derivatives in block r:
    /// `[p_j (1[j = r] - p_r) (g_j - gbar) - p_j p_r (g_r - gbar)] x + p_j (1[j = r] - p_r) x'`.
    fn add_slopes(&mut self, field: usize, layout: &Layout, coefficients: &Coefficients, chunk: &Chunk) {
        let m = coefficients.compared;
        let mut slopes = Block::default();
        let (mut g, mut of_x, mut of_slope) = (Vec::new(), Vec::new(), Vec::new());
        for_each_block(layout, coefficients, chunk, &mut |rows, block, p| {
            let (n, weight) = (block.rows, &chunk.weight[rows.clone()]);
            layout.fill_derivative(chunk, rows.start, rows.end, field, &mut slopes);
            g.resize(n * m, 0.0);
            products(&mut g, &slopes, coefficients, layout);
            let above = from_mean(&g, p, n);
            of_x.resize(n * (m + 1) * m, 0.0);
            of_slope.resize(n * (m + 1) * m, 0.0);
            for j in 0..=m {
                for i in 0..n {
                    self.effect[j] += weight[i] * p[j * n + i] * above[j * n + i];
                }
                for r in 0..m {
                    let own = f64::from(u8::from(j == r + 1));
                    let place = (j * m + r) * n;
                    for i in 0..n {
                        let (p_j, p_r) = (p[j * n + i], p[(r + 1) * n + i]);
                        let (above_j, above_r) = (above[j * n + i], above[(r + 1) * n + i]);
                        of_slope[place + i] = weight[i] * p_j * (own - p_r);
                        of_x[place + i] = of_slope[place + i] * above_j - weight[i] * p_j * p_r * above_r;
                    }
                }
            }
            add_linear(&mut self.jacobian, block, &of_x, layout);
            add_linear(&mut self.jacobian, &slopes, &of_slope, layout);
        });
    }
}

/// `g_j - sum_k p_k g_k` for all categories, the reference (whose g is 0) first: J columns.
fn from_mean(g: &[f64], p: &[f64], n: usize) -> Vec<f64> {
    let mut mean = vec![0.0; n];
    for (g, p) in g.chunks_exact(n).zip(p[n..].chunks_exact(n)) {
        for i in 0..n {
            mean[i] += p[i] * g[i];
        }
    }
    let mut above: Vec<f64> = mean.iter().map(|mean| -mean).collect();
    for g in g.chunks_exact(n) {
        above.extend(g.iter().zip(&mean).map(|(g, mean)| g - mean));
    }
    above
}

/// The rows of a chunk, all at one level of a field.
fn with_level(chunk: &Chunk, field: usize, level: u32) -> Chunk {
    let mut changed = chunk.clone();
    match &mut changed.fields[field] {
        ChunkColumn::Levels(levels) => levels.fill(level),
        ChunkColumn::Numbers(flags) => flags.fill(f64::from(level)),
    }
    changed
}
