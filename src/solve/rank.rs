//! Rank-revealing orthogonal factorisation by Householder reflections with pivoting, and the pair of
//! range and null space of a growing set of equality rows.
//!
//! Rows are handled as the columns of a d x m matrix: `[a_1 ... a_m] P = Q R`. At each step the
//! row with the largest part outside the span of the kept ones, relative to its reference length, comes next.

use super::answer::RankDecision;
use super::dense::{axpy, dot, norm};

/// Rows shorter than this part of the longest row of their batch count against it, so that
/// the rounding noise of a row that should be zero is not read as a direction.
const SHORT_ROW: f64 = 1e-6;

/// A pivoted factorisation.
pub(super) struct Factor {
    /// Length of the rows.
    pub d: usize,
    /// Rows kept, in pivot order.
    pub kept: Vec<usize>,
    /// Reflection j at `j*d..(j+1)*d`, zero above entry j: `H_j = I - tau_j v_j v_j'`.
    reflectors: Vec<f64>,
    tau: Vec<f64>,
    /// Upper triangle by columns, column j at `j(j+1)/2`.
    triangle: Vec<f64>,
    /// The decision taken.
    pub decision: RankDecision,
}

/// Reference lengths of a batch of rows of the given lengths.
pub(super) fn reference_lengths(lengths: &[f64]) -> Vec<f64> {
    let longest = lengths.iter().fold(0.0f64, |a, &b| a.max(b));
    let least = if longest > 0.0 { SHORT_ROW * longest } else { 1.0 };
    lengths.iter().map(|&l| l.max(least)).collect()
}

impl Factor {
    /// Factorises the m columns of `work` (d x m, overwritten).
    pub fn new(work: &mut [f64], d: usize, reference: &[f64], threshold: f64, what: &'static str) -> Factor {
        let m = reference.len();
        let mut factor = Factor {
            d,
            kept: Vec::new(),
            reflectors: Vec::new(),
            tau: Vec::new(),
            triangle: Vec::new(),
            decision: RankDecision { what, rows: m, kept: 0, smallest_kept: 1.0, largest_dropped: 0.0, threshold },
        };
        let mut left: Vec<usize> = (0..m).collect();
        let mut square: Vec<f64> = (0..m).map(|i| dot(&work[i * d..(i + 1) * d], &work[i * d..(i + 1) * d])).collect();
        let mut trusted = square.clone();
        for step in 0..m.min(d) {
            refresh(work, d, step, &left, &mut square, &mut trusted);
            let Some((place, value)) = best(&left, &square, reference) else { break };
            if value <= threshold {
                break;
            }
            let row = left.swap_remove(place);
            factor.decision.smallest_kept = factor.decision.smallest_kept.min(value);
            factor.reflect(work, step, row);
            let v = &factor.reflectors[step * d + step..(step + 1) * d];
            let tau = factor.tau[step];
            for &other in &left {
                let column = &mut work[other * d + step..(other + 1) * d];
                let along = tau * dot(v, column);
                if along == 0.0 {
                    // Sparse rows share few columns, so most reflections do not touch them.
                    let head = column[0];
                    square[other] = (square[other] - head * head).max(0.0);
                    continue;
                }
                axpy(-along, v, column);
                square[other] = (square[other] - column[0] * column[0]).max(0.0);
            }
        }
        let rank = factor.kept.len();
        for &row in &left {
            let rest = if rank < d { norm(&work[row * d + rank..(row + 1) * d]) } else { 0.0 };
            factor.decision.largest_dropped = factor.decision.largest_dropped.max(rest / reference[row]);
        }
        factor.decision.kept = rank;
        factor
    }

    fn reflect(&mut self, work: &[f64], step: usize, row: usize) {
        let d = self.d;
        let column = &work[row * d..(row + 1) * d];
        let length = norm(&column[step..]);
        let head = if column[step] > 0.0 { -length } else { length };
        self.triangle.extend_from_slice(&column[..step]);
        self.triangle.push(head);
        let begin = self.reflectors.len();
        self.reflectors.resize(begin + d, 0.0);
        let v = &mut self.reflectors[begin + step..begin + d];
        v.copy_from_slice(&column[step..]);
        v[0] -= head;
        let square = dot(v, v);
        self.tau.push(if square > 0.0 { 2.0 / square } else { 0.0 });
        self.kept.push(row);
    }

    /// Number of rows kept.
    pub fn rank(&self) -> usize {
        self.kept.len()
    }

    /// `v <- Q' v`.
    pub fn apply_transpose(&self, v: &mut [f64]) {
        for j in 0..self.rank() {
            let reflector = &self.reflectors[j * self.d + j..(j + 1) * self.d];
            let along = self.tau[j] * dot(reflector, &v[j..]);
            axpy(-along, reflector, &mut v[j..]);
        }
    }

    /// `v <- Q v`.
    pub fn apply(&self, v: &mut [f64]) {
        for j in (0..self.rank()).rev() {
            let reflector = &self.reflectors[j * self.d + j..(j + 1) * self.d];
            let along = self.tau[j] * dot(reflector, &v[j..]);
            axpy(-along, reflector, &mut v[j..]);
        }
    }

    /// `M <- M Q` for an n x d matrix stored by columns.
    pub fn apply_right(&self, matrix: &mut [f64], n: usize) {
        let mut image = vec![0.0; n];
        for j in 0..self.rank() {
            image.fill(0.0);
            let reflector = &self.reflectors[j * self.d..(j + 1) * self.d];
            for c in j..self.d {
                axpy(reflector[c], &matrix[c * n..(c + 1) * n], &mut image);
            }
            for c in j..self.d {
                axpy(-self.tau[j] * reflector[c], &image, &mut matrix[c * n..(c + 1) * n]);
            }
        }
    }

    /// Q, d x d by columns.
    pub fn orthogonal(&self) -> Vec<f64> {
        let d = self.d;
        let mut q = vec![0.0; d * d];
        for c in 0..d {
            q[c * d + c] = 1.0;
        }
        // From the last reflection to the first: a column is touched only from its own diagonal on.
        for j in (0..self.rank()).rev() {
            let reflector = &self.reflectors[j * d + j..(j + 1) * d];
            for c in j..d {
                let column = &mut q[c * d + j..(c + 1) * d];
                let along = self.tau[j] * dot(reflector, column);
                axpy(-along, reflector, column);
            }
        }
        q
    }

    /// Column j of R, entries 0..=j.
    pub fn column(&self, j: usize) -> &[f64] {
        &self.triangle[j * (j + 1) / 2..j * (j + 1) / 2 + j + 1]
    }

    /// Solves `R y = v` in place (first `rank` entries).
    pub fn solve_upper(&self, v: &mut [f64]) {
        solve_upper(&self.triangle, self.rank(), v);
    }

    /// Solves `R' y = v` in place (first `rank` entries).
    pub fn solve_lower(&self, v: &mut [f64]) {
        solve_lower(&self.triangle, self.rank(), v);
    }
}

fn refresh(work: &[f64], d: usize, step: usize, left: &[usize], square: &mut [f64], trusted: &mut [f64]) {
    // Downdated squares lose digits; below this part of the last exact one they are computed anew.
    const LOST: f64 = 1e-4;
    for &row in left {
        if square[row] <= LOST * trusted[row] {
            let rest = &work[row * d + step..(row + 1) * d];
            square[row] = dot(rest, rest);
            trusted[row] = square[row];
        }
    }
}

fn best(left: &[usize], square: &[f64], reference: &[f64]) -> Option<(usize, f64)> {
    let mut found: Option<(usize, f64)> = None;
    for (place, &row) in left.iter().enumerate() {
        let value = square[row].sqrt() / reference[row];
        // Ties go to the first row of the batch, so that the choice does not hang on the order of `left`.
        if found.is_none_or(|(p, v)| value > v || (value == v && row < left[p])) {
            found = Some((place, value));
        }
    }
    found
}

fn solve_upper(triangle: &[f64], rank: usize, v: &mut [f64]) {
    for j in (0..rank).rev() {
        let column = &triangle[j * (j + 1) / 2..j * (j + 1) / 2 + j + 1];
        let value = v[j] / column[j];
        v[j] = value;
        axpy(-value, &column[..j], &mut v[..j]);
    }
}

fn solve_lower(triangle: &[f64], rank: usize, v: &mut [f64]) {
    for j in 0..rank {
        let column = &triangle[j * (j + 1) / 2..j * (j + 1) / 2 + j + 1];
        v[j] = (v[j] - dot(&column[..j], &v[..j])) / column[j];
    }
}

/// y that minimises `|C y - right|`, C given by columns of length m (overwritten) with full rank, and the smallest pivot.
pub(super) fn least_squares(columns: &mut [f64], m: usize, mut right: Vec<f64>) -> (Vec<f64>, f64) {
    let n = columns.len() / m;
    let factor = Factor::new(columns, m, &vec![1.0; n], 0.0, "least squares");
    factor.apply_transpose(&mut right);
    factor.solve_upper(&mut right);
    let mut y = vec![0.0; n];
    for (j, &c) in factor.kept.iter().enumerate() {
        y[c] = right[j];
    }
    (y, factor.decision.smallest_kept)
}

/// Range and null space of equality rows `E x = e` that grow by batches: `E' = Q1 R`, `[Q1 N]` orthogonal.
#[derive(Clone)]
pub(super) struct Subspace {
    n: usize,
    rank: usize,
    basis: Vec<f64>,
    triangle: Vec<f64>,
}

impl Subspace {
    /// No rows yet, over n columns.
    pub fn new(n: usize) -> Self {
        let mut basis = vec![0.0; n * n];
        for c in 0..n {
            basis[c * n + c] = 1.0;
        }
        Subspace { n, rank: 0, basis, triangle: Vec::new() }
    }

    /// Dimension of the null space.
    pub fn free(&self) -> usize {
        self.n - self.rank
    }

    /// Null-space basis vector c.
    pub fn null(&self, c: usize) -> &[f64] {
        let at = (self.rank + c) * self.n;
        &self.basis[at..at + self.n]
    }

    fn range(&self, c: usize) -> &[f64] {
        &self.basis[c * self.n..(c + 1) * self.n]
    }

    /// `N' a` of a sparse row.
    pub fn project(&self, row: impl Iterator<Item = (usize, f64)> + Clone, out: &mut [f64]) {
        if self.rank == 0 {
            // Nothing appended yet: the basis is the identity.
            out.fill(0.0);
            row.for_each(|(j, v)| out[j] += v);
            return;
        }
        for (c, o) in out.iter_mut().enumerate() {
            let column = self.null(c);
            *o = row.clone().map(|(j, v)| v * column[j]).sum();
        }
    }

    /// `N' g`.
    pub fn reduce(&self, g: &[f64]) -> Vec<f64> {
        (0..self.free()).map(|c| dot(self.null(c), g)).collect()
    }

    /// `x += N u`.
    pub fn add_expanded(&self, u: &[f64], x: &mut [f64]) {
        for (c, &value) in u.iter().enumerate() {
            axpy(value, self.null(c), x);
        }
    }

    /// Adds rows; returns those kept, in pivot order, and the decision.
    pub fn append<R>(&mut self, rows: &[R], threshold: f64, what: &'static str) -> (Vec<usize>, RankDecision)
    where
        R: Iterator<Item = (usize, f64)> + Clone,
    {
        let (n, d, m) = (self.n, self.free(), rows.len());
        let mut work = vec![0.0; d * m];
        for (i, row) in rows.iter().enumerate() {
            if d > 0 {
                self.project(row.clone(), &mut work[i * d..(i + 1) * d]);
            }
        }
        let lengths: Vec<f64> = rows.iter().map(|r| r.clone().map(|(_, v)| v * v).sum::<f64>().sqrt()).collect();
        let factor = Factor::new(&mut work, d, &reference_lengths(&lengths), threshold, what);
        let old = self.rank;
        for (j, &row) in factor.kept.iter().enumerate() {
            for c in 0..old {
                let column = self.range(c);
                let value = rows[row].clone().map(|(k, v)| v * column[k]).sum();
                self.triangle.push(value);
            }
            self.triangle.extend_from_slice(factor.column(j));
        }
        if old == 0 {
            self.basis = factor.orthogonal();
        } else {
            factor.apply_right(&mut self.basis[old * n..], n);
        }
        self.rank += factor.rank();
        (factor.kept, factor.decision)
    }

    /// Multipliers y of the kept rows with `E'y = g` on the range.
    pub fn multipliers(&self, g: &[f64]) -> Vec<f64> {
        let mut y: Vec<f64> = (0..self.rank).map(|c| dot(self.range(c), g)).collect();
        solve_upper(&self.triangle, self.rank, &mut y);
        y
    }

    /// Adds the shortest dx with `E dx = residual` to x.
    pub fn add_correction(&self, residual: &mut [f64], x: &mut [f64]) {
        solve_lower(&self.triangle, self.rank, residual);
        for c in 0..self.rank {
            axpy(residual[c], self.range(c), x);
        }
    }
}
