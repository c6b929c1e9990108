//! The hierarchy in the form that general-purpose solvers take, all levels over the same unknowns.
//!
//! Unknowns `z = (x, t, e)`: what the robot does, the excess of every soft limit, the residual of every task row and of the
//! tie-break. Level k is
//!
//! ```text
//! minimise 1/2 z'P_k z   subject to   A z = b,   G z + s = h,   s in the cones,
//!                                     z_i as found before, i a residual or an excess of a level before k
//! ```
//!
//! with P_k diagonal: twice the weights of the level's own residuals and excesses, zero elsewhere. A holds the equalities of
//! every level and `e = R x - r`; G the inequalities, the soft limits relaxed by t, and `t >= 0`. A level's cost is strictly
//! convex in its own residuals and excesses, so that these are unique at its optimum, and holding them is the same as leaving
//! the level as good as it can be. Nothing is squared: P holds weights alone.

use crate::conic::{Column, Cone, ConicRows, Hierarchy, ResidualRows, RowName, SparseRows};

/// One level.
#[derive(Debug, Clone, PartialEq)]
pub struct ProgramLevel {
    /// Priority; none for the tie-break, the last level.
    pub priority: Option<u32>,
    /// Columns that are this level's own, with twice their weight: the diagonal of P.
    pub diagonal: Vec<(usize, f64)>,
}

/// All levels over the same unknowns (scaled, no unit).
#[derive(Debug, Clone, PartialEq)]
pub struct Program {
    /// The unknowns z.
    pub columns: Vec<Column>,
    /// A.
    pub equality: SparseRows,
    /// b.
    pub equality_rhs: Vec<f64>,
    /// What the rows of A mean.
    pub equality_names: Vec<RowName>,
    /// G: rows of the nonnegative cone first, then the second-order blocks.
    pub inequality: SparseRows,
    /// h.
    pub inequality_rhs: Vec<f64>,
    /// What the rows of G mean.
    pub inequality_names: Vec<RowName>,
    /// Rows of the nonnegative cone.
    pub nonnegative: usize,
    /// Rows of each second-order block, in order.
    pub second_order: Vec<usize>,
    /// Levels, most important first; the tie-break last.
    pub levels: Vec<ProgramLevel>,
}

/// One row on its way.
struct Row<'a> {
    entries: Vec<(usize, f64)>,
    rhs: f64,
    name: &'a RowName,
}

/// Rows by cone.
#[derive(Default)]
struct Sorted<'a> {
    zero: Vec<Row<'a>>,
    nonnegative: Vec<Row<'a>>,
    second_order: Vec<Vec<Row<'a>>>,
}

impl<'a> Sorted<'a> {
    /// Takes in rows over x; `slack` gives the column by which the next row or block is relaxed, if it is.
    fn add(&mut self, rows: &'a ConicRows, mut slack: impl FnMut(&'a RowName) -> Option<usize>) {
        let mut at = 0;
        let row = |i: usize| Row { entries: rows.matrix.row(i).collect(), rhs: rows.rhs[i], name: &rows.names[i] };
        for cone in &rows.cones {
            let range = at..at + cone.dimension();
            at = range.end;
            match cone {
                Cone::Zero(_) => self.zero.extend(range.map(row)),
                Cone::Nonnegative(_) => {
                    for i in range {
                        let mut row = row(i);
                        row.entries.extend(slack(row.name).map(|t| (t, -1.0)));
                        self.nonnegative.push(row);
                    }
                }
                Cone::SecondOrder(_) => {
                    let mut block: Vec<Row<'a>> = range.map(row).collect();
                    if let Some(first) = block.first_mut() {
                        first.entries.extend(slack(first.name).map(|t| (t, -1.0)));
                    }
                    self.second_order.push(block);
                }
            }
        }
    }
}

/// The program of a hierarchy.
pub fn program(hierarchy: &Hierarchy) -> Program {
    let mut columns = hierarchy.columns.clone();
    let mut sorted = Sorted::default();
    sorted.add(&hierarchy.hard, |_| None);
    let mut levels: Vec<ProgramLevel> = Vec::new();
    for level in &hierarchy.levels {
        let mut diagonal = Vec::new();
        let mut weights = level.soft_weight.iter();
        sorted.add(&level.soft, |name| {
            let weight = weights.next().copied().unwrap_or(0.0);
            diagonal.push((columns.len(), 2.0 * weight));
            columns.push(column("excess", level.priority, name));
            Some(columns.len() - 1)
        });
        levels.push(ProgramLevel { priority: Some(level.priority), diagonal });
    }
    let slacks = hierarchy.columns.len()..columns.len();
    levels.push(ProgramLevel { priority: None, diagonal: Vec::new() });
    let residuals = hierarchy.levels.iter().map(|level| &level.residuals).chain([&hierarchy.tie_break]);
    for (level, rows) in levels.iter_mut().zip(residuals) {
        define(rows, level, &mut columns, &mut sorted.zero);
    }
    finish(columns, slacks, sorted, levels)
}

/// One residual column per row: `R x - e = r`.
fn define<'a>(rows: &'a ResidualRows, level: &mut ProgramLevel, columns: &mut Vec<Column>, zero: &mut Vec<Row<'a>>) {
    for (i, name) in rows.names.iter().enumerate() {
        let at = columns.len();
        columns.push(column("residual", level.priority.unwrap_or(0), name));
        level.diagonal.push((at, 2.0 * rows.weight[i]));
        zero.push(Row { entries: rows.matrix.row(i).chain([(at, -1.0)]).collect(), rhs: rows.rhs[i], name });
    }
}

fn column(what: &str, priority: u32, name: &RowName) -> Column {
    let level = if priority == 0 { "tie_break".to_string() } else { priority.to_string() };
    Column { name: format!("{what}:{level}:{}:{}", name.group, name.part), unit: name.unit, scale: name.scale }
}

fn finish(columns: Vec<Column>, slacks: std::ops::Range<usize>, sorted: Sorted<'_>, levels: Vec<ProgramLevel>) -> Program {
    let least = RowName { group: "excess".to_string(), part: "least".to_string(), unit: "", scale: 1.0, physics: false };
    let bounds = slacks.map(|t| Row { entries: vec![(t, -1.0)], rhs: 0.0, name: &least });
    let nonnegative: Vec<Row<'_>> = sorted.nonnegative.into_iter().chain(bounds).collect();
    let count = nonnegative.len();
    let second_order: Vec<usize> = sorted.second_order.iter().map(Vec::len).collect();
    let inequalities = nonnegative.into_iter().chain(sorted.second_order.into_iter().flatten());
    let (equality, equality_rhs, equality_names) = stack(columns.len(), sorted.zero);
    let (inequality, inequality_rhs, inequality_names) = stack(columns.len(), inequalities);
    Program {
        columns, equality, equality_rhs, equality_names, inequality, inequality_rhs, inequality_names,
        nonnegative: count, second_order, levels,
    }
}

fn stack<'a>(columns: usize, rows: impl IntoIterator<Item = Row<'a>>) -> (SparseRows, Vec<f64>, Vec<RowName>) {
    let (mut matrix, mut rhs, mut names) = (SparseRows::new(columns), Vec::new(), Vec::new());
    for row in rows {
        matrix.push(row.entries);
        rhs.push(row.rhs);
        names.push(row.name.clone());
    }
    (matrix, rhs, names)
}
