//! The program against statsmodels and scikit-learn, live, on random tables.

use std::io::Write;
use std::path::Path;
use std::process::{Command, Stdio};

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use serde_json::{Value, json};

use crate::support::{json_file, kilter_well, write};

/// A kind of table.
struct Shape {
    name: &'static str,
    rows: usize,
    categories: usize,
    numbers: usize,
    /// Number of levels of each field of levels.
    levels: &'static [usize],
    counts: bool,
    ridge: Option<f64>,
}

const SHAPES: [Shape; 6] = [
    Shape { name: "small", rows: 400, categories: 3, numbers: 2, levels: &[], counts: false, ridge: None },
    Shape { name: "binary", rows: 500, categories: 2, numbers: 2, levels: &[4], counts: false, ridge: None },
    Shape {
        name: "wide",
        rows: 3000,
        categories: 6,
        numbers: 5,
        levels: &[3, 5],
        counts: false,
        ridge: None,
    },
    Shape { name: "counts", rows: 300, categories: 4, numbers: 1, levels: &[2], counts: true, ridge: None },
    Shape {
        name: "ridge",
        rows: 500,
        categories: 4,
        numbers: 6,
        levels: &[],
        counts: false,
        ridge: Some(0.01),
    },
    Shape {
        name: "ridge-counts",
        rows: 200,
        categories: 3,
        numbers: 3,
        levels: &[],
        counts: true,
        ridge: Some(0.3),
    },
];

/// Seeds of the tables; another one can be given as `KILTER_TEST_SEED`.
fn seed() -> u64 {
    std::env::var("KILTER_TEST_SEED").ok().and_then(|text| text.parse().ok()).unwrap_or(20_260_301)
}

/// Standard normal, by the polar method (Marsaglia and Bray 1964).
fn normal(random: &mut ChaCha8Rng) -> f64 {
    loop {
        let [x, y] = [(); 2].map(|()| random.random_range(-1.0..1.0_f64));
        let square = x * x + y * y;
        if square > 0.0 && square < 1.0 {
            return x * (-2.0 * square.ln() / square).sqrt();
        }
    }
}

impl Shape {
    /// Writes table and plan; the categories follow from the fields with moderate effects.
    fn write(&self, folder: &Path, random: &mut ChaCha8Rng) {
        let scales: Vec<f64> = (0..self.numbers).map(|_| 10f64.powi(random.random_range(-2..4))).collect();
        let mut effect = |size: f64| -> Vec<f64> {
            (0..self.categories).map(|j| if j == 0 { 0.0 } else { size * normal(random) }).collect()
        };
        let intercepts = effect(0.4);
        let slopes: Vec<Vec<f64>> = (0..self.numbers).map(|_| effect(0.6)).collect();
        let by_level: Vec<Vec<Vec<f64>>> =
            self.levels.iter().map(|levels| (0..*levels).map(|_| effect(0.5)).collect()).collect();
        let mut head: Vec<String> = (0..self.numbers).map(|k| format!("x{k}")).collect();
        head.extend((0..self.levels.len()).map(|k| format!("g{k}")));
        head.extend(["n".to_owned(), "y".to_owned()]);
        let mut text = head.join(",") + "\n";
        for _ in 0..self.rows {
            let mut odds = intercepts.clone();
            let mut cells = Vec::new();
            for (scale, slope) in scales.iter().zip(&slopes) {
                let z = normal(random);
                odds.iter_mut().zip(slope).for_each(|(odds, slope)| *odds += z * slope);
                cells.push((scale * (z + 3.0)).to_string());
            }
            for effects in &by_level {
                let level = random.random_range(0..effects.len());
                odds.iter_mut().zip(&effects[level]).for_each(|(odds, effect)| *odds += effect);
                cells.push(format!("l{level}"));
            }
            cells.push(random.random_range(1..6).to_string());
            let total: f64 = odds.iter().map(|odds| odds.exp()).sum();
            let mut rest = random.random_range(0.0..total);
            let drawn = odds.iter().position(|odds| {
                rest -= odds.exp();
                rest < 0.0
            });
            cells.push(format!("c{}", drawn.unwrap_or(0)));
            text.push_str(&(cells.join(",") + "\n"));
        }
        write(&folder.join("table.csv"), &text);
    }

    fn plan(&self, standard_errors: &str) -> String {
        let count = if self.counts { "count = \"n\"\n" } else { "" };
        let mut plan = format!(
            "name = \"live\"\n[data]\nfiles = [\"table.csv\"]\n{count}[outcome]\nfield = \"y\"\nreference = \"c0\"\n"
        );
        let numbers = (0..self.numbers).map(|k| format!("[[field]]\nname = \"x{k}\"\nkind = \"number\"\n"));
        let levels = (0..self.levels.len())
            .map(|k| format!("[[field]]\nname = \"g{k}\"\nkind = \"levels\"\nreference = \"l0\"\n"));
        plan.extend(numbers.chain(levels));
        let ridge = self.ridge.map_or_else(String::new, |ridge| format!("ridge = {ridge}\n"));
        plan + &format!("[fit]\nstandard_errors = \"{standard_errors}\"\n{ridge}")
    }

    /// What the libraries find.
    fn ask_peers(&self, folder: &Path) -> Value {
        let names = |prefix: &str, count: usize| -> Vec<String> {
            (0..count).map(|k| format!("{prefix}{k}")).collect()
        };
        let levels: serde_json::Map<String, Value> = names("g", self.levels.len())
            .into_iter()
            .zip(self.levels)
            .map(|(name, levels)| (name, names("l", *levels).into()))
            .collect();
        let case = json!({
            "csv": folder.join("table.csv"),
            "outcome": "y",
            "categories": names("c", self.categories),
            "numbers": names("x", self.numbers),
            "levels": levels,
            "count": self.counts.then_some("n"),
            "ridge": self.ridge,
        });
        let root = Path::new(env!("CARGO_MANIFEST_DIR"));
        let python = root.join("../target/tests-python/bin/python");
        assert!(python.exists(), "the libraries to compare with are not installed: `tests/run` does that");
        let mut child = Command::new(python)
            .arg(root.join("live/peers.py"))
            .stdin(Stdio::piped())
            .stdout(Stdio::piped())
            .spawn()
            .expect("starts");
        let mut input = child.stdin.take().expect("piped");
        input.write_all(case.to_string().as_bytes()).expect("written");
        drop(input);
        let output = child.wait_with_output().expect("ended");
        assert!(output.status.success(), "the libraries failed on {}", self.name);
        serde_json::from_slice(&output.stdout).expect("JSON")
    }
}

fn numbers(value: &Value) -> Vec<f64> {
    match value {
        Value::Array(values) => values.iter().flat_map(numbers).collect(),
        value => vec![value.as_f64().unwrap_or_else(|| panic!("{value} is no number"))],
    }
}

/// Coefficients of a model file and their standard errors, category by category.
fn estimates(folder: &Path) -> [Vec<f64>; 2] {
    let shown: Value =
        serde_json::from_str(&kilter_well(folder, &["show", "m.json", "--json"])).expect("JSON");
    let categories = shown["categories"].as_object().expect("categories");
    ["estimate", "standard_error"].map(|key| {
        let terms = categories.values().flat_map(|terms| terms.as_array().expect("terms"));
        terms.map(|term| term[key].as_f64().expect("a number")).collect()
    })
}

#[track_caller]
fn assert_near(what: &str, found: &[f64], wanted: &[f64], unit: impl Fn(usize) -> f64, tolerance: f64) {
    assert_eq!(found.len(), wanted.len(), "{what}");
    for (place, (found, wanted)) in found.iter().zip(wanted).enumerate() {
        let apart = (found - wanted).abs() / unit(place);
        assert!(apart < tolerance, "{what}, place {place}: {found}, expected {wanted} ({apart:.1e})");
    }
}

/// Probabilities that `kilter score` writes.
fn scored(folder: &Path, categories: usize) -> Vec<f64> {
    let table = kilter_well(folder, &["score", "m.json", "table.csv"]);
    let mut lines = table.lines();
    let head: Vec<&str> = lines.next().expect("a head").split(',').collect();
    let first = head.iter().position(|name| *name == "p_c0").expect("probabilities");
    let cells = lines.flat_map(|line| line.split(',').skip(first).take(categories).collect::<Vec<_>>());
    cells.map(|cell| cell.parse().expect("a number")).collect()
}

/// statsmodels goes on with Newton's method to the last digits, so coefficients agree to a
/// millionth of their standard error and errors to 1e-6 of themselves; scikit-learn stops a little
/// earlier.
#[test]
fn fits_agree_with_statsmodels_and_scikit_learn_on_random_tables() {
    for (place, shape) in SHAPES.iter().enumerate() {
        let seed = seed() + place as u64;
        let what = format!("{} with seed {seed}", shape.name);
        eprintln!("{what}");
        let folder = tempfile::tempdir().expect("a folder");
        let at = folder.path();
        shape.write(at, &mut ChaCha8Rng::seed_from_u64(seed));
        write(&at.join("plan.toml"), &shape.plan("model"));
        kilter_well(at, &["fit", "plan.toml", "-o", "m.json"]);
        let peers = shape.ask_peers(at);
        let [coefficients, errors] = estimates(at);
        let probabilities = scored(at, shape.categories);
        let of_scikit_learn = &peers["scikit_learn"];
        let wanted = numbers(&of_scikit_learn["probabilities"]);
        assert_near(
            &format!("{what}: probabilities by scikit-learn"),
            &probabilities,
            &wanted,
            |_| 1.0,
            1e-6,
        );
        if shape.ridge.is_some() {
            continue;
        }
        let wanted = numbers(&of_scikit_learn["coefficients"]);
        assert_near(&format!("{what}: scikit-learn"), &coefficients, &wanted, |place| errors[place], 1e-3);
        let of_statsmodels = &peers["statsmodels"];
        let wanted = numbers(&of_statsmodels["coefficients"]);
        assert_near(&format!("{what}: statsmodels"), &coefficients, &wanted, |place| errors[place], 1e-6);
        let wanted = numbers(&of_statsmodels["standard_errors"]);
        assert_near(&format!("{what}: errors"), &errors, &wanted, |place| wanted[place], 1e-6);
        let figures = &json_file(&at.join("m.json"))["fit"];
        // statsmodels finds the log-likelihood without fields by another, coarser optimiser.
        for (key, tolerance) in [("log_likelihood", 1e-12), ("log_likelihood_null", 1e-8)] {
            let (found, wanted) = (numbers(&figures[key]), numbers(&of_statsmodels[key]));
            assert_near(&format!("{what}: {key}"), &found, &wanted, |_| wanted[0].abs(), tolerance);
        }
        if !shape.counts {
            let wanted = numbers(&of_statsmodels["probabilities"]);
            assert_near(&format!("{what}: probabilities"), &probabilities, &wanted, |_| 1.0, 1e-9);
            write(&at.join("plan.toml"), &shape.plan("robust"));
            kilter_well(at, &["fit", "plan.toml", "-o", "m.json"]);
            // kilter multiplies the sandwich by n / (n - 1), statsmodels' HC0 does not.
            let factor = (shape.rows as f64 / (shape.rows as f64 - 1.0)).sqrt();
            let wanted: Vec<f64> =
                numbers(&of_statsmodels["robust_errors"]).iter().map(|error| error * factor).collect();
            let [_, robust] = estimates(at);
            assert_near(&format!("{what}: robust errors"), &robust, &wanted, |place| wanted[place], 1e-6);
        }
    }
}
