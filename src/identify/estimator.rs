//! Recursive least squares over samples of several rows, with error bars that stay honest under forgetting.
//!
//! Parameters are counted in units of their own (`scale`), so that all of them are near one. With the gain
//! K = P h' of a row of variance s^2, the covariance of the estimate follows
//! ```text
//! V <- (I - K h) V (I - K h)' + s^2 K K',
//! ```
//! which is P only as long as nothing is forgotten: with forgetting, P says how much is remembered, and error bars
//! from it are too wide. Since `I - K h = lambda P P_before^-1`, the recursion is the same as
//! ```text
//! V = P W P,     W <- lambda^2 W + s^2 h' h,     W_0 = P_0^-1,
//! ```
//! and W is what is kept here, per group of rows: the variance of force rows and that of moment rows are estimated
//! apart, each from its recursive residuals, so that a wrong guess of their ratio does not spoil the error bars. The
//! degrees of freedom used up in a group are `tr(P W_group)`. The residual of a row that is spent on parameters still
//! unknown tells how far the prior was off and not how noisy the row is; it is not counted.

use nalgebra::{DMatrix, DVector};

use super::square_root::{Residual, SquareRoot};

/// Rows come in two groups: forces and moments.
pub const GROUPS: usize = 2;
/// Most parameters.
pub const MOST_PARAMETERS: usize = 16;

/// Share of the prior's knowledge (as one over a deviation) below which nothing more is forgotten.
const FAINT: f64 = 1e-3;
/// A row whose residual keeps less than this share of its own variance is spent on the parameters.
pub const SPENT: f64 = 1e-6;

/// What is assumed before the first sample, in physical units.
#[derive(Debug, Clone, PartialEq)]
pub struct Prior {
    /// Expected size of each parameter, > 0: its unit of account.
    pub scale: Vec<f64>,
    /// Mean, in the parameter's own physical unit.
    pub mean: Vec<f64>,
    /// Standard deviation, in the parameter's own physical unit, > 0.
    pub deviation: Vec<f64>,
}

/// The estimator. It takes one sample after the other and can be read at any time.
#[derive(Debug, Clone)]
pub struct Estimator {
    prior: Prior,
    /// The first so many parameters belong to the ground; a reset forgets them alone.
    ground: usize,
    root: SquareRoot,
    /// What was known before the first row, as it stands in W: of the ground the prior, of the sensor what earlier stances left.
    carried: DMatrix<f64>,
    /// `sum lambda^2(n-i) h' h` per group, upper triangles.
    meat: [DMatrix<f64>; GROUPS],
    /// What is left of the prior's weight: product of all lambda.
    faded: f64,
    /// Discounted sums of squared recursive residuals, and of ones.
    squares: [f64; GROUPS],
    weight: [f64; GROUPS],
    scaled: Vec<f64>,
}

/// Parameters with their covariance, physical units.
#[derive(Debug, Clone, PartialEq)]
pub struct Estimate {
    /// Parameters.
    pub value: Vec<f64>,
    /// Covariance of the estimate (the sandwich form).
    pub covariance: DMatrix<f64>,
    /// `P`, in units of the prior's scale: what the recursion remembers.
    pub memory: DMatrix<f64>,
    /// Standard deviation of a whitened row per group, from residuals; none where no degrees of freedom are left.
    pub noise: [Option<f64>; GROUPS],
    /// Largest over smallest singular value of R in units of the prior's scale.
    pub condition: f64,
    /// Samples that count: their discounted number.
    pub weight: f64,
}

impl Estimator {
    /// Starts from `prior`; the first `ground` parameters are those a reset forgets.
    pub fn new(prior: Prior, ground: usize) -> Self {
        let n = prior.scale.len();
        let unit = |values: &[f64]| -> Vec<f64> { values.iter().zip(&prior.scale).map(|(x, s)| x / s).collect() };
        let root = SquareRoot::prior(&unit(&prior.mean), &unit(&prior.deviation));
        Estimator {
            ground: ground.min(n),
            root,
            carried: prior_information(&prior),
            meat: [DMatrix::zeros(n, n), DMatrix::zeros(n, n)],
            faded: 1.0,
            squares: [0.0; GROUPS],
            weight: [0.0; GROUPS],
            scaled: vec![0.0; n],
            prior,
        }
    }

    /// Ages what is known by `lambda`, 0 < lambda <= 1. Once per sample, before its rows.
    ///
    /// Forgetting pauses while next to nothing is known of some parameter: with a sole that stands still, what was known
    /// would otherwise fade until numbers underflow, and the next motion would meet an estimator without memory.
    pub fn forget(&mut self, lambda: f64) {
        let faint = |(i, deviation): (usize, &f64)| self.root.diagonal(i) * deviation < FAINT * self.prior.scale[i];
        if lambda == 1.0 || self.prior.deviation.iter().enumerate().any(faint) {
            return;
        }
        self.root.forget(lambda);
        for group in 0..GROUPS {
            self.meat[group] *= lambda * lambda;
            self.squares[group] *= lambda;
            self.weight[group] *= lambda;
        }
        self.faded *= lambda;
    }

    /// Takes in a row `y = row x` of unit variance in its group; gives its recursive residual, or none where the row was
    /// spent on the parameters. Rows are in physical units of the parameters.
    pub fn update(&mut self, group: usize, row: &[f64], y: f64) -> Option<f64> {
        let n = self.scaled.len();
        for k in 0..n {
            self.scaled[k] = row[k] * self.prior.scale[k];
        }
        let meat = &mut self.meat[group];
        for i in 0..n {
            let h = self.scaled[i];
            if h != 0.0 {
                for k in i..n {
                    meat[(i, k)] += h * self.scaled[k];
                }
            }
        }
        let Residual { value, share } = self.root.update(&self.scaled, y);
        self.weight[group] += 1.0;
        if share < SPENT {
            return None;
        }
        self.squares[group] += value * value;
        Some(value)
    }

    /// The batch solution: many rows at once, nothing forgotten between them.
    pub fn update_block(&mut self, group: usize, rows: &DMatrix<f64>, y: &DVector<f64>) {
        let mut scaled = rows.clone();
        for (k, scale) in self.prior.scale.iter().enumerate() {
            scaled.column_mut(k).scale_mut(*scale);
        }
        self.meat[group] += scaled.transpose() * &scaled;
        let before = self.root.rss() - self.misfit();
        self.root.update_block(&scaled, y);
        self.squares[group] += (self.root.rss() - self.misfit() - before).max(0.0);
        self.weight[group] += rows.nrows() as f64;
    }

    /// The prior's part of the sum of squares.
    fn misfit(&self) -> f64 {
        let Some(value) = self.value() else { return 0.0 };
        let prior = &self.prior;
        let off = value.iter().zip(&prior.mean).zip(&prior.deviation).map(|((x, m), d)| ((x - m) / d).powi(2));
        self.faded * off.sum::<f64>()
    }

    /// The ground is a new one: its parameters go back to the prior, their covariance with them. What was learnt
    /// about the sensor stays.
    pub fn reset(&mut self) {
        let mean = self.prior.mean.clone();
        self.reset_about(&mean);
    }

    /// The covariance of the ground's parameters goes back to the prior's, about their present values.
    pub fn reset_covariance(&mut self) {
        let mean = self.value().unwrap_or_else(|| self.prior.mean.clone());
        self.reset_about(&mean);
    }

    fn reset_about(&mut self, mean: &[f64]) {
        let n = self.scaled.len();
        let unit = |values: &[f64]| -> Vec<f64> { values.iter().zip(&self.prior.scale).map(|(x, s)| x / s).collect() };
        let (mean, deviation) = (unit(mean), unit(&self.prior.deviation));
        if self.ground == n {
            self.root = SquareRoot::prior(&mean, &deviation);
            self.carried = prior_information(&self.prior);
        } else {
            self.carry_over(&mean, &deviation);
        }
        self.meat = [DMatrix::zeros(n, n), DMatrix::zeros(n, n)];
        self.faded = 1.0;
        self.squares = [0.0; GROUPS];
        self.weight = [0.0; GROUPS];
    }

    /// A reset that keeps the sensor's parameters: their covariance so far stands in W from here on, and what is known of them
    /// whatever the ground is stays in R.
    fn carry_over(&mut self, mean: &[f64], deviation: &[f64]) {
        let (n, ground) = (self.scaled.len(), self.ground);
        let estimate = self.estimate();
        self.root.renew(ground, mean, deviation);
        self.carried = prior_information(&self.prior);
        let Some(estimate) = estimate else { return };
        let sensor = n - ground;
        let corner = self.root.triangle().view((ground, ground), (sensor, sensor)).into_owned();
        let information = corner.transpose() * &corner;
        let unit = DMatrix::from_fn(sensor, sensor, |i, k| {
            let scale = self.prior.scale[ground + i] * self.prior.scale[ground + k];
            estimate.covariance[(ground + i, ground + k)] / scale
        });
        // W such that P W P is that covariance.
        let kept = &information * unit * &information;
        self.carried.view_mut((ground, ground), (sensor, sensor)).copy_from(&kept);
    }

    /// Parameters, physical units; none where R is singular.
    pub fn value(&self) -> Option<Vec<f64>> {
        let mut value = self.root.solution()?;
        value.iter_mut().zip(&self.prior.scale).for_each(|(x, s)| *x *= s);
        Some(value)
    }

    /// Everything that can be read; none where R is singular or a number is not finite.
    pub fn estimate(&self) -> Option<Estimate> {
        let n = self.scaled.len();
        let value = self.value()?;
        let memory = self.root.covariance()?;
        let mut middle = &self.carried * (self.faded * self.faded);
        let mut noise = [None; GROUPS];
        for group in 0..GROUPS {
            let meat = symmetric(&self.meat[group]);
            let used = (&memory * &meat).trace();
            let left = self.weight[group] - used;
            if left > 0.5 {
                noise[group] = Some((self.squares[group] / left).sqrt());
            }
            middle += meat * noise[group].unwrap_or(1.0).powi(2);
        }
        let mut covariance = &memory * middle * &memory;
        for i in 0..n {
            for k in 0..n {
                covariance[(i, k)] *= self.prior.scale[i] * self.prior.scale[k];
            }
        }
        let covariance = (&covariance + covariance.transpose()) * 0.5;
        if !covariance.iter().all(|x| x.is_finite()) {
            return None;
        }
        let singular = self.root.triangle().singular_values();
        let condition = singular.max() / singular.min();
        let weight = self.weight[0] / 3.0;
        Some(Estimate { value, covariance, memory, noise, condition, weight })
    }

    /// The prior it started from.
    pub fn prior(&self) -> &Prior {
        &self.prior
    }

    /// Sum of squared recursive residuals since the last reset, discounted.
    pub fn squares(&self) -> f64 {
        self.squares.iter().sum()
    }
}

/// `P0^-1` in units of the scale.
fn prior_information(prior: &Prior) -> DMatrix<f64> {
    let squares = prior.scale.iter().zip(&prior.deviation).map(|(scale, deviation)| (scale / deviation).powi(2));
    DMatrix::from_diagonal(&DVector::from_iterator(prior.scale.len(), squares))
}

/// The full matrix of an upper triangle.
fn symmetric(upper: &DMatrix<f64>) -> DMatrix<f64> {
    DMatrix::from_fn(upper.nrows(), upper.ncols(), |i, k| if i <= k { upper[(i, k)] } else { upper[(k, i)] })
}
