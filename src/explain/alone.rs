//! Groups taken one by one: what each alone would have to give, and a set of them that cannot stand together.

use super::ExplainError;
use super::blame::{Blame, Role};
use super::relax::{Relaxation, least};
use crate::solve::Status;

/// Most solves spent on one request's groups; what is not reached is said to be open.
pub const MOST_SOLVES: usize = 200;
/// A relaxation (relative to the sizes) below this counts as none where the solver could not decide otherwise.
const FEASIBLE: f64 = 1e-7;

/// What one group alone would have to give.
#[derive(Debug, Clone, PartialEq)]
pub struct Alone {
    /// Limit or must-hold task.
    pub group: String,
    /// Its least relaxation with everything else held; none where it alone cannot make the request feasible.
    pub needs: Option<Relaxation>,
}

/// Groups that cannot hold together with the physics, while every proper part of them can.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct IrreducibleSet {
    /// The groups. Not unique: another order of deletion may find another set.
    pub groups: Vec<String>,
    /// False where the bound on solves was reached first, so that the set may still hold groups it does not need.
    pub complete: bool,
}

/// The least relaxation of every group on its own; false where the bound on solves was reached first.
pub(super) fn each(blame: &mut Blame) -> Result<(Vec<Alone>, bool), ExplainError> {
    let mut out = Vec::new();
    let mut roles = vec![Role::Hold; blame.groups.len()];
    for g in 0..blame.groups.len() {
        if blame.solves >= MOST_SOLVES {
            return Ok((out, false));
        }
        roles[g] = Role::Relax;
        out.push(Alone { group: blame.groups[g].clone(), needs: least(blame, &roles)? });
        roles[g] = Role::Hold;
    }
    Ok((out, true))
}

/// Deletes group after group from `start` (all of which, with physics, are infeasible), keeping those without which the
/// rest is feasible. Feasibility only grows with deletion, so that one pass leaves an irreducible set.
pub(super) fn irreducible(blame: &mut Blame, start: &[bool]) -> Result<IrreducibleSet, ExplainError> {
    let mut roles: Vec<Role> = start.iter().map(|&s| if s { Role::Hold } else { Role::Drop }).collect();
    let mut complete = true;
    for g in 0..roles.len() {
        if roles[g] == Role::Drop {
            continue;
        }
        if blame.solves >= MOST_SOLVES {
            complete = false;
            break;
        }
        roles[g] = Role::Drop;
        if feasible(blame, &roles)? {
            roles[g] = Role::Hold;
        }
    }
    let groups = roles.iter().zip(&blame.groups).filter(|(r, _)| **r == Role::Hold).map(|(_, g)| g.clone()).collect();
    Ok(IrreducibleSet { groups, complete })
}

/// Whether the groups held by `roles` can stand together with the physics.
pub(super) fn feasible(blame: &mut Blame, roles: &[Role]) -> Result<bool, ExplainError> {
    let program = blame.program(roles);
    match blame.solve(&program.hierarchy)?.status {
        Status::Infeasible => Ok(false),
        Status::Solved | Status::IllPosed => Ok(true),
        // Undecided within rounding: the distance to feasibility decides.
        Status::Inaccurate | Status::Cancelled => {
            let relax: Vec<Role> = roles.iter().map(|r| if *r == Role::Hold { Role::Relax } else { *r }).collect();
            Ok(least(blame, &relax)?.is_some_and(|r| r.sum.sqrt() < FEASIBLE))
        }
    }
}
