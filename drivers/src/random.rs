//! Random numbers for resynchronisation and for links spoilt on purpose: few, quick, seeded. Not for secrets.

use std::hash::{BuildHasher, RandomState};

/// The generator SplitMix64 (Steele, Lea and Flood, OOPSLA 2014).
#[derive(Debug, Clone)]
pub struct Random {
    state: u64,
}

impl Random {
    /// The same numbers for the same seed.
    pub fn seeded(seed: u64) -> Self {
        Self { state: seed }
    }

    /// Other numbers in every process.
    pub fn fresh() -> Self {
        Self::seeded(RandomState::new().hash_one(std::process::id()))
    }

    /// The next 64 bits.
    pub fn bits(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// From 0 up to, not including, `limit`; 0 for a limit of 0.
    pub fn below(&mut self, limit: usize) -> usize {
        match u64::try_from(limit) {
            Ok(limit @ 1..) => usize::try_from(self.bits() % limit).unwrap_or(0),
            _ => 0,
        }
    }

    /// True with the probability `share`.
    pub fn chance(&mut self, share: f64) -> bool {
        share > 0.0 && ((self.bits() >> 11) as f64) < share * (1u64 << 53) as f64
    }
}
