//! The probabilities of a model as expressions in standard SQL, so that a data base can score where
//! the data lies.
//!
//! # What the expressions need
//! They use `CASE`, `COALESCE`, `CAST`, `BETWEEN`, `LOWER`, `EXP`, `LN` and names in double quotes,
//! and nothing else. The columns of the table have the names of the model's fields:
//!
//! * a number is of any numeric type, and is computed with as `DOUBLE PRECISION`;
//! * a level is a text or a whole number; the empty text counts as missing, as in files;
//! * a flag is of a boolean type, or 1 and 0, or one of the texts true, false, yes, no, 1, 0.
//!
//! # What they give
//! The probability that [`crate::Scorer`] gives, up to rounding, and `NULL` where it refuses the
//! record. Each is `1 / (1 + sum over the other categories of exp(difference of log-odds))`; a
//! difference beyond 700 is not exponentiated, because many engines treat overflow and underflow of
//! `EXP` as errors. So a probability below 1e-300 may come out as another one below 1e-300.
//!
//! Products that leave the range of floating-point numbers on the way, such as a square of 1e200,
//! give `NULL` on engines that compute with infinities and an error on those that do not.
//!
//! # Which form to take
//! [`sql`] writes one expression for each category, to stand wherever an expression can: in a
//! `SELECT` list, a view, a generated column. Every log-odds is repeated in it, so it grows with the
//! square of the number of categories. [`sql_query`] writes a whole query on two levels, the log-odds
//! inside and the probabilities outside: shorter, quicker, and with the coefficients of the file.

use crate::design::DesignError;
use crate::file::ModelFile;

mod words;
mod writer;

use words::{identifier, number, sum};
use writer::Writer;

/// Longest text that is written, in bytes.
pub const LONGEST_SQL: usize = 64 * 1024 * 1024;
/// Differences of log-odds up to this are exponentiated.
const LARGEST_EXPONENT: f64 = 700.0;
/// About `exp(700)`, for differences above.
const BEYOND: f64 = 1e304;

/// Why a model cannot be written as SQL.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum SqlError {
    /// Fields and interactions make no design.
    #[error(transparent)]
    Design(#[from] DesignError),
    /// A name has a character that SQL has no way to write.
    #[error("`{name}` has a zero character, which SQL texts and names cannot have; rename it")]
    ZeroCharacter {
        /// The name, the character made visible.
        name: String,
    },
    /// A difference of two coefficients is no number.
    #[error("term `{term}`: the coefficients of two categories are too far apart to compute with")]
    Coefficients {
        /// Name of the term.
        term: String,
    },
    /// The expressions would be too long for any engine.
    #[error(
        "the expressions would be longer than {LONGEST_SQL} bytes; merge levels or score outside the data base"
    )]
    TooLong,
}

/// The probabilities of all categories as a list for `SELECT … FROM table`: one line for each
/// category, `expression AS "p_<category>"`, separated by commas.
///
/// The model must pass [`crate::check()`].
///
/// # Errors
/// [`SqlError`] where names or numbers cannot be written, or the list would be too long.
pub fn sql(model: &ModelFile) -> Result<String, SqlError> {
    let writer = Writer::new(model)?;
    probabilities(model, |category, against| writer.log_odds(category, Some(against), " + "))
}

/// A query that gives every row of a table with the log-odds of each category but the reference, as
/// `log_odds_<category>`, and all probabilities, as `p_<category>`.
///
/// `table` is the name as the data base stores it; a schema before it is set off by a point. The
/// model must pass [`crate::check()`].
///
/// # Errors
/// [`SqlError`] where names or numbers cannot be written, or the query would be too long.
pub fn sql_query(model: &ModelFile, table: &str) -> Result<String, SqlError> {
    let writer = Writer::new(model)?;
    let reference = model.reference_index();
    let mut columns = Vec::new();
    let mut log_odds = Vec::new();
    let mut length = 0;
    for (category, name) in model.outcome.categories.iter().enumerate() {
        let column = identifier(&format!("log_odds_{name}"))?;
        if category != reference {
            let expression = writer.log_odds(category, None, "\n      + ")?;
            length += expression.len();
            check_length(length)?;
            log_odds.push(format!("{expression} AS {column}"));
        }
        columns.push(column);
    }
    let probabilities = probabilities(model, |category, against| {
        Ok(match (category == reference, against == reference) {
            (true, _) => format!("(-{})", columns[against]),
            (_, true) => columns[category].clone(),
            _ => format!("({} - {})", columns[category], columns[against]),
        })
    })?;
    let table: Vec<String> = table.split('.').map(identifier).collect::<Result<_, _>>()?;
    Ok(format!(
        "SELECT scored.*,\n  {}\nFROM (\n  SELECT records.*,\n    {}\n  FROM {} AS records\n) AS scored",
        probabilities.replace(",\n", ",\n  "),
        log_odds.join(",\n    "),
        table.join(".")
    ))
}

/// The list of probabilities, from the log-odds of one category against another.
fn probabilities(
    model: &ModelFile,
    log_odds: impl Fn(usize, usize) -> Result<String, SqlError>,
) -> Result<String, SqlError> {
    let categories = &model.outcome.categories;
    let mut lines: Vec<String> = Vec::new();
    let mut length = 0;
    for (category, name) in categories.iter().enumerate() {
        let mut ratios = vec![number(1.0)];
        for other in (0..categories.len()).filter(|other| *other != category) {
            ratios.push(exponential(&log_odds(other, category)?));
            length += ratios[ratios.len() - 1].len();
            check_length(length)?;
        }
        let column = identifier(&format!("p_{name}"))?;
        lines.push(format!("{} / {} AS {column}", number(1.0), sum(&ratios, " + ")));
    }
    Ok(lines.join(",\n"))
}

fn check_length(length: usize) -> Result<(), SqlError> {
    if length > LONGEST_SQL { Err(SqlError::TooLong) } else { Ok(()) }
}

/// The exponential of a number that may be anything: `NULL` where it is not finite.
fn exponential(x: &str) -> String {
    let (edge, beyond, largest) = (number(LARGEST_EXPONENT), number(BEYOND), number(f64::MAX));
    let (minus_edge, smallest, none) = (number(-LARGEST_EXPONENT), number(-f64::MAX), number(0.0));
    format!(
        "CASE WHEN {x} BETWEEN {minus_edge} AND {edge} THEN EXP({x}) \
         WHEN {x} BETWEEN {edge} AND {largest} THEN {beyond} \
         WHEN {x} BETWEEN {smallest} AND {minus_edge} THEN {none} END"
    )
}
