//! Force and moment balance of every body about its centre of mass, in world axes.
//!
//! For body i with mass m, centre of mass c and rotational inertia I about it,
//!     m (a_c - g) = sum of forces,     I alpha + w x I w = sum of moments about c.
//! From the leaves inward this gives the load every joint has to carry; its part along the joint
//! axis, with joint friction and rotor inertia, must be the motor's torque, and the base carries
//! nothing. What is left over is the residual of
//!     M nu_dot + h + friction + rotor q_ddot - S' tau - sum J' w - external = 0,
//! obtained without M, h or J.

use super::motion::Motion;
use crate::model::{BaseKind, JointKind, Model, State};
use crate::spatial::{Vec3, Wrench};

/// A load on a body from outside.
#[derive(Debug, Clone, Copy)]
pub struct Load {
    /// Body it acts on.
    pub body: usize,
    /// Point of application (m, world).
    pub point: Vec3,
    /// Force and moment about that point, world axes.
    pub wrench: Wrench,
}

/// What is left of the balance, one entry per generalised velocity (N for the base's linear part and
/// sliding joints, N m about the base origin and along turning joints).
pub fn residual(
    model: &Model,
    state: &State,
    gravity: &Vec3,
    motions: &[Motion],
    torques: &[f64],
    acceleration: &[f64],
    loads: &[Load],
) -> Vec<f64> {
    let mut carried: Vec<Wrench> =
        model.bodies.iter().zip(motions).map(|(b, m)| needed(&b.inertia, m, gravity)).collect();
    for load in loads {
        let arm = load.point - motions[load.body].pose.translation;
        let wrench = &mut carried[load.body];
        wrench.force -= load.wrench.force;
        wrench.moment -= load.wrench.moment + arm.cross(&load.wrench.force);
    }
    let offset = model.joint_offset();
    let mut rows = vec![0.0; model.velocities()];
    for (i, body) in model.bodies.iter().enumerate().rev() {
        let load = carried[i];
        if let Some(j) = body.joint {
            let joint = &model.joints[j];
            let axis = motions[i].pose.rotation * joint.axis;
            let along = match joint.kind {
                JointKind::Prismatic => axis.dot(&load.force),
                JointKind::Revolute | JointKind::Continuous => axis.dot(&load.moment),
            };
            let speed = state.velocity[j];
            let coulomb = if speed == 0.0 { 0.0 } else { joint.coulomb_friction * speed.signum() };
            rows[offset + j] = along
                + joint.rotor_inertia * acceleration[offset + j]
                + joint.viscous_friction * speed
                + coulomb
                - torques[j];
        }
        match body.parent {
            Some(parent) => {
                let arm = motions[i].pose.translation - motions[parent].pose.translation;
                carried[parent].force += load.force;
                carried[parent].moment += load.moment + arm.cross(&load.force);
            }
            None if model.base == BaseKind::Floating => {
                rows[..3].copy_from_slice(load.force.as_slice());
                rows[3..6].copy_from_slice(load.moment.as_slice());
            }
            None => {}
        }
    }
    rows
}

/// Load about the body origin that makes the body move as it does, gravity taken off.
fn needed(inertia: &crate::spatial::Inertia, motion: &Motion, gravity: &Vec3) -> Wrench {
    let rotation = &motion.pose.rotation;
    let arm = rotation * inertia.center;
    let about_center = rotation * inertia.about_center * rotation.transpose();
    let (w, alpha) = (motion.twist.angular, motion.acceleration.angular);
    let force = (motion.acceleration_of(&inertia.center) - gravity) * inertia.mass;
    let moment = about_center * alpha + w.cross(&(about_center * w));
    Wrench { force, moment: moment + arm.cross(&force) }
}
