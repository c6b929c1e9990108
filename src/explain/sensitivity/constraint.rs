//! Equations that hold near the answer, as combinations of rows of the data, with their changes.
//!
//! An equation is `c(x, p) = 0` with gradient `sum factor_i A_i` over x. A second-order block on its boundary is
//! `c = |s_bar| - s_0`, gradient `A_0 - n'A_bar` with `n = s_bar/|s_bar|` and curvature `A_bar'(I - n n')A_bar/|s_bar|`; once a
//! level has exposed it, it is held on the ray `s_bar = n (s_0 + t)`, n turning with the parameters.

use nalgebra::{DMatrix, DVector};

use super::data::{Data, Source};

/// A second-order block this close to its apex has no direction.
const APEX: f64 = 1e-9;

/// One row of the data in an equation.
#[derive(Debug, Clone)]
pub(super) struct Term {
    pub source: Source,
    pub row: usize,
    pub factor: f64,
    /// Change of the factor, per parameter; empty for none.
    pub changes: Vec<f64>,
}

/// One equation.
#[derive(Debug, Clone)]
pub(super) struct Equation {
    pub terms: Vec<Term>,
    /// Change of c at fixed x, per parameter.
    pub change: Vec<f64>,
}

impl Equation {
    /// A row held as it stands: `A x - b = 0`.
    pub fn flat(data: &Data, source: Source, row: usize, x: &[f64]) -> Equation {
        let change = (0..data.parameters()).map(|p| -data.slack_change(p, source, row, x)).collect();
        Equation { terms: vec![Term { source, row, factor: 1.0, changes: Vec::new() }], change }
    }

    /// A row held at the value that moves with `dx` (one per parameter) as a level decided.
    pub fn frozen(data: &Data, source: Source, row: usize, dx: &[DVector<f64>]) -> Equation {
        let a = data.row(source, row);
        let change = dx.iter().map(|d| -a.dot(d)).collect();
        Equation { terms: vec![Term { source, row, factor: 1.0, changes: Vec::new() }], change }
    }

    pub fn gradient(&self, data: &Data) -> DVector<f64> {
        let mut out = DVector::zeros(data.base.columns.len());
        for term in &self.terms {
            out.axpy(term.factor, &data.row(term.source, term.row), 1.0);
        }
        out
    }

    /// Change of the gradient.
    pub fn gradient_change(&self, data: &Data, p: usize) -> DVector<f64> {
        let mut out = DVector::zeros(data.base.columns.len());
        for term in &self.terms {
            out.axpy(term.factor, &data.row_change(p, term.source, term.row), 1.0);
            if let Some(&change) = term.changes.get(p) {
                out.axpy(change, &data.row(term.source, term.row), 1.0);
            }
        }
        out
    }
}

/// A second-order block off its apex.
pub(super) struct Boundary {
    pub source: Source,
    pub first: usize,
    /// `s_bar / |s_bar|`.
    pub n: DVector<f64>,
    pub radius: f64,
    /// `A_bar`.
    pub bar: DMatrix<f64>,
    /// Change of `s_bar` at fixed x, per parameter.
    pub bar_change: Vec<DVector<f64>>,
    /// Change of `s_0` at fixed x, per parameter.
    pub head_change: Vec<f64>,
}

impl Boundary {
    /// None at the apex.
    pub fn new(data: &Data, source: Source, first: usize, len: usize, x: &[f64]) -> Option<Boundary> {
        let tail = DVector::from_iterator(len - 1, (first + 1..first + len).map(|row| data.slack(source, row, x)));
        let radius = tail.norm();
        if radius < APEX {
            return None;
        }
        let mut bar = DMatrix::zeros(len - 1, data.base.columns.len());
        for k in 1..len {
            bar.set_row(k - 1, &data.row(source, first + k).transpose());
        }
        let change = |p: usize| DVector::from_iterator(len - 1, (first + 1..first + len).map(|row| data.slack_change(p, source, row, x)));
        Some(Boundary {
            source,
            first,
            n: tail / radius,
            radius,
            bar,
            bar_change: (0..data.parameters()).map(change).collect(),
            head_change: (0..data.parameters()).map(|p| data.slack_change(p, source, first, x)).collect(),
        })
    }

    /// `(I - n n') v / |s_bar|`: how n turns when `s_bar` moves by v.
    fn turn(&self, v: &DVector<f64>) -> DVector<f64> {
        (v - &self.n * self.n.dot(v)) / self.radius
    }

    /// `|s_bar| - s_0` (its value is zero, or the slack t of a soft block).
    pub fn equation(&self) -> Equation {
        let turns: Vec<DVector<f64>> = self.bar_change.iter().map(|v| self.turn(v)).collect();
        let mut terms = vec![Term { source: self.source, row: self.first, factor: 1.0, changes: Vec::new() }];
        for k in 0..self.n.len() {
            terms.push(Term {
                source: self.source,
                row: self.first + 1 + k,
                factor: -self.n[k],
                changes: turns.iter().map(|t| -t[k]).collect(),
            });
        }
        let change = self.bar_change.iter().zip(&self.head_change).map(|(bar, head)| self.n.dot(bar) - head).collect();
        Equation { terms, change }
    }

    /// `A_bar'(I - n n')A_bar / |s_bar|`.
    pub fn curvature(&self) -> DMatrix<f64> {
        let along = self.bar.tr_mul(&self.n);
        (self.bar.tr_mul(&self.bar) - &along * along.transpose()) / self.radius
    }

    /// The block on its ray, `s_bar_k - n_k (s_0 + t) = 0`, once a level moved by `dx` and its slack by `slack_change`.
    pub fn ray(&self, dx: &[DVector<f64>], slack_change: &[f64]) -> Vec<Equation> {
        let turns: Vec<DVector<f64>> =
            self.bar_change.iter().zip(dx).map(|(change, d)| self.turn(&(change - &self.bar * d))).collect();
        (0..self.n.len())
            .map(|k| {
                let head = Term {
                    source: self.source,
                    row: self.first,
                    factor: self.n[k],
                    changes: turns.iter().map(|t| t[k]).collect(),
                };
                let own = Term { source: self.source, row: self.first + 1 + k, factor: -1.0, changes: Vec::new() };
                let change = (0..dx.len())
                    .map(|p| {
                        let grows = self.head_change[p] + slack_change.get(p).copied().unwrap_or(0.0);
                        self.bar_change[p][k] - self.n[k] * grows - turns[p][k] * self.radius
                    })
                    .collect();
                Equation { terms: vec![own, head], change }
            })
            .collect()
    }
}
