//! A small seeded generator: the same draws on every machine.

/// SplitMix64 (Steele, Lea & Flood 2014, quoted from memory).
#[derive(Debug, Clone)]
pub(super) struct Random {
    state: u64,
}

impl Random {
    pub fn new(seed: u64) -> Random {
        Random { state: seed }
    }

    fn next(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^ (z >> 31)
    }

    /// Uniform in (0, 1].
    fn uniform(&mut self) -> f64 {
        ((self.next() >> 11) as f64 + 1.0) / (1u64 << 53) as f64
    }

    /// Standard normal, by the transformation of Box and Muller.
    pub fn normal(&mut self) -> f64 {
        let radius = (-2.0 * self.uniform().ln()).sqrt();
        radius * (std::f64::consts::TAU * self.uniform()).cos()
    }
}

#[cfg(test)]
mod tests {
    use super::Random;

    #[test]
    fn draws_are_the_published_ones_and_normal_moments_come_out() {
        // First outputs of SplitMix64 for seed 1234567 (published with the reference code, quoted from memory).
        let mut random = Random::new(1234567);
        assert_eq!([random.next(), random.next()], [6457827717110365317, 3203168211198807973]);
        let n = 20000;
        let draws: Vec<f64> = (0..n).map(|_| random.normal()).collect();
        let mean = draws.iter().sum::<f64>() / n as f64;
        let variance = draws.iter().map(|d| d * d).sum::<f64>() / n as f64;
        // Derived: standard errors 1/sqrt(n) and sqrt(2/n); four of them.
        assert!(mean.abs() < 4.0 / (n as f64).sqrt() && (variance - 1.0).abs() < 4.0 * (2.0 / n as f64).sqrt(), "{mean} {variance}");
    }
}
