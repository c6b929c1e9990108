//! What happens between two levels: the answer about the level that was solved, and the freezing of what it decided.
//!
//! A frozen level is `A x = A x*` by independent rows, its soft limits as hard ones relaxed by their slacks, and every cone
//! restricted to the face that its multiplier exposes; what then has no interior is restricted further (`faces`).

use super::answer::*;
use super::cascade::{Cascade, Solved, Stop};
use super::faces::{ensure_interior, exposed, restrict};
use super::level::LevelData;
use super::refine::ON_BOUNDARY;
use super::system::{DEPENDENT, DEPENDENT_FACE, Entries, Kind};

/// A row this close to its value (scaled, per unit of row length and value) holds to rounding.
const HOLDS: f64 = 1e-12;
/// A row of the data that a refined multiplier names counts as dependent below this: what is left free then moves it by no more.
const DEPENDENT_EXACT: f64 = 1e-10;
/// [`ON_BOUNDARY`] where the point is the engine's own.
const ON_BOUNDARY_UNREFINED: f64 = 1e-5;

impl Cascade<'_> {
    pub(super) fn move_to(&mut self, solved: &Solved) {
        self.system.space.add_expanded(&solved.point.u, &mut self.system.x);
        self.system.return_to_equalities();
        self.sets = None;
    }

    /// What the answer says about a level, before it is frozen.
    pub(super) fn report(&mut self, data: &LevelData, solved: &Solved) -> LevelOutcome {
        let system = &self.system;
        let mut x = system.x.clone();
        system.space.add_expanded(&solved.point.u, &mut x);
        let residuals = data.residuals;
        let residual: Vec<f64> = (0..residuals.rhs.len()).map(|i| residuals.matrix.row_dot(i, &x) - residuals.rhs[i]).collect();
        let mut gradient = vec![0.0; x.len()];
        let pull: Vec<f64> = residual.iter().zip(&residuals.weight).map(|(r, w)| 2.0 * w * r).collect();
        residuals.matrix.add_transpose_times(&pull, &mut gradient);
        let mut cost: f64 = residual.iter().zip(&residuals.weight).map(|(r, w)| w * r * r).sum();
        let mut by_row = vec![0.0; system.rhs.len()];
        let soft_rows = data.soft.map_or(0, |(rows, _)| rows.rhs.len());
        let (mut soft_slack, mut soft_multipliers) = (Vec::new(), vec![0.0; soft_rows]);
        for block in &solved.problem.sets.blocks {
            let z = &solved.point.z[block.first..block.first + block.len];
            if let (Some(weight), Some((soft, _))) = (block.soft, data.soft) {
                let first = solved.problem.soft_first[block.block];
                soft_multipliers[first..first + block.len].copy_from_slice(z);
                let t = z[0] / (2.0 * weight);
                cost += weight * t * t;
                soft_slack.push(t);
                for (k, row) in (first..first + block.len).enumerate() {
                    soft.matrix.row(row).for_each(|(j, v)| gradient[j] += v * z[k]);
                }
            } else {
                let first = system.blocks[block.block].first;
                by_row[first..first + block.len].copy_from_slice(z);
                for (k, row) in (first..first + block.len).enumerate() {
                    system.matrix.row(row).for_each(|(j, v)| gradient[j] += v * z[k]);
                }
            }
        }
        for (&row, y) in system.pivots.iter().zip(system.space.multipliers(&gradient)) {
            by_row[row] = -y;
        }
        self.x_bound += solved.bound / solved.cost_pivot.max(f64::MIN_POSITIVE);
        let (shown, origin) = system.snapshot();
        LevelOutcome {
            priority: data.priority,
            x,
            system: shown,
            multipliers: origin.iter().map(|&row| by_row[row]).collect(),
            soft_slack,
            soft_multipliers,
            cost: cost + 0.0,
            residual,
            rank: Vec::new(),
            faces: Vec::new(),
            refined: solved.refined,
            bound: solved.bound,
            optimality: solved.optimality,
            iterations: solved.iterations,
        }
    }

    /// Fixes what a level decided: its residuals, its slacks, the faces its multipliers expose.
    pub(super) fn freeze(&mut self, index: usize, data: &LevelData, solved: &Solved, outcome: &mut LevelOutcome) -> Result<(), Stop> {
        self.move_to(solved);
        outcome.rank.push(self.fix_residuals(index, data));
        let faces = self.expose(index, data, solved);
        let fixed: Vec<usize> = faces.iter().flat_map(|(block, face)| restrict(&mut self.system, *block, &face.kind)).collect();
        if !fixed.is_empty() {
            // Rows of the data are exact; only the engine's own multipliers may have named one that is not quite active.
            let threshold = if solved.refined { DEPENDENT_EXACT } else { DEPENDENT_FACE };
            self.settle(&fixed);
            outcome.rank.push(self.system.fix(&fixed, threshold, "faces of the level"));
        }
        outcome.faces.extend(faces.into_iter().map(|(_, face)| face));
        self.system.return_to_equalities();
        let interior = ensure_interior(&mut self.system, self.options, self.cancel)?;
        if interior.cancelled {
            return Err(Stop::Cancelled);
        }
        self.ill_posed |= interior.ill_posed;
        self.inaccurate |= interior.negative;
        outcome.faces.extend(interior.faces);
        outcome.rank.extend(interior.rank);
        self.sets = Some(interior.sets);
        Ok(())
    }

    /// Rows that hold to rounding are fixed where they stand: rows that nearly depend on each other would turn the rounding into
    /// a move.
    fn settle(&mut self, rows: &[usize]) {
        let system = &mut self.system;
        for &row in rows {
            let at = system.matrix.row_dot(row, &system.x);
            if (at - system.rhs[row]).abs() <= HOLDS * (system.row_length(row) + system.rhs[row].abs()) {
                system.rhs[row] = at;
            }
        }
    }

    /// Appends the independent ones of the level's residual rows as equalities at their present value.
    fn fix_residuals(&mut self, index: usize, data: &LevelData) -> RankDecision {
        let matrix = &data.residuals.matrix;
        let entries: Vec<_> = (0..data.residuals.rhs.len()).map(|row| Entries::new(matrix, row)).collect();
        let (kept, decision) = self.system.space.append(&entries, DEPENDENT, "residuals of the level");
        for row in kept {
            let value = matrix.row_dot(row, &self.system.x);
            self.system.push_row(matrix.row(row), value, RowSource::Frozen { level: index, row });
            self.system.close_block(1, Kind::Equality);
            self.system.pivots.push(self.system.rhs.len() - 1);
        }
        decision
    }

    /// Appends the soft limits relaxed by their slacks, and lists the faces the level's multipliers expose.
    fn expose(&mut self, index: usize, data: &LevelData, solved: &Solved) -> Vec<(usize, FaceDecision)> {
        let boundary = if solved.refined { ON_BOUNDARY } else { ON_BOUNDARY_UNREFINED };
        let mut faces = Vec::new();
        for block in &solved.problem.sets.blocks {
            let z = &solved.point.z[block.first..block.first + block.len];
            let at = match (block.soft, data.soft) {
                (Some(weight), Some((soft, _))) => {
                    let first = solved.problem.soft_first[block.block];
                    for (k, row) in (first..first + block.len).enumerate() {
                        let relaxed = soft.rhs[row] + if k == 0 { z[0] / (2.0 * weight) } else { 0.0 };
                        self.system.push_row(soft.matrix.row(row), relaxed, RowSource::Soft { level: index, row });
                    }
                    self.system.close_block(block.len, block.kind)
                }
                _ => block.block,
            };
            if let Some(kind) = exposed(block.kind, z, solved.noise, boundary) {
                let source = self.system.source[self.system.blocks[at].first];
                faces.push((at, FaceDecision { source, kind, exposed: Exposed::ByMultiplier, multiplier: z.to_vec() }));
            }
        }
        faces
    }
}
