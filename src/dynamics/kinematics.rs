//! Poses, velocities and velocity-product accelerations, from the base outwards.

use super::workspace::{BodyState, Workspace};
use crate::model::{Body, Model, State};
use crate::spatial::{Mat3, Pose, Twist, Vec3};

impl Workspace {
    /// Fills pose, twist, bias acceleration and world-axes mass properties of every body, and nothing else: what
    /// frames need. Allocates nothing.
    pub fn update_kinematics(&mut self, model: &Model, state: &State) {
        let twist = if self.floating { state.base_twist } else { Twist::zero() };
        for (i, body) in model.bodies.iter().enumerate() {
            let (done, rest) = self.bodies.split_at_mut(i);
            let here = &mut rest[0];
            if i == 0 {
                here.pose = state.base_pose;
                here.twist = twist;
                here.bias_acceleration = Twist::zero();
            } else {
                let link = &self.links[i];
                let parent = &done[link.parent];
                match link.motion {
                    Some(motion) => {
                        let joint = &model.joints[motion.joint];
                        let (q, speed) =
                            (state.position[motion.joint], state.velocity[motion.joint]);
                        if motion.slides {
                            slide(here, parent, &body.placement, &joint.axis, q, speed);
                        } else {
                            turn(here, parent, &body.placement, &joint.axis, q, speed);
                        }
                    }
                    None => turn(here, parent, &body.placement, &Vec3::zeros(), 0.0, 0.0),
                }
            }
            place_inertia(here, body);
        }
    }
}

/// A body that turns by `q` about `axis`. With d from the parent's origin to the body's:
///
/// ```text
/// omega = omega_p + a q_dot            v     = v_p + omega_p x d
/// alpha = alpha_p + omega_p x a q_dot  v_dot = v_dot_p + alpha_p x d + omega_p x (omega_p x d)
/// ```
fn turn(here: &mut BodyState, parent: &BodyState, placement: &Pose, axis: &Vec3, q: f64, speed: f64) {
    let frame = parent.pose.rotation * placement.rotation;
    let d = parent.pose.rotation * placement.translation;
    here.pose.rotation = frame * rotation_about(axis, q);
    here.pose.translation = parent.pose.translation + d;
    // The axis is the same in the joint frame before and after the turn.
    here.axis = frame * axis;
    carry_along(here, parent, &d);
    let relative = here.axis * speed;
    here.twist.angular += relative;
    here.bias_acceleration.angular += parent.twist.angular.cross(&relative);
}

/// A body that slides by `q` along `axis`: it turns with its parent, and the origin gains `a q_dot`
/// in velocity and the Coriolis term `2 omega_p x a q_dot` in acceleration.
fn slide(here: &mut BodyState, parent: &BodyState, placement: &Pose, axis: &Vec3, q: f64, speed: f64) {
    here.pose.rotation = parent.pose.rotation * placement.rotation;
    here.axis = here.pose.rotation * axis;
    let d = parent.pose.rotation * placement.translation + here.axis * q;
    here.pose.translation = parent.pose.translation + d;
    carry_along(here, parent, &d);
    let relative = here.axis * speed;
    here.twist.linear += relative;
    here.bias_acceleration.linear += 2.0 * parent.twist.angular.cross(&relative);
}

/// Velocity and acceleration of a point that is fixed to the parent, `d` from its origin.
fn carry_along(here: &mut BodyState, parent: &BodyState, d: &Vec3) {
    let w = parent.twist.angular;
    let swept = w.cross(d);
    here.twist.angular = w;
    here.twist.linear = parent.twist.linear + swept;
    let alpha = parent.bias_acceleration.angular;
    here.bias_acceleration.angular = alpha;
    here.bias_acceleration.linear =
        parent.bias_acceleration.linear + alpha.cross(d) + w.cross(&swept);
}

fn place_inertia(here: &mut BodyState, body: &Body) {
    let r = &here.pose.rotation;
    here.mass = body.inertia.mass;
    here.center = here.pose.point(&body.inertia.center);
    // R I R', each pair of mirrored entries computed once, so that M is symmetric to the last bit.
    let turned = r * body.inertia.about_center;
    let entry = |i: usize, j: usize| turned.row(i).dot(&r.row(j));
    let (xy, xz, yz) = (entry(0, 1), entry(0, 2), entry(1, 2));
    here.inertia = Mat3::new(
        entry(0, 0), xy, xz,
        xy, entry(1, 1), yz,
        xz, yz, entry(2, 2),
    );
}

/// Rotation by `angle` about a unit axis (Rodrigues): `cos I + sin [a]x + (1 - cos) a a'`.
fn rotation_about(axis: &Vec3, angle: f64) -> Mat3 {
    let (s, c) = angle.sin_cos();
    let t = 1.0 - c;
    let (x, y, z) = (axis.x, axis.y, axis.z);
    Mat3::new(
        c + t * x * x, t * x * y - s * z, t * x * z + s * y,
        t * x * y + s * z, c + t * y * y, t * y * z - s * x,
        t * x * z - s * y, t * y * z + s * x, c + t * z * z,
    )
}
