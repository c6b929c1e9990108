//! Reading conic rows: blocks, excesses, sizes.

use std::ops::Range;

use crate::conic::{Cone, ConicRows, SparseRows};

/// One cone with the rows it covers; rows of a `Nonnegative` cone one by one.
#[derive(Debug, Clone)]
pub struct Block {
    /// The cone.
    pub cone: Cone,
    /// Its rows.
    pub rows: Range<usize>,
}

/// All blocks in row order; `Zero` and `Nonnegative` cones split into single rows.
pub fn blocks(rows: &ConicRows) -> Vec<Block> {
    let mut out = Vec::new();
    let mut at = 0;
    for cone in &rows.cones {
        let end = at + cone.dimension();
        match cone {
            Cone::SecondOrder(_) => out.push(Block { cone: *cone, rows: at..end }),
            Cone::Zero(_) => out.extend((at..end).map(|i| Block { cone: Cone::Zero(1), rows: i..i + 1 })),
            Cone::Nonnegative(_) => out.extend((at..end).map(|i| Block { cone: Cone::Nonnegative(1), rows: i..i + 1 })),
        }
        at = end;
    }
    out
}

/// How far `slack` of one block is outside its cone (least t with `s + t e` inside).
pub fn excess(cone: Cone, slack: &[f64]) -> f64 {
    match cone {
        Cone::Zero(_) => slack.iter().fold(0.0, |worst, s| larger(worst, s.abs())),
        Cone::Nonnegative(_) => slack.iter().fold(0.0, |worst, s| larger(worst, -s)),
        Cone::SecondOrder(_) => larger(0.0, norm(&slack[1..]) - slack[0]),
    }
}

/// Distance of a multiplier from the dual of its cone.
pub fn dual_excess(cone: Cone, z: &[f64]) -> f64 {
    match cone {
        // Any number will do, but it has to be one.
        Cone::Zero(_) => z.iter().map(|v| v * 0.0).sum::<f64>(),
        Cone::Nonnegative(_) | Cone::SecondOrder(_) => excess(cone, z),
    }
}

/// The larger of the two, not a number where either is not one.
pub fn larger(a: f64, b: f64) -> f64 {
    if a.is_nan() || b.is_nan() { f64::NAN } else { a.max(b) }
}

/// Euclidean length.
pub fn norm(v: &[f64]) -> f64 {
    v.iter().map(|x| x * x).sum::<f64>().sqrt()
}

/// Size of the terms of row i: `sum |a_ij x_j| + |b_i|`.
pub fn row_size(matrix: &SparseRows, rhs: &[f64], i: usize, x: &[f64]) -> f64 {
    matrix.row(i).map(|(j, v)| (v * x[j]).abs()).sum::<f64>() + rhs[i].abs()
}

/// True where the rows fit n unknowns and each other.
pub fn fits(rows: &ConicRows, n: usize) -> bool {
    let total: usize = rows.cones.iter().map(Cone::dimension).sum();
    let empty = rows.cones.iter().any(|c| c.dimension() == 0 && matches!(c, Cone::SecondOrder(_)));
    !empty && total == rows.rhs.len() && matrix_fits(&rows.matrix, rows.rhs.len(), n)
}

/// True where a matrix has the given shape and consistent offsets.
pub fn matrix_fits(matrix: &SparseRows, rows: usize, n: usize) -> bool {
    let entries = matrix.index.len();
    let empty = rows == 0 && matrix.start.len() <= 1 && entries == 0;
    let offsets = matrix.start.first() == Some(&0)
        && matrix.start.windows(2).all(|w| w[0] <= w[1])
        && matrix.start.last() == Some(&entries);
    let inside = matrix.value.len() == entries && matrix.index.iter().all(|&j| j < n);
    empty || (matrix.rows() == rows && offsets && inside)
}
