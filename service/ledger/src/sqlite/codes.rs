//! How things are written into columns.

use crate::error::LedgerError;
use crate::types::Stream;

/// A 64-bit hash of an id (FNV-1a with a final mix), stable for ever: it is stored.
pub(crate) fn id_hash(id: &str) -> i64 {
    let hash = id.bytes().fold(0xCBF2_9CE4_8422_2325, |hash: u64, byte| {
        (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01B3)
    });
    let mixed = (hash ^ (hash >> 32)).wrapping_mul(0x9E37_79B9_7F4A_7C15);
    (mixed ^ (mixed >> 29)).cast_signed()
}

pub(crate) fn floats_to_bytes(values: &[f64]) -> Vec<u8> {
    values.iter().flat_map(|value| value.to_le_bytes()).collect()
}

pub(crate) fn floats_from_bytes(bytes: &[u8]) -> Result<Vec<f64>, LedgerError> {
    let (chunks, rest) = bytes.as_chunks::<8>();
    if !rest.is_empty() {
        return Err(LedgerError::damaged("numbers", format!("{} bytes are no 64-bit numbers", bytes.len())));
    }
    Ok(chunks.iter().map(|chunk| f64::from_le_bytes(*chunk)).collect())
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

    /// Stored hashes must never change.
    #[test]
    fn hashes_are_stable() {
        assert_eq!(id_hash(""), id_hash(""));
        assert_ne!(id_hash("S-1"), id_hash("S-2"));
        assert_eq!(id_hash("S-1041"), HASH_OF_S_1041);
    }

    /// Computed once with an independent implementation in Python.
    const HASH_OF_S_1041: i64 = 8_664_225_008_637_256_268;
}
