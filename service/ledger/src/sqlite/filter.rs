//! A filter that says of most keys that are not in a set that they are not (Bloom 1970; blocked as
//! in Putze, Sanders & Singler 2007, so that a question touches one cache line).

use crate::error::LedgerError;

const WORDS_PER_BLOCK: usize = 8;
const BITS_PER_BLOCK: usize = 64 * WORDS_PER_BLOCK;
/// With seven bits set for each key about one question in a hundred is answered in vain.
const BITS_PER_KEY: usize = 11;
const BITS_SET: u32 = 7;
/// Bits of the mixed key that choose one bit of a block.
const BITS_OF_CHOICE: u32 = BITS_PER_BLOCK.ilog2();

/// A filter over 64-bit hashes.
#[derive(Debug)]
pub(crate) struct Filter {
    words: Vec<u64>,
}

impl Filter {
    pub(crate) fn of(keys: impl ExactSizeIterator<Item = i64>) -> Self {
        let blocks = (keys.len() * BITS_PER_KEY).div_ceil(BITS_PER_BLOCK).max(1);
        let mut filter = Self { words: vec![0; blocks * WORDS_PER_BLOCK] };
        for key in keys {
            let (block, choices) = filter.place(key);
            for bit in choices {
                filter.words[block + bit / 64] |= 1 << (bit % 64);
            }
        }
        filter
    }

    /// Whether the set may hold the key; `false` is certain.
    pub(crate) fn may_hold(&self, key: i64) -> bool {
        let (block, mut choices) = self.place(key);
        choices.all(|bit| self.words[block + bit / 64] & (1 << (bit % 64)) != 0)
    }

    pub(crate) fn to_bytes(&self) -> Vec<u8> {
        self.words.iter().flat_map(|word| word.to_le_bytes()).collect()
    }

    pub(crate) fn from_bytes(bytes: &[u8]) -> Result<Self, LedgerError> {
        let (chunks, rest) = bytes.as_chunks::<8>();
        if !rest.is_empty() || chunks.is_empty() || chunks.len() % WORDS_PER_BLOCK != 0 {
            return Err(LedgerError::damaged(
                "a filter",
                format!("{} bytes are no whole blocks", bytes.len()),
            ));
        }
        Ok(Self { words: chunks.iter().map(|chunk| u64::from_le_bytes(*chunk)).collect() })
    }

    /// First word of the key's block, and its bits in the block.
    fn place(&self, key: i64) -> (usize, impl Iterator<Item = usize> + use<>) {
        let key = key.cast_unsigned();
        let blocks = (self.words.len() / WORDS_PER_BLOCK) as u128;
        let block = ((u128::from(key) * blocks) >> 64) as usize;
        let mixed = key.wrapping_mul(0xD6E8_FEB8_6659_FD93);
        let choice = move |i: u32| (mixed >> (i * BITS_OF_CHOICE)) as usize % BITS_PER_BLOCK;
        (block * WORDS_PER_BLOCK, (0..BITS_SET).map(choice))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::codes::id_hash;

    #[test]
    fn holds_all_its_keys_and_few_others() {
        let keys: Vec<i64> = (0..100_000).map(|i| id_hash(1, &format!("S-{i}"))).collect();
        let filter = Filter::from_bytes(&Filter::of(keys.iter().copied()).to_bytes()).unwrap();
        assert!(keys.iter().all(|key| filter.may_hold(*key)));
        let others = (0..100_000).filter(|i| filter.may_hold(id_hash(1, &format!("T-{i}")))).count();
        // A blocked filter of 11 bits a key answers about 1.0 % in vain; three standard deviations
        // of a count of 1000 are 95.
        assert!((300..1_500).contains(&others), "{others} of 100 000 in vain");
    }

    #[test]
    fn an_empty_set_holds_nothing() {
        let filter = Filter::of(std::iter::empty::<i64>().collect::<Vec<_>>().into_iter());
        assert!(!filter.may_hold(7));
        assert!(Filter::from_bytes(&[]).is_err() && Filter::from_bytes(&[0; 63]).is_err());
    }
}
