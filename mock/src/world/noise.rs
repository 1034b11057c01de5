//! Noise without a state: each number depends on (seed, channel, acquisition, sample) and on nothing else, so that it
//! does not matter when, in which order or how often it is asked for.
//!
//! Philox4x32-10 of J. K. Salmon, M. A. Moraes, R. O. Dror, D. E. Shaw, "Parallel random numbers: as easy as 1, 2, 3",
//! SC11 (2011); normal numbers by G. E. P. Box and M. E. Muller, Ann. Math. Stat. 29, 610 (1958).

/// Streams of independent normal numbers of one world.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Noise {
    seed: u64,
}

/// The normal numbers of one channel in one acquisition, in the order of the samples.
#[derive(Debug, Clone)]
pub(crate) struct Stream {
    seed: u64,
    channel: u32,
    acquisition: u64,
    sample: u64,
    spare: f64,
}

impl Noise {
    pub(crate) fn new(seed: u64) -> Noise {
        Noise { seed }
    }

    /// The stream from sample 0 on.
    pub(crate) fn stream(&self, channel: u32, acquisition: u64) -> Stream {
        Stream {
            seed: self.seed,
            channel,
            acquisition,
            sample: 0,
            spare: 0.0,
        }
    }

    /// One normal number (mean 0, standard deviation 1).
    pub(crate) fn normal(&self, channel: u32, acquisition: u64) -> f64 {
        self.stream(channel, acquisition).next()
    }

    /// One number evenly spread over 0..1.
    pub(crate) fn uniform(&self, channel: u32, acquisition: u64) -> f64 {
        uniforms(self.seed, channel, acquisition, 0).0
    }
}

impl Stream {
    /// The next sample's normal number (mean 0, standard deviation 1).
    pub(crate) fn next(&mut self) -> f64 {
        let sample = self.sample;
        self.sample += 1;
        if sample % 2 == 1 {
            return self.spare;
        }
        let (first, second) = uniforms(self.seed, self.channel, self.acquisition, sample / 2);
        let radius = (-2.0 * (1.0 - first).ln()).sqrt();
        let (sine, cosine) = (2.0 * std::f64::consts::PI * second).sin_cos();
        self.spare = radius * sine;
        radius * cosine
    }
}

/// Two numbers in [0, 1).
fn uniforms(seed: u64, channel: u32, acquisition: u64, block: u64) -> (f64, f64) {
    let counter = [
        block as u32,
        acquisition as u32,
        (acquisition >> 32) as u32,
        channel,
    ];
    let words = philox(counter, [seed as u32, (seed >> 32) as u32]);
    let unit = |low: u32, high: u32| {
        ((u64::from(high) << 32 | u64::from(low)) >> 11) as f64 / (1u64 << 53) as f64
    };
    (unit(words[0], words[1]), unit(words[2], words[3]))
}

fn philox(mut counter: [u32; 4], mut key: [u32; 2]) -> [u32; 4] {
    for round in 0..10 {
        if round > 0 {
            key = [
                key[0].wrapping_add(0x9E37_79B9),
                key[1].wrapping_add(0xBB67_AE85),
            ];
        }
        let first = u64::from(counter[0]) * 0xD251_1F53;
        let second = u64::from(counter[2]) * 0xCD9E_8D57;
        counter = [
            (second >> 32) as u32 ^ counter[1] ^ key[0],
            second as u32,
            (first >> 32) as u32 ^ counter[3] ^ key[1],
            first as u32,
        ];
    }
    counter
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn philox_gives_its_authors_known_answers() {
        // kat_vectors, "philox4x32 10", of the authors' Random123 distribution (recalled).
        assert_eq!(
            philox([0; 4], [0; 2]),
            [0x6627_e8d5, 0xe169_c58d, 0xbc57_ac4c, 0x9b00_dbd8]
        );
        assert_eq!(
            philox([u32::MAX; 4], [u32::MAX; 2]),
            [0x408f_276d, 0x41c8_3b0e, 0xa20b_c7c6, 0x6d54_51fd]
        );
        assert_eq!(
            philox(
                [0x243f_6a88, 0x85a3_08d3, 0x1319_8a2e, 0x0370_7344],
                [0xa409_3822, 0x299f_31d0]
            ),
            [0xd16c_fe09, 0x94fd_cceb, 0x5001_e420, 0x2412_6ea1]
        );
    }

    #[test]
    fn normal_numbers_have_the_moments_of_a_normal_distribution() {
        let mut stream = Noise::new(7).stream(1, 3);
        let numbers: Vec<f64> = (0..100_000).map(|_| stream.next()).collect();
        let moment =
            |power| numbers.iter().map(|x| x.powi(power)).sum::<f64>() / numbers.len() as f64;
        // Five standard errors: sqrt(1/n), sqrt(2/n), sqrt(15/n), sqrt(96/n).
        for (power, expected, variance) in
            [(1, 0.0, 1.0), (2, 1.0, 2.0), (3, 0.0, 15.0), (4, 3.0, 96.0)]
        {
            let error: f64 = moment(power) - expected;
            assert!(
                error.abs() < 5.0 * (variance / 1e5f64).sqrt(),
                "moment {power}: off by {error}"
            );
        }
        let lag: f64 = numbers.windows(2).map(|w| w[0] * w[1]).sum::<f64>() / 1e5;
        assert!(lag.abs() < 5.0 / 1e5f64.sqrt());
    }

    #[test]
    fn streams_differ_in_every_part_of_their_address() {
        let noise = Noise::new(1);
        let numbers = [
            noise.normal(1, 1),
            noise.normal(2, 1),
            noise.normal(1, 2),
            Noise::new(2).normal(1, 1),
        ];
        for (i, a) in numbers.iter().enumerate() {
            assert!(numbers[..i].iter().all(|b| a != b));
        }
        assert_eq!(
            noise.normal(1, 1).to_bits(),
            Noise::new(1).normal(1, 1).to_bits()
        );
    }
}
