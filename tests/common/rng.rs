//! Seeded random numbers for test data: the same on every machine.
//!
//! Use: `#[path = "common/rng.rs"] mod rng;`

#![allow(dead_code, missing_docs)]

/// Splitmix64: small, seeded, good enough for test data.
#[derive(Debug, Clone)]
pub struct Rng(pub u64);

impl Rng {
    pub fn next_u64(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Uniform in [low, high).
    pub fn uniform(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * (self.next_u64() >> 11) as f64 / (1u64 << 53) as f64
    }

    /// Uniform in 0..n.
    pub fn below(&mut self, n: usize) -> usize {
        (self.next_u64() % n.max(1) as u64) as usize
    }

    pub fn triple(&mut self, size: f64) -> [f64; 3] {
        [self.uniform(-size, size), self.uniform(-size, size), self.uniform(-size, size)]
    }

    pub fn list(&mut self, n: usize, size: f64) -> Vec<f64> {
        (0..n).map(|_| self.uniform(-size, size)).collect()
    }

    pub fn pick<'a, T>(&mut self, items: &'a [T]) -> &'a T {
        &items[self.below(items.len())]
    }

    pub fn shuffle<T>(&mut self, items: &mut [T]) {
        for i in (1..items.len()).rev() {
            let other = self.below(i + 1);
            items.swap(i, other);
        }
    }
}
