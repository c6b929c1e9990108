//! Where the sole is relative to its rest pose, kept as differences so that stiff ground does not
//! multiply the rounding of world coordinates.

use super::SoleMotion;
use crate::spatial::{Mat3, Pose, Twist, Vec3, Vec6, exp_so3, head, skew, tail};

/// Sole and rest pose at one instant.
#[derive(Debug, Clone, Copy)]
pub(super) struct Relative {
    /// Ground normal (unit, world).
    pub normal: Vec3,
    /// Sole rotation R.
    pub rotation: Mat3,
    /// `d = o0 - o` (m).
    pub offset: Vec3,
    /// `F = R0 R' - I`, so that `E = R0 - R = F R`.
    pub turn: Mat3,
    /// Velocity of the sole.
    pub twist: Twist,
    /// Velocity of the rest pose.
    pub rest_twist: Twist,
}

impl Relative {
    /// From poses in the world.
    pub fn between(normal: &Vec3, rest: &Pose, rest_twist: &Twist, motion: &SoleMotion) -> Self {
        let rotation = motion.pose.rotation;
        Relative {
            normal: *normal,
            rotation,
            offset: rest.translation - motion.pose.translation,
            turn: (rest.rotation - rotation) * rotation.transpose(),
            twist: motion.twist,
            rest_twist: *rest_twist,
        }
    }

    /// From the offset and the rotation vector that lead from the sole to its rest pose.
    pub fn from_offset(
        normal: &Vec3,
        offset: &Vec3,
        rotation_vector: &Vec3,
        rest_twist: &Twist,
        motion: &SoleMotion,
    ) -> Self {
        Relative {
            normal: *normal,
            rotation: motion.pose.rotation,
            offset: *offset,
            turn: exp_minus_identity(rotation_vector),
            twist: motion.twist,
            rest_twist: *rest_twist,
        }
    }

    /// The rest pose in the world.
    pub fn rest_pose(&self, present: &Pose) -> Pose {
        Pose {
            rotation: self.rotation + self.turn * self.rotation,
            translation: present.translation + self.offset,
        }
    }

    /// The state after a tick with the sole acceleration `a` held: poses advance by `T v + c T^2 a`,
    /// rotations by `exp(T w + c T^2 alpha)`, velocities by `T a`; the ground, its normal included,
    /// moves on with its rest twist.
    pub fn advanced(&self, tick: f64, c: f64, acceleration: &Vec6) -> Self {
        let (linear, angular) = (head(acceleration), tail(acceleration));
        let step = self.twist.linear * tick + linear * (c * tick * tick);
        let turning = self.twist.angular * tick + angular * (c * tick * tick);
        let ground = exp_minus_identity(&(self.rest_twist.angular * tick));
        let back = exp_minus_identity(&(-turning));
        // (I + P)(I + F)(I + Q) - I, multiplied out: the identities would swallow small turns.
        let (p, f, q) = (ground, self.turn, back);
        let turn = p + f + q + p * f + (p + f + p * f) * q;
        Relative {
            normal: self.normal + ground * self.normal,
            rotation: exp_so3(&turning) * self.rotation,
            offset: self.offset + self.rest_twist.linear * tick - step,
            turn,
            twist: Twist {
                linear: self.twist.linear + linear * tick,
                angular: self.twist.angular + angular * tick,
            },
            rest_twist: self.rest_twist,
        }
    }
}

/// `exp([phi]x) - I` with full relative accuracy at small angles.
pub(super) fn exp_minus_identity(phi: &Vec3) -> Mat3 {
    let angle = phi.norm();
    let (a, b) = if angle < 1e-4 {
        let t = angle * angle;
        (1.0 - t / 6.0, 0.5 - t / 24.0)
    } else {
        let half = (angle / 2.0).sin() / angle;
        (angle.sin() / angle, 2.0 * half * half)
    };
    let k = skew(phi);
    k * a + k * k * b
}
