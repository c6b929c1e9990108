//! The robot as data: bodies, joints, frames and soles. Valid by construction once built.

mod build;
mod description;
mod error;
mod identity;
mod loads;
mod mass;
mod options;
mod settings;
mod singular;
mod tree;
mod urdf;
mod xml;

pub use build::{MAX_MOVING_JOINTS, MAX_SOLES, read_urdf};
pub use error::{Fault, ModelError, Subject};
pub use loads::{Load, LoadError, with_loads};
pub use options::{JointSpec, ModelOptions, SoleSpec};
pub use urdf::MAX_LINKS;
pub use xml::{MAX_ATTRIBUTES, MAX_DEPTH, MAX_NAMESPACES, MAX_NODES, MAX_URDF_BYTES};

use crate::spatial::polygon::SoleShape;
use crate::spatial::{Inertia, Pose, Twist, Vec3};

/// How the base moves.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum BaseKind {
    /// Six degrees of freedom, no actuation: the first six generalised velocities.
    Floating,
    /// Welded to the world at the pose the state gives.
    Fixed,
}

/// How a joint moves its body.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum JointKind {
    /// Turns about its axis (rad), with position limits.
    Revolute,
    /// Turns about its axis without position limits (rad).
    Continuous,
    /// Slides along its axis (m).
    Prismatic,
}

/// Torque available falls linearly with speed: `|tau| <= stall * (1 - |q_dot| / no_load_speed)`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TorqueSpeedLine {
    /// Torque at standstill (N m or N).
    pub stall: f64,
    /// Speed at which no torque is left (rad/s or m/s).
    pub no_load_speed: f64,
}

/// A moving joint. Units are rad and N m for turning joints, m and N for sliding ones.
#[derive(Debug, Clone, PartialEq)]
pub struct Joint {
    /// Name as in the URDF.
    pub name: String,
    /// Kind of motion.
    pub kind: JointKind,
    /// Index of the body it moves.
    pub body: usize,
    /// Unit axis in the moved body's axes (equal to the joint frame's).
    pub axis: Vec3,
    /// Position limits, where there are any.
    pub position: Option<(f64, f64)>,
    /// Largest speed, where one is given.
    pub speed: Option<f64>,
    /// Largest torque or force, where one is given (URDF effort 0 means none given).
    pub effort: Option<f64>,
    /// Reflected rotor inertia added to the diagonal of the mass matrix (kg m^2 or kg).
    pub rotor_inertia: f64,
    /// Viscous friction torque per speed (N m s/rad or N s/m).
    pub viscous_friction: f64,
    /// Coulomb friction torque (N m or N), opposing motion; zero at rest.
    pub coulomb_friction: f64,
    /// Torque-speed line, where one is given.
    pub torque_speed: Option<TorqueSpeedLine>,
    /// False for passive joints: no motor, torque zero.
    pub actuated: bool,
}

/// A rigid body: one link, or several welded together by fixed and locked joints.
#[derive(Debug, Clone, PartialEq)]
pub struct Body {
    /// Name of the link that carries its frame.
    pub name: String,
    /// Index of the parent body (always smaller); none for the base.
    pub parent: Option<usize>,
    /// Index of the joint that moves it; none for the base.
    pub joint: Option<usize>,
    /// Joint frame in the parent body's axes at zero joint position.
    pub placement: Pose,
    /// Mass properties in the body's axes, welded links included.
    pub inertia: Inertia,
}

/// A named frame: every URDF link.
#[derive(Debug, Clone, PartialEq)]
pub struct Frame {
    /// Link name.
    pub name: String,
    /// Body that carries it.
    pub body: usize,
    /// Placement in the body's axes.
    pub placement: Pose,
}

/// A sole: z of its frame points out of the ground into the robot.
#[derive(Debug, Clone, PartialEq)]
pub struct Sole {
    /// Name.
    pub name: String,
    /// Name of the link it was attached to.
    pub link: String,
    /// Body that carries it.
    pub body: usize,
    /// Sole frame in the body's axes.
    pub placement: Pose,
    /// Its surface.
    pub shape: SoleShape,
}

/// A robot. Generalised velocity: base linear and angular velocity (floating base only, both in
/// world axes, base link origin), then one entry per joint in URDF document order.
#[derive(Debug, Clone, PartialEq)]
pub struct Model {
    /// Robot name of the URDF.
    pub name: String,
    /// Content hash: same content, same id.
    pub id: String,
    /// How the base moves.
    pub base: BaseKind,
    /// Bodies, parents before children; body 0 is the base.
    pub bodies: Vec<Body>,
    /// Moving joints in URDF document order.
    pub joints: Vec<Joint>,
    /// Every link as a frame, in URDF document order.
    pub frames: Vec<Frame>,
    /// Soles in the order given.
    pub soles: Vec<Sole>,
    /// Elements of the description that were ignored, and other remarks for the user.
    pub remarks: Vec<String>,
}

impl Model {
    /// Number of generalised velocities.
    pub fn velocities(&self) -> usize {
        self.joint_offset() + self.joints.len()
    }

    /// Index of the first joint in the generalised velocity: 6 or 0.
    pub fn joint_offset(&self) -> usize {
        match self.base {
            BaseKind::Floating => 6,
            BaseKind::Fixed => 0,
        }
    }

    /// Total mass (kg).
    pub fn mass(&self) -> f64 {
        self.bodies.iter().map(|b| b.inertia.mass).sum()
    }

    /// Index of the joint with this name.
    pub fn joint(&self, name: &str) -> Option<usize> {
        self.joints.iter().position(|j| j.name == name)
    }

    /// Index of the frame with this name.
    pub fn frame(&self, name: &str) -> Option<usize> {
        self.frames.iter().position(|f| f.name == name)
    }

    /// Index of the sole with this name.
    pub fn sole(&self, name: &str) -> Option<usize> {
        self.soles.iter().position(|s| s.name == name)
    }
}

/// Configuration and velocity. Base parts are in world axes whatever axes the request used.
#[derive(Debug, Clone, PartialEq)]
pub struct State {
    /// Base link frame in the world.
    pub base_pose: Pose,
    /// Velocity of the base link origin, world axes.
    pub base_twist: Twist,
    /// Joint positions in model order (rad or m).
    pub position: Vec<f64>,
    /// Joint velocities in model order (rad/s or m/s).
    pub velocity: Vec<f64>,
}
