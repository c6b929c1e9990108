//! The largest of many figures and where it was found.

use super::Check;

/// Keeps the largest figure; a figure that is no number is kept for good, so that it can never pass.
#[derive(Debug, Clone, Default)]
pub struct Worst {
    /// The figure, zero where nothing was recorded.
    pub value: f64,
    /// Where it was found.
    pub place: String,
}

impl Worst {
    /// Takes note of a figure.
    pub fn record(&mut self, value: f64, place: impl FnOnce() -> String) {
        if self.value.is_nan() {
            return;
        }
        if value.is_nan() || value > self.value {
            self.value = value;
            self.place = place();
        }
    }

    /// As a line of a certificate.
    pub fn check(self, name: &'static str, relative_to: &'static str, bound: f64) -> Check {
        Check { name, relative_to, value: self.value, bound, worst: self.place }
    }
}
