//! How things are written into columns.

use std::borrow::Cow;

use kilter_drift::Summary;

use crate::error::LedgerError;
use crate::types::Stream;

/// A 64-bit hash of the id of a record of a model (FNV-1a with a final mix), stable for ever: it
/// is stored.
pub(crate) fn id_hash(model: i64, id: &str) -> i64 {
    let start = 0xCBF2_9CE4_8422_2325 ^ model.cast_unsigned().wrapping_mul(0x9E37_79B9_7F4A_7C15);
    let hash =
        id.bytes().fold(start, |hash: u64, byte| (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01B3));
    let mixed = (hash ^ (hash >> 32)).wrapping_mul(0x9E37_79B9_7F4A_7C15);
    (mixed ^ (mixed >> 29)).cast_signed()
}

pub(crate) fn floats_to_bytes(values: &[f64]) -> Vec<u8> {
    let mut bytes = Vec::with_capacity(8 * values.len());
    for value in values {
        bytes.extend_from_slice(&value.to_le_bytes());
    }
    bytes
}

pub(crate) fn floats_from_bytes(bytes: &[u8]) -> Result<Vec<f64>, LedgerError> {
    let (chunks, rest) = bytes.as_chunks::<8>();
    if !rest.is_empty() {
        return Err(LedgerError::damaged("numbers", format!("{} bytes are no 64-bit numbers", bytes.len())));
    }
    Ok(chunks.iter().map(|chunk| f64::from_le_bytes(*chunk)).collect())
}

pub(crate) fn integers_to_bytes(values: &[i64]) -> Vec<u8> {
    values.iter().flat_map(|value| value.to_le_bytes()).collect()
}

pub(crate) fn integers_from_bytes(bytes: &[u8]) -> Result<Vec<i64>, LedgerError> {
    Ok(floats_from_bytes(bytes)?.into_iter().map(|value| value.to_bits().cast_signed()).collect())
}

pub(crate) fn segments_to_text(segments: &[String]) -> Result<String, LedgerError> {
    serde_json::to_string(segments).map_err(|error| LedgerError::damaged("segments", error))
}

pub(crate) fn segments_from_text(text: &str) -> Result<Vec<String>, LedgerError> {
    serde_json::from_str(text).map_err(|error| LedgerError::damaged("segments", error))
}

/// MessagePack with the names of the parts: a number takes nine bytes and is not rounded, reading
/// needs no parsing of digits, and parts that a later version adds can be told from those of an
/// earlier one.
pub(crate) fn summary_to_bytes(summary: &Summary) -> Result<Vec<u8>, LedgerError> {
    rmp_serde::to_vec_named(summary).map_err(|error| LedgerError::damaged("a summary", error))
}

pub(crate) fn summary_from_bytes(bytes: &[u8]) -> Result<Summary, LedgerError> {
    rmp_serde::from_slice(bytes).map_err(|error| LedgerError::damaged("a summary", error))
}

/// Field and value of a stream; both empty for all records.
pub(crate) fn stream_columns(stream: &Stream) -> (&str, &str) {
    match stream {
        Stream::All => ("", ""),
        Stream::Segment { field, value } => (field, value),
    }
}

pub(crate) fn stream_from_columns(field: String, value: String) -> Stream {
    if field.is_empty() { Stream::All } else { Stream::Segment { field, value } }
}

/// Begins a replacement in [`without_nul`].
const ESCAPE: char = '\u{E000}';

/// A text for a column that cannot hold the character NUL. Two different texts stay different, and
/// nearly all stay as they are.
pub(crate) fn without_nul(text: &str) -> Cow<'_, str> {
    if !text.contains(['\0', ESCAPE]) {
        return Cow::Borrowed(text);
    }
    let mut escaped = String::with_capacity(text.len() + 8);
    for character in text.chars() {
        match character {
            '\0' => escaped.extend([ESCAPE, '0']),
            ESCAPE => escaped.extend([ESCAPE, '1']),
            other => escaped.push(other),
        }
    }
    Cow::Owned(escaped)
}

/// The text that [`without_nul`] was given.
pub(crate) fn with_nul(text: String) -> String {
    if !text.contains(ESCAPE) {
        return text;
    }
    let mut pieces = text.split(ESCAPE);
    let mut plain = pieces.next().unwrap_or_default().to_owned();
    for piece in pieces {
        let (nul, rest) = match piece.strip_prefix('0') {
            Some(rest) => (true, rest),
            None => (false, piece.strip_prefix('1').unwrap_or(piece)),
        };
        plain.push(if nul { '\0' } else { ESCAPE });
        plain.push_str(rest);
    }
    plain
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_come_back_bit_for_bit() {
        let values = [0.1, -0.0, f64::NAN, f64::INFINITY, 5e-324];
        let again = floats_from_bytes(&floats_to_bytes(&values)).unwrap();
        assert!(values.iter().zip(&again).all(|(a, b)| a.to_bits() == b.to_bits()));
        assert!(floats_from_bytes(&[1, 2, 3]).is_err());
    }

    #[test]
    fn texts_with_any_characters_come_back() {
        let odd = ["", "S-1041", "\0", "a\0b", "\u{E000}", "\u{E000}0", "\0\u{E000}1", "\u{E000}\u{E000}\0"];
        for text in odd {
            let kept = without_nul(text);
            assert!(!kept.contains('\0'), "{text:?}");
            assert_eq!(with_nul(kept.clone().into_owned()), text);
            assert!(odd.iter().filter(|other| without_nul(other) == kept).count() == 1, "{text:?}");
        }
    }

    /// Stored hashes must never change. These were computed once with an independent
    /// implementation in Python.
    #[test]
    fn hashes_are_stable() {
        for (model, id, want) in HASHES {
            assert_eq!(id_hash(model, id), want, "{model} {id}");
        }
    }

    const HASHES: [(i64, &str, i64); 4] = [
        (0, "", -8_831_310_031_781_878_669),
        (1, "S-1041", -5_993_155_617_468_855_689),
        (2, "S-1041", -3_882_882_939_282_053_773),
        (1, "Zürich-7", 7_668_730_342_815_857_687),
    ];
}
