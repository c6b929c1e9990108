//! What is estimated, in which order, and on which scale.
//!
//! The rest pose enters the law through products with a stiffness, so those products are the parameters: with the rest
//! height z0 unknown, `k_n z0` stands beside k and b, and the law stays linear. Parameters of the ground come first,
//! those of the sensor last.

use super::estimator::Prior;
use super::setup::{Directions, Setup};

/// One unknown.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Parameter {
    /// Stiffness, equal in all directions (N/m^3; N/m on a point sole).
    Stiffness,
    /// Stiffness along the normal.
    NormalStiffness,
    /// Stiffness in the ground plane.
    TangentialStiffness,
    /// Damping, equal in all directions (N s/m^3; N s/m on a point sole).
    Damping,
    /// Damping along the normal.
    NormalDamping,
    /// Damping in the ground plane.
    TangentialDamping,
    /// Normal stiffness times how far the rest pose lies above its anchor, along the normal (N/m^2; N).
    Height,
    /// Tangential stiffness times how far the rest pose lies off its anchor, along the first or second axis of the
    /// ground plane (N/m^2; N).
    Offset(usize),
    /// Normal stiffness times the small turn of the rest pose about the first or second axis of the ground plane
    /// (N/m^3 rad).
    Tilt(usize),
    /// Constant error of a force reading, sensor axes (N).
    ForceBias(usize),
    /// Constant error of a moment reading, sensor axes (N m).
    MomentBias(usize),
}

/// Expected size of a rest height or offset (m).
const LENGTH_SCALE: f64 = 0.01;
/// Expected size of a tilt (rad).
const TILT_SCALE: f64 = 0.05;
/// Expected size of a force bias (N).
const FORCE_BIAS_SCALE: f64 = 10.0;
/// Expected size of a moment bias (N m).
const MOMENT_BIAS_SCALE: f64 = 1.0;
/// Standard deviation of the prior, in expected sizes: next to no knowledge.
const VAGUE: f64 = 1e3;
/// Stiffness where nothing is known (N/m^3), of firm turf or foam.
const USUAL_STIFFNESS: f64 = 1e6;
/// The same under a point sole (N/m).
const USUAL_POINT_STIFFNESS: f64 = 1e4;
/// Damping over stiffness where nothing is known (s).
const USUAL_RATIO: f64 = 0.01;

impl Parameter {
    /// True for what belongs to the ground; false for the sensor's.
    pub fn of_ground(self) -> bool {
        !matches!(self, Parameter::ForceBias(_) | Parameter::MomentBias(_))
    }

    /// True for stiffness and damping themselves.
    pub fn of_material(self) -> bool {
        use Parameter as P;
        matches!(
            self,
            P::Stiffness | P::NormalStiffness | P::TangentialStiffness | P::Damping | P::NormalDamping | P::TangentialDamping
        )
    }

    /// True for a damping.
    pub fn is_damping(self) -> bool {
        matches!(self, Parameter::Damping | Parameter::NormalDamping | Parameter::TangentialDamping)
    }
}

/// The unknowns of a sole, ground first.
pub fn layout(setup: &Setup, point: bool) -> Vec<Parameter> {
    use Parameter as P;
    let mut out = match setup.directions {
        Directions::Isotropic => vec![P::Stiffness, P::Damping],
        Directions::Split => vec![P::NormalStiffness, P::TangentialStiffness, P::NormalDamping, P::TangentialDamping],
    };
    let unknown = setup.unknown;
    if unknown.height {
        out.push(P::Height);
    }
    if unknown.offset {
        out.extend([P::Offset(0), P::Offset(1)]);
    }
    if unknown.tilt && !point {
        out.extend([P::Tilt(0), P::Tilt(1)]);
    }
    if unknown.force_bias {
        out.extend([P::ForceBias(0), P::ForceBias(1), P::ForceBias(2)]);
    }
    if unknown.moment_bias && !point {
        out.extend([P::MomentBias(0), P::MomentBias(1), P::MomentBias(2)]);
    }
    out
}

/// Sizes, means and deviations before the first sample. Without a stated guess the mean is zero and the deviation a
/// thousand expected sizes; with one, stiffness and damping start there.
pub fn prior(setup: &Setup, layout: &[Parameter], point: bool) -> Prior {
    use Parameter as P;
    let usual = if point { USUAL_POINT_STIFFNESS } else { USUAL_STIFFNESS };
    let (stiffness, damping) = match setup.guess {
        Some(guess) => (guess.stiffness, guess.damping),
        None => (usual, usual * USUAL_RATIO),
    };
    let scale: Vec<f64> = layout
        .iter()
        .map(|parameter| match parameter {
            P::Stiffness | P::NormalStiffness | P::TangentialStiffness => stiffness,
            P::Damping | P::NormalDamping | P::TangentialDamping => damping,
            P::Height | P::Offset(_) => stiffness * LENGTH_SCALE,
            P::Tilt(_) => stiffness * TILT_SCALE,
            P::ForceBias(_) => FORCE_BIAS_SCALE,
            P::MomentBias(_) => MOMENT_BIAS_SCALE,
        })
        .collect();
    let guessed = |parameter: &Parameter| setup.guess.filter(|_| parameter.of_material());
    let mean = layout.iter().zip(&scale).map(|(p, s)| if guessed(p).is_some() { *s } else { 0.0 }).collect();
    let deviation = layout
        .iter()
        .zip(&scale)
        .map(|(p, s)| s * guessed(p).map_or(VAGUE, |guess| guess.relative_deviation))
        .collect();
    Prior { scale, mean, deviation }
}
