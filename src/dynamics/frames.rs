//! Frames carried by bodies: pose, velocity, Jacobian and its rate term.

use nalgebra::{DMatrix, DVector};

use super::workspace::Workspace;
use crate::model::Model;
use crate::spatial::{Pose, Twist, Vec3, Vec6, Wrench, skew, stack};

/// Pose in the world of a frame that sits at `placement` on `body`.
pub fn frame_pose(_model: &Model, ws: &Workspace, body: usize, placement: &Pose) -> Pose {
    ws.bodies[body].pose.compose(placement)
}

/// Velocity of that frame's origin (m/s) and its angular velocity (rad/s), world axes.
pub fn frame_twist(_model: &Model, ws: &Workspace, body: usize, placement: &Pose) -> Twist {
    let b = &ws.bodies[body];
    let arm = b.pose.rotation * placement.translation;
    let w = b.twist.angular;
    Twist { linear: b.twist.linear + w.cross(&arm), angular: w }
}

/// Jacobian J of that frame into `out` (6 x nv): `J nu` is its twist. Linear rows first, world axes,
/// at the frame's origin.
pub fn frame_jacobian(
    _model: &Model,
    ws: &Workspace,
    body: usize,
    placement: &Pose,
    out: &mut DMatrix<f64>,
) {
    out.fill(0.0);
    let origin = ws.bodies[body].pose.point(&placement.translation);
    if ws.floating {
        let arm = skew(&(origin - ws.bodies[0].pose.translation));
        for r in 0..3 {
            out[(r, r)] = 1.0;
            out[(3 + r, 3 + r)] = 1.0;
            for c in 0..3 {
                out[(r, 3 + c)] = -arm[(r, c)];
            }
        }
    }
    let mut j = body;
    // Parents have smaller indices, so the walk ends at the base.
    while j != 0 {
        if let Some(motion) = ws.links[j].motion {
            let at = &ws.bodies[j];
            let (linear, angular) = if motion.slides {
                (at.axis, Vec3::zeros())
            } else {
                (at.axis.cross(&(origin - at.pose.translation)), at.axis)
            };
            out.column_mut(motion.column).copy_from(&stack(&linear, &angular));
        }
        j = ws.links[j].parent;
    }
}

/// `J_dot nu` of that frame: acceleration of its origin (m/s^2, classical, not the spatial one) and
/// angular acceleration (rad/s^2) when `nu_dot = 0`. World axes.
pub fn frame_bias_acceleration(
    _model: &Model,
    ws: &Workspace,
    body: usize,
    placement: &Pose,
) -> Vec6 {
    let b = &ws.bodies[body];
    let arm = b.pose.rotation * placement.translation;
    let (w, alpha) = (b.twist.angular, b.bias_acceleration.angular);
    let linear = b.bias_acceleration.linear + alpha.cross(&arm) + w.cross(&w.cross(&arm));
    stack(&linear, &alpha)
}

/// Adds `J' w` to `out` (nv): the generalised force of a wrench on `body`, world axes, moment about
/// `point` (world, m).
pub fn external_generalised_force(
    _model: &Model,
    ws: &Workspace,
    body: usize,
    point: &Vec3,
    wrench: &Wrench,
    out: &mut DVector<f64>,
) {
    let about = |origin: &Vec3| wrench.moment + (point - origin).cross(&wrench.force);
    if ws.floating {
        let moment = about(&ws.bodies[0].pose.translation);
        for k in 0..3 {
            out[k] += wrench.force[k];
            out[3 + k] += moment[k];
        }
    }
    let mut j = body;
    while j != 0 {
        if let Some(motion) = ws.links[j].motion {
            let at = &ws.bodies[j];
            out[motion.column] += if motion.slides {
                at.axis.dot(&wrench.force)
            } else {
                at.axis.dot(&about(&at.pose.translation))
            };
        }
        j = ws.links[j].parent;
    }
}
