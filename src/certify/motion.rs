//! Where every body is and how it moves, from the joints outward, in world axes.
//!
//! This is a second, plain account of the kinematics: it forms no Jacobian and shares no code
//! with `dynamics`, so that a mistake there cannot hide in the certificate.

use crate::model::{BaseKind, Body, Joint, JointKind, Model, State};
use crate::spatial::{Pose, Twist, Vec3, exp_so3};

/// Pose, velocity and acceleration of one frame, world axes.
#[derive(Debug, Clone, Copy)]
pub struct Motion {
    /// Placement in the world.
    pub pose: Pose,
    /// Velocity of the origin (m/s) and angular velocity (rad/s).
    pub twist: Twist,
    /// Classical acceleration of the origin (m/s^2) and angular acceleration (rad/s^2).
    pub acceleration: Twist,
}

impl Motion {
    /// The motion of a frame fixed to the same rigid body at `placement` in this frame's axes:
    /// `v = v_o + w x r`, `a = a_o + alpha x r + w x (w x r)`.
    pub fn carried(&self, placement: &Pose) -> Motion {
        let arm = self.pose.rotation * placement.translation;
        let (w, alpha) = (self.twist.angular, self.acceleration.angular);
        Motion {
            pose: self.pose.compose(placement),
            twist: Twist { linear: self.twist.linear + w.cross(&arm), angular: w },
            acceleration: Twist {
                linear: self.acceleration.linear + alpha.cross(&arm) + w.cross(&w.cross(&arm)),
                angular: alpha,
            },
        }
    }

    /// Acceleration (m/s^2, world) of the point at `inner` in this frame's axes.
    pub fn acceleration_of(&self, inner: &Vec3) -> Vec3 {
        self.carried(&Pose { translation: *inner, ..Pose::identity() }).acceleration.linear
    }
}

/// Motion of every body, in model order, under the generalised acceleration `acceleration`
/// (base linear and angular in world axes, then joints). Lengths must fit the model.
pub fn move_bodies(model: &Model, state: &State, acceleration: &[f64]) -> Vec<Motion> {
    let mut motions: Vec<Motion> = Vec::with_capacity(model.bodies.len());
    for body in &model.bodies {
        let motion = match (body.parent, body.joint) {
            (Some(parent), Some(j)) => {
                let joint = &model.joints[j];
                let rate = (state.position[j], state.velocity[j], acceleration[model.joint_offset() + j]);
                across_joint(&motions[parent], body, joint, rate)
            }
            (Some(parent), None) => motions[parent].carried(&body.placement),
            (None, _) => base_motion(model, state, acceleration),
        };
        motions.push(motion);
    }
    motions
}

fn base_motion(model: &Model, state: &State, acceleration: &[f64]) -> Motion {
    let at_rest = Motion { pose: state.base_pose, twist: Twist::zero(), acceleration: Twist::zero() };
    match model.base {
        BaseKind::Fixed => at_rest,
        BaseKind::Floating => Motion {
            twist: state.base_twist,
            acceleration: Twist {
                linear: Vec3::new(acceleration[0], acceleration[1], acceleration[2]),
                angular: Vec3::new(acceleration[3], acceleration[4], acceleration[5]),
            },
            ..at_rest
        },
    }
}

/// From a parent body across a joint with position, speed and acceleration `(q, q_dot, q_ddot)`.
/// With z the axis in the world and r the way from the parent's origin to the moved one:
/// turning: `w = w_p + z q_dot`, `alpha = alpha_p + z q_ddot + w_p x z q_dot`;
/// sliding: `v` gains `z q_dot`, `a` gains `z q_ddot + 2 w_p x z q_dot`.
fn across_joint(parent: &Motion, body: &Body, joint: &Joint, rate: (f64, f64, f64)) -> Motion {
    let (position, speed, change) = rate;
    let moved = match joint.kind {
        JointKind::Prismatic => Pose { translation: joint.axis * position, ..Pose::identity() },
        JointKind::Revolute | JointKind::Continuous => {
            Pose { rotation: exp_so3(&(joint.axis * position)), translation: Vec3::zeros() }
        }
    };
    // As if welded to the parent where it is now; the joint's own motion is added.
    let mut motion = parent.carried(&body.placement.compose(&moved));
    let axis = motion.pose.rotation * joint.axis;
    let w = parent.twist.angular;
    match joint.kind {
        JointKind::Prismatic => {
            motion.twist.linear += axis * speed;
            motion.acceleration.linear += axis * change + w.cross(&axis) * (2.0 * speed);
        }
        JointKind::Revolute | JointKind::Continuous => {
            motion.twist.angular += axis * speed;
            motion.acceleration.angular += axis * change + w.cross(&axis) * speed;
        }
    }
    motion
}
