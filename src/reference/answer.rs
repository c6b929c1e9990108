//! The answer as plain data. Every number is physical (SI), in world axes unless a name says otherwise.

use crate::certify::Certificate;
use crate::conic::Hierarchy;
use crate::explain::infeasible::Explanation;
use crate::explain::sensitivity::Sensitivity;
use crate::explain::spread::Spread;
use crate::explain::uniqueness::Uniqueness;
use crate::spatial::{Vec3, Wrench};

/// How a request ended. All of these are answers; none is an error.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Status {
    /// The certificate holds.
    Solved,
    /// No answer obeys what must hold.
    Infeasible,
    /// Not feasible within one tick, though nothing else forbids it.
    NotReachable,
    /// The answer is exact but moves like the square root of the data.
    IllPosed,
    /// An answer that misses the certificate's bounds; the bounds reached are stated.
    Inaccurate,
    /// The work was called off.
    Cancelled,
}

/// A remark the user should read.
#[derive(Debug, Clone, PartialEq)]
pub struct Warning {
    /// Stable short code, kebab-case.
    pub code: &'static str,
    /// The sentence.
    pub text: String,
}

/// Everything a solve says.
#[derive(Debug, Clone, PartialEq)]
pub struct Answer {
    /// How it ended.
    pub status: Status,
    /// Torques, accelerations and wrenches, unless nothing was found.
    pub motion: Option<Motion>,
    /// One entry per contact, in request order.
    pub soles: Vec<SoleAnswer>,
    /// One entry per task, in request order.
    pub tasks: Vec<TaskAnswer>,
    /// One entry per priority.
    pub levels: Vec<LevelAnswer>,
    /// Limits that bind, with multipliers.
    pub binding: Vec<Binding>,
    /// Room left to each limit.
    pub margins: Vec<Margin>,
    /// Directions the question left free, measured before the tie-break.
    pub free: Vec<FreeDirection>,
    /// The certificate, where there is an answer to certify.
    pub certificate: Option<Certificate>,
    /// Where nothing is feasible: named groups and the share of the certificate each carries.
    pub blocking: Vec<Blocking>,
    /// Ground and tick in figures.
    pub ground: GroundReport,
    /// Remarks.
    pub warnings: Vec<Warning>,
    /// The assembled problem, on request.
    pub problem: Option<Box<Hierarchy>>,
    /// Rigid-body terms, on request.
    pub dynamics: Option<Box<DynamicsReport>>,
    /// Why nothing is feasible, on request.
    pub explained: Option<Box<Explained>>,
    /// What the question leaves open, on request.
    pub uniqueness: Option<Box<Uniqueness>>,
    /// Derivatives by the ground, on request.
    pub sensitivity: Option<Box<Sensitivity>>,
    /// Spread under uncertain ground, on request.
    pub spread: Option<Box<Spread>>,
}

/// Why nothing is feasible, and what the answer would be with the least more allowed.
#[derive(Debug, Clone, PartialEq)]
pub struct Explained {
    /// Proof, least relaxation, single limits, irreducible set.
    pub explanation: Explanation,
    /// The answer with every limit relaxed by the least relaxation; none where physics contradicts itself.
    pub relaxed: Option<RelaxedAnswer>,
}

/// The answer at the least relaxation.
#[derive(Debug, Clone, PartialEq)]
pub struct RelaxedAnswer {
    /// How that solve ended. `Solved` here means that every level's optimality is certified over the relaxed limits.
    pub status: Status,
    /// What every limit that gives way was granted beyond the least relaxation, relative to its natural size.
    pub slack: f64,
    /// Torques and accelerations.
    pub motion: Motion,
    /// Soles.
    pub soles: Vec<SoleAnswer>,
    /// Tasks.
    pub tasks: Vec<TaskAnswer>,
    /// Priorities.
    pub levels: Vec<LevelAnswer>,
    /// Room left to the limits as asked for: negative where they gave way.
    pub margins: Vec<Margin>,
}

/// Torques and accelerations.
#[derive(Debug, Clone, PartialEq)]
pub struct Motion {
    /// Torque or force per joint in model order (N m or N); passive joints carry zero.
    pub torques: Vec<f64>,
    /// Acceleration per joint (rad/s^2 or m/s^2).
    pub joint_accelerations: Vec<f64>,
    /// Base acceleration (linear m/s^2, angular rad/s^2) in the request's velocity axes; none on a fixed base.
    pub base_acceleration: Option<[Vec3; 2]>,
}

/// One sole.
#[derive(Debug, Clone, PartialEq)]
pub struct SoleAnswer {
    /// Index in `contacts`.
    pub contact: usize,
    /// Sole name.
    pub name: String,
    /// Wrench at the tick's end, world axes about the sole origin.
    pub wrench: Option<Wrench>,
    /// The same in sole axes.
    pub wrench_in_sole_axes: Option<Wrench>,
    /// Wrench that acts in the dynamics over the tick, world axes.
    pub wrench_over_tick: Option<Wrench>,
    /// Present wrench: measured, else modelled; none on a rigid sole without a measured one.
    pub present: Option<Wrench>,
    /// Present wrench in sole axes.
    pub present_in_sole_axes: Option<Wrench>,
    /// Normal force at the tick's end along the ground normal (N).
    pub normal_force: Option<f64>,
    /// Centre of pressure in sole axes at the tick's end (m); none without normal force or on a point.
    pub center_of_pressure: Option<[f64; 2]>,
    /// `|f_t| / (mu f_n)` at the tick's end; none without friction limit or normal force.
    pub friction_use: Option<f64>,
    /// Distance of the centre of pressure from the nearest edge of the sole (m), negative outside.
    pub edge_distance: Option<f64>,
    /// Vertex forces in world axes where the friction set uses them (N); not unique.
    pub vertex_forces: Vec<Vec3>,
    /// Sole acceleration, world axes (m/s^2, rad/s^2).
    pub acceleration: Option<[Vec3; 2]>,
    /// Difference between the nonlinear law at the predicted state and the linear map: force (N) and moment (N m).
    pub linearisation_error: Option<[f64; 2]>,
}

/// One task.
#[derive(Debug, Clone, PartialEq)]
pub struct TaskAnswer {
    /// Name.
    pub name: String,
    /// Unit of the linear (or only) rows.
    pub unit: &'static str,
    /// Priority; none for `must_hold`.
    pub priority: Option<u32>,
    /// Names of the rows, e.g. `x` or a joint name.
    pub rows: Vec<String>,
    /// Unit per row.
    pub units: Vec<&'static str>,
    /// Wanted value per row.
    pub desired: Vec<f64>,
    /// Reached value per row.
    pub achieved: Vec<f64>,
    /// `achieved - desired`.
    pub residual: Vec<f64>,
}

/// One priority level.
#[derive(Debug, Clone, PartialEq)]
pub struct LevelAnswer {
    /// Priority.
    pub priority: u32,
    /// Cost reached, tasks and soft limits.
    pub cost: f64,
    /// Rows the tasks of this level added.
    pub rows: usize,
    /// Independent rows among them, given all that was frozen before.
    pub rank: usize,
    /// Smallest pivot kept and largest dropped by the rank decision (relative to the largest).
    pub smallest_kept: Option<f64>,
    /// See `smallest_kept`.
    pub largest_dropped: Option<f64>,
    /// Degrees of freedom left after this level (unknowns minus everything fixed).
    pub freedom_left: usize,
    /// Cone faces exposed and frozen by this level, in words.
    pub faces: Vec<String>,
    /// True where Newton refinement on the active set was accepted.
    pub refined: bool,
    /// Stated bound on the scaled error of the answer after this level.
    pub error_bound: f64,
    /// Interior-point iterations.
    pub iterations: u32,
}

/// A limit that binds.
#[derive(Debug, Clone, PartialEq)]
pub struct Binding {
    /// The limit, as `group` of its rows.
    pub limit: String,
    /// The row.
    pub part: String,
    /// Priority at which this multiplier was found.
    pub priority: u32,
    /// Multiplier: change of that level's cost per unit of the limit (cost per `unit`).
    pub multiplier: f64,
    /// Unit of the limit.
    pub unit: &'static str,
}

/// Room left to a limit.
#[derive(Debug, Clone, PartialEq)]
pub struct Margin {
    /// The limit.
    pub limit: String,
    /// The row.
    pub part: String,
    /// Positive inside, negative where a soft limit is exceeded.
    pub margin: f64,
    /// Unit.
    pub unit: &'static str,
}

/// A direction left free.
#[derive(Debug, Clone, PartialEq)]
pub struct FreeDirection {
    /// Parts of the unit direction (in scaled unknowns) by unknown name, physical amounts, largest first.
    pub parts: Vec<(String, f64, &'static str)>,
}

/// What carries a proof of infeasibility.
#[derive(Debug, Clone, PartialEq)]
pub struct Blocking {
    /// Limit or must-hold task.
    pub group: String,
    /// Its part of the sum of absolute (scaled) multipliers, 0 to 1.
    pub share: f64,
}

/// Ground and tick in figures.
#[derive(Debug, Clone, PartialEq)]
pub struct GroundReport {
    /// Largest eigenfrequency of the robot on its bed, `omega^2` of `M^-1 J' S J` (rad/s); zero without soft soles.
    pub omega_max: f64,
    /// `omega_max T`.
    pub omega_max_tick: f64,
    /// One entry per contact.
    pub soles: Vec<SoleGround>,
    /// Rocking stiffness of all soft soles together about the horizontal axis in which it is least,
    /// beside `m g h` (N m/rad); none without soft soles or with a rigid one.
    pub rocking: Option<Rocking>,
}

/// Rocking stiffness against the weight that wants to topple.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Rocking {
    /// Least rocking stiffness of the bed about the centre of the soles (N m/rad).
    pub bed: f64,
    /// Mass times gravity times height of the centre of mass above the soles (N m/rad).
    pub weight: f64,
}

/// Ground figures of one sole.
#[derive(Debug, Clone, PartialEq)]
pub struct SoleGround {
    /// Sole name.
    pub name: String,
    /// Normal b/k (s); none for rigid ground or k = 0.
    pub damping_time: Option<f64>,
    /// Normal T k / b; none for rigid ground or b = 0.
    pub tick_stiffness_over_damping: Option<f64>,
    /// Normal sink under the present wrench, from the rest pose (m).
    pub sink: Option<f64>,
}

/// Rigid-body terms in the request's velocity axes.
#[derive(Debug, Clone, PartialEq)]
pub struct DynamicsReport {
    /// Mass (kg).
    pub mass: f64,
    /// Names of the generalised velocities, e.g. `base:vx`, `left_knee`.
    pub velocities: Vec<String>,
    /// Mass matrix, rows.
    pub mass_matrix: Vec<Vec<f64>>,
    /// Coriolis, centrifugal and gravity terms (joint friction not included).
    pub bias: Vec<f64>,
    /// Joint friction, per generalised velocity.
    pub friction: Vec<f64>,
    /// Centre of mass (m) and its velocity (m/s), world.
    pub center_of_mass: Vec3,
    /// See `center_of_mass`.
    pub center_of_mass_velocity: Vec3,
    /// Momentum: linear and angular about the centre of mass, world axes.
    pub momentum: [Vec3; 2],
    /// Centroidal momentum matrix, 6 rows.
    pub momentum_matrix: Vec<Vec<f64>>,
    /// Its rate term `A_dot nu`.
    pub momentum_bias: [Vec3; 2],
    /// Kinetic energy (J).
    pub kinetic_energy: f64,
    /// Potential energy, zero at the world origin (J).
    pub potential_energy: f64,
    /// Soles and the frames asked for.
    pub frames: Vec<FrameReport>,
}

/// Kinematics of one frame or sole.
#[derive(Debug, Clone, PartialEq)]
pub struct FrameReport {
    /// Name.
    pub name: String,
    /// Position (m) and orientation quaternion `[x, y, z, w]`.
    pub position: Vec3,
    /// See `position`.
    pub orientation: [f64; 4],
    /// Velocity, world axes.
    pub twist: [Vec3; 2],
    /// Jacobian, 6 rows (linear first, world axes).
    pub jacobian: Vec<Vec<f64>>,
    /// `J_dot nu`.
    pub bias_acceleration: [Vec3; 2],
}
