//! One sole on the ground, in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::common::{NumberOr, WrenchBody, pose};
use super::friction::{FrictionBody, NormalForceBody, WrenchRateBody};
use super::gate::{At, Gate, listed, quoted};
use super::kinds::{KindRule, KindTable, given};
use super::strict::MAX_MAGNITUDE;
use crate::contact::{Ground, Law, Material, Rest, TickRule};
use crate::dynamics::{Workspace, frame_pose};
use crate::model::{Model, Sole, State};
use crate::problem::question::{Contact, Tick};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Pose, Twist, Vec3, Wrench};

/// A sole on the ground. A sole without an entry is in the air.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Contact")]
pub(super) struct ContactBody {
    /// Name of the sole (no unit); each sole at most once.
    sole: String,
    /// Law of the ground (stiffness N/m^3 or N/m, damping N s/m^3 or N s/m).
    law: LawBody,
    /// Unit normal of the ground, out of the ground, world axes [x, y, z] (no unit; length 1 within
    /// 1e-6); [0, 0, 1] when left out.
    normal: Option<[f64; 3]>,
    /// Where the ground rests, unloaded (m, N, N m). Required with the bonded law unless
    /// `measured_wrench` is given; unused with the rigid law.
    rest: Option<RestBody>,
    /// Velocity of the rest pose's origin where the ground itself moves (m/s, rad/s), world axes;
    /// zero when left out.
    rest_velocity: Option<VelocityBody>,
    /// Measured present wrench of the ground on the sole (N, N m). It replaces the modelled one;
    /// the law then supplies the change alone.
    measured_wrench: Option<MeasuredBody>,
    /// Friction and unilateral contact at the tick's end (coefficient without unit).
    friction: Option<FrictionBody>,
    /// Range of the normal force at the tick's end (N).
    normal_force: Option<NormalForceBody>,
    /// Largest rate of change of the wrench over the tick (N/s, N m/s).
    wrench_rate: Option<WrenchRateBody>,
}

/// Kinds of law.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum LawKind {
    Bonded,
    Rigid,
}

/// What stiffness and damping refer to.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum Per {
    Area,
    Sole,
}

/// Which members go with which law.
pub(super) const LAW_KINDS: KindTable = KindTable {
    definition: "Law",
    rules: &[
        KindRule { kind: "bonded", needs: &["stiffness", "damping", "per"], may: &[] },
        KindRule { kind: "rigid", needs: &[], may: &["stop"] },
    ],
};

/// Law of the ground. `bonded`: springs and dampers under the whole sole, tension included.
/// `rigid`: no compliance.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Law")]
struct LawBody {
    /// `bonded` or `rigid` (no unit).
    kind: LawKind,
    /// For `bonded`: stiffness, 0 or more (N/m^3 per area, N/m per sole); one number for ground that
    /// is equally stiff in all directions.
    #[schemars(extend("minimum" = 0.0))]
    stiffness: Option<NumberOr<DirectionsBody>>,
    /// For `bonded`: damping, 0 or more (N s/m^3 per area, N s/m per sole); one number for ground
    /// that damps equally in all directions.
    #[schemars(extend("minimum" = 0.0))]
    damping: Option<NumberOr<DirectionsBody>>,
    /// For `bonded`: whether stiffness and damping are per `area` of the sole (N/m^3, N s/m^3) or
    /// for the whole `sole` (N/m, N s/m; divided by the polygon's area). A point sole has no area:
    /// `sole`.
    per: Option<Per>,
    /// For `rigid`: bring the sole to rest within the tick instead of asking for zero acceleration
    /// (no unit); false when left out.
    stop: Option<bool>,
}

/// Along the ground normal, and in the plane of the ground.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "NormalTangential")]
struct DirectionsBody {
    /// Along the ground normal, 0 or more (stiffness N/m^3 or N/m, damping N s/m^3 or N s/m).
    #[schemars(extend("minimum" = 0.0))]
    normal: f64,
    /// In the plane of the ground, 0 or more (stiffness N/m^3 or N/m, damping N s/m^3 or N s/m).
    #[schemars(extend("minimum" = 0.0))]
    tangential: f64,
}

/// Kinds of rest pose.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum RestKind {
    Pose,
    Touchdown,
    Carries,
    Measured,
}

/// Which members go with which kind of rest pose.
pub(super) const REST_KINDS: KindTable = KindTable {
    definition: "Rest",
    rules: &[
        KindRule { kind: "pose", needs: &["position"], may: &["orientation"] },
        KindRule { kind: "touchdown", needs: &["position", "plane_point"], may: &["orientation"] },
        KindRule { kind: "carries", needs: &["force"], may: &["moment"] },
        KindRule { kind: "measured", needs: &[], may: &[] },
    ],
};

/// Where the ground rests, unloaded. `pose`: the sole pose at which it carries nothing.
/// `touchdown`: tangential position and yaw of the sole at touchdown, height and tilt of the plane
/// through `plane_point`. `carries`: the pose from which the present sole pose, at rest, carries
/// the given wrench. `measured`: unknown, the measured wrench says enough.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Rest")]
struct RestBody {
    /// `pose`, `touchdown`, `carries` or `measured` (no unit).
    kind: RestKind,
    /// For `pose` and `touchdown`: position of the sole origin [x, y, z], world axes (m).
    position: Option<[f64; 3]>,
    /// For `pose` and `touchdown`: orientation of the sole frame, quaternion [x, y, z, w] of unit
    /// length within 1e-6 (no unit); that of the world when left out.
    orientation: Option<[f64; 4]>,
    /// For `touchdown`: a point of the unloaded ground plane [x, y, z], world axes (m).
    plane_point: Option<[f64; 3]>,
    /// For `carries`: force of the ground on the sole [x, y, z], world axes (N).
    force: Option<[f64; 3]>,
    /// For `carries`: moment about the sole origin [x, y, z], world axes (N m); zero when left out.
    moment: Option<[f64; 3]>,
}

/// A velocity.
#[derive(Debug, Clone, Copy, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Velocity")]
struct VelocityBody {
    /// Linear velocity [x, y, z], world axes (m/s); zero when left out.
    linear: Option<[f64; 3]>,
    /// Angular velocity [x, y, z], world axes (rad/s); zero when left out.
    angular: Option<[f64; 3]>,
}

/// Axes of a measured wrench.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum WrenchAxes {
    World,
    Sole,
}

/// A measured wrench of the ground on the sole, about the sole origin.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "MeasuredWrench")]
struct MeasuredBody {
    /// Force [x, y, z] (N).
    force: [f64; 3],
    /// Moment about the sole origin [x, y, z] (N m); zero when left out. None on a point sole.
    moment: Option<[f64; 3]>,
    /// Axes in which force (N) and moment (N m) are given: `world` (default) or `sole`.
    axes: Option<WrenchAxes>,
}

/// What the conversion of contacts has to know.
pub(super) struct Scene<'a> {
    pub(super) model: &'a Model,
    pub(super) state: &'a State,
    pub(super) tick: Tick,
}

impl ContactBody {
    /// Name of the sole.
    pub(super) fn sole(&self) -> &str {
        &self.sole
    }

    /// The contact; none where something that everything else hangs on is wrong.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, scene: &Scene<'_>) -> Option<Contact> {
        let Some(index) = scene.model.sole(&self.sole) else {
            let known = listed(scene.model.soles.iter().map(|sole| sole.name.as_str()));
            gate.fault(at.name("sole"), format!("the name of a sole: {known}"), quoted(&self.sole));
            return None;
        };
        let sole = scene.model.soles.get(index)?;
        let point = sole.shape == SoleShape::Point;
        let normal = match &self.normal {
            Some(normal) => gate.direction(at.name("normal"), normal),
            None => Vec3::z(),
        };
        let measured = self.measured(gate, at, scene, sole);
        let law = self.law.read(gate, at.name("law"), sole, scene.tick);
        let rest = self.rest(gate, at, measured.is_some(), point);
        let velocity = self.rest_velocity.unwrap_or_default();
        let rest_twist = Twist {
            linear: Vec3::from(velocity.linear.unwrap_or_default()),
            angular: Vec3::from(velocity.angular.unwrap_or_default()),
        };
        let ground = Ground { law, normal, rest, rest_twist, measured };
        let tick = scene.tick.length;
        // What the present wrench is, a rigid sole can only know from a measurement.
        let known = measured.is_some() || matches!(law, Law::Bonded(_));
        let friction = self.friction.as_ref();
        let normal_force = self.normal_force.as_ref();
        let wrench_rate = self.wrench_rate.as_ref();
        Some(Contact {
            sole: index,
            ground,
            friction: friction.map(|f| f.read(gate, at.name("friction"), point, tick, known)),
            normal_force: normal_force.map(|f| f.read(gate, at.name("normal_force"), tick, known)),
            wrench_rate: wrench_rate.map(|r| r.read(gate, at.name("wrench_rate"), point, tick, known)),
        })
    }

    fn measured(&self, gate: &mut Gate, at: At<'_>, scene: &Scene<'_>, sole: &Sole) -> Option<Wrench> {
        let Some(body) = self.measured_wrench else {
            // One that was left out for its form is a measurement all the same.
            let left_out = gate.lacks(at.name("measured_wrench"));
            return left_out.then(|| Wrench { force: Vec3::zeros(), moment: Vec3::zeros() });
        };
        let given = WrenchBody { force: body.force, moment: body.moment };
        let point = sole.shape == SoleShape::Point;
        let wrench = given.read(gate, at.name("measured_wrench"), point);
        if body.axes != Some(WrenchAxes::Sole) || !gate.clean() {
            return Some(wrench);
        }
        // Only a state that was found good fits the model, which the kinematics rely on.
        let mut workspace = Workspace::new(scene.model);
        workspace.update(scene.model, scene.state, &Vec3::zeros());
        let pose = frame_pose(scene.model, &workspace, sole.body, &sole.placement);
        Some(wrench.rotated(&pose.rotation))
    }

    fn rest(&self, gate: &mut Gate, at: At<'_>, measured: bool, point: bool) -> Rest {
        let here = at.name("rest");
        let unused = Rest::Pose(Pose::identity());
        let Some(body) = &self.rest else {
            if measured {
                return Rest::Measured;
            }
            if self.law.kind == LawKind::Bonded {
                gate.missing(here, "a rest pose, for the law is bonded and no wrench is measured");
            }
            return unused;
        };
        let kind = match body.kind {
            RestKind::Pose => "pose",
            RestKind::Touchdown => "touchdown",
            RestKind::Carries => "carries",
            RestKind::Measured => "measured",
        };
        let given = given!(body, position, orientation, plane_point, force, moment);
        REST_KINDS.check(gate, here, kind, &given);
        match body.kind {
            RestKind::Pose => Rest::Pose(pose(gate, here, body.position, body.orientation)),
            RestKind::Touchdown => Rest::Touchdown {
                pose: pose(gate, here, body.position, body.orientation),
                plane_point: Vec3::from(body.plane_point.unwrap_or_default()),
            },
            RestKind::Carries => {
                let carried = WrenchBody { force: body.force.unwrap_or_default(), moment: body.moment };
                Rest::Carries(carried.read(gate, here, point))
            }
            RestKind::Measured => {
                if !measured {
                    let expected = "the measured wrench, for the rest pose is unknown";
                    gate.missing(at.name("measured_wrench"), expected);
                }
                Rest::Measured
            }
        }
    }
}

impl LawBody {
    fn read(&self, gate: &mut Gate, at: At<'_>, sole: &Sole, tick: Tick) -> Law {
        let kind = if self.kind == LawKind::Bonded { "bonded" } else { "rigid" };
        LAW_KINDS.check(gate, at, kind, &given!(self, stiffness, damping, per, stop));
        if self.kind == LawKind::Rigid {
            return Law::Rigid { stop: self.stop.unwrap_or(false) };
        }
        let area = match (&sole.shape, self.per) {
            (SoleShape::Polygon(polygon), Some(Per::Sole)) => polygon.moments().area,
            (SoleShape::Point, Some(Per::Area)) => {
                gate.fault(at.name("per"), "\"sole\": a point sole has no area", "\"area\"");
                1.0
            }
            _ => 1.0,
        };
        let [kn, kt] = directions(gate, at.name("stiffness"), self.stiffness.as_ref());
        let [bn, bt] = directions(gate, at.name("damping"), self.damping.as_ref());
        if tick.rule == TickRule::Explicit {
            explicit_needs(gate, at.name("damping"), [(kn, bn), (kt, bt)], tick.length);
        }
        let mut spread = |name: &'static str, value: f64| {
            let value = value / area;
            if value > MAX_MAGNITUDE || !value.is_finite() {
                let expected = "at most 1e15 per area once divided by the area of the sole";
                gate.fault(at.name(name), expected, format!("{value}, the area being {area} m^2"));
            }
            value
        };
        Law::Bonded(Material {
            normal_stiffness: spread("stiffness", kn),
            tangential_stiffness: spread("stiffness", kt),
            normal_damping: spread("damping", bn),
            tangential_damping: spread("damping", bt),
        })
    }
}

/// With the explicit rule the wrench at the tick's end moves through the damping alone, and the
/// motion on the bed is stable only while `T < 2 b / k`.
fn explicit_needs(gate: &mut Gate, at: At<'_>, pairs: [(f64, f64); 2], tick: f64) {
    for (stiffness, damping) in pairs {
        if damping <= 0.0 {
            let expected = "damping above 0 in every direction, for the tick rule is explicit";
            gate.fault(at, expected, damping.to_string());
            return;
        }
        if tick * stiffness >= 2.0 * damping {
            let expected = format!(
                "2 damping / stiffness above the tick of {tick} s, for the tick rule is explicit"
            );
            gate.fault(at, expected, format!("{} s", 2.0 * damping / stiffness));
            return;
        }
    }
}

/// Normal and tangential value, each 0 or more.
fn directions(gate: &mut Gate, at: At<'_>, body: Option<&NumberOr<DirectionsBody>>) -> [f64; 2] {
    let mut bound = |at: At<'_>, value: f64| {
        if value < 0.0 {
            gate.fault(at, "a number, 0 or more", value.to_string());
        }
        value
    };
    match body {
        None => [0.0; 2],
        Some(NumberOr::Number(value)) => [bound(at, *value); 2],
        Some(NumberOr::Object(body)) => {
            [bound(at.name("normal"), body.normal), bound(at.name("tangential"), body.tangential)]
        }
    }
}
