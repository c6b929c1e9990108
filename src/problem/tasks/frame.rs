//! Position, orientation and pose of a frame, and acceleration of the base.
//!
//! A point of a frame moves with `a = J nu_dot + J_dot nu` (classical acceleration, world axes). A follow law asks for
//! `a = reference + gain_v (v_ref - v) + gain_p error`; the orientation error is the rotation vector of
//! `R_ref R'`, the turn (world axes) that brings the frame to its reference.

use nalgebra::DMatrix;

use super::super::question::{OrientationAim, PointAim, Task};
use super::super::rows::Entries;
use super::{Context, TargetRow, vector_rows};
use crate::dynamics;
use crate::spatial::{Mat3, Pose, Twist, Vec3, Vec6, log_so3};

struct FrameKinematics {
    pose: Pose,
    twist: Twist,
    jacobian: DMatrix<f64>,
    bias: Vec6,
}

impl FrameKinematics {
    fn new(frame: usize, point: &Vec3, context: &Context) -> Self {
        let model = &*context.question.model;
        let ws = &context.scene.dynamics;
        let frame = &model.frames[frame];
        let placement = frame.placement.compose(&Pose { rotation: Mat3::identity(), translation: *point });
        let mut jacobian = DMatrix::zeros(6, model.velocities());
        dynamics::frame_jacobian(model, ws, frame.body, &placement, &mut jacobian);
        FrameKinematics {
            pose: dynamics::frame_pose(model, ws, frame.body, &placement),
            twist: dynamics::frame_twist(model, ws, frame.body, &placement),
            bias: dynamics::frame_bias_acceleration(model, ws, frame.body, &placement),
            jacobian,
        }
    }

    fn entries(&self, k: usize) -> Entries {
        (0..self.jacobian.ncols()).map(|j| (j, self.jacobian[(k, j)])).collect()
    }
}

/// Acceleration of a point.
pub fn position(task: &Task, frame: usize, point: &Vec3, aim: &PointAim, context: &Context) -> Vec<TargetRow> {
    let at = FrameKinematics::new(frame, point, context);
    vector_rows(&task.axes, 0..3, ["m/s^2", "rad/s^2"], |k| {
        let desired = aim.acceleration[k]
            + aim.gains.velocity * (aim.velocity[k] - at.twist.linear[k])
            + aim.gains.position * (aim.position[k] - at.pose.translation[k]);
        (at.entries(k), at.bias[k], desired)
    })
}

/// Angular acceleration of a frame.
pub fn orientation(task: &Task, frame: usize, aim: &OrientationAim, context: &Context) -> Vec<TargetRow> {
    let at = FrameKinematics::new(frame, &Vec3::zeros(), context);
    let error = log_so3(&(aim.orientation * at.pose.rotation.transpose()));
    vector_rows(&task.axes, 3..6, ["m/s^2", "rad/s^2"], |k| {
        let i = k - 3;
        let desired = aim.acceleration[i]
            + aim.gains.velocity * (aim.velocity[i] - at.twist.angular[i])
            + aim.gains.position * error[i];
        (at.entries(k), at.bias[k], desired)
    })
}

/// Acceleration of the base, world axes; no rows on a fixed base.
pub fn base(task: &Task, linear: &Vec3, angular: &Vec3, context: &Context) -> Vec<TargetRow> {
    let floating = context.question.model.joint_offset();
    vector_rows(&task.axes, 0..floating, ["m/s^2", "rad/s^2"], |k| {
        let desired = if k < 3 { linear[k] } else { angular[k - 3] };
        (vec![(k, 1.0)], 0.0, desired)
    })
}
