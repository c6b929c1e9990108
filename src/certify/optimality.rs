//! One final point against every priority: is it optimal there, given everything above?
//!
//! With residuals r = A x - b, weights W, soft excesses t, and `slack = rhs - matrix x` in every cone,
//!     stationarity   2 A'W r + system' z + soft' z_soft = 0,
//!     dual cones     z, z_soft in the duals, z_t = 2 w t - e' z_soft >= 0,
//!     complementary  z's = 0, z_soft'(s_soft + t e) = 0, z_t t = 0,
//!     feasible       s in K, s_soft + t e in K, and t the actual excess.
//! For a convex program these are enough. Figures are relative:
//! - stationarity to `max_j (sum_i 2 |a_ij| w_i size_i + sum_i |A_ij z_i|)`, where `size_i` is the residual itself, but at least
//!   [`ROUNDING`] of `sum_k |a_ik x_k| + |b_i|` and of 1 (rows are dimensionless, their natural size is 1): a level that is met
//!   to rounding has no gradient to be small beside, and a level with a small cost is not judged by the large terms that
//!   cancel in it (two solvers found a level 0.06 % too dear that was so judged);
//! - multipliers to the larger of the greatest multiplier of a cone row and the residuals' part of that;
//! - complementarity to `sum w_i r_i^2`, each square at least [`ROUNDING`] of the square of its terms, plus `sum w t^2`;
//! - feasibility of each row to the larger of 1 and `size_i` (rows are dimensionless).

use super::LevelCheck;
use super::rows::{Block, blocks, dual_excess, excess, fits, larger, matrix_fits, row_size};
use crate::conic::{Cone, ConicRows, Level, LevelProof, ResidualRows};

/// Bound of every figure here.
pub const OPTIMALITY_BOUND: f64 = 1e-8;

/// Share of the terms of a residual below which it counts as met: with the bound of 1e-8 on top, a level met to rounding has to
/// be stationary to 1e-12 of its terms, which is what Newton refinement confirms.
pub const ROUNDING: f64 = 1e-4;

/// A verdict that cannot pass, where the proof does not even fit the problem.
fn unfit(priority: u32) -> LevelCheck {
    LevelCheck {
        priority,
        stationarity: f64::NAN,
        complementarity: f64::NAN,
        dual_violation: f64::NAN,
        feasibility: f64::NAN,
        bound: OPTIMALITY_BOUND,
    }
}

/// Optimality of x for one level.
pub fn check(level: &Level, x: &[f64], proof: Option<&LevelProof>) -> LevelCheck {
    match proof {
        Some(proof) if proof_fits(level, x.len(), proof) => Terms::of(level, x, proof).verdict(level.priority),
        _ => unfit(level.priority),
    }
}

fn proof_fits(level: &Level, n: usize, proof: &LevelProof) -> bool {
    level.priority == proof.priority
        && fits(&proof.system, n)
        && fits(&level.soft, n)
        && level.soft.cones.iter().all(|c| !matches!(c, Cone::Zero(_)))
        && residuals_fit(&level.residuals, n)
        && proof.multipliers.len() == proof.system.rhs.len()
        && proof.soft_multipliers.len() == level.soft.rhs.len()
        && proof.soft_slack.len() == level.soft_weight.len()
        && level.soft_weight.len() == blocks(&level.soft).len()
}

fn residuals_fit(rows: &ResidualRows, n: usize) -> bool {
    rows.weight.len() == rows.rhs.len() && matrix_fits(&rows.matrix, rows.rhs.len(), n)
}

/// Sums gathered row by row.
struct Terms {
    gradient: Vec<f64>,
    /// Size of the residuals' terms of the gradient, column by column.
    cost_size: Vec<f64>,
    /// The same for the multipliers' terms.
    force_size: Vec<f64>,
    gap: f64,
    gap_size: f64,
    dual: f64,
    dual_size: f64,
    feasibility: f64,
}

impl Terms {
    fn of(level: &Level, x: &[f64], proof: &LevelProof) -> Terms {
        let zeros = vec![0.0; x.len()];
        let mut terms = Terms {
            gradient: zeros.clone(),
            cost_size: zeros.clone(),
            force_size: zeros,
            gap: 0.0,
            gap_size: 0.0,
            dual: 0.0,
            dual_size: 0.0,
            feasibility: 0.0,
        };
        terms.add_residuals(&level.residuals, x);
        for block in blocks(&proof.system) {
            terms.add_block(&proof.system, &block, x, &proof.multipliers, 0.0);
        }
        for (k, block) in blocks(&level.soft).into_iter().enumerate() {
            terms.add_soft(level, &block, x, proof, k);
        }
        terms
    }

    fn add_residuals(&mut self, rows: &ResidualRows, x: &[f64]) {
        for i in 0..rows.rhs.len() {
            let residual = rows.matrix.row_dot(i, x) - rows.rhs[i];
            let terms = larger(1.0, row_size(&rows.matrix, &rows.rhs, i, x));
            let size = larger(residual.abs(), ROUNDING * terms);
            let weight = rows.weight[i];
            for (j, v) in rows.matrix.row(i) {
                self.gradient[j] += 2.0 * weight * v * residual;
                self.cost_size[j] += 2.0 * weight * v.abs() * size;
            }
            self.gap_size += weight * larger(residual * residual, ROUNDING * terms * terms);
        }
    }

    /// A block with `slack + relief e` in its cone.
    fn add_block(&mut self, rows: &ConicRows, block: &Block, x: &[f64], z: &[f64], relief: f64) {
        let mut slack: Vec<f64> =
            block.rows.clone().map(|i| rows.rhs[i] - rows.matrix.row_dot(i, x)).collect();
        slack[0] += relief;
        let z = &z[block.rows.clone()];
        let mut size: f64 = 1.0;
        for (k, i) in block.rows.clone().enumerate() {
            let terms = row_size(&rows.matrix, &rows.rhs, i, x);
            size = larger(size, terms);
            for (j, v) in rows.matrix.row(i) {
                self.gradient[j] += v * z[k];
                self.force_size[j] += (v * z[k]).abs();
            }
            if !matches!(block.cone, Cone::Zero(_)) {
                self.dual_size = larger(self.dual_size, z[k].abs());
            }
        }
        self.feasibility = larger(self.feasibility, excess(block.cone, &slack) / size);
        self.dual = larger(self.dual, dual_excess(block.cone, z));
        if !matches!(block.cone, Cone::Zero(_)) {
            self.gap += slack.iter().zip(z).map(|(s, z)| s * z).sum::<f64>().abs();
        }
    }

    /// One of the level's own soft limits with its excess t: a block relieved by t, t itself, and its multiplier.
    fn add_soft(&mut self, level: &Level, block: &Block, x: &[f64], proof: &LevelProof, k: usize) {
        let t = proof.soft_slack[k];
        self.add_block(&level.soft, block, x, &proof.soft_multipliers, t);
        let rows = &level.soft;
        let slack: Vec<f64> =
            block.rows.clone().map(|i| rows.rhs[i] - rows.matrix.row_dot(i, x)).collect();
        let size = block.rows.clone().fold(1.0, |s, i| larger(s, row_size(&rows.matrix, &rows.rhs, i, x)));
        self.feasibility = larger(self.feasibility, (t - excess(block.cone, &slack)).abs() / size);
        let cost = 2.0 * level.soft_weight[k] * t;
        let of_t = cost - proof.soft_multipliers[block.rows.start];
        self.dual = larger(self.dual, -of_t);
        self.dual_size = larger(self.dual_size, cost.abs());
        self.gap += (of_t * t).abs();
        // A soft limit with room to spare costs nothing, and its multiplier is rounding: like a residual that is met, it is
        // judged beside its natural size.
        let met = ROUNDING * size;
        self.gap_size += level.soft_weight[k] * larger(t * t, met * size);
        self.dual_size = larger(self.dual_size, 2.0 * level.soft_weight[k] * met);
        for i in block.rows.clone() {
            for (j, v) in rows.matrix.row(i) {
                self.cost_size[j] += 2.0 * level.soft_weight[k] * v.abs() * larger(t, met);
            }
        }
    }

    fn verdict(&self, priority: u32) -> LevelCheck {
        let largest = |v: &[f64]| v.iter().fold(0.0, |a, b| larger(a, b.abs()));
        let cost = largest(&self.cost_size);
        let both: Vec<f64> = self.cost_size.iter().zip(&self.force_size).map(|(a, b)| a + b).collect();
        LevelCheck {
            priority,
            stationarity: share(largest(&self.gradient), largest(&both)),
            complementarity: share(self.gap, self.gap_size),
            dual_violation: share(self.dual, larger(self.dual_size, cost)),
            feasibility: self.feasibility,
            bound: OPTIMALITY_BOUND,
        }
    }
}

/// `value / size`; zero where both are zero.
fn share(value: f64, size: f64) -> f64 {
    if value == 0.0 && size == 0.0 { 0.0 } else { value / size }
}
