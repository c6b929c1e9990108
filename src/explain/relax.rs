//! The least relaxation that makes a request feasible.
//!
//! ```text
//! minimise sum (delta_i / size_i)^2   subject to   physics,   s_i + delta_i e in K_i, delta_i >= 0   for limits,
//!                                                  a_i x = b_i + delta_i, either sign                for must-hold tasks
//! ```
//! One delta per row of a limit, one per second-order block (along `e = (1, 0, ...)`), each beside the natural size of
//! its limit. The optimum is unique in delta, and depends on the sizes alone, not on how rows were divided.
//!
//! That no smaller relaxation exists is proved by weak duality. With z in the dual cone (z_i its part along e) and
//! `w_i = (scale_i / size_i)^2`, every relaxation that works has `sum z_i delta_i >= v = -b'z - sum_j |A'z|_j X_j`, so by
//! Cauchy and Schwarz `sum w_i delta_i^2 >= v^2 / sum (z_i^2 / w_i)` wherever v > 0.

use super::ExplainError;
use super::blame::{Blame, Kind, Program, Role};
use super::farkas::verify;
use crate::conic::Hierarchy;
use crate::solve::{LevelOutcome, RowSource, Status};

/// Amounts below this part of the largest (both relative to their sizes) are rounding and are not listed.
const LISTED: f64 = 1e-8;

/// One row or second-order block that gives way.
#[derive(Debug, Clone, PartialEq)]
pub struct RowRelaxation {
    /// Limit or must-hold task.
    pub group: String,
    /// The row, or the first row of its cone.
    pub part: String,
    /// How far it gives way, in `unit`: positive for limits, either sign (wanted value moves by this) for must-hold tasks.
    pub amount: f64,
    /// Unit.
    pub unit: &'static str,
    /// The natural size of the limit, in `unit`: what the amount is compared with.
    pub size: f64,
    /// `(amount / size)^2` as a part of the whole sum, 0 to 1.
    pub share: f64,
}

/// One limit or must-hold task that gives way.
#[derive(Debug, Clone, PartialEq)]
pub struct GroupRelaxation {
    /// Its name.
    pub group: String,
    /// Its part of the whole sum, 0 to 1.
    pub share: f64,
}

/// The least relaxation of some groups.
#[derive(Debug, Clone, PartialEq)]
pub struct Relaxation {
    /// `sum (amount / size)^2`.
    pub sum: f64,
    /// Rows that give way, largest share first.
    pub rows: Vec<RowRelaxation>,
    /// Groups that give way, largest share first.
    pub groups: Vec<GroupRelaxation>,
    /// Every hard row's delta, scaled like the row: `b + delta` admits the point found (second-order blocks: first row).
    pub deltas: Vec<f64>,
    /// No relaxation of these groups has a sum below this (computed from `multipliers` by weak duality, with the bounds on
    /// the unknowns that the proof of infeasibility uses).
    pub proved: f64,
    /// The multipliers of that proof, one per hard row (scaled), in the dual cone; zero on rows left out.
    pub multipliers: Vec<f64>,
    /// False where the solver could not confirm the optimum to rounding.
    pub exact: bool,
}

/// The least relaxation under the given roles; none where even unbounded relaxation of these groups leaves nothing.
pub(super) fn least(blame: &mut Blame, roles: &[Role]) -> Result<Option<Relaxation>, ExplainError> {
    let program = blame.program(roles);
    let solution = blame.solve(&program.hierarchy)?;
    if solution.status == Status::Infeasible {
        return Ok(None);
    }
    let mut deltas = vec![0.0; blame.hierarchy.hard.rhs.len()];
    let Some(level) = solution.levels.first() else {
        // Nothing to relax: feasible as it stands, or not known to be.
        let feasible = matches!(solution.status, Status::Solved | Status::IllPosed);
        return Ok(feasible.then(|| report(blame, deltas, Vec::new(), roles, true)));
    };
    let (mut slacks, mut residuals) = (level.soft_slack.iter(), level.residual.iter());
    for block in blame.relaxed(roles) {
        let next = if block.kind == Kind::Equality { residuals.next() } else { slacks.next() };
        deltas[block.first] = next.copied().unwrap_or(0.0) / program.factor[block.first];
    }
    let exact = level.refined || level.optimality.worst() < 1e-8;
    let z = multipliers(blame, &program, level);
    Ok(Some(report(blame, deltas, z, roles, exact)))
}

/// The multipliers of the level, row by row of the hierarchy it was made from.
fn multipliers(blame: &Blame, program: &Program, level: &LevelOutcome) -> Vec<f64> {
    let mut z = vec![0.0; blame.hierarchy.hard.rhs.len()];
    for (source, &value) in level.system.source.iter().zip(&level.multipliers) {
        if let RowSource::Hard { row } | RowSource::HardFace { row } = *source {
            z[program.held[row]] += value * program.factor[program.held[row]];
        }
    }
    for (&row, &value) in program.soft.iter().zip(&level.soft_multipliers) {
        z[row] = value * program.factor[row];
    }
    // cost r^2 with r = f (a x - b): the row's multiplier is 2 r.
    for (&row, &residual) in program.residuals.iter().zip(&level.residual) {
        z[row] = 2.0 * residual * program.factor[row];
    }
    z
}

/// The bound of weak duality, see the top of this file.
fn proved(blame: &Blame, z: &[f64], roles: &[Role]) -> (f64, Vec<f64>) {
    let checked = verify(blame.hierarchy, z);
    let excess = -(checked.value + checked.spill);
    let size: f64 = blame.relaxed(roles).map(|b| (checked.projected[b.first] / blame.ratio(b.first)).powi(2)).sum();
    let bound = if excess > 0.0 && size > 0.0 { excess * excess / size } else { 0.0 };
    (bound, checked.projected)
}

fn report(blame: &Blame, deltas: Vec<f64>, z: Vec<f64>, roles: &[Role], exact: bool) -> Relaxation {
    let names = &blame.hierarchy.hard.names;
    let relative: Vec<f64> = deltas.iter().enumerate().map(|(i, d)| d * names[i].scale / blame.sizes[i]).collect();
    let sum: f64 = relative.iter().map(|r| r * r).sum();
    let largest = relative.iter().fold(0.0f64, |m, r| m.max(r.abs()));
    let mut rows: Vec<RowRelaxation> = (0..deltas.len())
        .filter(|&i| relative[i].abs() > LISTED * largest)
        .map(|i| RowRelaxation {
            group: names[i].group.clone(),
            part: names[i].part.clone(),
            amount: deltas[i] * names[i].scale,
            unit: names[i].unit,
            size: blame.sizes[i],
            share: relative[i] * relative[i] / sum,
        })
        .collect();
    let mut groups: Vec<GroupRelaxation> = Vec::new();
    for row in &rows {
        match groups.iter_mut().find(|g| g.group == row.group) {
            Some(group) => group.share += row.share,
            None => groups.push(GroupRelaxation { group: row.group.clone(), share: row.share }),
        }
    }
    rows.sort_by(|a, b| b.share.total_cmp(&a.share));
    groups.sort_by(|a, b| b.share.total_cmp(&a.share));
    let (proved, multipliers) = proved(blame, &z, roles);
    Relaxation { sum, rows, groups, deltas, proved, multipliers, exact }
}

/// The hierarchy with its limits relaxed: deltas times `factor`, and `slack` (scaled) more on every limit that gives way,
/// so that what is left has an interior.
pub fn relaxed(hierarchy: &Hierarchy, deltas: &[f64], factor: f64, slack: f64) -> Hierarchy {
    let mut out = hierarchy.clone();
    let largest = deltas.iter().fold(0.0f64, |m, d| m.max(d.abs()));
    for (first, _, kind) in super::blame::pieces(&hierarchy.hard.cones) {
        let delta = deltas.get(first).copied().unwrap_or(0.0);
        let gives = kind != Kind::Equality && delta > LISTED * largest;
        if let Some(bound) = out.hard.rhs.get_mut(first) {
            *bound += factor * delta + if gives { slack } else { 0.0 };
        }
    }
    out
}
