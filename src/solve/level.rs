//! One level as data: the conic program for the engine, and the same level in reduced coordinates.
//!
//! `minimise sum w (a x - b)^2 + sum v t^2` over the system and the level's soft limits. For the
//! engine every x stays a variable, the residuals and slacks become variables with a diagonal cost.
//! `t >= 0` needs no row: a negative t would only tighten the limit at a cost.

use super::dense::norm;
use super::engine::Program;
use super::rank::Factor;
use super::system::{DEPENDENT, Entries, Kind, Reduced, ReducedBlock, System, blocks_of};
use crate::conic::{Cone, ConicRows, Level, ResidualRows, SparseRows};

/// The parts of a level that are solved for; the tie-break is a level without soft limits.
#[derive(Clone, Copy)]
pub(super) struct LevelData<'a> {
    pub priority: u32,
    pub residuals: &'a ResidualRows,
    pub soft: Option<(&'a ConicRows, &'a [f64])>,
}

impl<'a> LevelData<'a> {
    pub fn of(level: &'a Level) -> Self {
        LevelData {
            priority: level.priority,
            residuals: &level.residuals,
            soft: Some((&level.soft, level.soft_weight.as_slice())).filter(|(rows, _)| !rows.rhs.is_empty()),
        }
    }

    pub fn tie_break(residuals: &'a ResidualRows) -> Self {
        LevelData { priority: 0, residuals, soft: None }
    }

    /// Soft blocks as (first row, rows, kind), one per slack.
    pub fn soft_blocks(&self) -> Vec<(usize, usize, Kind)> {
        self.soft.map_or(Vec::new(), |(rows, _)| blocks_of(&rows.cones))
    }
}

/// The level for the engine.
pub(super) struct Assembled {
    pub program: Program,
    /// For each block of `Reduced` (hard, then soft), its first row in the program.
    pub first: Vec<usize>,
}

/// Writes the level as one conic program in [x - x0, r, t]; x0 satisfies the equalities, so that their right-hand sides
/// vanish. The cost is divided by the problem's scale, and so are the multipliers that come back. `pull` adds
/// `pull |x - x0|^2 / 2` to it.
pub(super) fn assemble(system: &System, data: &LevelData, reduced: &LevelProblem, pull: f64) -> Assembled {
    let n = system.matrix.columns;
    let residuals = data.residuals;
    let m = residuals.rhs.len();
    let weights = data.soft.map_or(&[][..], |(_, w)| w);
    let mut rows = SparseRows::new(n + m + weights.len());
    let mut rhs = Vec::new();
    for &row in &system.pivots {
        push(&mut rows, Entries::new(&system.matrix, row), None);
        rhs.push(0.0);
    }
    for i in 0..m {
        push(&mut rows, Entries::new(&residuals.matrix, i), Some(n + i));
        rhs.push(-reduced.residual_at[i] / (2.0 * residuals.weight[i]).sqrt());
    }
    let mut cones = Vec::new();
    if !rhs.is_empty() {
        cones.push(Cone::Zero(rhs.len()));
    }
    let mut first = vec![0; reduced.sets.blocks.len()];
    for kind in [Kind::Nonnegative, Kind::SecondOrder] {
        let begin = rhs.len();
        for (place, block) in reduced.sets.blocks.iter().enumerate().filter(|(_, b)| b.kind == kind) {
            first[place] = rhs.len();
            let (matrix, at, slack) = match (block.soft, data.soft) {
                (Some(_), Some((soft, _))) => {
                    (&soft.matrix, reduced.soft_first[block.block], Some(n + m + block.block))
                }
                _ => (&system.matrix, system.blocks[block.block].first, None),
            };
            for k in 0..block.len {
                push(&mut rows, Entries::new(matrix, at + k), slack.filter(|_| k == 0));
                rhs.push(reduced.sets.at[block.first + k]);
            }
            if kind == Kind::SecondOrder {
                cones.push(Cone::SecondOrder(block.len));
            }
        }
        if kind == Kind::Nonnegative && rhs.len() > begin {
            cones.push(Cone::Nonnegative(rhs.len() - begin));
        }
    }
    let mut diagonal = vec![pull; n];
    diagonal.extend(residuals.weight.iter().map(|w| 2.0 * w / reduced.scale));
    diagonal.extend(weights.iter().map(|w| 2.0 * w / reduced.scale));
    let linear = vec![0.0; diagonal.len()];
    Assembled { program: Program { diagonal, linear, rows, rhs, cones }, first }
}

/// Writes the level as one conic program in [u, r, t]: no equalities but the residuals' own, so that nothing hangs on how well
/// the frozen rows are conditioned. Residuals are turned into at most d rows first; their sum of squares changes by a constant.
pub(super) fn assemble_reduced(reduced: &LevelProblem, pull: f64) -> Assembled {
    let sets = &reduced.sets;
    let d = sets.d;
    let root = reduced.scale.sqrt();
    let (cost_rows, cost_at) = compressed(reduced);
    let m = cost_at.len();
    let slacks = reduced.soft_first.len();
    let mut rows = SparseRows::new(d + m + slacks);
    let mut rhs = Vec::new();
    for i in 0..m {
        rows.push((0..d).map(|j| (j, cost_rows[i * d + j] / root)).chain([(d + i, -1.0)]));
        rhs.push(-cost_at[i] / root);
    }
    let mut cones = Vec::new();
    if m > 0 {
        cones.push(Cone::Zero(m));
    }
    let mut first = vec![0; sets.blocks.len()];
    let mut diagonal = vec![pull; d];
    diagonal.resize(d + m, 1.0);
    diagonal.resize(d + m + slacks, 0.0);
    for kind in [Kind::Nonnegative, Kind::SecondOrder] {
        let begin = rhs.len();
        for (place, block) in sets.blocks.iter().enumerate().filter(|(_, b)| b.kind == kind) {
            first[place] = rhs.len();
            for i in block.first..block.first + block.len {
                let slack = block.soft.filter(|_| i == block.first).map(|weight| {
                    diagonal[d + m + block.block] = 2.0 * weight / reduced.scale;
                    (d + m + block.block, -1.0)
                });
                rows.push(sets.row(i).iter().copied().enumerate().chain(slack));
                rhs.push(sets.at[i]);
            }
            if kind == Kind::SecondOrder {
                cones.push(Cone::SecondOrder(block.len));
            }
        }
        if kind == Kind::Nonnegative && rhs.len() > begin {
            cones.push(Cone::Nonnegative(rhs.len() - begin));
        }
    }
    let linear = vec![0.0; diagonal.len()];
    Assembled { program: Program { diagonal, linear, rows, rhs, cones }, first }
}

/// Rows R and values with `|R u + values|^2 = |M u + at|^2` up to a constant: at most d of them.
fn compressed(reduced: &LevelProblem) -> (Vec<f64>, Vec<f64>) {
    let (d, m) = (reduced.sets.d, reduced.residual_at.len());
    if m <= d || d == 0 {
        return (reduced.residual.clone(), reduced.residual_at.clone());
    }
    let mut columns = vec![0.0; m * d];
    for i in 0..m {
        for j in 0..d {
            columns[j * m + i] = reduced.residual[i * d + j];
        }
    }
    compress(columns, d, reduced.residual_at.clone())
}

/// Rows R by rows and values with `|R u + values|^2 = |M u + at|^2` up to a constant, M given by d columns: as many as M has rank.
pub(super) fn compress(mut columns: Vec<f64>, d: usize, mut at: Vec<f64>) -> (Vec<f64>, Vec<f64>) {
    let m = at.len();
    let original = columns.clone();
    let factor = Factor::new(&mut columns, m, &vec![1.0; d], 0.0, "cost columns");
    let rank = factor.rank();
    let mut rows = vec![0.0; rank * d];
    for j in 0..d {
        let mut turned = original[j * m..(j + 1) * m].to_vec();
        factor.apply_transpose(&mut turned);
        for i in 0..rank {
            rows[i * d + j] = turned[i];
        }
    }
    factor.apply_transpose(&mut at);
    at.truncate(rank);
    (rows, at)
}

fn push(rows: &mut SparseRows, entries: Entries, minus: Option<usize>) {
    for (j, v) in entries {
        rows.index.push(j);
        rows.value.push(v);
    }
    if let Some(j) = minus {
        rows.index.push(j);
        rows.value.push(-1.0);
    }
    rows.start.push(rows.index.len());
}

/// The level in u: `minimise |M u + at|^2 / 2 + sum v t^2` over blocks of which the last are soft.
#[derive(Default)]
pub(super) struct LevelProblem {
    pub sets: Reduced,
    /// First row of each soft block in the level's soft rows.
    pub soft_first: Vec<usize>,
    /// `sqrt(2 w) a N`, by rows.
    pub residual: Vec<f64>,
    /// `sqrt(2 w) (a x0 - b)`.
    pub residual_at: Vec<f64>,
    /// `sqrt(2 w) |a|`.
    pub residual_length: Vec<f64>,
    /// Largest `2 w |a|^2`, the natural size of a cost gradient; 1 where there are no residuals.
    pub size: f64,
    /// What the cost is divided by for the engine: the geometric mean of the largest and the smallest `2 w`, so that within a
    /// wide range of weights the small ones are not lost under the engine's tolerance.
    pub scale: f64,
}

/// Reduces a level to the coordinates of the system.
pub(super) fn reduce(system: &System, sets: Reduced, data: &LevelData) -> LevelProblem {
    let d = sets.d;
    let mut problem = LevelProblem { sets, ..LevelProblem::default() };
    let residuals = data.residuals;
    for i in 0..residuals.rhs.len() {
        let root = (2.0 * residuals.weight[i]).sqrt();
        let start = problem.residual.len();
        problem.residual.resize(start + d, 0.0);
        let out = &mut problem.residual[start..];
        system.space.project(Entries::new(&residuals.matrix, i), out);
        let length: f64 = residuals.matrix.row(i).map(|(_, v)| v * v).sum();
        // What is left of a row that the freezing of levels would call dependent is rounding: nothing here may move along it.
        let root_here = if norm(out) <= DEPENDENT * length.sqrt() { 0.0 } else { root };
        out.iter_mut().for_each(|v| *v *= root_here);
        problem.residual_at.push(root * (residuals.matrix.row_dot(i, &system.x) - residuals.rhs[i]));
        problem.residual_length.push(root * length.sqrt());
        problem.size = problem.size.max(2.0 * residuals.weight[i] * length);
    }
    if let Some((soft, weights)) = data.soft {
        for (index, (first, len, kind)) in data.soft_blocks().into_iter().enumerate() {
            let sets = &mut problem.sets;
            let at = sets.at.len();
            for row in first..first + len {
                let start = sets.gamma.len();
                sets.gamma.resize(start + d, 0.0);
                system.space.project(Entries::new(&soft.matrix, row), &mut sets.gamma[start..]);
                sets.at.push(soft.rhs[row] - soft.matrix.row_dot(row, &system.x));
                let length: f64 = soft.matrix.row(row).map(|(_, v)| v * v).sum();
                sets.length.push(length.sqrt());
                problem.size = problem.size.max(2.0 * weights[index] * length);
            }
            sets.blocks.push(ReducedBlock { block: index, first: at, len, kind, soft: Some(weights[index]) });
            problem.soft_first.push(first);
        }
    }
    if problem.size == 0.0 {
        problem.size = 1.0;
    }
    let weights = residuals.weight.iter().chain(data.soft.map_or(&[][..], |(_, w)| w));
    let (least, most) = weights.fold((f64::INFINITY, 0.0f64), |(a, b), &w| (a.min(w), b.max(w)));
    problem.scale = if most > 0.0 { 2.0 * least.sqrt() * most.sqrt() } else { 1.0 };
    problem
}

impl LevelProblem {
    pub fn residual_row(&self, i: usize) -> &[f64] {
        &self.residual[i * self.sets.d..(i + 1) * self.sets.d]
    }
}

