//! The freedom left after the last level.
//!
//! Once every block without interior has been restricted to its face, what remains has an interior
//! relative to its equalities, so the null space of the equalities IS the affine hull of the remaining set: an
//! active row without multiplier that lets the answer move one way takes nothing from it.

use super::answer::FreeDirections;
use super::rank::Factor;
use super::system::System;

/// A direction whose part in the counted columns is shorter than this moves auxiliary columns only.
const AUXILIARY_ONLY: f64 = 1e-7;

/// Directions that can still move, as far as they move columns that count.
pub(super) fn free_directions(system: &System, auxiliary: &[usize]) -> FreeDirections {
    let n = system.matrix.columns;
    let hull = system.space.free();
    let mut work = Vec::with_capacity(n * hull);
    for c in 0..hull {
        let start = work.len();
        work.extend_from_slice(system.space.null(c));
        for &j in auxiliary {
            work[start + j] = 0.0;
        }
    }
    let factor = Factor::new(&mut work, n, &vec![1.0; hull], AUXILIARY_ONLY, "free directions");
    let basis = (0..factor.rank()).map(|j| {
        let mut v = vec![0.0; n];
        v[j] = 1.0;
        factor.apply(&mut v);
        auxiliary.iter().for_each(|&k| v[k] = 0.0);
        v
    });
    FreeDirections { dimension: factor.rank(), basis: basis.collect(), hull, rank: Some(factor.decision.clone()) }
}
