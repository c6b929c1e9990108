//! One level's optimality conditions, differentiated.
//!
//! Near the answer the level is `minimise f(x, p)` subject to equations `c(x, p) = 0` with gradients E. With multipliers y
//! (`grad f + E'y = 0`) and the Hessian H of the Lagrangian,
//! ```text
//! [ H  E' ] [dx]     [ d_p (grad f + E'y) ]
//! [ E  0  ] [dy] = - [ d_p c              ],     d_p at fixed x and y.
//! ```
//! Where E or H leave directions open (rows that depend on one another, a level that does not care), the shortest step
//! is taken: what the level decides, its residuals, does not depend on that choice. But where the parameter pulls along a direction
//! in which the level has no curvature, its optimum does not move, it jumps: there is no derivative, and that is said.

use nalgebra::{DMatrix, DVector, SymmetricEigen};

use super::constraint::{Boundary, Equation};
use super::data::{Data, Source};

/// Equations count as dependent below this relative singular value.
const DEPENDENT: f64 = 1e-10;
/// Curvature counts as none below this part of the Hessian's largest entry: where the equations leave a level nothing to
/// decide, what is left of its Hessian is rounding.
const FLAT: f64 = 1e-13;
/// A pull along directions without curvature counts above this part of the whole (the differences of the data leave about 1e-8).
const UNOPPOSED: f64 = 3e-7;
/// A gradient below this part of the Hessian is rounding.
const ROUNDING: f64 = 1e-9;

/// A block that takes part in a level by its own multiplier.
pub(super) enum Own {
    /// Rows held as equations.
    Flat { source: Source, first: usize, len: usize },
    /// A second-order block on its boundary.
    Boundary(Boundary),
    /// A row of the level's own soft limits, exceeded: its excess costs like a residual.
    SoftRow { row: usize, weight: usize },
    /// A second-order block of the level's own soft limits, exceeded.
    SoftBoundary { boundary: Boundary, weight: usize, excess: f64 },
}

/// What a level comes to.
pub(super) struct Step {
    /// Change of x, per parameter (the shortest among those that keep the level optimal).
    pub dx: Vec<DVector<f64>>,
    /// Per parameter: the optimum jumps when it changes.
    pub jumps: Vec<bool>,
    /// Multiplier of each own block that is held: (first row, size of the multiplier).
    pub multipliers: Vec<(Source, usize, f64)>,
    /// `|grad f + E'y|` relative to `|grad f|`: near zero where the equations explain the level's optimum.
    pub unexplained: f64,
    /// `|grad f|`.
    pub gradient: f64,
    /// False where the level reached everything it wanted: its gradient is rounding.
    pub gradient_counts: bool,
}

/// Cost in hand: gradient, Hessian, change of the gradient per parameter.
struct Cost {
    gradient: DVector<f64>,
    hessian: DMatrix<f64>,
    change: Vec<DVector<f64>>,
}

impl Cost {
    /// Adds `w r^2` with `r = a x - b = -slack`.
    fn add_residual(&mut self, data: &Data, source: Source, row: usize, weight: usize, x: &[f64]) {
        let (a, w, r) = (data.row(source, row), data.weight(source, weight), -data.slack(source, row, x));
        self.gradient.axpy(2.0 * w * r, &a, 1.0);
        self.hessian.ger(2.0 * w, &a, &a, 1.0);
        for p in 0..self.change.len() {
            let dr = -data.slack_change(p, source, row, x);
            let dw = data.weight_change(p, source, weight);
            self.change[p].axpy(2.0 * (dw * r + w * dr), &a, 1.0);
            self.change[p].axpy(2.0 * w * r, &data.row_change(p, source, row), 1.0);
        }
    }

    /// Adds `w t^2` with `t = |s_bar| - s_0`.
    fn add_excess(&mut self, data: &Data, boundary: &Boundary, weight: usize, t: f64) {
        let equation = boundary.equation();
        let (e, w) = (equation.gradient(data), data.weight(boundary.source, weight));
        self.gradient.axpy(2.0 * w * t, &e, 1.0);
        self.hessian.ger(2.0 * w, &e, &e, 1.0);
        self.hessian += boundary.curvature() * (2.0 * w * t);
        for p in 0..self.change.len() {
            let dw = data.weight_change(p, boundary.source, weight);
            self.change[p].axpy(2.0 * (dw * t + w * equation.change[p]), &e, 1.0);
            self.change[p].axpy(2.0 * w * t, &equation.gradient_change(data, p), 1.0);
        }
    }
}

/// Differentiates level `index` (the number of levels: the tie-break) at x under `fixed` equations and its own blocks.
pub(super) fn differentiate(data: &Data, index: usize, fixed: &[Equation], own: &[Own], x: &[f64]) -> Step {
    let n = data.base.columns.len();
    let parameters = data.parameters();
    let mut cost = Cost {
        gradient: DVector::zeros(n),
        hessian: DMatrix::zeros(n, n),
        change: vec![DVector::zeros(n); parameters],
    };
    let residuals = data.base.levels.get(index).map_or(&data.base.tie_break, |l| &l.residuals);
    for row in 0..residuals.rhs.len() {
        cost.add_residual(data, Source::Residual(index), row, row, x);
    }
    let mut equations: Vec<Equation> = fixed.to_vec();
    let mut held: Vec<(Source, usize, std::ops::Range<usize>, Option<&Boundary>)> = Vec::new();
    for block in own {
        let begin = equations.len();
        match block {
            Own::Flat { source, first, len } => {
                equations.extend((*first..first + len).map(|row| Equation::flat(data, *source, row, x)));
                held.push((*source, *first, begin..equations.len(), None));
            }
            Own::Boundary(boundary) => {
                equations.push(boundary.equation());
                held.push((boundary.source, boundary.first, begin..equations.len(), Some(boundary)));
            }
            Own::SoftRow { row, weight } => cost.add_residual(data, Source::Soft(index), *row, *weight, x),
            Own::SoftBoundary { boundary, weight, excess } => cost.add_excess(data, boundary, *weight, *excess),
        }
    }
    solve(data, cost, &equations, &held)
}

fn solve(
    data: &Data,
    mut cost: Cost,
    equations: &[Equation],
    held: &[(Source, usize, std::ops::Range<usize>, Option<&Boundary>)],
) -> Step {
    let n = cost.gradient.len();
    let mut e = DMatrix::zeros(n, equations.len());
    for (k, equation) in equations.iter().enumerate() {
        e.set_column(k, &equation.gradient(data));
    }
    // E' = U S V': its range (columns of U kept) is what the equations fix.
    let svd = e.clone().svd(true, true);
    let (Some(u), Some(vt)) = (&svd.u, &svd.v_t) else {
        let dx = vec![DVector::zeros(n); cost.change.len()];
        return Step { dx, jumps: vec![false; cost.change.len()], multipliers: Vec::new(), unexplained: f64::INFINITY, gradient: 0.0, gradient_counts: true };
    };
    let largest = svd.singular_values.iter().fold(0.0f64, |m, v| m.max(*v));
    let kept: Vec<usize> = (0..svd.singular_values.len()).filter(|&i| svd.singular_values[i] > DEPENDENT * largest).collect();
    let range = u.select_columns(&kept);
    let right = vt.select_rows(&kept);
    let inverse = DVector::from_iterator(kept.len(), kept.iter().map(|&i| 1.0 / svd.singular_values[i]));
    let y = right.tr_mul(&(-range.tr_mul(&cost.gradient)).component_mul(&inverse));
    let unexplained = (&cost.gradient + &e * &y).norm() / cost.gradient.norm().max(f64::MIN_POSITIVE);
    let mut multipliers = Vec::new();
    for (source, first, rows, boundary) in held {
        let size = rows.clone().map(|i| y[i].abs()).fold(0.0, f64::max);
        multipliers.push((*source, *first, size));
        if let Some(boundary) = boundary {
            cost.hessian += boundary.curvature() * y[rows.start];
        }
    }
    let project = |v: &DVector<f64>| v - &range * range.tr_mul(v);
    let mut inner = &cost.hessian - &range * range.tr_mul(&cost.hessian);
    inner = &inner - (&inner * &range) * range.transpose();
    let eigen = SymmetricEigen::new((&inner + inner.transpose()) * 0.5);
    let top = cost.hessian.amax();
    let (dx, jumps) = (0..cost.change.len())
        .map(|p| {
            let c = DVector::from_iterator(equations.len(), equations.iter().map(|q| q.change[p]));
            let onto = &range * (-(&right * c)).component_mul(&inverse);
            let mut pull = cost.change[p].clone() + &cost.hessian * &onto;
            for (k, equation) in equations.iter().enumerate().filter(|(k, _)| y[*k] != 0.0) {
                pull.axpy(y[k], &equation.gradient_change(data, p), 1.0);
            }
            let along = eigen.eigenvectors.tr_mul(&project(&pull));
            let curved = |i: usize| eigen.eigenvalues[i] > FLAT * top;
            let step = DVector::from_iterator(n, (0..n).map(|i| if curved(i) { -along[i] / eigen.eigenvalues[i] } else { 0.0 }));
            let unopposed = (0..n).filter(|&i| !curved(i)).map(|i| along[i].abs()).fold(0.0, f64::max);
            let jumps = unopposed > UNOPPOSED * pull.norm() && pull.norm() > ROUNDING * top;
            (onto + project(&(&eigen.eigenvectors * step)), jumps)
        })
        .unzip();
    let gradient = cost.gradient.norm();
    Step { dx, jumps, multipliers, unexplained, gradient, gradient_counts: gradient > ROUNDING * cost.hessian.amax() }
}
