//! Torque differences, as far as the question determines torques.
//!
//! The directions left free after the last priority, before the tie-break, are taken out of a difference: with Q an orthonormal basis
//! of their torque parts (torques in their natural sizes), what is left is `d - Q Q' d`, the shortest difference to any torques that
//! are as good.

use nalgebra::{DMatrix, DVector};

use super::tolerances::Tolerances;
use crate::reference::Work;

/// Parts of a free direction below this move no torque.
const MOVES: f64 = 1e-7;
/// Sweeps of a singular value decomposition.
const MOST_SWEEPS: usize = 10_000;

/// Torques of a reference, and what it leaves open about them.
#[derive(Debug, Clone)]
pub struct Determined {
    /// Torque per joint (N m or N), zero on passive joints.
    pub reference: Vec<f64>,
    /// Tolerance per joint (N m or N).
    pub tolerance: Vec<f64>,
    scale: Vec<f64>,
    open: DMatrix<f64>,
}

impl Determined {
    /// From a solved question.
    pub fn new(work: &Work, tolerances: &Tolerances) -> Determined {
        let layout = &work.assembly.layout;
        let columns = |f: &dyn Fn(usize) -> f64| layout.torque.iter().map(|c| c.map_or(0.0, f)).collect::<Vec<f64>>();
        let scale = columns(&|c| layout.columns[c].scale);
        let basis = &work.solution.free.basis;
        let parts = DMatrix::from_fn(layout.torque.len(), basis.len(), |j, d| layout.torque[j].map_or(0.0, |c| basis[d][c]));
        Determined {
            reference: columns(&|c| work.solution.x[c] * layout.columns[c].scale),
            tolerance: columns(&|c| tolerances.of_torque(&layout.columns[c])),
            scale,
            open: orthonormal(parts),
        }
    }

    /// Independent directions of torque that are open.
    pub fn free(&self) -> usize {
        self.open.ncols()
    }

    /// What is left per joint of the difference between `torques` and the reference's (N m or N).
    pub fn difference(&self, torques: &[f64]) -> Vec<f64> {
        let n = self.scale.len();
        let entry = |j: usize| if self.scale[j] > 0.0 { (torques[j] - self.reference[j]) / self.scale[j] } else { 0.0 };
        let whole = DVector::from_fn(n, |j, _| entry(j));
        let left = &whole - &self.open * (self.open.transpose() * &whole);
        (0..n).map(|j| left[j] * self.scale[j]).collect()
    }

    /// The largest difference (N m or N), and the largest in tolerances.
    pub fn distance(&self, torques: &[f64]) -> (f64, f64) {
        let left = self.difference(torques);
        let ratio = |d: f64, tolerance: f64| if d == 0.0 { 0.0 } else { d.abs() / tolerance };
        left.iter().zip(&self.tolerance).fold((0.0, 0.0), |(most, in_tolerances), (d, tolerance)| {
            (f64::max(most, d.abs()), f64::max(in_tolerances, ratio(*d, *tolerance)))
        })
    }
}

fn orthonormal(parts: DMatrix<f64>) -> DMatrix<f64> {
    let rows = parts.nrows();
    if parts.ncols() == 0 || rows == 0 {
        return DMatrix::zeros(rows, 0);
    }
    let Some(svd) = parts.try_svd(true, false, f64::EPSILON, MOST_SWEEPS) else { return DMatrix::zeros(rows, 0) };
    let Some(u) = svd.u else { return DMatrix::zeros(rows, 0) };
    let kept: Vec<usize> = (0..svd.singular_values.len()).filter(|&i| svd.singular_values[i] > MOVES).collect();
    u.select_columns(&kept)
}
