//! What a user says about the ground, the sensor and the log.

use std::sync::Arc;

use crate::model::Model;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat6, Pose, Vec3, Vec6, Wrench, skew};

/// Which stiffnesses and dampings are told apart.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Directions {
    /// One k and one b.
    Isotropic,
    /// Normal and tangential ones.
    Split,
}

/// What is estimated besides stiffness and damping.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Unknown {
    /// How high the unloaded ground lies.
    pub height: bool,
    /// Where in the plane the sole would rest.
    pub offset: bool,
    /// How the unloaded ground is tilted.
    pub tilt: bool,
    /// Constant error of the force reading.
    pub force_bias: bool,
    /// Constant error of the moment reading.
    pub moment_bias: bool,
}

/// What is believed of the ground beforehand.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Guess {
    /// Stiffness (N/m^3, or N/m on a point sole), > 0.
    pub stiffness: f64,
    /// Damping (N s/m^3, or N s/m), > 0.
    pub damping: f64,
    /// Standard deviation of both over their size, > 0.
    pub relative_deviation: f64,
}

/// How fast old samples lose weight.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Forgetting {
    /// Not at all.
    None,
    /// By this factor per sample, 0 < factor <= 1.
    Factor(f64),
    /// By `exp(-dt / constant)` (s).
    TimeConstant(f64),
}

/// How touchdowns are told.
#[derive(Debug, Clone, PartialEq)]
pub enum Touchdown {
    /// Normal force above `on` begins a stance, below `off` ends it (N), off <= on.
    Force {
        /// Threshold that begins a stance (N).
        on: f64,
        /// Threshold that ends it (N).
        off: f64,
    },
    /// The log says with every sample whether the sole stands.
    Logged,
    /// Stances of each sole, begin and end (s), in order; samples from begin up to and including end belong to it. The
    /// anchor is the pose of the first sample.
    Given(Vec<Vec<(f64, f64)>>),
}

/// The ground plane, where it is known.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Plane {
    /// Unit normal, out of the ground, world.
    pub normal: Vec3,
    /// A point of the unloaded surface (m, world), if known: height and tilt of the rest pose are then the plane's.
    pub point: Option<Vec3>,
}

/// What the wrench sensor reads.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Sensor {
    /// +1 where the reading is what the ground side exerts on the robot side, -1 where it is the reaction.
    pub sign: f64,
    /// Sensor frame in the sole frame.
    pub placement: Pose,
    /// The reading is in world axes (about the sensor's origin), not in the sensor's.
    pub world_axes: bool,
    /// Mass between sensor and ground (kg).
    pub mass_below: f64,
    /// Its centre, sole axes (m).
    pub center_below: Vec3,
    /// Standard deviations of the reading, sensor axes (N, N m), all > 0; a guess of their ratio is enough.
    pub noise: Option<Vec6>,
}

impl Sensor {
    /// A sensor at the sole, reading the wrench of the ground on the robot in sole axes, with nothing below it.
    pub fn plain() -> Self {
        Sensor {
            sign: 1.0,
            placement: Pose::identity(),
            world_axes: false,
            mass_below: 0.0,
            center_below: Vec3::zeros(),
            noise: None,
        }
    }

    /// Carries a wrench from sensor axes and origin to the sole's.
    pub fn to_sole(&self) -> Mat6 {
        let r = self.placement.rotation;
        let mut out = Mat6::zeros();
        out.fixed_view_mut::<3, 3>(0, 0).copy_from(&r);
        out.fixed_view_mut::<3, 3>(3, 3).copy_from(&r);
        out.fixed_view_mut::<3, 3>(3, 0).copy_from(&(skew(&self.placement.translation) * r));
        out
    }

    /// The wrench of the ground on the sole, sole axes, from a reading (force first).
    ///
    /// The mass m below the sensor, centre c, obeys `ground + m g - reading = m a`, so that
    /// `ground = reading + m (a - g)` and its moment about the sole origin is `c x m (a - g)`; the rotational inertia
    /// of what lies below the sensor is left out. `gravity` and `acceleration` (of the sole origin) in world axes.
    pub fn ground_wrench(&self, reading: &Vec6, pose: &Pose, gravity: &Vec3, acceleration: &Vec3) -> Wrench {
        let back = pose.rotation.transpose();
        let raw = reading * self.sign;
        let sole = if self.world_axes {
            let (f, m) = (back * raw.fixed_rows::<3>(0), back * raw.fixed_rows::<3>(3));
            Wrench { force: f, moment: m + self.placement.translation.cross(&f) }
        } else {
            Wrench::from_vec6(&(self.to_sole() * raw))
        };
        let carried = back * (acceleration - gravity) * self.mass_below;
        Wrench { force: sole.force + carried, moment: sole.moment + self.center_below.cross(&carried) }
    }
}

/// Time between force and motion, and the force sensor's low-pass.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Lag {
    /// How much later than the motion the force is stamped (s).
    pub delay: f64,
    /// Time constant of a first-order low-pass that the force went through (s); 0 where there is none.
    pub time_constant: f64,
}

/// Where a sole's pose and twist come from.
#[derive(Debug, Clone, PartialEq)]
pub enum Source {
    /// The log holds them.
    Soles,
    /// The log holds base and joint states; the model's kinematics gives them.
    Model(Arc<Model>),
}

/// One sole of the log.
#[derive(Debug, Clone, PartialEq)]
pub struct SoleSetup {
    /// Name.
    pub name: String,
    /// Surface.
    pub shape: SoleShape,
    /// Index in the model, where poses come from a model.
    pub in_model: usize,
    /// Its sensor.
    pub sensor: Sensor,
}

/// Everything but the samples. Valid by construction past the gate.
#[derive(Debug, Clone, PartialEq)]
pub struct Setup {
    /// Where motion comes from.
    pub source: Source,
    /// Soles, at least one.
    pub soles: Vec<SoleSetup>,
    /// Which stiffnesses are told apart.
    pub directions: Directions,
    /// What else is unknown.
    pub unknown: Unknown,
    /// What is believed beforehand.
    pub guess: Option<Guess>,
    /// Forgetting.
    pub forgetting: Forgetting,
    /// Touchdown.
    pub touchdown: Touchdown,
    /// Ground plane.
    pub plane: Plane,
    /// Gravity (m/s^2, world).
    pub gravity: Vec3,
    /// Candidates for the lag between motion and force; one where it is given. At least one.
    pub lags: Vec<Lag>,
    /// Half width of the smoother's window (samples), for twists that the log does not hold and for accelerations.
    pub half_window: usize,
    /// A longer step than this is a gap (s).
    pub longest_step: f64,
    /// Weight of the robot (N), if known: for the check of units and, on request, the sensor's scale.
    pub weight: Option<f64>,
    /// Estimate the scale of the force readings from the weight.
    pub scale: bool,
    /// Standard deviations of the logged motion: position (m), rotation (rad), linear (m/s) and angular velocity
    /// (rad/s); estimated from the log where not given.
    pub motion_noise: Option<[f64; 4]>,
    /// The base estimate that the poses rest on took the standing feet to be still.
    pub still_feet: bool,
}
