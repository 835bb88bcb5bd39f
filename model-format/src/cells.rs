//! Reading single cells of text: the one place that decides what a number, a flag and a time look
//! like, so that a file and a posted record agree to the last bit.

use jiff::{Timestamp, civil, tz::TimeZone};

/// Reads a number; `Ok(None)` for an empty cell.
///
/// White space around the number is ignored. The text is converted to the nearest `f64`.
///
/// # Errors
/// Says what is wrong where the text is no number, or not a finite one.
pub fn parse_number(text: &str) -> Result<Option<f64>, String> {
    let trimmed = text.trim();
    if trimmed.is_empty() {
        return Ok(None);
    }
    match trimmed.parse::<f64>() {
        Ok(value) if value.is_finite() => Ok(Some(value)),
        Ok(_) => Err(format!("`{}` is not a finite number", shorten(trimmed))),
        Err(_) => Err(format!("`{}` is not a number{}", shorten(trimmed), missing_hint(trimmed))),
    }
}

/// Reads a flag; `Ok(None)` for an empty cell.
///
/// # Errors
/// Says what is wrong where the text is none of true, false, yes, no, 1, 0 (in any case).
pub fn parse_flag(text: &str) -> Result<Option<bool>, String> {
    let trimmed = text.trim();
    match trimmed.to_ascii_lowercase().as_str() {
        "" => Ok(None),
        "true" | "yes" | "1" => Ok(Some(true)),
        "false" | "no" | "0" => Ok(Some(false)),
        _ => Err(format!("`{}` is not a flag: expected true or false, yes or no, 1 or 0", shorten(trimmed))),
    }
}

/// Reads an instant as microseconds since 1970-01-01T00:00:00Z; `Ok(None)` for an empty cell.
///
/// Accepts RFC 3339 with an offset, the same with a space for the `T`, a date and time without an
/// offset (taken as UTC) and a plain date (its midnight in UTC).
///
/// # Errors
/// Says what is wrong where the text is none of these.
pub fn parse_time(text: &str) -> Result<Option<i64>, String> {
    let trimmed = text.trim();
    if trimmed.is_empty() {
        return Ok(None);
    }
    let instant = trimmed.parse::<Timestamp>().or_else(|_| {
        trimmed.parse::<civil::DateTime>().and_then(|moment| TimeZone::UTC.to_timestamp(moment))
    });
    instant.map(|moment| Some(moment.as_microsecond())).map_err(|_| {
        format!(
            "`{}` is not a time: expected RFC 3339 such as 2026-03-01T08:30:00Z, or a date",
            shorten(trimmed)
        )
    })
}

/// An instant in RFC 3339, in UTC.
pub fn format_time(micros: i64) -> String {
    Timestamp::from_microsecond(micros).map_or_else(|_| format!("{micros} microseconds"), |t| t.to_string())
}

/// A text for an error message: long ones are cut.
pub fn shorten(text: &str) -> String {
    const LONGEST: usize = 40;
    if text.chars().count() <= LONGEST {
        text.to_owned()
    } else {
        text.chars().take(LONGEST).chain(std::iter::once('…')).collect()
    }
}

fn missing_hint(text: &str) -> &'static str {
    let looks_missing = ["na", "n/a", "nan", "null", "none", ".", "-", "?"];
    if looks_missing.contains(&text.to_ascii_lowercase().as_str()) {
        "; leave the cell empty where the value is missing"
    } else {
        ""
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers() {
        for (text, want) in [("1.5", Some(1.5)), (" -2e3 ", Some(-2000.0)), ("", None), ("  ", None)] {
            assert_eq!(parse_number(text), Ok(want), "{text:?}");
        }
        for text in ["abc", "1,5", "inf", "1e999", "0x10", "1 2"] {
            assert!(parse_number(text).is_err(), "{text:?}");
        }
        assert!(parse_number("NA").unwrap_err().contains("leave the cell empty"));
    }

    #[test]
    fn flags() {
        for (text, want) in [("Yes", Some(true)), ("0", Some(false)), ("", None)] {
            assert_eq!(parse_flag(text), Ok(want), "{text:?}");
        }
        assert!(parse_flag("2").is_err());
    }

    #[test]
    fn times() {
        let day = 86_400_000_000;
        for (text, want) in [
            ("1970-01-02", day),
            ("1970-01-01T01:00:00+01:00", 0),
            ("1970-01-02 00:00:00Z", day),
            ("1970-01-02T00:00:00.000001", day + 1),
        ] {
            assert_eq!(parse_time(text), Ok(Some(want)), "{text:?}");
        }
        for text in ["yesterday", "1970-13-01", "12"] {
            assert!(parse_time(text).is_err(), "{text:?}");
        }
        assert_eq!(format_time(day), "1970-01-02T00:00:00Z");
    }
}
