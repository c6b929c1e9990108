//! The question: a robot's state, the ground under its soles, what must hold and what is wanted.
//!
//! Valid by construction: the gate in `wire` has checked every index, length, sign and unit norm.
//! Vectors are in world axes unless a name says otherwise.

use std::sync::Arc;

use crate::contact::{Ground, TickRule};
use crate::dynamics::axes::VelocityAxes;
use crate::model::{Model, State};
use crate::spatial::{Mat3, Vec3, Wrench};

/// Everything a solve needs to know.
#[derive(Debug, Clone)]
pub struct Question {
    /// The robot, carried loads included.
    pub model: Arc<Model>,
    /// Its state, base parts in world axes.
    pub state: State,
    /// The axes in which the user gives, and gets back, the base part of velocities and accelerations.
    pub velocity_axes: VelocityAxes,
    /// Gravitational acceleration (m/s^2, world).
    pub gravity: Vec3,
    /// Length and rule of the tick over which the torques are held.
    pub tick: Tick,
    /// Soles on the ground, at most one entry per sole. A sole without an entry is in the air.
    pub contacts: Vec<Contact>,
    /// Limits of joints and torques.
    pub limits: Vec<Limit>,
    /// Tasks.
    pub tasks: Vec<Task>,
    /// Loads from outside, other than the ground.
    pub external: Vec<ExternalWrench>,
    /// Torques that act until this answer takes effect: the state is predicted under them first.
    pub latency: Option<Latency>,
    /// What the answer shall contain besides the answer.
    pub include: Include,
}

/// One control tick.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Tick {
    /// Length T (s), positive.
    pub length: f64,
    /// How the wrench follows from the acceleration.
    pub rule: TickRule,
    /// True where the rule was chosen, false where it is the default.
    pub chosen: bool,
}

/// One sole on the ground.
#[derive(Debug, Clone, PartialEq)]
pub struct Contact {
    /// Index in `model.soles`.
    pub sole: usize,
    /// Law, material, rest pose, measured wrench.
    pub ground: Ground,
    /// Limits on the wrench at the tick's end.
    pub friction: Option<Friction>,
    /// Range of the normal force (N, along the ground normal).
    pub normal_force: Option<NormalForce>,
    /// Largest rate of change of the wrench over the tick; none during a touchdown.
    pub wrench_rate: Option<WrenchRate>,
}

/// How strictly a limit holds.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Treatment {
    /// Always.
    Hard,
    /// May be exceeded; the excess counts as `weight * (excess / scale)^2` at this priority.
    Soft {
        /// Priority, 1 first.
        priority: u32,
        /// Weight, positive.
        weight: f64,
        /// Excess that costs `weight`, in the limit's own unit (N for forces; see the limit), positive.
        scale: f64,
    },
    /// A present violation must shrink: `viol(w+) <= (1 - rate T) max(0, viol(now))`.
    Decay {
        /// Rate lambda (1/s), `0 <= rate * T <= 1`.
        rate: f64,
    },
}

/// Which friction set holds under a sole.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FrictionSet {
    /// The wrench is a sum of vertex forces, each in its cone: possible under some pressure.
    Vertex,
    /// Force cone, centre of pressure in the polygon, bounded yaw moment: approximate.
    Wrench,
}

/// Friction and unilateral contact under one sole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Friction {
    /// The set.
    pub set: FrictionSet,
    /// Friction coefficient mu, positive.
    pub coefficient: f64,
    /// Yaw friction mu_z (m), for `Wrench`: `|m_z| <= mu_z f_n` about the polygon's centroid.
    pub torsion: Option<f64>,
    /// None: exact second-order cones. Some(n), n >= 3: inscribed pyramids with n facets.
    pub facets: Option<usize>,
    /// How strictly it holds.
    pub treatment: Treatment,
}

/// Range of a normal force (N).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct NormalForce {
    /// Least normal force.
    pub least: Option<f64>,
    /// Largest normal force.
    pub largest: Option<f64>,
    /// How strictly it holds.
    pub treatment: Treatment,
}

/// Largest rates of change of the wrench over the tick.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct WrenchRate {
    /// Per force component, world axes (N/s).
    pub force: Option<f64>,
    /// Per moment component, world axes (N m/s).
    pub moment: Option<f64>,
    /// How strictly it holds.
    pub treatment: Treatment,
}

/// A limit of joints or torques.
#[derive(Debug, Clone, PartialEq)]
pub struct Limit {
    /// Name as the answer reports it.
    pub name: String,
    /// What is limited.
    pub kind: LimitKind,
    /// How strictly it holds. `Decay` is for wrench limits only and never occurs here.
    pub treatment: Treatment,
}

/// What a [`Limit`] limits.
#[derive(Debug, Clone, PartialEq)]
pub enum LimitKind {
    /// `|tau_j| <= bound_j` with `bound` (joint index, N m or N).
    Torque(Vec<(usize, f64)>),
    /// Torque-speed lines: `-stall (1 + q_dot/v0) <= tau <= stall (1 - q_dot/v0)`, each side kept within
    /// `[-stall, stall]`, for the listed joints (joint index, stall torque, no-load speed).
    TorqueSpeed(Vec<(usize, f64, f64)>),
    /// `sum coefficient * tau <= bound`: coupled drives (joint index, coefficient).
    CoupledTorque {
        /// Coefficients.
        coefficients: Vec<(usize, f64)>,
        /// Bound (N m).
        bound: f64,
    },
    /// `lower <= q + H q_dot + H^2 q_ddot / 2 <= upper` (joint index, lower, upper).
    Position {
        /// Joints and their range.
        joints: Vec<(usize, f64, f64)>,
        /// Horizon H (s), at least one tick.
        horizon: f64,
    },
    /// `|q_dot + H q_ddot| <= bound` (joint index, bound).
    Velocity {
        /// Joints and their largest speed.
        joints: Vec<(usize, f64)>,
        /// Horizon H (s), at least one tick.
        horizon: f64,
    },
}

/// When a task counts.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Importance {
    /// Like physics, but it can be blamed when nothing is feasible.
    MustHold,
    /// Strictly ordered, 1 first.
    Priority(u32),
}

/// Something wanted: residual `achieved - desired`, cost `weight * sum (residual / scale)^2`.
#[derive(Debug, Clone, PartialEq)]
pub struct Task {
    /// Name as the answer reports it; unique.
    pub name: String,
    /// When it counts.
    pub importance: Importance,
    /// Weight within the priority, positive.
    pub weight: f64,
    /// Residual that costs `weight`, linear (or only) part, in the task's unit, positive.
    pub scale: f64,
    /// The same for the angular part of tasks that have both.
    pub scale_angular: f64,
    /// Which of the (three linear, three angular) components count; ignored by tasks on joints.
    pub axes: [bool; 6],
    /// What is wanted.
    pub kind: TaskKind,
}

/// Gains of a second-order follow law.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Gains {
    /// On the position error (1/s^2).
    pub position: f64,
    /// On the velocity error (1/s).
    pub velocity: f64,
}

/// What a [`Task`] wants.
#[derive(Debug, Clone, PartialEq)]
pub enum TaskKind {
    /// Rate of momentum (N; N m about the centre of mass), components picked by `axes`.
    MomentumRate(MomentumAim),
    /// Second rate of momentum (N/s; N m/s): for ground that gives.
    MomentumSecondRate(MomentumAim),
    /// Acceleration of the centre of mass (m/s^2).
    CenterOfMass(PointAim),
    /// Acceleration of a point of a frame (m/s^2, world axes).
    FramePosition {
        /// Frame index.
        frame: usize,
        /// Point in the frame's axes (m).
        point: Vec3,
        /// Aim.
        aim: PointAim,
    },
    /// Angular acceleration of a frame (rad/s^2, world axes).
    FrameOrientation {
        /// Frame index.
        frame: usize,
        /// Aim.
        aim: OrientationAim,
    },
    /// Both: linear part with `scale`, angular with `scale_angular`.
    FramePose {
        /// Frame index.
        frame: usize,
        /// Point in the frame's axes (m).
        point: Vec3,
        /// Linear aim.
        position: PointAim,
        /// Angular aim.
        orientation: OrientationAim,
    },
    /// Joint accelerations that lead to a posture (rad/s^2): (joint, position, velocity, acceleration reference).
    Posture {
        /// Joints with their references: position, velocity, acceleration.
        joints: Vec<(usize, f64, f64, f64)>,
        /// Gains.
        gains: Gains,
    },
    /// Given joint accelerations (rad/s^2 or m/s^2): (joint, value).
    JointAcceleration(Vec<(usize, f64)>),
    /// Given base acceleration, world axes: d/dt of the base velocity (m/s^2; rad/s^2).
    BaseAcceleration {
        /// Linear (m/s^2).
        linear: Vec3,
        /// Angular (rad/s^2).
        angular: Vec3,
    },
    /// Wrench of one sole at the tick's end (N; N m), world axes about the sole origin.
    Wrench {
        /// Index in `contacts`.
        contact: usize,
        /// Wanted wrench.
        value: Wrench,
        /// None: the value itself is wanted. Some(rate, 1/s): `w+ = now + T rate (value - now)`.
        approach: Option<f64>,
    },
    /// `w+` stays near the present wrench, every sole with a known one, or one.
    WrenchSmoothness {
        /// Index in `contacts`, or all.
        contact: Option<usize>,
    },
    /// Torques near a reference (N m): (joint, reference).
    Effort(Vec<(usize, f64)>),
}

/// What momentum should do: linear (3) and angular (3) parts, angular about the centre of mass.
/// The wanted value, feedforward plus feedback, is
/// first rate: `L_dot = rate + momentum_gain (reference - L) + position_gain m (center - c)` (linear only);
/// second rate: `L_ddot = second_rate + rate_gain (rate - L_dot) + momentum_gain (reference - L) + position_gain m (center - c)`.
#[derive(Debug, Clone, PartialEq)]
pub struct MomentumAim {
    /// Feedforward of the second rate (linear N/s, angular N m/s); unused at first rate.
    pub second_rate: [Vec3; 2],
    /// Reference (second rate) or feedforward (first rate) of the rate (N, N m).
    pub rate: [Vec3; 2],
    /// Reference momentum (kg m/s, kg m^2/s).
    pub reference: [Vec3; 2],
    /// Reference centre of mass (m), where `position_gain` is not zero.
    pub center: Vec3,
    /// Gain on the rate error, (linear, angular) (1/s); second rate only.
    pub rate_gain: [f64; 2],
    /// Gain on the momentum error, (linear, angular): 1/s at first rate, 1/s^2 at second.
    pub momentum_gain: [f64; 2],
    /// Gain on the centre-of-mass error times mass, linear: 1/s^2 at first rate, 1/s^3 at second.
    pub position_gain: f64,
}

/// What a point should do: `acceleration + velocity gain * (velocity - present) + position gain * (position - present)`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PointAim {
    /// Acceleration, feedforward or (with zero gains) the value itself (m/s^2).
    pub acceleration: Vec3,
    /// Reference velocity (m/s).
    pub velocity: Vec3,
    /// Reference position (m).
    pub position: Vec3,
    /// Gains.
    pub gains: Gains,
}

/// The same for orientation; the position error is the rotation vector of `reference * present'`, world axes (rad).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct OrientationAim {
    /// Angular acceleration (rad/s^2).
    pub acceleration: Vec3,
    /// Reference angular velocity (rad/s).
    pub velocity: Vec3,
    /// Reference orientation, frame axes to world axes.
    pub orientation: Mat3,
    /// Gains.
    pub gains: Gains,
}

/// A load on a link from outside.
#[derive(Debug, Clone, PartialEq)]
pub struct ExternalWrench {
    /// Frame (link) it acts on.
    pub frame: usize,
    /// Point of application in the frame's axes (m).
    pub point: Vec3,
    /// Force and moment about that point, world axes.
    pub wrench: Wrench,
}

/// Torques already on their way.
#[derive(Debug, Clone, PartialEq)]
pub struct Latency {
    /// Time until the new torques act (s), positive.
    pub delay: f64,
    /// Torques that act until then, in joint order (N m or N).
    pub torques: Vec<f64>,
}

/// Optional parts of the answer.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Include {
    /// The assembled problem with named rows and columns.
    pub problem: bool,
    /// Mass matrix, bias, Jacobians.
    pub dynamics: bool,
    /// Where nothing is feasible: least relaxation, what each limit alone would need, an irreducible set, the answer
    /// at the relaxation.
    pub explain: bool,
    /// The range of every torque, acceleration and wrench that the question leaves open.
    pub uniqueness: bool,
    /// Derivatives by stiffness, damping and friction.
    pub sensitivity: bool,
    /// Spread under uncertain stiffness and damping.
    pub spread: Option<SpreadAim>,
}

/// How uncertain stiffness and damping are.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SpreadAim {
    /// Covariance of the relative errors (of k, of b), symmetric and positive semidefinite: `[[0.04, 0], [0, 0.01]]` is
    /// 20 % on k and 10 % on b. Normal and tangential values move together.
    pub covariance: [[f64; 2]; 2],
    /// True: the same error under every sole. False: every sole has its own, independent of the others.
    pub shared: bool,
    /// Seeded samples besides the sigma points, bounded by `explain::spread::MOST_SAMPLES`; zero for none.
    pub samples: usize,
    /// Seed of the samples.
    pub seed: u64,
}

/// A state whose rigid-body terms are wanted.
#[derive(Debug, Clone)]
pub struct DynamicsQuestion {
    /// The robot.
    pub model: Arc<Model>,
    /// Its state, base parts in world axes.
    pub state: State,
    /// The axes in which the user works.
    pub velocity_axes: VelocityAxes,
    /// Gravitational acceleration (m/s^2, world).
    pub gravity: Vec3,
    /// Frames to report besides the soles.
    pub frames: Vec<usize>,
}
