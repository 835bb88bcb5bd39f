//! Spans of time as people write them: `90s`, `15m`, `12h`, `5d`, `2w`.

use std::time::Duration;

use serde::{Deserialize, Deserializer};

/// A span of time in a configuration file.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, schemars::JsonSchema)]
#[schemars(with = "String")]
pub(crate) struct Span(pub(crate) Duration);

impl Span {
    /// A span of seconds.
    pub(crate) const fn from_seconds(seconds: u64) -> Self {
        Self(Duration::from_secs(seconds))
    }
}

/// Reads a span such as `5d`.
pub(crate) fn parse(text: &str) -> Result<Duration, String> {
    let refusal =
        || format!("`{text}` is not a span of time: expected a whole number and s, m, h, d or w, such as 5d");
    let trimmed = text.trim();
    let unit = trimmed.chars().last().ok_or_else(refusal)?;
    let seconds_per_unit = match unit {
        's' => 1,
        'm' => 60,
        'h' => 3600,
        'd' => 86_400,
        'w' => 604_800,
        _ => return Err(refusal()),
    };
    let count: u64 = trimmed[..trimmed.len() - unit.len_utf8()].trim().parse().map_err(|_| refusal())?;
    count.checked_mul(seconds_per_unit).map(Duration::from_secs).ok_or_else(refusal)
}

impl<'de> Deserialize<'de> for Span {
    fn deserialize<D: Deserializer<'de>>(source: D) -> Result<Self, D::Error> {
        let text = String::deserialize(source)?;
        parse(&text).map(Self).map_err(serde::de::Error::custom)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spans() {
        for (text, seconds) in [("90s", 90), ("1m", 60), ("12h", 43_200), ("5d", 432_000), ("2 w", 1_209_600)]
        {
            assert_eq!(parse(text), Ok(Duration::from_secs(seconds)), "{text}");
        }
        for text in ["", "5", "d", "-1d", "1.5h", "5y", "99999999999999999999d", "5µ"] {
            assert!(parse(text).is_err(), "{text}");
        }
    }
}
