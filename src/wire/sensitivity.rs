//! Derivatives of the answer by stiffness, damping and friction, in an answer.

use schemars::JsonSchema;
use serde::Serialize;

use super::number::{LinearAngularOut, Number, WrenchOut};
use crate::explain::sensitivity::{Derivative, NearChange, Sensitivity};
use crate::explain::{Parameter, ParameterKind};
use crate::problem::question::Question;
use crate::reference::answer::Answer;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Vec3, Wrench};

/// Derivatives of the answer. All are per relative change of a parameter: for the parameter times (1 + e), the change is e
/// times what stands here.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Sensitivity")]
pub(super) struct SensitivityOut<'a> {
    /// One entry per sole and parameter (N m, rad/s^2, N and units of the margins, per relative change); empty where there
    /// are none, see `why_not`.
    derivatives: Vec<DerivativeOut<'a>>,
    /// Parameters by which there is no derivative, because the answer jumps when one of them changes alone (no unit).
    undefined: Vec<ParameterOut<'a>>,
    /// Limits at which the active set is about to change: the derivatives hold on one side only, or nowhere near (no unit).
    near: Vec<NearOut<'a>>,
    /// Why there are no derivatives (no unit); null where there are.
    why_not: Option<&'a str>,
}

/// A parameter of the ground under one sole.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "GroundParameter")]
struct ParameterOut<'a> {
    /// Sole name (no unit).
    sole: &'a str,
    /// Which parameter (no unit). `stiffness`, `damping`: normal and tangential by the same factor; the others by
    /// themselves.
    parameter: ParameterWord,
}

/// Parameters of the ground.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum ParameterWord {
    Stiffness,
    Damping,
    NormalStiffness,
    TangentialStiffness,
    NormalDamping,
    TangentialDamping,
    Friction,
}

/// Derivatives by one parameter.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Derivative")]
struct DerivativeOut<'a> {
    /// Sole name (no unit).
    sole: &'a str,
    /// Which parameter (no unit). `stiffness`, `damping`: normal and tangential by the same factor; the others by
    /// themselves.
    parameter: ParameterWord,
    /// Present value of the parameter (in `unit`), by which to divide for a derivative per unit; null where it stands for
    /// two different values.
    value: Option<Number>,
    /// Unit of the value (no unit): `N/m^3` or `N s/m^3` under a polygon, `N/m` or `N s/m` under a point, `1` for friction.
    unit: &'static str,
    /// Change of each joint's torque and acceleration (N m, rad/s^2; N, m/s^2) per relative change.
    joints: Vec<JointDerivativeOut<'a>>,
    /// Change of the base's acceleration, world axes (m/s^2, rad/s^2) per relative change; null on a fixed base.
    base_acceleration: Option<LinearAngularOut>,
    /// Change of each sole's wrench at the tick's end (N, N m) per relative change.
    soles: Vec<SoleDerivativeOut<'a>>,
    /// Change of each margin of the answer, each in its own unit, per relative change.
    margins: Vec<MarginDerivativeOut<'a>>,
    /// Relative change of the parameter at which, by linear prediction, a limit that does not bind yet comes to bind (no
    /// unit); null where no limit comes closer.
    reaches: Option<Number>,
}

/// Change of one joint.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "JointDerivative")]
struct JointDerivativeOut<'a> {
    /// Joint name as in the URDF (no unit).
    name: &'a str,
    /// Change of the torque per relative change (N m, or N for a sliding joint).
    torque: Number,
    /// Change of the acceleration per relative change (rad/s^2, or m/s^2 for a sliding joint).
    acceleration: Number,
}

/// Change of one sole's wrench.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "SoleDerivative")]
struct SoleDerivativeOut<'a> {
    /// Sole name (no unit).
    name: &'a str,
    /// Change of the wrench at the tick's end per relative change, world axes, about the sole origin (N, N m).
    wrench: WrenchOut,
}

/// Change of one margin.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "MarginDerivative")]
struct MarginDerivativeOut<'a> {
    /// The limit (no unit).
    limit: &'a str,
    /// The row within it (no unit).
    part: &'a str,
    /// Change of the margin per relative change (in `unit`).
    change: Number,
    /// Unit of the margin (no unit).
    unit: &'a str,
}

/// A limit at which the active set is about to change.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "NearChange")]
struct NearOut<'a> {
    /// The limit (no unit).
    limit: &'a str,
    /// The row within it (no unit).
    part: &'a str,
    /// Scaled slack of a limit that does not bind, or multiplier relative to the largest of its level (no unit).
    value: Number,
    /// True where the limit binds now (no unit).
    binds: bool,
}

impl<'a> SensitivityOut<'a> {
    /// From the answer.
    pub(super) fn of(question: &'a Question, answer: &'a Answer, found: &'a Sensitivity) -> Self {
        let near = |near: &'a NearChange| NearOut {
            limit: &near.limit,
            part: &near.part,
            value: Number(near.value),
            binds: near.binds,
        };
        let undefined = found.undefined.iter();
        SensitivityOut {
            derivatives: found.derivatives.iter().map(|by| derivative(question, answer, by)).collect(),
            undefined: undefined
                .map(|p| ParameterOut { sole: sole_name(question, p.contact), parameter: word(p.kind) })
                .collect(),
            near: found.near.iter().map(near).collect(),
            why_not: found.why_not,
        }
    }
}

fn derivative<'a>(question: &'a Question, answer: &'a Answer, by: &'a Derivative) -> DerivativeOut<'a> {
    let names = &question.model.joints;
    // The base, where it moves, comes before the joints.
    let base = by.accelerations.len().saturating_sub(names.len());
    let (base, accelerations) = by.accelerations.split_at(base);
    let values = by.torques.iter().zip(accelerations);
    DerivativeOut {
        sole: sole_name(question, by.parameter.contact),
        parameter: word(by.parameter.kind),
        value: by.value.map(Number),
        unit: unit(question, by.parameter),
        joints: names
            .iter()
            .zip(values)
            .map(|(joint, (torque, acceleration))| JointDerivativeOut {
                name: &joint.name,
                torque: Number(*torque),
                acceleration: Number(*acceleration),
            })
            .collect(),
        base_acceleration: match *base {
            [x, y, z, p, q, r] => Some([Vec3::new(x, y, z), Vec3::new(p, q, r)].into()),
            _ => None,
        },
        soles: by.wrenches.iter().enumerate().map(|(contact, change)| sole(question, contact, change)).collect(),
        margins: answer
            .margins
            .iter()
            .zip(&by.margins)
            .map(|(margin, change)| MarginDerivativeOut {
                limit: &margin.limit,
                part: &margin.part,
                change: Number(*change),
                unit: margin.unit,
            })
            .collect(),
        reaches: by.reaches.map(Number),
    }
}

fn sole<'a>(question: &'a Question, contact: usize, change: &[f64; 6]) -> SoleDerivativeOut<'a> {
    let [x, y, z, p, q, r] = *change;
    let wrench = Wrench { force: Vec3::new(x, y, z), moment: Vec3::new(p, q, r) };
    SoleDerivativeOut { name: sole_name(question, contact), wrench: wrench.into() }
}

fn sole_name(question: &Question, contact: usize) -> &str {
    let sole = question.contacts.get(contact).and_then(|contact| question.model.soles.get(contact.sole));
    sole.map_or("", |sole| &sole.name)
}

fn word(kind: ParameterKind) -> ParameterWord {
    match kind {
        ParameterKind::Stiffness => ParameterWord::Stiffness,
        ParameterKind::Damping => ParameterWord::Damping,
        ParameterKind::NormalStiffness => ParameterWord::NormalStiffness,
        ParameterKind::TangentialStiffness => ParameterWord::TangentialStiffness,
        ParameterKind::NormalDamping => ParameterWord::NormalDamping,
        ParameterKind::TangentialDamping => ParameterWord::TangentialDamping,
        ParameterKind::Friction => ParameterWord::Friction,
    }
}

/// Unit in which the domain keeps a parameter: a material is per area under a polygon, per sole under a point.
fn unit(question: &Question, parameter: Parameter) -> &'static str {
    let sole = question.contacts.get(parameter.contact).and_then(|contact| question.model.soles.get(contact.sole));
    let point = sole.is_some_and(|sole| matches!(sole.shape, SoleShape::Point));
    match parameter.kind {
        ParameterKind::Friction => "1",
        ParameterKind::Stiffness | ParameterKind::NormalStiffness | ParameterKind::TangentialStiffness => {
            if point { "N/m" } else { "N/m^3" }
        }
        ParameterKind::Damping | ParameterKind::NormalDamping | ParameterKind::TangentialDamping => {
            if point { "N s/m" } else { "N s/m^3" }
        }
    }
}
