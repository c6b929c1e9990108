//! A model, as a document.

use schemars::JsonSchema;
use serde::Serialize;

use super::common::Format;
use super::number::{Number, Tuple};
use crate::model::{BaseKind, Joint, JointKind, Model, Sole};
use crate::spatial::polygon::SoleShape;

/// A registered model.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Model")]
pub(super) struct ModelOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Content hash by which requests may name it: same content, same id (no unit).
    id: &'a str,
    /// Robot name of the URDF (no unit).
    name: &'a str,
    /// `floating` or `fixed` (no unit).
    base: BaseWord,
    /// Total mass (kg).
    mass: Number,
    /// Moving joints in model order, the document order of the URDF (rad, N m; m, N for sliding
    /// joints).
    joints: Vec<JointOut<'a>>,
    /// Links, each a frame that tasks and loads may name, in document order (no unit).
    links: Vec<&'a str>,
    /// Soles (m, m^2).
    soles: Vec<SoleOut<'a>>,
    /// Parts of the description that were ignored, and other remarks (no unit).
    remarks: &'a [String],
}

#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum BaseWord {
    Floating,
    Fixed,
}

#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum KindWord {
    Revolute,
    Continuous,
    Prismatic,
}

/// A moving joint.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ModelJoint")]
struct JointOut<'a> {
    /// Name as in the URDF (no unit).
    name: &'a str,
    /// `revolute`, `continuous` or `prismatic` (no unit).
    kind: KindWord,
    /// False for a joint without motor (no unit).
    actuated: bool,
    /// Position limits (rad or m); null where there are none.
    position: Option<RangeOut>,
    /// Largest speed (rad/s or m/s); null where none is given.
    speed: Option<Number>,
    /// Largest torque or force (N m or N); null where none is given.
    effort: Option<Number>,
    /// Torque-speed line (N m and rad/s, or N and m/s); null where none is given.
    torque_speed: Option<LineOut>,
    /// Reflected rotor inertia (kg m^2 or kg).
    rotor_inertia: Number,
    /// Viscous friction (N m s/rad or N s/m).
    viscous_friction: Number,
    /// Coulomb friction (N m or N).
    coulomb_friction: Number,
}

/// A range of positions.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ModelRange")]
struct RangeOut {
    /// Lower end (rad or m).
    lower: Number,
    /// Upper end (rad or m).
    upper: Number,
}

/// Torque that falls linearly with speed.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ModelTorqueSpeed")]
struct LineOut {
    /// Torque or force at standstill (N m or N).
    stall: Number,
    /// Speed at which none is left (rad/s or m/s).
    no_load_speed: Number,
}

/// A sole.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ModelSole")]
struct SoleOut<'a> {
    /// Name (no unit).
    name: &'a str,
    /// Link that carries it (no unit).
    link: &'a str,
    /// Vertices [x, y] in the sole frame (m); empty for a point.
    vertices: Vec<Tuple<2>>,
    /// Area (m^2); zero for a point.
    area: Number,
}

/// The document. A model holds finite numbers only, so that writing it cannot fail.
pub(super) fn write(model: &Model) -> Vec<u8> {
    let document = ModelOut {
        format: Format::One,
        id: &model.id,
        name: &model.name,
        base: match model.base {
            BaseKind::Floating => BaseWord::Floating,
            BaseKind::Fixed => BaseWord::Fixed,
        },
        mass: Number(model.mass()),
        joints: model.joints.iter().map(joint).collect(),
        links: model.frames.iter().map(|frame| frame.name.as_str()).collect(),
        soles: model.soles.iter().map(sole).collect(),
        remarks: &model.remarks,
    };
    serde_json::to_vec(&document).unwrap_or_default()
}

fn joint(joint: &Joint) -> JointOut<'_> {
    JointOut {
        name: &joint.name,
        kind: match joint.kind {
            JointKind::Revolute => KindWord::Revolute,
            JointKind::Continuous => KindWord::Continuous,
            JointKind::Prismatic => KindWord::Prismatic,
        },
        actuated: joint.actuated,
        position: joint
            .position
            .map(|(lower, upper)| RangeOut { lower: Number(lower), upper: Number(upper) }),
        speed: joint.speed.map(Number),
        effort: joint.effort.map(Number),
        torque_speed: joint.torque_speed.map(|line| LineOut {
            stall: Number(line.stall),
            no_load_speed: Number(line.no_load_speed),
        }),
        rotor_inertia: Number(joint.rotor_inertia),
        viscous_friction: Number(joint.viscous_friction),
        coulomb_friction: Number(joint.coulomb_friction),
    }
}

fn sole(sole: &Sole) -> SoleOut<'_> {
    let (vertices, area) = match &sole.shape {
        SoleShape::Polygon(polygon) => (polygon.vertices(), polygon.moments().area),
        SoleShape::Point => (&[][..], 0.0),
    };
    SoleOut {
        name: &sole.name,
        link: &sole.link,
        vertices: vertices.iter().map(|vertex| Tuple(*vertex)).collect(),
        area: Number(area),
    }
}
