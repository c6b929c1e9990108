//! Linear least squares, row by row, in square-root information form.
//!
//! What is known of the parameters x after some rows `y = h x + e`, e of unit variance, is kept as `R x = z + unit noise`
//! with R upper triangular, and the sum of squares that no x can remove:
//! ```text
//! |R x - z|^2 + rss  =  (x - x0)' P0^-1 (x - x0) + sum (y - h x)^2.
//! ```
//! A row is rotated into R by Givens rotations, which never form `H'H` and so lose half as many digits as the
//! covariance form (Bierman 1977, Factorization Methods for Discrete Sequential Estimation; quoted from memory). What
//! the rotations leave of y is the recursive residual
//! ```text
//! delta = (y - h x_before) / sqrt(1 + h P_before h'),
//! ```
//! independent from row to row and of unit variance where the model holds (Brown, Durbin, Evans 1975, J. R. Stat. Soc.
//! B 37:149-192; quoted from memory), and rss grows by exactly delta^2. Forgetting multiplies R, z by sqrt(lambda) and rss by
//! lambda; then `P = (lambda^n P0^-1 + sum lambda^(n-i) h_i' h_i)^-1` (Ljung 1999, System Identification; quoted from memory).
//!
//! A block of rows is taken in at once by Householder reflections: the batch solution, on the same triangle.

use nalgebra::{DMatrix, DVector};

/// What a row leaves over.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Residual {
    /// The recursive residual.
    pub value: f64,
    /// `1 / (1 + h P_before h')`: near 0 the row was spent on parameters that were unknown until then.
    pub share: f64,
}

/// Triangle, right side and what is left over.
#[derive(Debug, Clone, PartialEq)]
pub struct SquareRoot {
    size: usize,
    /// Rows of R one after the other, the lower triangle zero.
    triangle: Vec<f64>,
    right: Vec<f64>,
    /// Weighted sum of squared residuals at the best x, the prior's included.
    rss: f64,
    work: Vec<f64>,
}

impl SquareRoot {
    /// Nothing is known: R = 0.
    pub fn unknown(size: usize) -> Self {
        let (triangle, right, work) = (vec![0.0; size * size], vec![0.0; size], vec![0.0; size]);
        SquareRoot { size, triangle, right, rss: 0.0, work }
    }

    /// Each parameter near `mean` with standard deviation `deviation` > 0, independent of the others.
    pub fn prior(mean: &[f64], deviation: &[f64]) -> Self {
        let mut out = SquareRoot::unknown(mean.len());
        for (i, (mean, deviation)) in mean.iter().zip(deviation).enumerate() {
            out.triangle[i * out.size + i] = 1.0 / deviation;
            out.right[i] = mean / deviation;
        }
        out
    }

    /// Number of parameters.
    pub fn size(&self) -> usize {
        self.size
    }

    /// Weighted sum of squared residuals at the best parameters (the prior counts as rows).
    pub fn rss(&self) -> f64 {
        self.rss
    }

    /// Everything known so far weighs `lambda` (0 < lambda <= 1) times as much.
    pub fn forget(&mut self, lambda: f64) {
        if lambda == 1.0 {
            return;
        }
        let root = lambda.sqrt();
        self.triangle.iter_mut().chain(&mut self.right).for_each(|x| *x *= root);
        self.rss *= lambda;
    }

    /// Diagonal element of R: one over the deviation of a parameter while those after it are held.
    pub fn diagonal(&self, place: usize) -> f64 {
        self.triangle.get(place * self.size + place).copied().unwrap_or(0.0)
    }

    /// Takes in one row of unit variance, `row` as long as there are parameters.
    pub fn update(&mut self, row: &[f64], y: f64) -> Residual {
        let n = self.size;
        self.work[..n].copy_from_slice(&row[..n]);
        let (mut rest, mut share) = (y, 1.0);
        for j in 0..n {
            let h = self.work[j];
            if h == 0.0 {
                continue;
            }
            let line = &mut self.triangle[j * n..(j + 1) * n];
            let length = (line[j] * line[j] + h * h).sqrt();
            let (c, s) = (line[j] / length, h / length);
            line[j] = length;
            for k in j + 1..n {
                let (r, w) = (line[k], self.work[k]);
                line[k] = c * r + s * w;
                self.work[k] = c * w - s * r;
            }
            let z = self.right[j];
            self.right[j] = c * z + s * rest;
            rest = c * rest - s * z;
            share *= c * c;
        }
        self.rss += rest * rest;
        Residual { value: rest, share }
    }

    /// Takes in many rows of unit variance at once, by Householder reflections of `[R z; H y]`.
    pub fn update_block(&mut self, rows: &DMatrix<f64>, y: &DVector<f64>) {
        let (n, m) = (self.size, rows.nrows());
        let mut stacked = DMatrix::zeros(n + m, n + 1);
        for i in 0..n {
            for k in i..n {
                stacked[(i, k)] = self.triangle[i * n + k];
            }
            stacked[(i, n)] = self.right[i];
        }
        stacked.view_mut((n, 0), (m, n)).copy_from(rows);
        stacked.view_mut((n, n), (m, 1)).copy_from(y);
        let triangle = stacked.qr().r();
        for i in 0..n.min(triangle.nrows()) {
            // Signs so that the diagonal is not negative: the recursion relies on it.
            let sign = if triangle[(i, i)] < 0.0 { -1.0 } else { 1.0 };
            for k in i..n {
                self.triangle[i * n + k] = sign * triangle[(i, k)];
            }
            self.right[i] = sign * triangle[(i, n)];
        }
        if triangle.nrows() > n {
            self.rss += triangle[(n, n)].powi(2);
        }
    }

    /// Forgets all about the first `count` parameters, which get the given prior; what is known of the others, whatever
    /// the first ones are, is kept: it stands in the lower right corner of R.
    pub fn renew(&mut self, count: usize, mean: &[f64], deviation: &[f64]) {
        let n = self.size;
        for i in 0..count.min(n) {
            self.triangle[i * n..(i + 1) * n].fill(0.0);
            self.triangle[i * n + i] = 1.0 / deviation[i];
            self.right[i] = mean[i] / deviation[i];
        }
        self.rss = 0.0;
    }

    /// The parameters; none where R is singular.
    pub fn solution(&self) -> Option<Vec<f64>> {
        let n = self.size;
        let mut x = self.right.clone();
        for i in (0..n).rev() {
            let line = &self.triangle[i * n..(i + 1) * n];
            let known: f64 = (i + 1..n).map(|k| line[k] * x[k]).sum();
            x[i] = (x[i] - known) / line[i];
            if !x[i].is_finite() {
                return None;
            }
        }
        Some(x)
    }

    /// `R^-1`, upper triangular; none where R is singular.
    pub fn inverse(&self) -> Option<DMatrix<f64>> {
        let n = self.size;
        let mut inverse = DMatrix::zeros(n, n);
        for column in 0..n {
            for i in (0..=column).rev() {
                let line = &self.triangle[i * n..(i + 1) * n];
                let known: f64 = (i + 1..=column).map(|k| line[k] * inverse[(k, column)]).sum();
                let one = if i == column { 1.0 } else { 0.0 };
                inverse[(i, column)] = (one - known) / line[i];
                if !inverse[(i, column)].is_finite() {
                    return None;
                }
            }
        }
        Some(inverse)
    }

    /// `P = (R'R)^-1`; none where R is singular.
    pub fn covariance(&self) -> Option<DMatrix<f64>> {
        let inverse = self.inverse()?;
        Some(&inverse * inverse.transpose())
    }

    /// R itself.
    pub fn triangle(&self) -> DMatrix<f64> {
        DMatrix::from_row_slice(self.size, self.size, &self.triangle)
    }
}
