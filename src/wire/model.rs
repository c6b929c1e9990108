//! A robot in a request.

use std::fmt::{self, Write as _};
use std::sync::Arc;

use schemars::JsonSchema;
use serde::Deserialize;
use sha2::{Digest, Sha256};

use super::common::{Format, pose};
use super::gate::{At, Gate, push_token};
use super::refusal::{Fault, Refusal};
use super::{ModelSource, Request};
use crate::model::{
    JointSpec, MAX_SOLES, Model, ModelError, ModelOptions, SoleSpec, Subject, TorqueSpeedLine, read_urdf,
};
use crate::spatial::polygon::{Polygon, PolygonError, SoleShape};

/// Vertices of a sole polygon.
const MAX_VERTICES: usize = 64;
/// Joint settings of one model.
const MAX_ENTRIES: usize = 200;

/// Registers a robot (`POST /v1/models`): a URDF and what it does not hold.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "ModelRequest")]
pub(super) struct ModelRequest {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// The robot's URDF as text (SI units as the URDF standard has them: m, kg, kg m^2, rad).
    urdf: String,
    /// True: the base link is welded to the world (no unit); false when left out.
    fixed_base: Option<bool>,
    /// Soles, at most 64 (m); none when left out.
    #[schemars(extend("maxItems" = MAX_SOLES))]
    soles: Option<Vec<SoleBody>>,
    /// Settings of single joints, at most one entry a joint (kg m^2, N m, rad, s); what is left out
    /// keeps the URDF's value.
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    joints: Option<Vec<JointBody>>,
}

/// A robot inside another request: a URDF and what it does not hold.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "InlineModel")]
pub(super) struct InlineModel {
    /// The robot's URDF as text (SI units as the URDF standard has them: m, kg, kg m^2, rad).
    urdf: String,
    /// True: the base link is welded to the world (no unit); false when left out.
    fixed_base: Option<bool>,
    /// Soles, at most 64 (m); none when left out.
    #[schemars(extend("maxItems" = MAX_SOLES))]
    soles: Option<Vec<SoleBody>>,
    /// Settings of single joints, at most one entry a joint (kg m^2, N m, rad, s); what is left out
    /// keeps the URDF's value.
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    joints: Option<Vec<JointBody>>,
}

/// Kinds of sole.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum SoleKind {
    Polygon,
    Point,
}

/// A sole: a flat convex polygon, or a point, fixed to a link. The z axis of its frame points out
/// of the ground into the robot.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Sole")]
struct SoleBody {
    /// Name, unique among soles (no unit).
    name: String,
    /// Link that carries it, as named in the URDF (no unit).
    link: String,
    /// `polygon` (default) or `point` (no unit).
    kind: Option<SoleKind>,
    /// Origin of the sole frame in the link's frame [x, y, z] (m); zero when left out.
    position: Option<[f64; 3]>,
    /// Orientation of the sole frame in the link's frame, quaternion [x, y, z, w] of unit length
    /// within 1e-6 (no unit); that of the link when left out.
    orientation: Option<[f64; 4]>,
    /// Vertices [x, y] in the sole frame (m), 3 to 64, strictly convex, counter-clockwise seen from
    /// +z. Not for a point.
    #[schemars(extend("minItems" = 3, "maxItems" = MAX_VERTICES))]
    vertices: Option<Vec<[f64; 2]>>,
}

/// Settings of one joint. Units are rad and N m for turning joints, m and N for sliding ones.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "JointSettings")]
struct JointBody {
    /// Joint name as in the URDF (no unit).
    name: String,
    /// Reflected rotor inertia, 0 or more (kg m^2 or kg); zero when left out.
    #[schemars(extend("minimum" = 0.0))]
    rotor_inertia: Option<f64>,
    /// Viscous friction, 0 or more (N m s/rad or N s/m); the URDF's `damping` when left out.
    #[schemars(extend("minimum" = 0.0))]
    viscous_friction: Option<f64>,
    /// Coulomb friction, 0 or more (N m or N); the URDF's `friction` when left out.
    #[schemars(extend("minimum" = 0.0))]
    coulomb_friction: Option<f64>,
    /// Torque that falls linearly with speed (N m and rad/s, or N and m/s); none when left out.
    torque_speed: Option<TorqueSpeedBody>,
    /// False for a joint without motor (no unit); true when left out.
    actuated: Option<bool>,
    /// Weld the joint at this position (rad or m).
    locked_at: Option<f64>,
    /// Position limits (rad or m); the URDF's when left out.
    position: Option<RangeBody>,
    /// Largest speed, more than 0 (rad/s or m/s); the URDF's when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    speed: Option<f64>,
    /// Largest torque or force, more than 0 (N m or N); the URDF's when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    effort: Option<f64>,
}

/// Torque that falls linearly with speed.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "TorqueSpeed")]
struct TorqueSpeedBody {
    /// Torque or force at standstill, more than 0 (N m or N).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    stall: f64,
    /// Speed at which none is left, more than 0 (rad/s or m/s).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    no_load_speed: f64,
}

/// A range of positions.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Range")]
struct RangeBody {
    /// Lower end (rad or m).
    lower: f64,
    /// Upper end (rad or m), not below the lower.
    upper: f64,
}

impl Request for ModelRequest {
    type Question = Model;

    fn read(self, mut gate: Gate, _: &dyn ModelSource) -> Result<Model, Refusal> {
        let inline = InlineModel {
            urdf: self.urdf,
            fixed_base: self.fixed_base,
            soles: self.soles,
            joints: self.joints,
        };
        inline.read(&mut gate, At::ROOT).ok_or_else(|| gate.refuse())
    }
}

/// Hashes what is written to it.
struct Hashed(Sha256);

impl fmt::Write for Hashed {
    fn write_str(&mut self, text: &str) -> fmt::Result {
        self.0.update(text.as_bytes());
        Ok(())
    }
}

impl InlineModel {
    /// The robot described at this place of the request, which is not read anew where the source has kept it.
    pub(super) fn find(&self, gate: &mut Gate, at: At<'_>, models: &dyn ModelSource) -> Option<Arc<Model>> {
        if gate.partial() {
            return self.read(gate, at).map(Arc::new);
        }
        models.described(&self.key(), &mut || self.read(gate, at).map(Arc::new))
    }

    /// A hash of everything in the description, the URDF's text as it stands.
    fn key(&self) -> [u8; 32] {
        let mut hash = Hashed(Sha256::new());
        // Writing to a hash cannot fail; numbers are written so that different ones differ.
        let _ = write!(hash, "{}:{}{:?}{:?}{:?}", self.urdf.len(), self.urdf, self.fixed_base, self.soles, self.joints);
        hash.0.finalize().into()
    }

    /// The robot described at this place of the request; none where it cannot be used. Where a part of it was left out, the
    /// rest describes another robot, of which only the options are looked at.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>) -> Option<Model> {
        let before = gate.seen();
        let options = self.options(gate, at);
        if gate.seen() > before || gate.lacks(at) {
            return None;
        }
        match read_urdf(&self.urdf, &options) {
            Ok(model) => Some(model),
            Err(error) => {
                refuse(gate, &error, at);
                None
            }
        }
    }

    fn options(&self, gate: &mut Gate, at: At<'_>) -> ModelOptions {
        let soles = self.soles.as_deref().unwrap_or_default();
        let joints = self.joints.as_deref().unwrap_or_default();
        let mut options = ModelOptions {
            fixed_base: self.fixed_base.unwrap_or(false),
            ..ModelOptions::default()
        };
        let list = at.name("soles");
        if gate.at_most(list, soles.len(), MAX_SOLES, "soles") {
            options.soles =
                soles.iter().enumerate().map(|(i, sole)| sole.read(gate, list.index(i))).collect();
        }
        let list = at.name("joints");
        if gate.at_most(list, joints.len(), MAX_ENTRIES, "joints") {
            options.joints =
                joints.iter().enumerate().map(|(i, joint)| joint.read(gate, list.index(i))).collect();
        }
        options
    }
}

impl SoleBody {
    fn read(&self, gate: &mut Gate, at: At<'_>) -> SoleSpec {
        let placement = pose(gate, at, self.position, self.orientation);
        SoleSpec {
            name: self.name.clone(),
            link: self.link.clone(),
            placement,
            shape: self.shape(gate, at),
        }
    }

    fn shape(&self, gate: &mut Gate, sole: At<'_>) -> SoleShape {
        let at = sole.name("vertices");
        let point = self.kind == Some(SoleKind::Point);
        let Some(vertices) = &self.vertices else {
            if !point && !gate.lacks(sole.name("kind")) {
                gate.missing(at, "the vertices of the polygon, or kind \"point\"");
            }
            return SoleShape::Point;
        };
        if point {
            gate.fault(at, "no vertices, for the kind is \"point\"", format!("{}", vertices.len()));
            return SoleShape::Point;
        }
        if !gate.at_most(at, vertices.len(), MAX_VERTICES, "vertices") {
            return SoleShape::Point;
        }
        match Polygon::new(vertices.clone()) {
            Ok(polygon) => SoleShape::Polygon(polygon),
            Err(error) => {
                let expected = "a strictly convex polygon, vertices counter-clockwise seen from +z";
                match error {
                    PolygonError::NotFinite(i) | PolygonError::NotConvex(i) => {
                        gate.fault(at.index(i), expected, error.to_string());
                    }
                    _ => gate.fault(at, expected, error.to_string()),
                }
                SoleShape::Point
            }
        }
    }
}

impl JointBody {
    fn read(&self, gate: &mut Gate, at: At<'_>) -> JointSpec {
        let not_negative = [
            ("rotor_inertia", self.rotor_inertia, "kg m^2 or kg"),
            ("viscous_friction", self.viscous_friction, "N m s/rad or N s/m"),
            ("coulomb_friction", self.coulomb_friction, "N m or N"),
        ];
        for (name, value, unit) in not_negative {
            if let Some(value) = value.filter(|value| *value < 0.0) {
                gate.fault(at.name(name), format!("0 or more ({unit})"), value.to_string());
            }
        }
        let line = at.name("torque_speed");
        let above_zero = [
            (at.name("speed"), self.speed, "rad/s or m/s"),
            (at.name("effort"), self.effort, "N m or N"),
            (line.name("stall"), self.torque_speed.map(|line| line.stall), "N m or N"),
            (line.name("no_load_speed"), self.torque_speed.map(|line| line.no_load_speed), "rad/s or m/s"),
        ];
        for (here, value, unit) in above_zero {
            if let Some(value) = value.filter(|value| *value <= 0.0) {
                gate.fault(here, format!("a number above 0 ({unit})"), value.to_string());
            }
        }
        if let Some(range) = self.position.filter(|range| range.lower > range.upper) {
            let here = at.name("position");
            gate.fault(here.name("upper"), format!("{} or more", range.lower), range.upper.to_string());
        }
        JointSpec {
            name: self.name.clone(),
            rotor_inertia: self.rotor_inertia,
            viscous_friction: self.viscous_friction,
            coulomb_friction: self.coulomb_friction,
            torque_speed: self
                .torque_speed
                .map(|line| TorqueSpeedLine { stall: line.stall, no_load_speed: line.no_load_speed }),
            actuated: self.actuated,
            locked_at: self.locked_at,
            position: self.position.map(|range| (range.lower, range.upper)),
            speed: self.speed,
            effort: self.effort,
        }
    }
}

/// Notes a refused description.
fn refuse(gate: &mut Gate, error: &ModelError, at: At<'_>) {
    let (mut pointer, line) = match error.subject {
        Subject::Urdf { line, .. } => (at.name("urdf").pointer(), u32::try_from(line).ok()),
        Subject::Sole(i) => (at.name("soles").index(i).pointer(), None),
        Subject::Joint(i) => (at.name("joints").index(i).pointer(), None),
    };
    for token in error.member().into_iter().flat_map(|member| member.split('.')) {
        push_token(&mut pointer, token);
    }
    let fault = Fault {
        pointer,
        expected: "a robot that can be modelled".to_string(),
        got: format!("{}: {}", error.element, error.fault),
        line,
    };
    gate.robot(fault, error.code(), "The robot description cannot be used", error.to_string());
}
