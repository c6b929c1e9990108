//! Rigid-body terms and models, as documents.

use schemars::JsonSchema;
use serde::Serialize;

use super::common::Format;
use super::number::{LinearAngularOut, Number, Numbers, Rows, Tuple};
use crate::dynamics::axes::{Axes, VelocityAxes};
use crate::problem::question::DynamicsQuestion;
use crate::reference::answer::{DynamicsReport, FrameReport};

/// World axes or the base link's own.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum AxesWord {
    World,
    Base,
}

/// Axes of base velocities and accelerations.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "VelocityAxesAnswer")]
pub(super) struct AxesOut {
    /// Axes of the linear part (no unit): `world` or `base`.
    linear: AxesWord,
    /// Axes of the angular part (no unit): `world` or `base`.
    angular: AxesWord,
}

impl From<VelocityAxes> for AxesOut {
    fn from(axes: VelocityAxes) -> Self {
        let word = |axes: Axes| match axes {
            Axes::World => AxesWord::World,
            Axes::Base => AxesWord::Base,
        };
        AxesOut { linear: word(axes.linear), angular: word(axes.angular) }
    }
}

/// The answer to a dynamics request.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "DynamicsAnswer")]
pub(super) struct DynamicsAnswerOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Version of the service that answered (no unit).
    version: &'static str,
    /// SHA-256 of the canonical request and the version: same fingerprint, same question (no unit).
    fingerprint: &'a str,
    /// Id of the model, carried loads included (no unit).
    model: &'a str,
    /// Axes of the base part of generalised velocities (m/s, rad/s), as the request gave them.
    velocity_axes: AxesOut,
    /// The terms (kg, m, N m); null where a number was not finite, which happens only on numbers far
    /// beyond any robot.
    dynamics: Option<DynamicsOut<'a>>,
}

/// Rigid-body terms: `mass_matrix * acceleration + bias + friction = torques + sum of J' wrench`, over
/// generalised velocities: base linear, base angular, joints in model order.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Dynamics")]
pub(super) struct DynamicsOut<'a> {
    /// Mass (kg).
    mass: Number,
    /// Name of each generalised velocity (no unit; base m/s and rad/s, joints rad/s or m/s).
    velocities: &'a [String],
    /// Mass matrix, rows (kg, kg m, kg m^2).
    mass_matrix: Rows<'a>,
    /// Coriolis, centrifugal and gravity terms, joint friction not included (N, N m).
    bias: Numbers<'a>,
    /// Joint friction per generalised velocity (N, N m).
    friction: Numbers<'a>,
    /// Centre of mass [x, y, z], world axes (m).
    center_of_mass: Tuple<3>,
    /// Its velocity [x, y, z], world axes (m/s).
    center_of_mass_velocity: Tuple<3>,
    /// Momentum, angular about the centre of mass, world axes (kg m/s, kg m^2/s).
    momentum: LinearAngularOut,
    /// Centroidal momentum matrix, six rows, linear first (kg, kg m, kg m^2).
    momentum_matrix: Rows<'a>,
    /// Rate of momentum at zero generalised acceleration, world axes (N, N m).
    momentum_bias: LinearAngularOut,
    /// Kinetic energy (J).
    kinetic_energy: Number,
    /// Potential energy, zero with the centre of mass at the world origin (J).
    potential_energy: Number,
    /// Soles, then the links asked for (m, m/s).
    frames: Vec<FrameOut<'a>>,
}

/// Kinematics of one frame.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Frame")]
struct FrameOut<'a> {
    /// Name of the sole or link (no unit).
    name: &'a str,
    /// Position [x, y, z], world axes (m).
    position: Tuple<3>,
    /// Orientation, quaternion [x, y, z, w] (no unit).
    orientation: Tuple<4>,
    /// Velocity, world axes (m/s, rad/s).
    twist: LinearAngularOut,
    /// Jacobian, six rows, linear first, world axes (no unit, m).
    jacobian: Rows<'a>,
    /// Acceleration at zero generalised acceleration, world axes (m/s^2, rad/s^2).
    bias_acceleration: LinearAngularOut,
}

impl<'a> DynamicsOut<'a> {
    /// From the report.
    pub(super) fn of(report: &'a DynamicsReport) -> Self {
        let frame = |frame: &'a FrameReport| FrameOut {
            name: &frame.name,
            position: frame.position.into(),
            orientation: Tuple(frame.orientation),
            twist: frame.twist.into(),
            jacobian: Rows(&frame.jacobian),
            bias_acceleration: frame.bias_acceleration.into(),
        };
        DynamicsOut {
            mass: Number(report.mass),
            velocities: &report.velocities,
            mass_matrix: Rows(&report.mass_matrix),
            bias: Numbers(&report.bias),
            friction: Numbers(&report.friction),
            center_of_mass: report.center_of_mass.into(),
            center_of_mass_velocity: report.center_of_mass_velocity.into(),
            momentum: report.momentum.into(),
            momentum_matrix: Rows(&report.momentum_matrix),
            momentum_bias: report.momentum_bias.into(),
            kinetic_energy: Number(report.kinetic_energy),
            potential_energy: Number(report.potential_energy),
            frames: report.frames.iter().map(frame).collect(),
        }
    }
}

/// Room to begin with (bytes): some twenty joints and a few frames.
const USUAL_LENGTH: usize = 32 * 1024;

/// The document.
pub(super) fn write(question: &DynamicsQuestion, report: &DynamicsReport, fingerprint: &str) -> Vec<u8> {
    let document = |dynamics| DynamicsAnswerOut {
        format: Format::One,
        version: env!("CARGO_PKG_VERSION"),
        fingerprint,
        model: &question.model.id,
        velocity_axes: question.velocity_axes.into(),
        dynamics,
    };
    let mut bytes = Vec::with_capacity(USUAL_LENGTH);
    match serde_json::to_writer(&mut bytes, &document(Some(DynamicsOut::of(report)))) {
        Ok(()) => bytes,
        Err(_) => serde_json::to_vec(&document(None)).unwrap_or_default(),
    }
}
