//! A small seeded random source, so that a simulated day repeats exactly.

/// Splitmix64: one word of state, good enough for noise and choices, never for secrets.
#[derive(Clone, Debug)]
pub struct Rng(u64);

impl Rng {
    /// The same seed gives the same sequence on every machine.
    pub fn new(seed: u64) -> Self {
        Self(seed)
    }

    /// The next word.
    pub fn next_u64(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^ (z >> 31)
    }

    /// A number from 0 up to, not including, 1.
    pub fn unit(&mut self) -> f64 {
        // 53 bits are what an f64 holds exactly.
        (self.next_u64() >> 11) as f64 / (1u64 << 53) as f64
    }

    /// A number from `low` to `high`, both included. `low` when the range is empty.
    pub fn between(&mut self, low: i64, high: i64) -> i64 {
        if high <= low {
            return low;
        }
        let span = high.abs_diff(low).saturating_add(1);
        low.wrapping_add((self.next_u64() % span) as i64)
    }

    /// True with this probability (0 never, 1 always).
    pub fn chance(&mut self, probability: f64) -> bool {
        self.unit() < probability
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_sequence_is_that_of_splitmix64() {
        // First outputs for seed 1234567 as printed with the public-domain
        // reference implementation of splitmix64 (from memory).
        let mut rng = Rng::new(1_234_567);
        assert_eq!(rng.next_u64(), 6_457_827_717_110_365_317);
        assert_eq!(rng.next_u64(), 3_203_168_211_198_807_973);
    }

    #[test]
    fn ranges_are_kept_and_both_ends_occur() {
        let mut rng = Rng::new(5);
        let drawn: Vec<i64> = (0..200).map(|_| rng.between(-1, 1)).collect();
        for want in [-1, 0, 1] {
            assert!(drawn.contains(&want), "{want} never drawn");
        }
        assert!(drawn.iter().all(|n| (-1..=1).contains(n)));
        assert_eq!(rng.between(7, 3), 7);
        assert!((0..100).all(|_| !rng.chance(0.0)) && (0..100).all(|_| rng.chance(1.0)));
    }
}
