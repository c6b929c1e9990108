//! Where the ground rests, unloaded.
//!
//! `carries`: find the rest pose (o0, R0) at which the present sole pose, with no relative velocity, carries a
//! given wrench. In the unknowns d = o0 - o and a rotation vector theta, R0 = exp(theta) R, the static law is
//! ```text
//! f = A K d + K F s,   m = s x K d + int y x K (F y) dA,   F = exp(theta) - I,  y = R r,
//! ```
//! linear in d and, for small turns, in theta. Gauss-Newton steps (u, phi), d <- d + u and
//! exp(theta) <- exp(phi) exp(theta), use the exact Jacobian
//! ```text
//! [ A K   -K [s0]x ;  [s]x K   -int [y]x K [y0]x dA ],   y0 = R0 r,
//! ```
//! with moments in units of force times r. Directions the material does not resist (k_t = 0) have no
//! singular value and are left alone, so the step is the shortest one.

use super::law::bonded::{self, blocks};
use super::moments::{SoleMoments, cross_sum, material_matrices};
use super::relative::{Relative, exp_minus_identity};
use super::{ContactError, Law, Material, Patch, Rest, SoleMotion};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{
    Mat3, Mat6, Pose, Twist, Vec3, Vec6, Wrench, exp_so3, head, log_so3, skew, tail,
};

/// Most Gauss-Newton steps. Quadratic convergence needs about five.
const MAX_STEPS: usize = 40;
/// Sweeps of the singular value iteration for a 6 x 6 matrix.
const MAX_SVD_SWEEPS: usize = 200;
/// Longest turn of one step (rad).
const MAX_STEP_TURN: f64 = 0.3;
/// Largest angle between rest pose and present pose (rad). Beyond a quarter turn the rocking moment
/// `k I sin(theta)` falls again, and the smaller solution is the one meant.
const MAX_TURN: f64 = std::f64::consts::FRAC_PI_2;
/// Singular values below this share of the largest belong to directions the material does not resist.
const SINGULAR_SHARE: f64 = 1e-13;
/// A wrench counts as carried when what is left over is below this share of it.
const CARRIED_SHARE: f64 = 1e-10;

/// The rest pose in the world.
///
/// - `Pose`: as given.
/// - `Touchdown`: the sole frame at touchdown, moved along the normal onto the plane and tilted onto it by
///   the smallest rotation, so that neither tangential position nor yaw about the normal changes. A point sole
///   keeps its orientation. On moving ground pose and plane are those the ground has carried along until now.
/// - `Carries`: solved for as told at the top of this file; the equilibrium with the smaller turn.
/// - `Measured`: as `Carries` with the measured wrench. Where the material cannot carry it (k_t = 0 with a
///   tangential force, a moment on a point sole, too large a turn), the pose that carries as much of
///   it as possible in the least-squares sense, and failing that the present pose: only the change of the
///   law is used then, and the rest pose enters that at second order.
///
/// On a rigid sole `Carries` and `Measured` rest where the sole is.
///
/// The static wrench is carried, without dampers: with a moving sole the law at present adds its damping.
///
/// # Errors
/// `CannotCarry`, `TouchdownTilt`, `MissingMeasurement`.
pub fn resolve(patch: &Patch, motion: &SoleMotion) -> Result<Pose, ContactError> {
    match patch.ground.rest {
        Rest::Pose(pose) => Ok(pose),
        Rest::Touchdown { pose, plane_point } => {
            touchdown_rest(patch.shape, &pose, &plane_point, &patch.ground.normal)
        }
        Rest::Carries(_) | Rest::Measured => {
            Ok(resolve_relative(patch, motion)?.rest_pose(&motion.pose))
        }
    }
}

/// As [`resolve`], as a state kept in differences: a carried wrench keeps its digits on stiff ground.
pub(super) fn resolve_relative(
    patch: &Patch,
    motion: &SoleMotion,
) -> Result<Relative, ContactError> {
    let ground = patch.ground;
    let at_offset = |offset: &Vec3, turn: &Vec3| {
        Relative::from_offset(&ground.normal, offset, turn, &ground.rest_twist, motion)
    };
    let (material, target, exact) = match (ground.rest, ground.law) {
        (Rest::Pose(_) | Rest::Touchdown { .. }, _) => {
            let rest = resolve(patch, motion)?;
            return Ok(Relative::between(&ground.normal, &rest, &ground.rest_twist, motion));
        }
        (_, Law::Rigid { .. }) => return Ok(at_offset(&Vec3::zeros(), &Vec3::zeros())),
        (Rest::Carries(wrench), Law::Bonded(material)) => (material, wrench, true),
        (Rest::Measured, Law::Bonded(material)) => {
            (material, ground.measured.ok_or(ContactError::MissingMeasurement)?, false)
        }
    };
    let sole = SoleMoments::of(patch.shape);
    let search = search(&sole, &material, &ground.normal, &motion.pose.rotation, &target);
    let reached = search.turn.norm() <= MAX_TURN && search.settled;
    if exact && !(reached && search.carried) {
        return Err(ContactError::CannotCarry {
            force_residual: search.residual.force.norm(),
            moment_residual: search.residual.moment.norm(),
            rotation: search.turn.norm(),
            rotation_limit: MAX_TURN,
            iterations: search.steps,
        });
    }
    if reached {
        Ok(at_offset(&search.offset, &search.turn))
    } else {
        Ok(at_offset(&Vec3::zeros(), &Vec3::zeros()))
    }
}

/// The rest pose after a touchdown, see [`resolve`].
fn touchdown_rest(
    shape: &SoleShape,
    pose: &Pose,
    plane_point: &Vec3,
    normal: &Vec3,
) -> Result<Pose, ContactError> {
    let translation = pose.translation - normal * normal.dot(&(pose.translation - plane_point));
    if *shape == SoleShape::Point {
        return Ok(Pose { rotation: pose.rotation, translation });
    }
    let up: Vec3 = pose.rotation.column(2).into();
    let cosine = up.dot(normal);
    if cosine.is_nan() || cosine <= 0.0 {
        return Err(ContactError::TouchdownTilt { cosine });
    }
    // The smallest rotation that takes `up` to the normal (Rodrigues, with axis up x n).
    let axis = skew(&up.cross(normal));
    let upright = Mat3::identity() + axis + axis * axis / (1.0 + cosine);
    Ok(Pose { rotation: upright * pose.rotation, translation })
}

/// Where the search for a carrying rest pose ended.
struct Search {
    offset: Vec3,
    turn: Vec3,
    residual: Wrench,
    steps: usize,
    /// The last step changed nothing any more (or none was needed).
    settled: bool,
    /// The wrench is carried.
    carried: bool,
}

/// Gauss-Newton from the present pose, see the top of this file.
fn search(
    sole: &SoleMoments,
    material: &Material,
    normal: &Vec3,
    rotation: &Mat3,
    target: &Wrench,
) -> Search {
    let radius = sole.radius();
    let unit = material.normal_stiffness.max(material.tangential_stiffness) * sole.area;
    let size = scaled(target, radius).norm();
    let mut at = Search {
        offset: Vec3::zeros(),
        turn: Vec3::zeros(),
        residual: *target,
        steps: 0,
        settled: true,
        carried: size == 0.0,
    };
    if unit <= 0.0 || at.carried {
        return at;
    }
    let mut previous_step = f64::INFINITY;
    at.settled = false;
    while at.steps < MAX_STEPS {
        at.steps += 1;
        let state = static_state(normal, rotation, &at);
        let Some(step) = shortest_step(sole, material, &state, &at.residual, radius, unit) else {
            return at;
        };
        let mut turning = tail(&step) / radius;
        let mut moving = head(&step);
        let shorten = (MAX_STEP_TURN / turning.norm()).min(1.0);
        turning *= shorten;
        moving *= shorten;
        at.offset += moving;
        at.turn = log_so3(&(exp_so3(&turning) * exp_so3(&at.turn)));
        let carried = bonded::wrench(sole, material, &static_state(normal, rotation, &at));
        at.residual = Wrench {
            force: target.force - carried.force,
            moment: target.moment - carried.moment,
        };
        at.carried = scaled(&at.residual, radius).norm() <= CARRIED_SHARE * size;
        let length = step.norm();
        let reach = at.offset.norm().max(at.turn.norm() * radius);
        // Settled once a step is lost in rounding, or small and no longer shrinking.
        if length <= f64::EPSILON * reach || (length <= 1e-10 * reach && length >= 0.5 * previous_step) {
            at.settled = true;
            return at;
        }
        previous_step = length;
    }
    at
}

/// Present pose at rest with the rest pose of the search.
fn static_state(normal: &Vec3, rotation: &Mat3, at: &Search) -> Relative {
    Relative {
        normal: *normal,
        rotation: *rotation,
        offset: at.offset,
        turn: exp_minus_identity(&at.turn),
        twist: Twist::zero(),
        rest_twist: Twist::zero(),
    }
}

/// The shortest step (m; radius times rad) that removes the residual to first order, as far as it can.
fn shortest_step(
    sole: &SoleMoments,
    material: &Material,
    state: &Relative,
    residual: &Wrench,
    radius: f64,
    unit: f64,
) -> Option<Vec6> {
    let (k, _) = material_matrices(material, &state.normal);
    let k = k * (sole.area / unit);
    let rest = state.rotation + state.turn * state.rotation;
    let (s, s0) = (state.rotation * sole.first / sole.area, rest * sole.first / sole.area);
    let spread = state.rotation * sole.second * rest.transpose() / sole.area;
    let column = |axis: Vec3| cross_sum(&(spread * (k * skew(&axis)).transpose()));
    let rocking = Mat3::from_columns(&[column(Vec3::x()), column(Vec3::y()), column(Vec3::z())]);
    let arm = skew(&s);
    let jacobian: Mat6 = blocks(
        &k,
        &(-k * skew(&s0) / radius),
        &(arm * k / radius),
        &(rocking / (radius * radius)),
    );
    let svd = jacobian.try_svd(true, true, f64::EPSILON, MAX_SVD_SWEEPS)?;
    let cut = SINGULAR_SHARE * svd.singular_values.max();
    let step = svd.solve(&(scaled(residual, radius) / unit), cut).ok()?;
    step.iter().all(|x| x.is_finite()).then_some(step)
}

/// Force and moment over r, so that both are forces.
fn scaled(wrench: &Wrench, radius: f64) -> Vec6 {
    let mut out = wrench.to_vec6();
    for i in 3..6 {
        out[i] /= radius;
    }
    out
}
