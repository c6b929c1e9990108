//! What comes out.

use nalgebra::DMatrix;

use super::change::Change;
use super::excitation::{Excitation, Moved};
use super::parameters::Parameter;
use super::setup::Lag;
use super::whiteness::Verdict;

/// Something about the log that a reader should know, with the lines it concerns.
#[derive(Debug, Clone, PartialEq)]
pub struct Remark {
    /// Stable short code, kebab-case.
    pub code: &'static str,
    /// What happened the first time, in a sentence.
    pub text: String,
    /// How often.
    pub count: u64,
    /// The first lines it happened on, from 1.
    pub lines: Vec<u64>,
    /// Samples that were left out because of it.
    pub skipped: u64,
}

/// One parameter of one stance.
#[derive(Debug, Clone, PartialEq)]
pub struct Value {
    /// Which.
    pub parameter: Parameter,
    /// Estimate, in the parameter's unit.
    pub value: f64,
    /// Standard deviation.
    pub deviation: f64,
    /// Error to be expected from noise on the motion (estimate minus truth); none where it cannot be told.
    pub bias: Option<f64>,
    /// Whether the log excited it.
    pub excitation: Excitation,
    /// What was seen and what motion would help; none where it is identified.
    pub advice: Option<String>,
}

/// Residuals of one axis (sole axes).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Axis {
    /// Root mean square of the recursive residuals (N, N m).
    pub rms: f64,
    /// Whether they are independent of one another.
    pub whiteness: Option<Verdict>,
}

/// One stance of one sole.
#[derive(Debug, Clone, PartialEq)]
pub struct Stance {
    /// Time of the first sample (s).
    pub begin: f64,
    /// Time of the last sample (s).
    pub end: f64,
    /// Samples used.
    pub samples: u64,
    /// Parameters.
    pub values: Vec<Value>,
    /// Covariance of the parameters, in the order of `values`.
    pub covariance: DMatrix<f64>,
    /// Standard deviation of force and moment readings as the residuals show it, over the one that was assumed.
    pub noise_ratio: [Option<f64>; 2],
    /// Condition number in relative units.
    pub condition: f64,
    /// Residuals per axis: force x, y, z, then moment x, y, z; three on a point sole.
    pub axes: Vec<Axis>,
    /// How the sole moved.
    pub moved: Moved,
    /// Mean normal force (N).
    pub mean_normal_force: f64,
    /// Comparison with the stance before.
    pub change: Option<Change>,
    /// What no ground can have.
    pub unphysical: Vec<String>,
}

/// The estimate at one time.
#[derive(Debug, Clone, PartialEq)]
pub struct Moment {
    /// Time (s).
    pub time: f64,
    /// Material parameters.
    pub values: Vec<f64>,
    /// Their standard deviations.
    pub deviations: Vec<f64>,
}

/// All about one sole.
#[derive(Debug, Clone, PartialEq)]
pub struct SoleReport {
    /// Area (m^2); none on a point sole.
    pub area: Option<f64>,
    /// Stances, in order; see `unlisted`.
    pub stances: Vec<Stance>,
    /// Stances beyond the most that are listed, and those whose numbers overflowed; the last stance of all is the last of the
    /// list.
    pub unlisted: u64,
    /// The estimate over time, thinned out evenly.
    pub history: Vec<Moment>,
    /// The lag that fits best, or the one given.
    pub lag: Lag,
    /// The delay between grid points by a parabola through the residuals, where several were tried (s).
    pub delay_between: Option<f64>,
    /// Noise of position (m), rotation (rad), linear (m/s) and angular velocity (rad/s), as used for the bias.
    pub motion_noise: [f64; 4],
    /// Number of samples read, in the air, and left out.
    pub read: u64,
    /// See `read`.
    pub airborne: u64,
}

/// The answer.
#[derive(Debug, Clone, PartialEq)]
pub struct Report {
    /// Soles in the order of the settings.
    pub soles: Vec<SoleReport>,
    /// Rows of the log.
    pub rows: u64,
    /// Rows left out.
    pub skipped: u64,
    /// First and last time (s).
    pub span: Option<(f64, f64)>,
    /// About the log and the estimate.
    pub remarks: Vec<Remark>,
    /// Scale of the force readings (reading over truth) and its deviation, where asked for.
    pub scale: Option<(f64, f64)>,
}
