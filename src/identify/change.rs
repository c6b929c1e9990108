//! Did the ground change from one stance to the next?
//!
//! With estimates x1, x2 of the same parameters and covariances V1, V2, independent of each other, the Wald statistic
//! `(x2 - x1)' (V1 + V2)^-1 (x2 - x1)` is distributed like chi squared with as many degrees of freedom as there are
//! parameters, were the ground the same (Wald 1943, Trans. Am. Math. Soc. 54:426-482; quoted from memory).

use nalgebra::{DMatrix, DVector};

use super::whiteness::chi_squared_above;

/// The comparison of two stances.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Change {
    /// Wald statistic.
    pub statistic: f64,
    /// Probability of a larger one on the same ground.
    pub probability: f64,
}

/// Compares the material parameters of two stances (an even number of them); none where the covariances have no
/// inverse.
pub fn compare(first: (&[f64], &DMatrix<f64>), second: (&[f64], &DMatrix<f64>)) -> Option<Change> {
    let n = first.0.len();
    let scale: Vec<f64> = first.0.iter().zip(second.0).map(|(a, b)| a.abs().max(b.abs()).max(f64::MIN_POSITIVE)).collect();
    let difference = DVector::from_fn(n, |i, _| (second.0[i] - first.0[i]) / scale[i]);
    let covariance = DMatrix::from_fn(n, n, |i, k| (first.1[(i, k)] + second.1[(i, k)]) / (scale[i] * scale[k]));
    let solved = covariance.cholesky()?.solve(&difference);
    let statistic = difference.dot(&solved);
    statistic.is_finite().then(|| Change { statistic, probability: chi_squared_above(statistic, n) })
}
