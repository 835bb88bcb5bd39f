//! How fast a table is fitted, standard errors included.
//!
//! `cargo bench -p kilter-fit --bench fit -- FILE [RUNS] [KEEP_BYTES]` reads a table that
//! `tests/bench/fit` has written and fits it RUNS times; each run is a line of JSON with the seconds,
//! the log-likelihood and the steps. KEEP_BYTES 0 reads the source anew in every pass, as for a table
//! that does not fit into memory.
//!
//! A table is the line `ROWS NUMBERS CATEGORIES LEVELS…`, then column by column in the byte order
//! of the machine: the numbers as 64-bit floating-point numbers, each field of levels and at last the
//! outcome as 32-bit codes.

#![expect(clippy::print_stdout, reason = "the figures are what this program is for")]

use std::error::Error;
use std::fs::File;
use std::io::{BufRead, BufReader, Read};
use std::ops::ControlFlow;
use std::time::Instant;

use kilter_fit::{FitSettings, Plan, RowSource, fit};
use kilter_model::{Batch, Column, TextColumn};
use serde_json::json;

/// Rows of a batch as a source hands them over.
const BATCH_ROWS: usize = 100_000;

fn main() -> Result<(), Box<dyn Error>> {
    let arguments: Vec<String> = std::env::args().skip(1).filter(|argument| argument != "--bench").collect();
    let Some(path) = arguments.first() else {
        println!("give the file of a table that tests/bench/fit has written");
        return Ok(());
    };
    let number =
        |place: usize, default: usize| arguments.get(place).map_or(Ok(default), |text| text.parse::<usize>());
    let (runs, keep_bytes) = (number(1, 1)?, number(2, FitSettings::default().keep_bytes)?);
    let mut table = Table::read(path)?;
    let plan = table.plan()?;
    for _ in 0..runs {
        let settings = FitSettings { keep_bytes, ..FitSettings::default() };
        let started = Instant::now();
        let fitted = fit(&plan, &mut table, settings, &mut |_| {})?;
        let seconds = started.elapsed().as_secs_f64();
        let figures = fitted.model.fit.ok_or("no figures")?;
        let line = json!({
            "seconds": seconds,
            "log_likelihood": figures.log_likelihood,
            "gradient_per_row": figures.gradient_norm / figures.rows as f64,
            "steps": figures.iterations,
            "parameters": figures.parameters,
        });
        println!("{line}");
    }
    Ok(())
}

/// A table in memory.
struct Table {
    rows: usize,
    numbers: Vec<Vec<f64>>,
    levels: Vec<usize>,
    codes: Vec<Vec<u32>>,
}

impl Table {
    fn read(path: &str) -> Result<Self, Box<dyn Error>> {
        let mut file = BufReader::with_capacity(1 << 20, File::open(path)?);
        let mut head = String::new();
        file.read_line(&mut head)?;
        let head: Vec<usize> = head.split_whitespace().map(str::parse).collect::<Result<_, _>>()?;
        let [rows, numbers, categories, levels @ ..] = head.as_slice() else {
            return Err("the first line is not `ROWS NUMBERS CATEGORIES LEVELS…`".into());
        };
        let numbers = (0..*numbers).map(|_| numbers_of(&mut file, *rows)).collect::<Result<_, _>>()?;
        let levels: Vec<usize> = levels.iter().copied().chain([*categories]).collect();
        let codes = levels.iter().map(|_| codes_of(&mut file, *rows)).collect::<Result<_, _>>()?;
        Ok(Self { rows: *rows, numbers, levels, codes })
    }

    fn plan(&self) -> Result<Plan, Box<dyn Error>> {
        let mut text =
            "name = \"bench\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = \"y\"\nreference = \"0\"\n"
                .to_owned();
        let numbers = (0..self.numbers.len())
            .map(|number| format!("[[field]]\nname = \"x{number}\"\nkind = \"number\"\n"));
        let levels = (0..self.levels.len() - 1)
            .map(|number| format!("[[field]]\nname = \"g{number}\"\nkind = \"levels\"\nreference = \"0\"\n"));
        text.extend(numbers.chain(levels));
        Plan::from_toml(&text).map_err(Into::into)
    }
}

impl RowSource for Table {
    type Error = std::convert::Infallible;

    fn pass(&mut self, visit: &mut dyn FnMut(Batch) -> ControlFlow<()>) -> Result<(), Self::Error> {
        let texts = |place: usize, from: usize, to: usize| {
            let dictionary = (0..self.levels[place]).map(|level| level.to_string()).collect();
            Column::Text(TextColumn { codes: self.codes[place][from..to].to_vec(), dictionary })
        };
        for from in (0..self.rows).step_by(BATCH_ROWS) {
            let to = (from + BATCH_ROWS).min(self.rows);
            let mut columns: Vec<Column> =
                self.numbers.iter().map(|column| Column::Number(column[from..to].to_vec())).collect();
            columns.extend((0..self.levels.len()).map(|place| texts(place, from, to)));
            if visit(Batch { rows: to - from, columns, bad_cells: Vec::new() }).is_break() {
                break;
            }
        }
        Ok(())
    }
}

fn numbers_of(file: &mut impl Read, rows: usize) -> Result<Vec<f64>, Box<dyn Error>> {
    let mut bytes = vec![0; rows * 8];
    file.read_exact(&mut bytes)?;
    Ok(bytes.as_chunks().0.iter().map(|chunk| f64::from_ne_bytes(*chunk)).collect())
}

fn codes_of(file: &mut impl Read, rows: usize) -> Result<Vec<u32>, Box<dyn Error>> {
    let mut bytes = vec![0; rows * 4];
    file.read_exact(&mut bytes)?;
    Ok(bytes.as_chunks().0.iter().map(|chunk| u32::from_ne_bytes(*chunk)).collect())
}
