//! How the soft soles' accelerations answer their wrenches: the coupling that the rule `held` needs.
//!
//! With `M = L L'` and `B_r = J_r L^-T` of the rigid soles, whose accelerations are prescribed, the inverse of M under their constraint is
//! `N = L^-T (I - V V') L^-1`, the columns of V an orthonormal basis of the rows of B_r. Directions that B_r has twice (two rigid soles
//! that fight) are found by its singular values and counted once. The mobility is `W = J_s N J_s' = C C'`,
//! `C = J_s L^-T (I - V V')`.

use nalgebra::DMatrix;

use super::scene::SoleScene;

/// Singular values below this share of the largest belong to constraints the rigid soles state twice.
const STATED_TWICE: f64 = 1e-11;
/// Sweeps of the singular value decomposition.
const MOST_SWEEPS: usize = 10_000;

/// W of the soft soles among `soles` (stacked in order, each with its own dimension). None where the mass matrix has no Cholesky factor.
pub fn mobility(mass_matrix: &DMatrix<f64>, soles: &[SoleScene]) -> Option<DMatrix<f64>> {
    let lower = mass_matrix.clone().cholesky()?.l();
    let soft = lower.solve_lower_triangular(&stacked(soles, false).transpose())?;
    let rigid = lower.solve_lower_triangular(&stacked(soles, true).transpose())?;
    if rigid.ncols() == 0 {
        return Some(soft.transpose() * soft);
    }
    let parts = rigid.try_svd(true, false, f64::EPSILON, MOST_SWEEPS)?;
    let mut basis = parts.u?;
    let cut = STATED_TWICE * parts.singular_values.max();
    for (mut column, value) in basis.column_iter_mut().zip(parts.singular_values.iter()) {
        if *value <= cut {
            column.fill(0.0);
        }
    }
    let free = &soft - &basis * (basis.transpose() * &soft);
    Some(free.transpose() * free)
}

/// The Jacobians of the soft or of the rigid soles, one under the other.
fn stacked(soles: &[SoleScene], rigid: bool) -> DMatrix<f64> {
    let chosen: Vec<&SoleScene> = soles.iter().filter(|s| s.map.rigid == rigid).collect();
    let columns = soles.first().map_or(0, |s| s.jacobian.ncols());
    let mut out = DMatrix::zeros(chosen.iter().map(|s| s.map.dimension).sum(), columns);
    let mut at = 0;
    for sole in chosen {
        out.rows_mut(at, sole.map.dimension).copy_from(&sole.jacobian.rows(0, sole.map.dimension));
        at += sole.map.dimension;
    }
    out
}
