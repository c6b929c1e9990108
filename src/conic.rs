//! Plain data of conic programs and of strictly ordered hierarchies of them.
//!
//! A conic program is `minimise 1/2 x'Px + q'x subject to A x + s = b, s in K`, K a product of
//! cones in row order. Nothing in this file computes; nothing in it knows a robot.
//! All numbers are SCALED and dimensionless: `physical = scaled * scale`, with the scale and the
//! unit kept beside every name.

/// One factor of the cone K, covering the given number of consecutive rows.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Cone {
    /// `s = 0` (an equality).
    Zero(usize),
    /// `s >= 0`, row by row.
    Nonnegative(usize),
    /// `s[0] >= |s[1..]|`, the block as a whole.
    SecondOrder(usize),
}

impl Cone {
    /// Number of rows the cone covers.
    pub fn dimension(&self) -> usize {
        match *self {
            Cone::Zero(n) | Cone::Nonnegative(n) | Cone::SecondOrder(n) => n,
        }
    }
}

/// A sparse matrix stored by rows: row i has the entries `start[i]..start[i+1]`.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct SparseRows {
    /// Number of columns.
    pub columns: usize,
    /// Offsets, one more than rows.
    pub start: Vec<usize>,
    /// Column index of each entry, ascending within a row.
    pub index: Vec<usize>,
    /// Value of each entry.
    pub value: Vec<f64>,
}

impl SparseRows {
    /// A matrix with no rows yet.
    pub fn new(columns: usize) -> Self {
        SparseRows { columns, start: vec![0], index: Vec::new(), value: Vec::new() }
    }

    /// Number of rows.
    pub fn rows(&self) -> usize {
        self.start.len().saturating_sub(1)
    }

    /// Appends a row given by (column, value) pairs; zeros are dropped, columns sorted, repeats summed.
    pub fn push(&mut self, entries: impl IntoIterator<Item = (usize, f64)>) {
        let begin = self.index.len();
        let mut row: Vec<(usize, f64)> = entries.into_iter().filter(|e| e.1 != 0.0).collect();
        row.sort_by_key(|e| e.0);
        for (column, value) in row {
            debug_assert!(column < self.columns);
            if self.index.len() > begin && self.index.last() == Some(&column) {
                if let Some(last) = self.value.last_mut() {
                    *last += value;
                }
            } else {
                self.index.push(column);
                self.value.push(value);
            }
        }
        self.start.push(self.index.len());
    }

    /// Entries of row i as (column, value).
    pub fn row(&self, i: usize) -> impl Iterator<Item = (usize, f64)> + '_ {
        let range = self.start[i]..self.start[i + 1];
        self.index[range.clone()].iter().copied().zip(self.value[range].iter().copied())
    }

    /// Row i times x.
    pub fn row_dot(&self, i: usize, x: &[f64]) -> f64 {
        self.row(i).map(|(j, v)| v * x[j]).sum()
    }

    /// The product with x.
    pub fn times(&self, x: &[f64]) -> Vec<f64> {
        (0..self.rows()).map(|i| self.row_dot(i, x)).collect()
    }

    /// `out += A' y`.
    pub fn add_transpose_times(&self, y: &[f64], out: &mut [f64]) {
        for i in 0..self.rows() {
            for (j, v) in self.row(i) {
                out[j] += v * y[i];
            }
        }
    }
}

/// What a column (unknown) means.
#[derive(Debug, Clone, PartialEq)]
pub struct Column {
    /// Name in plain words, e.g. `acceleration:left_knee` or `wrench:left_foot:fz`.
    pub name: String,
    /// SI unit of the physical value.
    pub unit: &'static str,
    /// `physical = scaled * scale`, positive.
    pub scale: f64,
}

/// What a row means.
#[derive(Debug, Clone, PartialEq)]
pub struct RowName {
    /// The limit, task or law this row belongs to, as the answer names it; rows that share it form one named item.
    pub group: String,
    /// The row within its group, e.g. `fz` or `facet 3`.
    pub part: String,
    /// SI unit of the physical residual.
    pub unit: &'static str,
    /// `physical = scaled * scale`, positive.
    pub scale: f64,
    /// True where the row is physics (never blamed for infeasibility).
    pub physics: bool,
}

/// Rows `A x + s = b`, `s` in the product of `cones`.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct ConicRows {
    /// A, scaled.
    pub matrix: SparseRows,
    /// b, scaled.
    pub rhs: Vec<f64>,
    /// Cones in row order; their dimensions add up to the number of rows.
    pub cones: Vec<Cone>,
    /// One name per row.
    pub names: Vec<RowName>,
}

impl ConicRows {
    /// No rows over the given number of columns.
    pub fn new(columns: usize) -> Self {
        ConicRows { matrix: SparseRows::new(columns), ..Default::default() }
    }

    /// `s = b - A x`.
    pub fn slack(&self, x: &[f64]) -> Vec<f64> {
        (0..self.rhs.len()).map(|i| self.rhs[i] - self.matrix.row_dot(i, x)).collect()
    }
}

/// Weighted residual rows: cost `sum weight_i (a_i x - b_i)^2`.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct ResidualRows {
    /// A, scaled.
    pub matrix: SparseRows,
    /// b, scaled.
    pub rhs: Vec<f64>,
    /// Positive weights.
    pub weight: Vec<f64>,
    /// One name per row.
    pub names: Vec<RowName>,
}

impl ResidualRows {
    /// No rows over the given number of columns.
    pub fn new(columns: usize) -> Self {
        ResidualRows { matrix: SparseRows::new(columns), ..Default::default() }
    }
}

/// One priority: residuals to make small, and limits that may be exceeded at a cost.
///
/// A soft limit row or block gets one slack `t >= 0`: for each row of a `Nonnegative` cone
/// `b - A x + t >= 0`, for a `SecondOrder` block `(b - A x) + t e in K`, `e = (1, 0, ...)`; `Zero` does not occur.
/// Its cost is `soft_weight * t^2`.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Level {
    /// The user's priority number, 1 first.
    pub priority: u32,
    /// Residuals.
    pub residuals: ResidualRows,
    /// Soft limits.
    pub soft: ConicRows,
    /// One weight per slack (per row of a Nonnegative cone, per SecondOrder block), in row order.
    pub soft_weight: Vec<f64>,
}

/// A strictly ordered family of conic programs over the same unknowns.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Hierarchy {
    /// The unknowns.
    pub columns: Vec<Column>,
    /// What every level must obey.
    pub hard: ConicRows,
    /// Levels, most important first.
    pub levels: Vec<Level>,
    /// Strictly convex last level (weights positive on a full-column-rank set of rows): removes
    /// whatever freedom is left, so that the answer is one point.
    pub tie_break: ResidualRows,
    /// Columns whose non-uniqueness does not count (vertex forces): excluded from `free` reports.
    pub auxiliary: Vec<usize>,
}

/// What proves that one final point x is optimal for one priority, given everything above it.
///
/// With `r = A x - b` the level's residuals, W its weights, t its soft slacks, stationarity reads
/// `2 A'W r + system' z + soft' z_soft = 0`, with z and z_soft in the dual cones, complementary to
/// the slacks, and `2 w t - e'z_soft - z_t = 0`, `z_t >= 0`, `z_t t = 0` for every soft slack.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct LevelProof {
    /// Priority.
    pub priority: u32,
    /// Everything the level had to obey, over x alone: hard rows, rows and faces frozen by earlier
    /// levels, soft limits of earlier levels relaxed by the excess they were granted.
    pub system: ConicRows,
    /// One multiplier z per row of `system`.
    pub multipliers: Vec<f64>,
    /// The excess t of each of the level's own soft limits.
    pub soft_slack: Vec<f64>,
    /// One multiplier per row of the level's own soft limits.
    pub soft_multipliers: Vec<f64>,
}
