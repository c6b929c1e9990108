//! Bias forces and momentum rate by recursive Newton-Euler, in world axes.
//!
//! With `nu_dot = 0` every body needs the force `m (a_c - g)` at its centre and the moment
//! `I alpha + omega x I omega` about it. What hangs on a body is summed from the tips inwards, and
//! each joint takes the part along its axis: O(bodies).

use super::workspace::Workspace;
use crate::spatial::{Vec3, stack};

impl Workspace {
    /// Fills bias and momentum bias.
    pub(super) fn update_bias(&mut self, gravity: &Vec3) {
        let center = self.center_of_mass;
        let (mut rate, mut angular_rate) = (Vec3::zeros(), Vec3::zeros());
        for b in &mut self.bodies {
            let (w, alpha) = (b.twist.angular, b.bias_acceleration.angular);
            let arm = b.center - b.pose.translation;
            let acceleration =
                b.bias_acceleration.linear + alpha.cross(&arm) + w.cross(&w.cross(&arm));
            let inertial = acceleration * b.mass;
            let moment = b.inertia * alpha + w.cross(&(b.inertia * w));
            rate += inertial;
            angular_rate += moment + (b.center - center).cross(&inertial);
            b.force = inertial - gravity * b.mass;
            b.moment = moment + arm.cross(&b.force);
        }
        self.momentum_bias = stack(&rate, &angular_rate);
        for i in (1..self.bodies.len()).rev() {
            let link = &self.links[i];
            let (inner, outer) = self.bodies.split_at_mut(i);
            let (body, parent) = (&outer[0], &mut inner[link.parent]);
            if let Some(motion) = link.motion {
                let load = if motion.slides { &body.force } else { &body.moment };
                self.bias[motion.column] = body.axis.dot(load);
            }
            let arm = body.pose.translation - parent.pose.translation;
            parent.force += body.force;
            parent.moment += body.moment + arm.cross(&body.force);
        }
        if self.floating {
            let base = &self.bodies[0];
            for k in 0..3 {
                self.bias[k] = base.force[k];
                self.bias[3 + k] = base.moment[k];
            }
        }
    }
}
