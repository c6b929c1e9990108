//! Inverse dynamics by recursive Newton-Euler in BODY axes.
//!
//! Certificates rest on this, so it shares nothing with the mass matrix, the bias or the
//! kinematics of the workspace: each vector lives in the axes of its own body and is turned from
//! body to body. With R from body to parent axes, r the body's origin in the parent (both at the
//! present joint position) and a the axis:
//!
//! ```text
//! omega = R' omega_p + a q_dot
//! alpha = R' alpha_p + (R' omega_p) x a q_dot + a q_ddot
//! acc   = R' (acc_p + alpha_p x r + omega_p x (omega_p x r))
//! ```
//!
//! for a turning joint; a sliding one adds `2 (R' omega_p) x a q_dot + a q_ddot` to acc instead.
//! Gravity enters as an upward acceleration of the base.

use crate::model::{BaseKind, JointKind, Model, State};
use crate::spatial::{Pose, Vec3, Wrench, exp_so3};

/// A wrench on a body: world axes, moment about a point of the world.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ExternalWrench {
    /// Body it acts on.
    pub body: usize,
    /// The point its moment is about (m, world).
    pub point: Vec3,
    /// Force (N) and moment (N m), world axes.
    pub wrench: Wrench,
}

/// Memory of [`inverse_dynamics`].
#[derive(Debug, Clone)]
pub struct InverseScratch {
    bodies: Vec<Moving>,
}

#[derive(Debug, Clone, Copy)]
struct Moving {
    /// In the world, for the external wrenches.
    world: Pose,
    /// In the parent, at the present joint position.
    in_parent: Pose,
    omega: Vec3,
    alpha: Vec3,
    acceleration: Vec3,
    force: Vec3,
    moment: Vec3,
}

impl InverseScratch {
    /// Memory for this model.
    pub fn new(model: &Model) -> Self {
        let still = Moving {
            world: Pose::identity(),
            in_parent: Pose::identity(),
            omega: Vec3::zeros(),
            alpha: Vec3::zeros(),
            acceleration: Vec3::zeros(),
            force: Vec3::zeros(),
            moment: Vec3::zeros(),
        };
        InverseScratch { bodies: vec![still; model.bodies.len()] }
    }
}

/// Generalised force that gives `acceleration` (nv, nu_dot in world axes) against gravity, velocity
/// products and the external wrenches: `out = M nu_dot + h - sum J' w` (nv). Joint friction is not
/// part of it; rotor inertia is. Allocates nothing.
pub fn inverse_dynamics(
    model: &Model,
    state: &State,
    gravity: &Vec3,
    acceleration: &[f64],
    external: &[ExternalWrench],
    scratch: &mut InverseScratch,
    out: &mut [f64],
) {
    let offset = model.joint_offset();
    start_at_base(model, state, gravity, acceleration, &mut scratch.bodies[0]);
    for i in 1..model.bodies.len() {
        move_outwards(model, state, &acceleration[offset..], i, &mut scratch.bodies);
    }
    for (body, moving) in model.bodies.iter().zip(&mut scratch.bodies) {
        let (w, c) = (moving.omega, body.inertia.center);
        let at_center = moving.acceleration + moving.alpha.cross(&c) + w.cross(&w.cross(&c));
        let inertia = &body.inertia.about_center;
        moving.force = at_center * body.inertia.mass;
        moving.moment =
            inertia * moving.alpha + w.cross(&(inertia * w)) + c.cross(&moving.force);
    }
    for load in external {
        let moving = &mut scratch.bodies[load.body];
        let to_body = moving.world.rotation.transpose();
        let arm = load.point - moving.world.translation;
        moving.force -= to_body * load.wrench.force;
        moving.moment -= to_body * (load.wrench.moment + arm.cross(&load.wrench.force));
    }
    gather_inwards(model, &acceleration[offset..], &mut scratch.bodies, out);
}

fn start_at_base(model: &Model, state: &State, gravity: &Vec3, nu_dot: &[f64], base: &mut Moving) {
    base.world = state.base_pose;
    base.in_parent = state.base_pose;
    let to_body = state.base_pose.rotation.transpose();
    match model.base {
        BaseKind::Floating => {
            let linear = Vec3::new(nu_dot[0], nu_dot[1], nu_dot[2]);
            base.omega = to_body * state.base_twist.angular;
            base.alpha = to_body * Vec3::new(nu_dot[3], nu_dot[4], nu_dot[5]);
            base.acceleration = to_body * (linear - gravity);
        }
        BaseKind::Fixed => {
            base.omega = Vec3::zeros();
            base.alpha = Vec3::zeros();
            base.acceleration = -(to_body * gravity);
        }
    }
}

fn move_outwards(model: &Model, state: &State, q_ddot: &[f64], i: usize, bodies: &mut [Moving]) {
    let body = &model.bodies[i];
    let parent = bodies[body.parent.unwrap_or(0)];
    let here = &mut bodies[i];
    here.in_parent = body.placement;
    let (mut spin, mut spin_rate, mut shift, mut shift_rate) =
        (Vec3::zeros(), Vec3::zeros(), Vec3::zeros(), Vec3::zeros());
    if let Some(index) = body.joint {
        let joint = &model.joints[index];
        let (q, speed, rate) = (state.position[index], state.velocity[index], q_ddot[index]);
        if joint.kind == JointKind::Prismatic {
            here.in_parent.translation += body.placement.rotation * joint.axis * q;
            (shift, shift_rate) = (joint.axis * speed, joint.axis * rate);
        } else {
            here.in_parent.rotation *= exp_so3(&(joint.axis * q));
            (spin, spin_rate) = (joint.axis * speed, joint.axis * rate);
        }
    }
    let r = here.in_parent.translation;
    let to_body = here.in_parent.rotation.transpose();
    let carried = parent.acceleration
        + parent.alpha.cross(&r)
        + parent.omega.cross(&parent.omega.cross(&r));
    let omega = to_body * parent.omega;
    here.omega = omega + spin;
    here.alpha = to_body * parent.alpha + omega.cross(&spin) + spin_rate;
    here.acceleration = to_body * carried + 2.0 * omega.cross(&shift) + shift_rate;
    here.world = parent.world.compose(&here.in_parent);
}

fn gather_inwards(model: &Model, q_ddot: &[f64], bodies: &mut [Moving], out: &mut [f64]) {
    let offset = model.joint_offset();
    for i in (1..bodies.len()).rev() {
        let body = &model.bodies[i];
        let here = bodies[i];
        if let Some(index) = body.joint {
            let joint = &model.joints[index];
            let load =
                if joint.kind == JointKind::Prismatic { here.force } else { here.moment };
            out[offset + index] = joint.axis.dot(&load) + joint.rotor_inertia * q_ddot[index];
        }
        let parent = &mut bodies[body.parent.unwrap_or(0)];
        let force = here.in_parent.rotation * here.force;
        parent.force += force;
        parent.moment +=
            here.in_parent.rotation * here.moment + here.in_parent.translation.cross(&force);
    }
    if model.base == BaseKind::Floating {
        let base = &bodies[0];
        let (force, moment) =
            (base.world.rotation * base.force, base.world.rotation * base.moment);
        for k in 0..3 {
            out[k] = force[k];
            out[3 + k] = moment[k];
        }
    }
}
