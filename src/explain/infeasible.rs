//! Why nothing is feasible: the checked proof, the least relaxation, what each limit alone would have to give, and an
//! irreducible set. And whether it is the request that contradicts itself, or the tick that is too short.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::ExplainError;
pub use super::alone::{Alone, IrreducibleSet, MOST_SOLVES};
use super::alone::{each, feasible, irreducible};
use super::blame::{Blame, Role, copy_block, pieces};
use super::farkas::{Farkas, verify};
use super::relax::{Relaxation, least};
use crate::conic::{ConicRows, Hierarchy};
use crate::solve::{HierarchySolution, Status};

/// How an infeasible request is explained.
#[derive(Debug, Clone, PartialEq)]
pub struct Explanation {
    /// The proof, where the solver found one, checked without it.
    pub proof: Option<Farkas>,
    /// The least relaxation over all limits and must-hold tasks; none where physics contradicts itself (rigid soles that
    /// fight), for which nobody is blamed.
    pub relaxation: Option<Relaxation>,
    /// What each limit or must-hold task alone would have to give.
    pub alone: Vec<Alone>,
    /// False where the bound on solves left groups out of `alone`.
    pub alone_complete: bool,
    /// A set of limits and must-hold tasks that cannot hold together.
    pub irreducible: IrreducibleSet,
    /// Solves this took, at most about [`MOST_SOLVES`].
    pub solves: usize,
}

/// The natural size of every hard row: its scale as assembled.
pub fn natural_sizes(hierarchy: &Hierarchy) -> Vec<f64> {
    hierarchy.hard.names.iter().map(|n| n.scale).collect()
}

/// Explains why the hard rows of `hierarchy` cannot hold together.
///
/// `sizes`: natural size of each hard row in its own unit, see [`natural_sizes`]. Shares depend on them alone: rows (and
/// their scales) may be divided by anything.
pub fn explain(
    hierarchy: &Hierarchy,
    sizes: &[f64],
    solution: &HierarchySolution,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<Explanation, ExplainError> {
    let mut blame = Blame::new(hierarchy, sizes, cancel)?;
    let proof = solution.infeasibility.as_ref().map(|p| verify(hierarchy, &p.multipliers));
    let relaxation = relax_all(&mut blame)?;
    let (mut alone, mut alone_complete, mut set) = (Vec::new(), true, IrreducibleSet { complete: true, ..Default::default() });
    if relaxation.is_some() {
        (alone, alone_complete) = each(&mut blame)?;
        let start = start(&blame, proof.as_ref());
        set = irreducible(&mut blame, &start)?;
    }
    Ok(Explanation { proof, relaxation, alone, alone_complete, irreducible: set, solves: blame.solves })
}

fn relax_all(blame: &mut Blame) -> Result<Option<Relaxation>, ExplainError> {
    let roles = vec![Role::Relax; blame.groups.len()];
    least(blame, &roles)
}

/// Groups that carry a valid proof are infeasible by themselves; without one, all of them together are.
fn start(blame: &Blame, proof: Option<&Farkas>) -> Vec<bool> {
    let carried = |group: &String| proof.is_none_or(|p| !p.holds || p.multipliers.iter().any(|m| m.group == *group));
    blame.groups.iter().map(carried).collect()
}

/// Whether the hard rows can hold once the physics rows of the groups in `released` are dropped.
///
/// With the contact laws of the soft soles released, the wrenches at the tick's end are free: what is then feasible asks for
/// nothing that contradicts itself, only for more than one tick can bring about.
pub fn feasible_without(
    hierarchy: &Hierarchy,
    released: &[String],
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<bool, ExplainError> {
    let mut freed = Hierarchy { hard: ConicRows::new(hierarchy.columns.len()), levels: Vec::new(), ..hierarchy.clone() };
    for (first, len, kind) in pieces(&hierarchy.hard.cones) {
        let name = hierarchy.hard.names.get(first);
        if name.is_none_or(|n| !(n.physics && released.contains(&n.group))) {
            copy_block(&hierarchy.hard, &super::blame::Block { first, len, kind, group: None }, 1.0, &mut freed.hard);
        }
    }
    let sizes = natural_sizes(&freed);
    let mut blame = Blame::new(&freed, &sizes, cancel)?;
    let roles = vec![Role::Hold; blame.groups.len()];
    feasible(&mut blame, &roles)
}

/// The relaxed hierarchy solved to its end.
pub fn solve_relaxed(hierarchy: &Hierarchy, cancel: Option<&Arc<AtomicBool>>) -> Result<Option<HierarchySolution>, ExplainError> {
    let solution = super::blame::run(hierarchy, cancel)?;
    Ok((solution.status != Status::Infeasible).then_some(solution))
}
