//! Robots built by hand, without a robot description, for the dynamics tests.
//!
//! Use: `#[path = "common/hand_built.rs"] mod hand_built;`

#![allow(dead_code, missing_docs)]

use underfoot::model::{BaseKind, Body, Joint, JointKind, Model, State};
use underfoot::spatial::{Inertia, Mat3, Pose, Twist, Vec3, exp_so3};

#[path = "rng.rs"]
mod rng;

pub use rng::Rng;

impl Rng {
    pub fn vector(&mut self, size: f64) -> Vec3 {
        Vec3::from(self.triple(size))
    }

    pub fn pose(&mut self) -> Pose {
        Pose { rotation: exp_so3(&self.vector(3.0)), translation: self.vector(0.4) }
    }

    pub fn unit(&mut self) -> Vec3 {
        let v = self.vector(1.0);
        if v.norm() > 0.1 { v.normalize() } else { Vec3::z() }
    }
}

pub fn base(inertia: Inertia) -> Body {
    Body { name: "base".into(), parent: None, joint: None, placement: Pose::identity(), inertia }
}

pub fn empty(kind: BaseKind, base_inertia: Inertia) -> Model {
    Model {
        name: "hand built".into(),
        id: String::new(),
        base: kind,
        bodies: vec![base(base_inertia)],
        joints: vec![],
        frames: vec![],
        soles: vec![],
        remarks: vec![],
    }
}

/// Hangs a body on `parent` by a joint without friction or rotor; returns the body's index.
pub fn hang(
    model: &mut Model,
    parent: usize,
    placement: Pose,
    kind: JointKind,
    axis: Vec3,
    inertia: Inertia,
) -> usize {
    let (body, joint) = (model.bodies.len(), model.joints.len());
    model.joints.push(Joint {
        name: format!("j{joint}"),
        kind,
        body,
        axis,
        position: None,
        speed: None,
        effort: None,
        rotor_inertia: 0.0,
        viscous_friction: 0.0,
        coulomb_friction: 0.0,
        torque_speed: None,
        actuated: true,
    });
    let name = format!("l{body}");
    model.bodies.push(Body { name, parent: Some(parent), joint: Some(joint), placement, inertia });
    body
}

pub fn at(x: f64, y: f64, z: f64) -> Pose {
    Pose { rotation: Mat3::identity(), translation: Vec3::new(x, y, z) }
}

/// A solid box with random sides, turned and off centre.
fn random_inertia(rng: &mut Rng) -> Inertia {
    let mass = rng.uniform(0.2, 8.0);
    let s = Vec3::new(rng.uniform(0.05, 0.4), rng.uniform(0.05, 0.4), rng.uniform(0.05, 0.4));
    let s = s.component_mul(&s);
    let principal = Vec3::new(s.y + s.z, s.x + s.z, s.x + s.y) * (mass / 12.0);
    let turn = exp_so3(&rng.vector(2.0));
    Inertia {
        mass,
        center: rng.vector(0.2),
        about_center: turn * Mat3::from_diagonal(&principal) * turn.transpose(),
    }
}

/// A branched robot with every kind of joint, rotors and friction; its joints are numbered in an
/// order of their own.
pub fn random_model(seed: u64, joints: usize, kind: BaseKind) -> Model {
    let rng = &mut Rng(seed);
    let inertia = random_inertia(rng);
    let mut model = empty(kind, inertia);
    for i in 1..=joints {
        let parent = if rng.below(3) > 0 { i - 1 } else { rng.below(i) };
        let kind = match rng.below(6) {
            0..=2 => JointKind::Revolute,
            3 => JointKind::Continuous,
            _ => JointKind::Prismatic,
        };
        let (placement, axis, inertia) = (rng.pose(), rng.unit(), random_inertia(rng));
        hang(&mut model, parent, placement, kind, axis, inertia);
    }
    for joint in &mut model.joints {
        joint.rotor_inertia = rng.uniform(0.0, 0.3);
        joint.viscous_friction = rng.uniform(0.0, 2.0);
        joint.coulomb_friction = rng.uniform(0.0, 1.0);
    }
    rng.shuffle(&mut model.joints);
    for i in 0..joints {
        let body = model.joints[i].body;
        model.bodies[body].joint = Some(i);
    }
    model
}

pub fn random_state(rng: &mut Rng, model: &Model) -> State {
    let n = model.joints.len();
    let mut base_pose = rng.pose();
    base_pose.translation *= 3.0;
    State {
        base_pose,
        base_twist: Twist { linear: rng.vector(1.5), angular: rng.vector(2.0) },
        position: rng.list(n, 1.5),
        velocity: rng.list(n, 3.0),
    }
}

/// nu of a state.
pub fn nu(model: &Model, state: &State) -> Vec<f64> {
    let mut out = vec![];
    if model.base == BaseKind::Floating {
        out.extend(state.base_twist.to_vec6().iter());
    }
    out.extend(&state.velocity);
    out
}
