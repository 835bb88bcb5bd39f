//! Which rows are kept out of the fit, and the hash that draws them.

/// The increment of `SplitMix64`: the golden ratio as a 64-bit fraction.
const GOLDEN: u64 = 0x9E37_79B9_7F4A_7C15;

/// The output function of `SplitMix64` (Steele, Lea and Flood 2014).
fn mix(state: u64) -> u64 {
    let state = (state ^ (state >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    let state = (state ^ (state >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    state ^ (state >> 31)
}

/// The `number`-th output of `SplitMix64` started from `seed`, counted from 0.
pub(crate) fn draw(number: u64, seed: u64) -> u64 {
    mix(seed.wrapping_add(number.wrapping_add(1).wrapping_mul(GOLDEN)))
}

/// A 64-bit hash of a text: FNV-1a, mixed.
pub(crate) fn hash_text(text: &str) -> u64 {
    let fnv = text.bytes().fold(0xCBF2_9CE4_8422_2325, |hash: u64, byte| {
        (hash ^ u64::from(byte)).wrapping_mul(0x0100_0000_01B3)
    });
    mix(fnv)
}

/// What a row is drawn by: its id, or its number where it has none.
pub(crate) fn row_key(number: u64, id: Option<&str>) -> u64 {
    id.map_or(number, hash_text)
}

/// Whether a row with this key belongs to a random share.
fn in_share(key: u64, seed: u64, share: f64) -> bool {
    // The upper 53 bits as a fraction of one, exactly.
    ((draw(key, seed) >> 11) as f64) * (0.5f64).powi(53) < share
}

/// Decides for each row of a table whether it was kept out of the fit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Split {
    /// No row is kept out.
    None,
    /// Rows later than an instant are kept out.
    Latest {
        /// Microseconds since 1970-01-01T00:00:00Z; the last instant that belongs to the fit.
        last_fitted: i64,
    },
    /// A random share of the rows is kept out.
    Share {
        /// The share.
        share: f64,
        /// Which of the random shares.
        seed: u64,
    },
}

impl Split {
    /// Whether a row is kept out of the fit.
    ///
    /// `number` counts all rows of the source from 0, `id` is the row's id where the plan names a
    /// column for it, `time` its time in microseconds since 1970-01-01T00:00:00Z. A row without a
    /// time is refused by a fit that splits by time, and is on neither side of it.
    pub fn holds_out(&self, number: u64, id: Option<&str>, time: Option<i64>) -> bool {
        match *self {
            Self::None => false,
            Self::Latest { last_fitted } => time.is_some_and(|time| time > last_fitted),
            Self::Share { share, seed } => in_share(row_key(number, id), seed, share),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// First outputs of the reference implementation for seed 0.
    #[test]
    fn split_mix_equals_the_reference() {
        let outputs: Vec<u64> = (0..3).map(|number| draw(number, 0)).collect();
        assert_eq!(outputs, [0xE220_A839_7B1D_CDAF, 0x6E78_9E6A_A1B9_65F4, 0x06C4_5D18_8009_454F]);
    }

    #[test]
    fn a_share_is_as_large_as_it_says() {
        for by_id in [false, true] {
            let split = Split::Share { share: 0.2, seed: 7 };
            let held = (0..100_000)
                .filter(|&number| {
                    let id = format!("S-{number}");
                    split.holds_out(number, by_id.then_some(id.as_str()), None)
                })
                .count();
            // Four binomial standard deviations.
            assert!((held as f64 - 20_000.0).abs() < 4.0 * (100_000.0f64 * 0.2 * 0.8).sqrt(), "{held}");
        }
    }

    #[test]
    fn the_same_id_falls_on_the_same_side_wherever_it_stands() {
        let split = Split::Share { share: 0.5, seed: 1 };
        assert_eq!(split.holds_out(3, Some("S-9"), None), split.holds_out(90, Some("S-9"), None));
        let latest = Split::Latest { last_fitted: 10 };
        assert_eq!([9, 10, 11].map(|time| latest.holds_out(0, None, Some(time))), [false, false, true]);
    }
}
