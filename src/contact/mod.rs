//! Ground that gives under a rigid sole: laws, tick rules, friction sets. Knows no robot.
//!
//! The moments, wrenches and matrices here are about the sole-frame origin, in world axes.

pub mod error;
pub mod friction;
pub mod held;
pub mod law;
mod moments;
pub mod predict;
pub mod quadrature;
mod relative;
pub mod report;
pub mod rest;
pub mod tick;

pub use error::{ContactError, Direction};

use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat6, Pose, Twist, Vec3, Vec6, Wrench};

/// How the wrench over one tick follows from the acceleration held during it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TickRule {
    /// c = 1, theta = 1: stable for any stiffness.
    BackwardEuler,
    /// c = 1/2, theta = 1/2.
    Trapezoid,
    /// c = 0, theta = 0: the present wrench acts all through the tick.
    Explicit,
    /// The torques are held, and the frozen contact motion of all soft soles is solved exactly: see [`held`]. The accelerations
    /// of the problem are averages over the tick.
    Held,
}

/// Stiffness and damping, normal and tangential. Per area (N/m^3, N s/m^3) under a polygon, per
/// sole (N/m, N s/m) under a point.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Material {
    /// Normal stiffness, >= 0.
    pub normal_stiffness: f64,
    /// Tangential stiffness, >= 0.
    pub tangential_stiffness: f64,
    /// Normal damping, >= 0.
    pub normal_damping: f64,
    /// Tangential damping, >= 0.
    pub tangential_damping: f64,
}

/// The ground law under one sole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Law {
    /// Springs and dampers over the whole polygon, tension included.
    Bonded(Material),
    /// No compliance: the sole's acceleration is prescribed, zero or, with `stop`, `-v/T`.
    Rigid {
        /// Bring the sole to rest within the tick.
        stop: bool,
    },
}

/// Where the ground rests, unloaded.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Rest {
    /// The given sole pose is the unloaded one.
    Pose(Pose),
    /// Tangential position and yaw of the sole pose at touchdown; height and tilt of the plane
    /// through `plane_point` with the ground normal.
    Touchdown {
        /// Sole pose when it touched down.
        pose: Pose,
        /// A point of the unloaded ground plane (m, world).
        plane_point: Vec3,
    },
    /// The pose at which the present sole pose, at rest, carries this wrench.
    Carries(Wrench),
    /// Unknown: only with a measured wrench, for which the model supplies the change alone. The law is then
    /// evaluated about the rest pose that carries the measured wrench.
    Measured,
}

/// Everything about the ground under one sole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Ground {
    /// The law.
    pub law: Law,
    /// Unit normal, out of the ground.
    pub normal: Vec3,
    /// Rest pose.
    pub rest: Rest,
    /// Velocity of the rest pose (moving ground), of the rest frame's origin.
    pub rest_twist: Twist,
    /// Measured present wrench, if any: it replaces the modelled one, and the law supplies the change.
    pub measured: Option<Wrench>,
}

/// Present pose and velocity of a sole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SoleMotion {
    /// Sole frame in the world.
    pub pose: Pose,
    /// Velocity of the sole-frame origin, world axes.
    pub twist: Twist,
}

/// The affine map from sole acceleration to wrench over one tick:
/// `w_plus = drift - gain * a`, `a` the acceleration of the sole frame (classical, origin; angular).
#[derive(Debug, Clone, PartialEq)]
pub struct TickMap {
    /// 6 for polygons, 3 (force, linear acceleration) for points; unused rows and columns are zero.
    pub dimension: usize,
    /// Wrench at the start of the tick (measured where given, else the law's; zero on a rigid sole
    /// without a measurement, see `now_known`).
    pub now: Wrench,
    /// False on a rigid sole without a measured wrench: no law says what it carries at present, so
    /// rates of the wrench cannot be formed.
    pub now_known: bool,
    /// Wrench at the tick's end if the acceleration were zero. Unused on a rigid sole.
    pub drift: Vec6,
    /// `G = T D + c T^2 S`. Unused on a rigid sole.
    pub gain: Mat6,
    /// `w_bar = (1 - theta) now + theta w_plus` acts in the dynamics (rigid: theta = 1).
    pub theta: f64,
    /// The contact equality `acceleration_part * a + wrench_part * w_plus = right_side`,
    /// `(Z + G)^-1 [G a + w_plus - drift] = 0`, well scaled for rigid, soft and massless grounds alike.
    pub acceleration_part: Mat6,
    /// See `acceleration_part`.
    pub wrench_part: Mat6,
    /// See `acceleration_part`.
    pub right_side: Vec6,
    /// Natural size of each equality row: 1 m/s^2 for the linear rows, 1/r rad/s^2 for the angular ones (r the
    /// polygon's polar radius of gyration about the sole origin; 1 m/s^2 and 0 on a point sole). A
    /// row's residual is an acceleration: the mismatch of the law's wrench divided by `Z + G`.
    pub row_scale: Vec6,
    /// S = -dw/d(pose) at the drift state, for a translation of the origin and a left rotation
    /// vector (N/m, N, N m/m, N m/rad). Zero on a rigid sole.
    pub stiffness: Mat6,
    /// D = -dw/d(twist) at the drift state (N s/m and so on). Zero on a rigid sole.
    pub damping: Mat6,
    /// True on a rigid sole.
    pub rigid: bool,
}

/// What a sole is made of, for the functions here.
#[derive(Debug, Clone, Copy)]
pub struct Patch<'a> {
    /// Its surface.
    pub shape: &'a SoleShape,
    /// The ground under it.
    pub ground: &'a Ground,
}
