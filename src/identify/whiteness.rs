//! Are residuals independent of one another? If not, something is missing from the law, and error bars are too small.
//!
//! Ljung and Box (1978, Biometrika 65:297-303; quoted from memory): with r_k the autocorrelation of n residuals at lag k,
//! `Q = n (n + 2) sum_{k=1}^{m} r_k^2 / (n - k)` is distributed like chi squared with m degrees of freedom where they
//! are independent. Recursive residuals are, under the model, so no degrees are taken off for the parameters.

/// Lags looked at.
pub const LAGS: usize = 10;

/// Running sums of one axis.
#[derive(Debug, Clone, Default)]
pub struct Whiteness {
    recent: [f64; LAGS],
    count: u64,
    squares: f64,
    products: [f64; LAGS],
}

/// What the sums say.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Verdict {
    /// The statistic.
    pub statistic: f64,
    /// Probability of a larger one if residuals were independent.
    pub probability: f64,
    /// Autocorrelation at lag one.
    pub lag_one: f64,
}

impl Whiteness {
    /// Takes the next residual.
    pub fn push(&mut self, residual: f64) {
        for (product, past) in self.products.iter_mut().zip(&self.recent) {
            *product += residual * past;
        }
        self.recent.rotate_right(1);
        self.recent[0] = residual;
        self.squares += residual * residual;
        self.count += 1;
    }

    /// Root mean square.
    pub fn rms(&self) -> f64 {
        if self.count == 0 { 0.0 } else { (self.squares / self.count as f64).sqrt() }
    }

    /// Residuals so far.
    pub fn count(&self) -> u64 {
        self.count
    }

    /// None with fewer than four residuals per lag, or where all are zero.
    pub fn verdict(&self) -> Option<Verdict> {
        if self.count < 4 * LAGS as u64 || self.squares <= 0.0 {
            return None;
        }
        let n = self.count as f64;
        let sum: f64 = self.products.iter().enumerate().map(|(k, p)| (p / self.squares).powi(2) / (n - (k + 1) as f64)).sum();
        let statistic = n * (n + 2.0) * sum;
        Some(Verdict { statistic, probability: chi_squared_above(statistic, LAGS), lag_one: self.products[0] / self.squares })
    }
}

/// Probability that chi squared with an even number of degrees of freedom exceeds x:
/// `exp(-x/2) sum_{j < degrees/2} (x/2)^j / j!` (Abramowitz and Stegun 26.4.5; quoted from memory).
pub fn chi_squared_above(x: f64, degrees: usize) -> f64 {
    let half = x / 2.0;
    let mut term = (-half).exp();
    let mut sum = term;
    for j in 1..degrees / 2 {
        term *= half / j as f64;
        sum += term;
    }
    sum.clamp(0.0, 1.0)
}
