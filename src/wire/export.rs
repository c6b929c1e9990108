//! The assembled problem as a document, so that anyone can solve it again.

use schemars::JsonSchema;
use serde::Serialize;

use super::number::{Number, Numbers};
use crate::conic::{Column, Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName, SparseRows};

/// A strictly ordered family of conic programs over the same scaled unknowns x
/// (`physical = scaled * scale`). Every level obeys `hard`: `b - A x` in the product of its cones.
/// Level by level, most important first, `sum weight_i (A x - b)_i^2 + sum soft_weight_k t_k^2` is
/// made as small as the levels before it allow, where a soft limit holds with one slack `t >= 0` for
/// each row of a `nonnegative` cone, `b - A x + t >= 0`, and one for each `second_order` block,
/// `(b - A x) + t (1, 0, ...)` in the cone. `tie_break` is the last level.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "AssembledProblem")]
pub(super) struct ProblemOut<'a> {
    /// The unknowns in order (unit of each in `unit`).
    columns: Vec<ColumnOut<'a>>,
    /// What every level must obey (scaled, no unit).
    hard: RowsOut<'a>,
    /// Priorities, most important first (scaled, no unit).
    levels: Vec<ExportLevelOut<'a>>,
    /// Last level: least effort (scaled, no unit).
    tie_break: ResidualsOut<'a>,
    /// Zero-based columns whose freedom does not count: vertex forces (no unit).
    auxiliary: &'a [usize],
}

/// One unknown.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Column")]
struct ColumnOut<'a> {
    /// Name (no unit).
    name: &'a str,
    /// Unit of the physical value (no unit).
    unit: &'a str,
    /// Physical value of a scaled 1 (in `unit`).
    scale: Number,
}

/// A sparse matrix as zero-based triplets: `value[k]` at (`row[k]`, `column[k]`).
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Sparse")]
struct SparseOut<'a> {
    /// Number of rows (no unit).
    rows: usize,
    /// Number of columns (no unit).
    columns: usize,
    /// Row of each entry, zero-based (no unit).
    row: Vec<usize>,
    /// Column of each entry, zero-based (no unit).
    column: &'a [usize],
    /// Value of each entry (scaled, no unit).
    value: Numbers<'a>,
}

/// One factor of the cone, over the next `rows` rows.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Cone")]
struct ConeOut {
    /// `zero`: s = 0. `nonnegative`: s >= 0 row by row. `second_order`: s[0] >= |s[1..]| (no unit).
    kind: ConeKind,
    /// Number of rows (no unit).
    rows: usize,
}

#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum ConeKind {
    Zero,
    Nonnegative,
    SecondOrder,
}

/// What a row means.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "RowName")]
struct RowNameOut<'a> {
    /// Limit, task or law it belongs to (no unit).
    group: &'a str,
    /// The row within its group (no unit).
    part: &'a str,
    /// Unit of the physical residual (no unit).
    unit: &'a str,
    /// Physical residual of a scaled 1 (in `unit`).
    scale: Number,
    /// True where the row is physics, never blamed for infeasibility (no unit).
    physics: bool,
}

/// Rows `A x + s = b`, s in the product of the cones.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ConicRows")]
struct RowsOut<'a> {
    /// A (scaled, no unit).
    matrix: SparseOut<'a>,
    /// b (scaled, no unit).
    rhs: Numbers<'a>,
    /// Cones in row order (no unit).
    cones: Vec<ConeOut>,
    /// One entry per row (unit of each in `unit`).
    names: Vec<RowNameOut<'a>>,
}

/// Weighted residuals `A x - b`.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ResidualRows")]
struct ResidualsOut<'a> {
    /// A (scaled, no unit).
    matrix: SparseOut<'a>,
    /// b (scaled, no unit).
    rhs: Numbers<'a>,
    /// Weight of each row (no unit).
    weight: Numbers<'a>,
    /// One entry per row (unit of each in `unit`).
    names: Vec<RowNameOut<'a>>,
}

/// One priority.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "AssembledLevel")]
struct ExportLevelOut<'a> {
    /// Priority (no unit).
    priority: u32,
    /// Residuals of its tasks (scaled, no unit).
    residuals: ResidualsOut<'a>,
    /// Its soft limits (scaled, no unit).
    soft: RowsOut<'a>,
    /// One weight per slack, in row order (no unit).
    soft_weight: Numbers<'a>,
}

impl<'a> ProblemOut<'a> {
    /// From the answer.
    pub(super) fn of(problem: &'a Hierarchy) -> Self {
        let column = |column: &'a Column| ColumnOut {
            name: &column.name,
            unit: column.unit,
            scale: Number(column.scale),
        };
        ProblemOut {
            columns: problem.columns.iter().map(column).collect(),
            hard: rows(&problem.hard),
            levels: problem.levels.iter().map(level).collect(),
            tie_break: residuals(&problem.tie_break),
            auxiliary: &problem.auxiliary,
        }
    }
}

fn level(level: &Level) -> ExportLevelOut<'_> {
    ExportLevelOut {
        priority: level.priority,
        residuals: residuals(&level.residuals),
        soft: rows(&level.soft),
        soft_weight: Numbers(&level.soft_weight),
    }
}

fn rows(rows: &ConicRows) -> RowsOut<'_> {
    let cone = |cone: &Cone| ConeOut {
        kind: match cone {
            Cone::Zero(_) => ConeKind::Zero,
            Cone::Nonnegative(_) => ConeKind::Nonnegative,
            Cone::SecondOrder(_) => ConeKind::SecondOrder,
        },
        rows: cone.dimension(),
    };
    RowsOut {
        matrix: sparse(&rows.matrix),
        rhs: Numbers(&rows.rhs),
        cones: rows.cones.iter().map(cone).collect(),
        names: rows.names.iter().map(name).collect(),
    }
}

fn residuals(rows: &ResidualRows) -> ResidualsOut<'_> {
    ResidualsOut {
        matrix: sparse(&rows.matrix),
        rhs: Numbers(&rows.rhs),
        weight: Numbers(&rows.weight),
        names: rows.names.iter().map(name).collect(),
    }
}

fn sparse(matrix: &SparseRows) -> SparseOut<'_> {
    let mut row = Vec::with_capacity(matrix.value.len());
    for (i, ends) in matrix.start.windows(2).enumerate() {
        if let [begin, end] = ends {
            row.extend(std::iter::repeat_n(i, end.saturating_sub(*begin)));
        }
    }
    SparseOut {
        rows: matrix.rows(),
        columns: matrix.columns,
        row,
        column: &matrix.index,
        value: Numbers(&matrix.value),
    }
}

fn name(name: &RowName) -> RowNameOut<'_> {
    RowNameOut {
        group: &name.group,
        part: &name.part,
        unit: name.unit,
        scale: Number(name.scale),
        physics: name.physics,
    }
}
