//! The law itself, not its linearisation, at the state a given acceleration leads to.

use super::law::bonded;
use super::moments::SoleMoments;
use super::rest::resolve_relative;
use super::{ContactError, Law, Patch, SoleMotion, TickRule};
use crate::spatial::{Vec6, Wrench};

/// Wrench (world axes, about the sole origin then) at the end of the tick T if the sole acceleration `a` (linear of
/// the origin, angular) is held: poses advance by `T v + c T^2 a`, rotations by `exp(T w + c T^2 alpha)`,
/// velocities by `T a`. With a measured wrench, that wrench plus the change of the law. Its
/// difference from `drift - gain a` is the error of linearisation.
///
/// # Errors
/// As [`super::rest::resolve`]; `RigidHasNoLaw`; a tick that is not positive.
pub fn wrench_at(
    patch: &Patch,
    motion: &SoleMotion,
    acceleration: &Vec6,
    tick: f64,
    rule: TickRule,
) -> Result<Wrench, ContactError> {
    super::tick::require_positive("the tick", tick)?;
    let Law::Bonded(material) = patch.ground.law else {
        return Err(ContactError::RigidHasNoLaw);
    };
    let sole = SoleMoments::of(patch.shape);
    let state = resolve_relative(patch, motion)?;
    let later = state.advanced(tick, rule.position_weight(), acceleration);
    let law = bonded::wrench(&sole, &material, &later);
    Ok(match patch.ground.measured {
        None => law,
        Some(measured) => {
            let now = bonded::wrench(&sole, &material, &state);
            Wrench {
                force: measured.force + (law.force - now.force),
                moment: measured.moment + (law.moment - now.moment),
            }
        }
    })
}
