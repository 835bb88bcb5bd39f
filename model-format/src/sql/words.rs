//! The words of SQL: numbers, texts, names, sums.

use super::SqlError;

/// Sums of more parts are put in brackets by halves, because engines limit the depth of an
/// expression (SQLite to 1000).
const FLAT_SUM: usize = 32;

/// A sum in brackets.
pub(super) fn sum(parts: &[String], plus: &str) -> String {
    if parts.len() <= FLAT_SUM {
        return format!("({})", parts.join(plus));
    }
    let (left, right) = parts.split_at(parts.len() / 2);
    format!("({}{plus}{})", sum(left, plus), sum(right, plus))
}

/// A floating-point literal that reads back bit for bit; `NULL` for what is not finite.
pub(super) fn number(value: f64) -> String {
    match value {
        value if !value.is_finite() => "NULL".into(),
        value if value.is_sign_negative() => format!("({value:E})"),
        value => format!("{value:E}"),
    }
}

/// A text literal.
pub(super) fn literal(text: &str) -> Result<String, SqlError> {
    quoted(text, '\'')
}

/// A name in quotes.
pub(super) fn identifier(name: &str) -> Result<String, SqlError> {
    quoted(name, '"')
}

fn quoted(text: &str, quote: char) -> Result<String, SqlError> {
    if text.contains('\0') {
        return Err(SqlError::ZeroCharacter { name: text.replace('\0', "\\0") });
    }
    let doubled = String::from_iter([quote, quote]);
    Ok(format!("{quote}{}{quote}", text.replace(quote, &doubled)))
}
