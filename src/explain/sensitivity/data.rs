//! The rows of a hierarchy and how they change with each parameter, by central differences of the assembled DATA (never
//! of answers).

use nalgebra::DVector;

use crate::conic::{Hierarchy, SparseRows};

/// Where a row stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Source {
    Hard,
    Soft(usize),
    /// Residuals of a level; the number of levels is the tie-break.
    Residual(usize),
}

/// A hierarchy beside its variations.
pub(super) struct Data<'a> {
    pub base: &'a Hierarchy,
    /// Per parameter: the hierarchy with the parameter times `1 + step` and times `1 - step`.
    pub varied: Vec<[Hierarchy; 2]>,
    pub step: f64,
}

fn rows(h: &Hierarchy, source: Source) -> (&SparseRows, &[f64]) {
    match source {
        Source::Hard => (&h.hard.matrix, &h.hard.rhs),
        Source::Soft(k) => (&h.levels[k].soft.matrix, &h.levels[k].soft.rhs),
        Source::Residual(k) => {
            let residuals = h.levels.get(k).map_or(&h.tie_break, |l| &l.residuals);
            (&residuals.matrix, &residuals.rhs)
        }
    }
}

fn weight(h: &Hierarchy, source: Source, index: usize) -> f64 {
    match source {
        Source::Hard => 0.0,
        Source::Soft(k) => h.levels[k].soft_weight[index],
        Source::Residual(k) => h.levels.get(k).map_or(&h.tie_break, |l| &l.residuals).weight[index],
    }
}

fn dense(h: &Hierarchy, source: Source, row: usize) -> DVector<f64> {
    let (matrix, _) = rows(h, source);
    let mut out = DVector::zeros(h.columns.len());
    matrix.row(row).for_each(|(j, v)| out[j] = v);
    out
}

fn slack(h: &Hierarchy, source: Source, row: usize, x: &[f64]) -> f64 {
    let (matrix, rhs) = rows(h, source);
    rhs[row] - matrix.row_dot(row, x)
}

impl Data<'_> {
    /// True where every variation has the shape of the base, so that rows correspond.
    pub fn comparable(&self) -> bool {
        let same = |h: &Hierarchy| {
            let levels = h.levels.len() == self.base.levels.len();
            levels
                && h.columns == self.base.columns
                && h.hard.cones == self.base.hard.cones
                && h.tie_break.rhs.len() == self.base.tie_break.rhs.len()
                && h.levels.iter().zip(&self.base.levels).all(|(a, b)| {
                    a.residuals.rhs.len() == b.residuals.rhs.len() && a.soft.cones == b.soft.cones && a.priority == b.priority
                })
        };
        self.varied.iter().flatten().all(same)
    }

    pub fn parameters(&self) -> usize {
        self.varied.len()
    }

    pub fn row(&self, source: Source, row: usize) -> DVector<f64> {
        dense(self.base, source, row)
    }

    /// `s = b - A x` of a row.
    pub fn slack(&self, source: Source, row: usize, x: &[f64]) -> f64 {
        slack(self.base, source, row, x)
    }

    pub fn weight(&self, source: Source, index: usize) -> f64 {
        weight(self.base, source, index)
    }

    fn central(&self, p: usize, f: impl Fn(&Hierarchy) -> f64) -> f64 {
        let [plus, minus] = &self.varied[p];
        (f(plus) - f(minus)) / (2.0 * self.step)
    }

    /// Change of a row of A.
    pub fn row_change(&self, p: usize, source: Source, row: usize) -> DVector<f64> {
        let [plus, minus] = &self.varied[p];
        (dense(plus, source, row) - dense(minus, source, row)) / (2.0 * self.step)
    }

    /// Change of `b - A x` at fixed x.
    pub fn slack_change(&self, p: usize, source: Source, row: usize, x: &[f64]) -> f64 {
        self.central(p, |h| slack(h, source, row, x))
    }

    pub fn weight_change(&self, p: usize, source: Source, index: usize) -> f64 {
        self.central(p, |h| weight(h, source, index))
    }
}
