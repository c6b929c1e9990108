//! Sums in twice the working precision, so that a proof's value is not the rounding of its own addition.

/// A running sum with its rounding errors carried beside it (Ogita, Rump & Oishi 2005, quoted from memory).
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Sum {
    high: f64,
    low: f64,
}

impl Sum {
    /// Adds `a b`, both errors (of product and of sum) kept.
    pub fn add_product(&mut self, a: f64, b: f64) {
        let product = a * b;
        let lost = a.mul_add(b, -product);
        let total = self.high + product;
        let part = total - self.high;
        let lost_in_sum = (self.high - (total - part)) + (product - part);
        self.high = total;
        self.low += lost + lost_in_sum;
    }

    /// The sum, rounded once.
    pub fn value(self) -> f64 {
        self.high + self.low
    }
}

#[cfg(test)]
mod tests {
    use super::Sum;

    #[test]
    fn cancellation_leaves_what_is_left() {
        let mut sum = Sum::default();
        for (a, b) in [(1e16, 1.0), (1.0, 1.0), (-1e16, 1.0), (0.1, 10.0)] {
            sum.add_product(a, b);
        }
        // Derived: 0.1 rounds to 0.1 + 5.55e-18, times ten.
        assert_eq!(sum.value(), 2.0);
    }
}
