//! Finds a moving joint, or a floating base, that nothing resists: the mass matrix would be singular.
//!
//! Articulated-body recursion from the leaves up (Featherstone's algorithm): with the joint's motion
//! direction s and the articulated inertia A of its body, D = s' A s + rotor is the inertia the joint
//! feels while everything beyond it moves freely. M is positive definite exactly when every D is
//! positive and A of a floating base is. A is taken at one generic posture, so that a robot which
//! is singular only in special postures (a gimbal lock) is not refused.

use super::{BaseKind, Body, Joint, JointKind};
use crate::spatial::{Inertia, Mat3, Mat6, Pose, Vec3, Vec6, exp_so3, parallel_axis, skew, stack};

/// Free share of the composite inertia below which a direction counts as unresisted.
const SINGULAR: f64 = 1e-10;

/// Where the mass matrix is singular.
pub(super) enum Unresisted {
    /// At this joint, by index.
    Joint(usize),
    /// At the floating base.
    Base,
}

/// The first unresisted joint from the leaves up, or the base.
pub(super) fn find(base: BaseKind, bodies: &[Body], joints: &[Joint]) -> Option<Unresisted> {
    let mut articulated: Vec<Mat6> = bodies.iter().map(|b| about_origin(&b.inertia)).collect();
    let mut composite = articulated.clone();
    for index in (0..bodies.len()).rev() {
        let body = &bodies[index];
        let (Some(parent), Some(number)) = (body.parent, body.joint) else { continue };
        let joint = &joints[number];
        let (direction, motion) = generic_motion(joint, number);
        let felt = |inertia: &Mat6| direction.dot(&(inertia * direction)) + joint.rotor_inertia;
        let (free, whole) = (felt(&articulated[index]), felt(&composite[index]));
        if !(whole > 0.0 && free > SINGULAR * whole) {
            return Some(Unresisted::Joint(number));
        }
        let column = articulated[index] * direction;
        let passed_on = articulated[index] - column * column.transpose() / free;
        let to_body = motion_transform(&body.placement.compose(&motion));
        articulated[parent] += to_body.transpose() * passed_on * to_body;
        let carried = to_body.transpose() * composite[index] * to_body;
        composite[parent] += carried;
    }
    let free_base = base == BaseKind::Floating;
    match (articulated.first(), composite.first()) {
        (Some(free), Some(whole)) if free_base && !is_definite(free, whole) => Some(Unresisted::Base),
        _ => None,
    }
}

/// Motion direction (linear part first) and a displacement without special angles.
fn generic_motion(joint: &Joint, number: usize) -> (Vec6, Pose) {
    let amount = 0.4 + 0.37 * (1.0 + 2.3 * number as f64).sin();
    let none = Vec3::zeros();
    match joint.kind {
        JointKind::Prismatic => {
            let motion = Pose { rotation: Mat3::identity(), translation: joint.axis * amount };
            (stack(&joint.axis, &none), motion)
        }
        JointKind::Revolute | JointKind::Continuous => {
            let motion = Pose { rotation: exp_so3(&(joint.axis * amount)), translation: none };
            (stack(&none, &joint.axis), motion)
        }
    }
}

/// Spatial inertia about the body origin, linear part first.
fn about_origin(inertia: &Inertia) -> Mat6 {
    let first = skew(&(inertia.center * inertia.mass));
    let second = inertia.about_center + parallel_axis(inertia.mass, &inertia.center);
    let mut m = Mat6::zeros();
    m.fixed_view_mut::<3, 3>(0, 0).copy_from(&(Mat3::identity() * inertia.mass));
    m.fixed_view_mut::<3, 3>(0, 3).copy_from(&(-first));
    m.fixed_view_mut::<3, 3>(3, 0).copy_from(&first);
    m.fixed_view_mut::<3, 3>(3, 3).copy_from(&second);
    m
}

/// Takes a velocity in outer axes about the outer origin to inner axes about the inner origin.
fn motion_transform(placement: &Pose) -> Mat6 {
    let turn = placement.rotation.transpose();
    let mut x = Mat6::zeros();
    x.fixed_view_mut::<3, 3>(0, 0).copy_from(&turn);
    x.fixed_view_mut::<3, 3>(0, 3).copy_from(&(-turn * skew(&placement.translation)));
    x.fixed_view_mut::<3, 3>(3, 3).copy_from(&turn);
    x
}

/// Cholesky pivots of `free`, each against the diagonal of `whole`.
fn is_definite(free: &Mat6, whole: &Mat6) -> bool {
    let mut m = *free;
    for k in 0..6 {
        if !(whole[(k, k)] > 0.0 && m[(k, k)] > SINGULAR * whole[(k, k)]) {
            return false;
        }
        for i in k + 1..6 {
            for j in k + 1..6 {
                m[(i, j)] -= m[(i, k)] * m[(k, j)] / m[(k, k)];
            }
            m[(i, k)] = 0.0;
        }
    }
    true
}
