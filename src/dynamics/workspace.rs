//! The memory of one robot's dynamics, reused from state to state.

use nalgebra::{DMatrix, DVector};

use crate::model::{BaseKind, JointKind, Model, State};
use crate::spatial::{Mat3, Pose, Twist, Vec3, Vec6};

/// How one body hangs in the tree, without the strings of the model.
#[derive(Debug, Clone)]
pub(super) struct Link {
    /// Parent body; the base names itself.
    pub parent: usize,
    /// How it moves against its parent; none for the base (or a body welded to its parent).
    pub motion: Option<Motion>,
}

/// The joint that moves a body.
#[derive(Debug, Clone, Copy)]
pub(super) struct Motion {
    /// Index among the joints.
    pub joint: usize,
    /// Index in the generalised velocity.
    pub column: usize,
    /// Slides instead of turning.
    pub slides: bool,
}

/// What is known of one body at the present state. World axes.
#[derive(Debug, Clone)]
pub(super) struct BodyState {
    pub pose: Pose,
    /// Axis of its joint, unit length.
    pub axis: Vec3,
    /// Velocity of the body origin.
    pub twist: Twist,
    /// Acceleration of the body origin when `nu_dot = 0`, gravity left out.
    pub bias_acceleration: Twist,
    /// Mass, centre and inertia about the centre of this body alone.
    pub mass: f64,
    pub center: Vec3,
    pub inertia: Mat3,
    /// The same of this body and everything that hangs on it.
    pub composite_mass: f64,
    pub composite_center: Vec3,
    pub composite_inertia: Mat3,
    /// Load through the joint about the body origin (Newton-Euler, gravity included).
    pub force: Vec3,
    pub moment: Vec3,
}

/// Dynamics of a robot at one state. Build once with [`Workspace::new`], refill with
/// [`Workspace::update`]; the fields below hold the results. World axes, SI units.
#[derive(Debug, Clone)]
pub struct Workspace {
    pub(super) links: Vec<Link>,
    pub(super) bodies: Vec<BodyState>,
    pub(super) floating: bool,
    /// Lower triangle of the Cholesky factor of the mass matrix.
    pub(super) factor: DMatrix<f64>,
    /// Mass matrix M, nv x nv, rotor inertias on the diagonal included.
    pub mass_matrix: DMatrix<f64>,
    /// h: velocity products and gravity, nv (N, N m).
    pub bias: DVector<f64>,
    /// Joint friction opposing the motion, nv (N m or N): `viscous q_dot + coulomb sign(q_dot)`,
    /// zero for the base and for a joint at rest. It stands on the side of M and h.
    pub friction: DVector<f64>,
    /// Total mass (kg).
    pub mass: f64,
    /// Centre of mass (m).
    pub center_of_mass: Vec3,
    /// Its velocity (m/s).
    pub center_of_mass_velocity: Vec3,
    /// Rotational inertia of the whole robot, frozen in its posture, about the centre of mass (kg m^2).
    pub centroidal_inertia: Mat3,
    /// Linear momentum (kg m/s), then angular momentum about the centre of mass (kg m^2/s). Rotor
    /// inertias do not count.
    pub momentum: Vec6,
    /// A_G, 6 x nv: `momentum = A_G nu`.
    pub momentum_matrix: DMatrix<f64>,
    /// A_G_dot nu: rate of the momentum when `nu_dot = 0` (N, N m), gravity left out.
    pub momentum_bias: Vec6,
    /// `nu' M nu / 2` (J), rotors included.
    pub kinetic_energy: f64,
    /// `-m g . c` (J): zero when the centre of mass is at the world origin.
    pub potential_energy: f64,
}

impl Workspace {
    /// Memory for this model; every result is zero until the first update.
    pub fn new(model: &Model) -> Self {
        let offset = model.joint_offset();
        let nv = model.velocities();
        let links = model
            .bodies
            .iter()
            .map(|body| Link {
                parent: body.parent.unwrap_or(0),
                motion: body.joint.map(|joint| Motion {
                    joint,
                    column: offset + joint,
                    slides: model.joints[joint].kind == JointKind::Prismatic,
                }),
            })
            .collect();
        Workspace {
            links,
            bodies: vec![BodyState::new(); model.bodies.len()],
            floating: model.base == BaseKind::Floating,
            factor: DMatrix::zeros(nv, nv),
            mass_matrix: DMatrix::zeros(nv, nv),
            bias: DVector::zeros(nv),
            friction: DVector::zeros(nv),
            mass: 0.0,
            center_of_mass: Vec3::zeros(),
            center_of_mass_velocity: Vec3::zeros(),
            centroidal_inertia: Mat3::zeros(),
            momentum: Vec6::zeros(),
            momentum_matrix: DMatrix::zeros(6, nv),
            momentum_bias: Vec6::zeros(),
            kinetic_energy: 0.0,
            potential_energy: 0.0,
        }
    }

    /// Computes everything at `state` under `gravity` (m/s^2, world axes). Allocates nothing.
    pub fn update(&mut self, model: &Model, state: &State, gravity: &Vec3) {
        self.update_kinematics(model, state);
        self.update_composites();
        self.update_mass_matrix(model);
        self.update_momentum();
        self.update_bias(gravity);
        self.update_friction(model, state);
        self.update_energies(model, state, gravity);
    }

    /// Number of generalised velocities.
    pub fn velocities(&self) -> usize {
        self.bias.len()
    }

    /// Pose of a body in the world.
    pub fn body_pose(&self, body: usize) -> &Pose {
        &self.bodies[body].pose
    }

    /// Velocity of a body's origin, world axes.
    pub fn body_twist(&self, body: usize) -> &Twist {
        &self.bodies[body].twist
    }

    /// Acceleration of a body's origin when `nu_dot = 0`, world axes, gravity left out.
    pub fn body_bias_acceleration(&self, body: usize) -> &Twist {
        &self.bodies[body].bias_acceleration
    }

    fn update_friction(&mut self, model: &Model, state: &State) {
        let offset = model.joint_offset();
        for (i, (joint, &speed)) in model.joints.iter().zip(&state.velocity).enumerate() {
            // f64::signum(0.0) is 1, hence the comparison: friction at rest is not determined by
            // the state, and is left out.
            let direction = if speed == 0.0 { 0.0 } else { speed.signum() };
            self.friction[offset + i] =
                joint.viscous_friction * speed + joint.coulomb_friction * direction;
        }
    }

    fn update_energies(&mut self, model: &Model, state: &State, gravity: &Vec3) {
        // Of the bodies, by Koenig: each body's centre of mass moves and the body turns about it.
        let bodies: f64 = self
            .bodies
            .iter()
            .map(|b| {
                let w = b.twist.angular;
                let v = b.twist.linear + w.cross(&(b.center - b.pose.translation));
                b.mass * v.norm_squared() + w.dot(&(b.inertia * w))
            })
            .sum();
        let rotors: f64 =
            model.joints.iter().zip(&state.velocity).map(|(j, v)| j.rotor_inertia * v * v).sum();
        self.kinetic_energy = 0.5 * (bodies + rotors);
        self.potential_energy = -self.mass * gravity.dot(&self.center_of_mass);
    }
}

impl BodyState {
    fn new() -> Self {
        BodyState {
            pose: Pose::identity(),
            axis: Vec3::zeros(),
            twist: Twist::zero(),
            bias_acceleration: Twist::zero(),
            mass: 0.0,
            center: Vec3::zeros(),
            inertia: Mat3::zeros(),
            composite_mass: 0.0,
            composite_center: Vec3::zeros(),
            composite_inertia: Mat3::zeros(),
            force: Vec3::zeros(),
            moment: Vec3::zeros(),
        }
    }
}
