//! Seeded noise whose values do not depend on the version of any library.

/// SplitMix64 (Steele, Lea and Flood, "Fast splittable pseudorandom number
/// generators", OOPSLA 2014; from memory).
#[derive(Debug, Clone)]
pub struct Noise {
    state: u64,
    spare: Option<f64>,
}

impl Noise {
    /// The same seed gives the same noise.
    pub fn new(seed: u64) -> Self {
        Noise {
            state: seed,
            spare: None,
        }
    }

    fn bits(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Uniform in `(0, 1]`, 53 bits.
    pub fn uniform(&mut self) -> f64 {
        ((self.bits() >> 11) + 1) as f64 / (1_u64 << 53) as f64
    }

    /// Standard normal, by the method of Box and Muller (1958).
    pub fn normal(&mut self) -> f64 {
        if let Some(spare) = self.spare.take() {
            return spare;
        }
        let radius = (-2.0 * self.uniform().ln()).sqrt();
        let (sin, cos) = (std::f64::consts::TAU * self.uniform()).sin_cos();
        self.spare = Some(radius * sin);
        radius * cos
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The first values for seed 1234567 as published with the reference code (from
    /// memory), and moments within five standard errors.
    #[test]
    fn noise_is_what_it_says() {
        let mut n = Noise::new(1_234_567);
        assert_eq!(n.bits(), 6_457_827_717_110_365_317);
        assert_eq!(n.bits(), 3_203_168_211_198_807_973);
        let count = 100_000;
        let (mut sum, mut square) = (0.0, 0.0);
        for _ in 0..count {
            let x = n.normal();
            sum += x;
            square += x * x;
        }
        let count = f64::from(count);
        assert!((sum / count).abs() < 5.0 / count.sqrt());
        assert!((square / count - 1.0).abs() < 5.0 * (2.0 / count).sqrt());
    }
}
