//! What the question leaves open: the range of every torque, acceleration and wrench over all answers that are equally
//! good by every priority.
//!
//! The set is what holds after the last level, before the tie-break. A component that no free direction moves is the same
//! in all of them. For one that moves, its extreme over the set is the point nearest to a target beyond
//! it: `minimise (x_j - (x*_j -+ R))^2`. Where the target itself is reached, the component is unbounded as far as R; a
//! second, farther target settles whether it is bounded at all.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::ExplainError;
use super::blame::run;
use crate::conic::{Hierarchy, Level, ResidualRows};
use crate::solve::{HierarchySolution, Status};

/// A component moves where a free unit direction has a part this large in it.
const MOVES: f64 = 1e-7;
/// Targets tried, in scaled units (a force of one body weight counts 1): what moves farther counts as unbounded.
const REACH: [f64; 2] = [10.0, 1e4];
/// A target reached within this part of its distance leaves the component unbounded.
const REACHED: f64 = 1e-6;
/// Most components whose range is worked out.
pub const MOST_COMPONENTS: usize = 120;

/// The range of one component.
#[derive(Debug, Clone, PartialEq)]
pub struct Range {
    /// Name of the unknown, e.g. `torque:left_knee`.
    pub name: String,
    /// Unit.
    pub unit: &'static str,
    /// Its value in the answer, chosen by the tie-break.
    pub value: f64,
    /// Least value among equally good answers; none where unbounded.
    pub least: Option<f64>,
    /// Largest value among equally good answers; none where unbounded.
    pub largest: Option<f64>,
    /// False where the solver could not confirm an end of the range to rounding.
    pub exact: bool,
}

/// What the question leaves open.
#[derive(Debug, Clone, PartialEq)]
pub struct Uniqueness {
    /// Independent directions that move a torque, acceleration or wrench. Zero: the answer is unique, without the tie-break.
    pub directions: usize,
    /// The components they move. All others are determined by the question.
    pub ranges: Vec<Range>,
    /// Solves this took.
    pub solves: usize,
    /// False where more than [`MOST_COMPONENTS`] components move: the ranges of the rest are not worked out.
    pub complete: bool,
}

/// Works out the ranges over `solution.remaining`.
pub fn ranges(
    hierarchy: &Hierarchy,
    solution: &HierarchySolution,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<Uniqueness, ExplainError> {
    let basis = &solution.free.basis;
    let moved: Vec<usize> = (0..hierarchy.columns.len())
        .filter(|&j| basis.iter().any(|direction| direction.get(j).is_some_and(|v| v.abs() > MOVES)))
        .collect();
    let mut out = Uniqueness {
        directions: solution.free.dimension,
        ranges: Vec::new(),
        solves: 0,
        complete: moved.len() <= MOST_COMPONENTS,
    };
    let set = Hierarchy {
        columns: hierarchy.columns.clone(),
        hard: solution.remaining.rows.clone(),
        levels: Vec::new(),
        tie_break: hierarchy.tie_break.clone(),
        auxiliary: hierarchy.auxiliary.clone(),
    };
    for &j in moved.iter().take(MOST_COMPONENTS) {
        let column = &hierarchy.columns[j];
        let at = solution.x[j];
        let mut exact = true;
        let mut end = |sign: f64| -> Result<Option<f64>, ExplainError> {
            let (value, confirmed, solves) = extreme(&set, j, at, sign, cancel)?;
            out.solves += solves;
            exact &= confirmed;
            Ok(value.map(|v| v * column.scale))
        };
        let (least, largest) = (end(-1.0)?, end(1.0)?);
        out.ranges.push(Range { name: column.name.clone(), unit: column.unit, value: at * column.scale, least, largest, exact });
    }
    Ok(out)
}

/// The extreme of x_j in the direction of `sign`: (value, confirmed, solves).
fn extreme(
    set: &Hierarchy,
    j: usize,
    at: f64,
    sign: f64,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<(Option<f64>, bool, usize), ExplainError> {
    let mut program = set.clone();
    let mut solves = 0;
    for reach in REACH {
        let mut residuals = ResidualRows::new(set.columns.len());
        residuals.matrix.push([(j, 1.0)]);
        residuals.rhs.push(at + sign * reach);
        residuals.weight.push(1.0);
        residuals.names.extend(set.tie_break.names.get(j).cloned());
        program.levels = vec![Level { priority: 1, residuals, ..Level::default() }];
        let solution = run(&program, cancel)?;
        solves += 1;
        let Some(level) = solution.levels.first() else { return Ok((Some(at), false, solves)) };
        let short = level.residual.first().map_or(0.0, |r| r.abs());
        if short > REACHED * reach {
            let confirmed = level.refined && !matches!(solution.status, Status::Inaccurate | Status::Infeasible);
            return Ok((Some(at + sign * (reach - short)), confirmed, solves));
        }
    }
    Ok((None, true, solves))
}
