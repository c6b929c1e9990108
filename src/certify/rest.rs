//! Where the ground rests under a sole, found again from the meaning of each kind of rest pose.
//!
//! - given pose: as it stands;
//! - touchdown: the sole pose at touchdown, moved along the normal onto the plane and tilted onto it by the
//!   smallest rotation (about `up x n`, through their angle);
//! - carries, measured: the pose at which the present sole pose, everything at rest, carries the wrench. Newton
//!   steps on the quadrature law, each the shortest that does the job, so that directions the
//!   material does not resist stay put.

use nalgebra::{Matrix6, SVD};

use super::ground::{Bed, RestOffset, turn_of};
use crate::contact::{Patch, Rest, SoleMotion};
use crate::spatial::{Mat3, Pose, Vec3, Vec6, Wrench, exp_so3, head, log_so3, tail};

/// Most Newton steps towards the pose that carries a wrench.
const MAX_STEPS: usize = 60;
/// Longest turn of one step (rad).
const MAX_STEP_TURN: f64 = 0.3;
/// Largest turn between the sole and its rest pose (rad); the smaller of two equilibria is meant.
const MAX_TURN: f64 = std::f64::consts::FRAC_PI_2;
/// Singular values below this share of the largest count as no resistance.
const NO_RESISTANCE: f64 = 1e-13;
/// A wrench counts as carried when less than this share of it is left over.
const CARRIED: f64 = 1e-10;

/// The bed under a soft sole, its rest pose resolved; none on rigid ground, or where no rest pose can be found.
pub fn bed(patch: &Patch, motion: &SoleMotion) -> Option<Bed> {
    let unmoved = RestOffset { offset: Vec3::zeros(), turn: Mat3::zeros() };
    let rest = match patch.ground.rest {
        Rest::Pose(pose) => between(&motion.pose, &pose),
        Rest::Touchdown { pose, plane_point } => {
            between(&motion.pose, &laid_on_plane(&pose, &plane_point, &patch.ground.normal))
        }
        Rest::Carries(wrench) => {
            let trial = Bed::new(patch, motion, unmoved)?;
            let (rest, carried) = carrying(&trial, &wrench)?;
            if !carried {
                return None;
            }
            rest
        }
        // Where the material cannot carry what was measured, as much of it as possible; only the change of
        // the law is used then.
        Rest::Measured => {
            let trial = Bed::new(patch, motion, unmoved)?;
            carrying(&trial, &patch.ground.measured?).map_or(unmoved, |found| found.0)
        }
    };
    Bed::new(patch, motion, rest)
}

fn between(present: &Pose, rest: &Pose) -> RestOffset {
    RestOffset {
        offset: rest.translation - present.translation,
        turn: (rest.rotation - present.rotation) * present.rotation.transpose(),
    }
}

fn laid_on_plane(pose: &Pose, plane_point: &Vec3, normal: &Vec3) -> Pose {
    let up: Vec3 = pose.rotation.column(2).into();
    let axis = up.cross(normal);
    let sine = axis.norm();
    let turn = if sine > 0.0 { axis * (sine.atan2(up.dot(normal)) / sine) } else { Vec3::zeros() };
    Pose {
        rotation: exp_so3(&turn) * pose.rotation,
        translation: pose.translation - normal * normal.dot(&(pose.translation - plane_point)),
    }
}

/// The rest pose that carries `target`, or as much of it as possible in the least-squares sense (moments over the
/// sole's polar radius), and whether all of it is carried. None if the search does not settle.
fn carrying(bed: &Bed, target: &Wrench) -> Option<(RestOffset, bool)> {
    let radius = bed.radius();
    let level = |w: &Wrench| {
        let v = w.to_vec6();
        Vec6::from_fn(|i, _| if i < 3 { v[i] } else { v[i] / radius })
    };
    let size = level(target).norm();
    let (mut offset, mut turn) = (Vec3::zeros(), Vec3::zeros());
    let mut last = f64::INFINITY;
    for _ in 0..MAX_STEPS {
        let rest = RestOffset { offset, turn: turn_of(&turn) };
        let (carried, changes) = bed.carried(&rest);
        let left = level(target) - level(&carried);
        let mut slope = Matrix6::zeros();
        for (i, change) in changes.iter().enumerate() {
            // Turns are counted as lengths, radius times angle.
            let column = if i < 3 { level(change) } else { level(change) / radius };
            slope.set_column(i, &column);
        }
        let step = shortest(slope, &left)?;
        let length = step.norm();
        let reach = offset.norm().max(turn.norm() * radius);
        if length <= f64::EPSILON * reach || (length <= 1e-10 * reach && length >= 0.5 * last) || size == 0.0 {
            return (turn.norm() <= MAX_TURN).then_some((rest, left.norm() <= CARRIED * size));
        }
        last = length;
        let turning = tail(&step) / radius;
        let shorten = (MAX_STEP_TURN / turning.norm()).min(1.0);
        offset += head(&step) * shorten;
        turn = log_so3(&(exp_so3(&(turning * shorten)) * exp_so3(&turn)));
    }
    None
}

/// The shortest x with `slope x = left` as nearly as can be.
fn shortest(slope: Matrix6<f64>, left: &Vec6) -> Option<Vec6> {
    let size = slope.amax();
    if size == 0.0 {
        return Some(Vec6::zeros());
    }
    if !size.is_finite() {
        return None;
    }
    let svd = SVD::try_new(slope / size, true, true, f64::EPSILON, 200)?;
    let cut = NO_RESISTANCE * svd.singular_values.max();
    Some(svd.solve(left, cut).ok()? / size)
}
