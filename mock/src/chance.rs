//! Chance that depends on a seed, a purpose and a number, and on nothing else: no state, no order of events.

/// Uniform in [0, 1), by the finaliser of SplitMix64 (Steele, Lea and Flood 2014, recalled) over the three.
pub fn uniform(seed: u64, purpose: &str, number: u64) -> f64 {
    let purpose = u64::from(crc32c::crc32c(purpose.as_bytes()));
    let mixed = mix(mix(mix(seed) ^ purpose) ^ number);
    (mixed >> 11) as f64 / (1u64 << 53) as f64
}

fn mix(value: u64) -> u64 {
    let mut mixed = value.wrapping_add(0x9E37_79B9_7F4A_7C15);
    mixed = (mixed ^ (mixed >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    mixed ^ (mixed >> 31)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn is_uniform_and_repeats() {
        let drawn: Vec<f64> = (0..10_000)
            .map(|number| uniform(7, "trigger", number))
            .collect();
        let mean = drawn.iter().sum::<f64>() / drawn.len() as f64;
        // The mean of 10,000 draws has a standard deviation of 0.0029.
        assert!((mean - 0.5).abs() < 0.012, "{mean}");
        assert_eq!(drawn[5], uniform(7, "trigger", 5));
        assert_ne!(uniform(7, "trigger", 5), uniform(7, "reply", 5));
        assert_ne!(uniform(7, "trigger", 5), uniform(8, "trigger", 5));
    }
}
