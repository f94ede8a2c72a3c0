//! A small seeded random source. The history must come out the same on every run and after every
//! change of library versions, so the generator brings its own: SplitMix64 for uniform numbers, the
//! Box–Muller transform for normal ones, and a first-order autoregression for the noise of an
//! instrument, whose neighbouring readings are never quite independent.

/// A stream of pseudo-random numbers that depends on its seed alone.
pub struct Random {
    state: u64,
    spare: Option<f64>,
}

impl Random {
    /// Starts a stream.
    pub fn new(seed: u64) -> Random {
        Random { state: seed, spare: None }
    }

    /// Starts the stream that belongs to `name`, so that one more instrument leaves the others alone.
    /// The name is folded in by the 64-bit FNV-1a hash (Fowler, Noll, Vo; RFC 9923).
    pub fn named(seed: u64, name: &str) -> Random {
        let fold = |h: u64, b: u8| (h ^ u64::from(b)).wrapping_mul(0x0000_0100_0000_01b3);
        Random::new(seed ^ name.bytes().fold(0xcbf2_9ce4_8422_2325, fold))
    }

    /// Returns the next 64 bits.
    ///
    /// # Source
    /// Steele, Lea, Flood (2014), "Fast splittable pseudorandom number generators".
    pub fn bits(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Returns a uniform number in (0, 1): never 0, so that its logarithm exists.
    pub fn uniform(&mut self) -> f64 {
        ((self.bits() >> 12) as f64 + 0.5) / (1_u64 << 52) as f64
    }

    /// Returns a whole number in 0..`n`; `n` is small, so the bias of the remainder is far below notice.
    pub fn below(&mut self, n: u64) -> u64 {
        self.bits() % n
    }

    /// Returns a standard normal number.
    ///
    /// # Source
    /// Box, Muller (1958), "A note on the generation of random normal deviates".
    pub fn normal(&mut self) -> f64 {
        if let Some(z) = self.spare.take() {
            return z;
        }
        let radius = (-2.0 * self.uniform().ln()).sqrt();
        let (sin, cos) = (std::f64::consts::TAU * self.uniform()).sin_cos();
        self.spare = Some(radius * sin);
        radius * cos
    }
}

/// First-order autoregressive noise with standard deviation 1 whatever its dependence.
pub struct Noise {
    random: Random,
    last: f64,
}

impl Noise {
    /// Starts the noise in its long-run distribution.
    pub fn new(mut random: Random) -> Noise {
        let last = random.normal();
        Noise { random, last }
    }

    /// Returns the next value; `phi` is its correlation with the one before, within (−1, 1).
    pub fn next(&mut self, phi: f64) -> f64 {
        self.last = phi * self.last + (1.0 - phi * phi).sqrt() * self.random.normal();
        self.last
    }
}

#[cfg(test)]
mod tests {
    use super::{Noise, Random};

    /// Outside truth: the five numbers for seed 1234567 that Rosetta Code's task
    /// "Pseudo-random numbers/Splitmix64" prescribes.
    #[test]
    fn bits_match_the_published_sequence() {
        let mut random = Random::new(1_234_567);
        for expected in [
            6_457_827_717_110_365_317,
            3_203_168_211_198_807_973,
            9_817_491_932_198_370_423,
            4_593_380_528_125_082_431,
            16_408_922_859_458_223_821,
        ] {
            assert_eq!(random.bits(), expected);
        }
    }

    #[test]
    fn noise_has_unit_spread_and_the_asked_dependence() {
        for phi in [0.0, 0.3, 0.9] {
            let mut noise = Noise::new(Random::new(7));
            let e: Vec<f64> = (0..200_000).map(|_| noise.next(phi)).collect();
            let n = e.len() as f64;
            let mean = e.iter().sum::<f64>() / n;
            let variance = e.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / n;
            let lag1 =
                e.windows(2).map(|w| (w[0] - mean) * (w[1] - mean)).sum::<f64>() / n / variance;
            assert!((variance - 1.0).abs() < 0.04, "seed 7, phi {phi}: variance {variance}");
            assert!((lag1 - phi).abs() < 0.01, "seed 7, phi {phi}: lag-1 correlation {lag1}");
        }
    }
}
