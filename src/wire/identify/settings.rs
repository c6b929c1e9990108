//! What an identification is told besides the samples.

use std::sync::Arc;

use schemars::JsonSchema;
use serde::Deserialize;

use super::samples::SampleBody;
use super::sensor::SensorBody;
use super::touchdown::{self, TouchdownBody};
use crate::dynamics::VelocityAxes;
use crate::identify::setup::{
    Directions, Forgetting, Guess, Lag, Plane, Setup, SoleSetup, Source, Unknown,
};
use crate::identify::smoother::MOST_HALF;
use crate::model::Model;
use crate::spatial::Vec3;
use crate::spatial::polygon::{Polygon, SoleShape};
use crate::wire::{ModelSource, Request};
use crate::wire::common::{Format, TextOr, Whole};
use crate::wire::gate::{At, Gate, listed, quoted};
use crate::wire::model::InlineModel;
use crate::wire::refusal::Refusal;
use crate::wire::solve::find;
use crate::wire::state::VelocityAxesBody;
use crate::wire::strict::MAX_MAGNITUDE;

/// Soles of one log.
const MAX_SOLES: usize = 8;
/// Vertices of a sole.
const MAX_VERTICES: usize = 64;
/// Renamed columns.
const MAX_MAPPING: usize = 500;
/// Lags tried side by side.
const MAX_LAGS: usize = 40;
/// Longest lag (s).
const LONGEST_LAG: f64 = 1.0;
/// A longer step counts as a gap unless told otherwise (s).
const LONGEST_STEP: f64 = 0.1;
const GRAVITY: [f64; 3] = [0.0, 0.0, -9.80665];

/// Asks for stiffness and damping of the ground (`POST /v1/identify`): settings, and samples unless they follow in lines of
/// their own.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "IdentifyRequest")]
pub(in crate::wire) struct IdentifyRequest {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// The robot, the id of a registered model or the model itself (SI units), where the log holds base and joint states
    /// instead of sole poses.
    model: Option<TextOr<InlineModel>>,
    /// Order of joint positions and velocities in samples, by name (no unit); model order when left out.
    joints: Option<Vec<String>>,
    /// In which axes base velocities are logged (m/s, rad/s); world when left out.
    velocity_axes: Option<VelocityAxesBody>,
    /// Soles with a wrench sensor, 1 to 8 (m, N, N m).
    #[schemars(extend("minItems" = 1, "maxItems" = MAX_SOLES))]
    soles: Vec<SoleBody>,
    /// `isotropic` (default): one stiffness and one damping. `split`: normal and tangential ones (no unit).
    directions: Option<DirectionsWord>,
    /// What is estimated besides stiffness and damping: `height` (where the unloaded ground lies), `offset` (where in the plane
    /// the sole would rest), `tilt` (how the unloaded ground is inclined), `force_bias`, `moment_bias` (no unit). When left out:
    /// `height`, unless `ground.point` is given.
    unknown: Option<Vec<UnknownWord>>,
    /// What is believed beforehand (N/m^3, N s/m^3; N/m, N s/m on point soles); nothing when left out.
    guess: Option<GuessBody>,
    /// How fast old samples lose weight (no unit, or s); not at all when left out.
    forgetting: Option<ForgettingBody>,
    /// How touchdowns are told (N, s); by the normal force when left out.
    touchdown: Option<TouchdownBody>,
    /// The ground plane (m).
    ground: Option<PlaneBody>,
    /// Gravitational acceleration [x, y, z], world axes (m/s^2); [0, 0, -9.80665] when left out.
    gravity: Option<[f64; 3]>,
    /// Weight of the robot, more than 0 (N): the model's when left out and there is one. Forces far from it are remarked on.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    weight: Option<f64>,
    /// True: estimate the scale of the force readings from the weight and divide by it (no unit); every loaded sole must be in
    /// the log. False when left out.
    scale: Option<bool>,
    /// Time between motion and force (s); none when left out.
    lag: Option<LagBody>,
    /// Half width of the local polynomial for twists that are not logged, 1 to 100 samples (no unit); 5 when left out.
    #[schemars(extend("minimum" = 1, "maximum" = MOST_HALF))]
    half_window: Option<Whole>,
    /// A longer time between samples is a gap, more than 0 (s); 0.1 when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    longest_step: Option<f64>,
    /// Noise of the logged motion (m, rad, m/s, rad/s), for its bias; estimated from the log when left out.
    motion_noise: Option<MotionNoiseBody>,
    /// True: the base estimate behind the poses takes standing feet to be still (no unit). That hides the sink, and the answer
    /// warns. False when left out.
    still_feet: Option<bool>,
    /// CSV: columns that have other names in the log (no unit), at most 500.
    #[schemars(extend("maxItems" = MAX_MAPPING))]
    mapping: Option<Vec<MappingBody>>,
    /// Samples in order of time (s, m, N, N m); left out where they follow as lines.
    pub(super) samples: Option<Vec<SampleBody>>,
}

/// A sole and its sensor.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "IdentifySole")]
struct SoleBody {
    /// Name (no unit); with a model, the name of one of its soles.
    name: String,
    /// `polygon` (default) or `point` (no unit); not with a model, which knows.
    kind: Option<SoleWord>,
    /// Vertices [x, y] in the sole frame (m), 3 to 64, strictly convex, counter-clockwise seen from +z. Not for a point, and
    /// not with a model.
    #[schemars(extend("minItems" = 3, "maxItems" = MAX_VERTICES))]
    vertices: Option<Vec<[f64; 2]>>,
    /// Its wrench sensor (m, kg, N, N m); one at the sole origin in sole axes, with nothing below it, when left out.
    sensor: Option<SensorBody>,
}

#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum SoleWord {
    Polygon,
    Point,
}

#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum DirectionsWord {
    Isotropic,
    Split,
}

#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum UnknownWord {
    Height,
    Offset,
    Tilt,
    ForceBias,
    MomentBias,
}

/// What is believed of the ground beforehand.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Guess")]
struct GuessBody {
    /// Stiffness, more than 0 (N/m^3; N/m on point soles).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    stiffness: f64,
    /// Damping, more than 0 (N s/m^3; N s/m on point soles).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    damping: f64,
    /// Standard deviation of both over their size, more than 0 (no unit); 1000 when left out, so that the guess is a size only.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    relative_deviation: Option<f64>,
}

/// How fast old samples lose weight: one of the two.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Forgetting")]
struct ForgettingBody {
    /// Weight that is left after one more sample, 0.5 to 1 (no unit).
    #[schemars(extend("minimum" = 0.5, "maximum" = 1.0))]
    factor: Option<f64>,
    /// Time after which a weight of 1/e is left, more than 0 (s).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    time_constant: Option<f64>,
}

/// The ground plane.
#[derive(Debug, Clone, Copy, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "GroundPlane")]
struct PlaneBody {
    /// Unit normal, out of the ground, world axes [x, y, z] (no unit; length 1 within 1e-6); [0, 0, 1] when left out.
    normal: Option<[f64; 3]>,
    /// A point of the unloaded surface [x, y, z], world axes (m), where its height is known.
    point: Option<[f64; 3]>,
}

/// Time between motion and force: one value each, or several to be tried side by side (at most 40 pairs).
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Lag")]
struct LagBody {
    /// How much later than the motion the force is stamped, -1 to 1 (s); [0] when left out.
    delays: Option<Vec<f64>>,
    /// Time constants of a first-order low-pass in the force, 0 to 1 (s); [0] when left out. Its corner frequency is 1 over 2 pi
    /// times the constant.
    time_constants: Option<Vec<f64>>,
}

/// Standard deviations of the logged motion.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "MotionNoise")]
struct MotionNoiseBody {
    /// Position, 0 or more (m).
    #[schemars(extend("minimum" = 0.0))]
    position: f64,
    /// Rotation, 0 or more (rad).
    #[schemars(extend("minimum" = 0.0))]
    rotation: f64,
    /// Linear velocity, 0 or more (m/s); not used where twists are found from poses.
    #[schemars(extend("minimum" = 0.0))]
    linear_velocity: f64,
    /// Angular velocity, 0 or more (rad/s); not used where twists are found from poses.
    #[schemars(extend("minimum" = 0.0))]
    angular_velocity: f64,
}

/// A column with another name.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Mapping")]
struct MappingBody {
    /// The header cell as it stands in the log (no unit).
    column: String,
    /// What it means: a column name of this service with its unit, `name [unit]` (no unit of its own).
    means: String,
}

/// Settings past the gate.
#[derive(Debug, Clone)]
pub(in crate::wire) struct Settings {
    /// For the domain.
    pub(super) setup: Setup,
    /// Place in the model of each joint in samples.
    pub(super) joints: Vec<usize>,
    /// Axes of base velocities.
    pub(super) axes: VelocityAxes,
    /// Header cells and what they mean.
    pub(super) mapping: Vec<(String, String)>,
}

/// An identification request whose samples follow as lines.
#[derive(Debug, Clone, Deserialize)]
#[serde(transparent)]
pub(super) struct Head(IdentifyRequest);

impl Request for Head {
    type Question = Settings;

    fn read(self, gate: Gate, models: &dyn ModelSource) -> Result<Settings, Refusal> {
        self.0.settings(gate, models, true)
    }
}

impl IdentifyRequest {
    /// The settings. `lines`: samples follow as lines, so that none may stand here.
    pub(super) fn settings(&self, mut gate: Gate, models: &dyn ModelSource, lines: bool) -> Result<Settings, Refusal> {
        let at = At::ROOT;
        match (&self.samples, lines) {
            (None, false) => gate.missing(at.name("samples"), "samples"),
            (Some(_), true) => gate.fault(at.name("samples"), "no samples: they follow as lines", "some"),
            _ => {}
        }
        let model = match &self.model {
            None => None,
            Some(model) => match find(&mut gate, at, model, models)? {
                Some(model) => Some(model),
                None => return Err(gate.refuse()),
            },
        };
        let setup = self.setup(&mut gate, at, model.as_ref());
        let joints = self.joint_order(&mut gate, at.name("joints"), model.as_deref());
        let axes = self.velocity_axes.unwrap_or_default().axes();
        let mapping = self.mapping.as_deref().unwrap_or_default();
        gate.at_most(at.name("mapping"), mapping.len(), MAX_MAPPING, "columns");
        gate.finish()?;
        let mapping = mapping.iter().map(|entry| (entry.column.clone(), entry.means.clone())).collect();
        Ok(Settings { setup, joints, axes, mapping })
    }

    fn setup(&self, gate: &mut Gate, at: At<'_>, model: Option<&Arc<Model>>) -> Setup {
        let gravity = Vec3::from(self.gravity.unwrap_or(GRAVITY));
        if gravity.norm() == 0.0 {
            gate.fault(at.name("gravity"), "a vector that is not zero", "zero");
        }
        let weight = self.weight.or_else(|| model.map(|model| model.mass() * gravity.norm()));
        if let Some(weight) = self.weight {
            positive(gate, at.name("weight"), weight, "N");
        }
        let scale = self.scale.unwrap_or(false);
        if scale && weight.is_none() {
            gate.missing(at.name("weight"), "the robot's weight, for the scale is asked for");
        }
        let soles = self.soles(gate, at.name("soles"), model);
        let plane = self.plane(gate, at.name("ground"));
        let unknown = self.unknown(gate, at.name("unknown"), &plane, &soles);
        Setup {
            source: model.map_or(Source::Soles, |model| Source::Model(Arc::clone(model))),
            directions: match self.directions {
                Some(DirectionsWord::Split) => Directions::Split,
                _ => Directions::Isotropic,
            },
            unknown,
            guess: self.guess.map(|guess| guess.read(gate, at.name("guess"))),
            forgetting: self.forgetting.map_or(Forgetting::None, |f| f.read(gate, at.name("forgetting"))),
            touchdown: touchdown::read(self.touchdown.as_ref(), gate, at.name("touchdown"), weight, &soles),
            plane,
            gravity,
            lags: self.lag.clone().unwrap_or_default().read(gate, at.name("lag")),
            half_window: self.half_window(gate, at.name("half_window")),
            longest_step: self.longest_step.map_or(LONGEST_STEP, |s| positive(gate, at.name("longest_step"), s, "s")),
            weight,
            scale,
            motion_noise: self.motion_noise.map(|noise| noise.read(gate, at.name("motion_noise"))),
            still_feet: self.still_feet.unwrap_or(false),
            soles,
        }
    }

    fn soles(&self, gate: &mut Gate, at: At<'_>, model: Option<&Arc<Model>>) -> Vec<SoleSetup> {
        if self.soles.is_empty() {
            gate.fault(at, "at least one sole", "none");
        }
        if !gate.at_most(at, self.soles.len(), MAX_SOLES, "soles") {
            return Vec::new();
        }
        for (i, body) in self.soles.iter().enumerate() {
            if self.soles[..i].iter().any(|other| other.name == body.name) {
                gate.fault(at.index(i).name("name"), "each sole once", format!("{} again", quoted(&body.name)));
            }
        }
        let read = |(i, body): (usize, &SoleBody)| body.read(gate, at.index(i), model.map(|model| &**model));
        self.soles.iter().enumerate().filter_map(read).collect()
    }

    fn plane(&self, gate: &mut Gate, at: At<'_>) -> Plane {
        let body = self.ground.unwrap_or_default();
        let normal = body.normal.map_or(Vec3::z(), |normal| gate.direction(at.name("normal"), &normal));
        Plane { normal, point: body.point.map(Vec3::from) }
    }

    fn unknown(&self, gate: &mut Gate, at: At<'_>, plane: &Plane, soles: &[SoleSetup]) -> Unknown {
        let Some(words) = &self.unknown else {
            return Unknown { height: plane.point.is_none(), ..Unknown::default() };
        };
        let has = |word| words.contains(&word);
        let unknown = Unknown {
            height: has(UnknownWord::Height),
            offset: has(UnknownWord::Offset),
            tilt: has(UnknownWord::Tilt),
            force_bias: has(UnknownWord::ForceBias),
            moment_bias: has(UnknownWord::MomentBias),
        };
        if (unknown.force_bias || unknown.moment_bias) && soles.iter().any(|sole| sole.sensor.world_axes) {
            gate.fault(at, "no bias for a sensor whose readings are in world axes: it is constant in the sensor's own", "one");
        }
        unknown
    }

    fn half_window(&self, gate: &mut Gate, at: At<'_>) -> usize {
        let half = self.half_window.map_or(5, |half| half.0 as usize);
        if !(1..=MOST_HALF).contains(&half) {
            gate.fault(at, format!("a whole number from 1 to {MOST_HALF}"), half.to_string());
        }
        half
    }

    fn joint_order(&self, gate: &mut Gate, at: At<'_>, model: Option<&Model>) -> Vec<usize> {
        match (&self.joints, model) {
            (None, None) => Vec::new(),
            (None, Some(model)) => (0..model.joints.len()).collect(),
            (Some(_), None) => {
                gate.fault(at, "no joints, for there is no model", "some");
                Vec::new()
            }
            (Some(names), Some(model)) => {
                let found: Vec<usize> = names.iter().filter_map(|name| model.joint(name)).collect();
                let mut sorted = found.clone();
                sorted.sort_unstable();
                sorted.dedup();
                if sorted.len() != model.joints.len() || names.len() != sorted.len() {
                    let known = listed(model.joints.iter().map(|joint| joint.name.as_str()));
                    gate.fault(at, format!("every moving joint exactly once: {known}"), listed(names.iter().map(String::as_str)));
                }
                found
            }
        }
    }
}

/// The value, noted as a fault unless it is above zero.
pub(super) fn positive(gate: &mut Gate, at: At<'_>, value: f64, unit: &str) -> f64 {
    // NaN does not come past the reader.
    if value > 0.0 {
        return value;
    }
    let space = if unit.is_empty() { "" } else { " " };
    gate.fault(at, format!("a number above 0{space}{unit}"), value.to_string());
    1.0
}

impl GuessBody {
    fn read(self, gate: &mut Gate, at: At<'_>) -> Guess {
        Guess {
            stiffness: positive(gate, at.name("stiffness"), self.stiffness, ""),
            damping: positive(gate, at.name("damping"), self.damping, ""),
            relative_deviation: positive(gate, at.name("relative_deviation"), self.relative_deviation.unwrap_or(1e3), ""),
        }
    }
}

impl ForgettingBody {
    fn read(self, gate: &mut Gate, at: At<'_>) -> Forgetting {
        match (self.factor, self.time_constant) {
            (Some(factor), None) => Forgetting::Factor(gate.within(at.name("factor"), factor, 0.5, 1.0, "")),
            (None, Some(constant)) => Forgetting::TimeConstant(positive(gate, at.name("time_constant"), constant, "s")),
            _ => {
                gate.fault(at, "either factor or time_constant", "both or neither");
                Forgetting::None
            }
        }
    }
}

impl LagBody {
    fn read(&self, gate: &mut Gate, at: At<'_>) -> Vec<Lag> {
        let delays = self.delays.clone().unwrap_or_else(|| vec![0.0]);
        let constants = self.time_constants.clone().unwrap_or_else(|| vec![0.0]);
        let pairs = delays.len().saturating_mul(constants.len());
        if !(1..=MAX_LAGS).contains(&pairs) {
            gate.fault(at, format!("1 to {MAX_LAGS} pairs of delay and time constant"), pairs.to_string());
            return vec![Lag { delay: 0.0, time_constant: 0.0 }];
        }
        for (i, delay) in delays.iter().enumerate() {
            gate.within(at.name("delays").index(i), *delay, -LONGEST_LAG, LONGEST_LAG, "s");
        }
        for (i, constant) in constants.iter().enumerate() {
            gate.within(at.name("time_constants").index(i), *constant, 0.0, LONGEST_LAG, "s");
        }
        let pairs = delays.iter().flat_map(|delay| constants.iter().map(|constant| (*delay, *constant)));
        pairs.map(|(delay, time_constant)| Lag { delay, time_constant }).collect()
    }
}

impl MotionNoiseBody {
    fn read(self, gate: &mut Gate, at: At<'_>) -> [f64; 4] {
        let mut at_least_zero = |name: &'static str, value: f64| gate.within(at.name(name), value, 0.0, MAX_MAGNITUDE, "");
        [
            at_least_zero("position", self.position),
            at_least_zero("rotation", self.rotation),
            at_least_zero("linear_velocity", self.linear_velocity),
            at_least_zero("angular_velocity", self.angular_velocity),
        ]
    }
}

impl SoleBody {
    fn read(&self, gate: &mut Gate, at: At<'_>, model: Option<&Model>) -> Option<SoleSetup> {
        let (shape, in_model) = match model {
            Some(model) => {
                let Some(index) = model.sole(&self.name) else {
                    let known = listed(model.soles.iter().map(|sole| sole.name.as_str()));
                    gate.fault(at.name("name"), format!("the name of a sole: {known}"), quoted(&self.name));
                    return None;
                };
                if self.vertices.is_some() || self.kind.is_some() {
                    let expected = "neither kind nor vertices, for the model knows the sole";
                    gate.fault(at, expected, "some");
                }
                (model.soles.get(index)?.shape.clone(), index)
            }
            None => (self.shape(gate, at)?, 0),
        };
        let sensor = self.sensor.clone().unwrap_or_default().read(gate, at.name("sensor"), shape == SoleShape::Point);
        Some(SoleSetup { name: self.name.clone(), shape, in_model, sensor })
    }

    fn shape(&self, gate: &mut Gate, at: At<'_>) -> Option<SoleShape> {
        let here = at.name("vertices");
        match (self.kind, &self.vertices) {
            (Some(SoleWord::Point), None) => Some(SoleShape::Point),
            (Some(SoleWord::Point), Some(_)) => {
                gate.fault(here, "no vertices, for the sole is a point", "some");
                None
            }
            (_, None) => {
                gate.missing(here, "vertices, for the sole is a polygon");
                None
            }
            (_, Some(vertices)) => {
                if !gate.at_most(here, vertices.len(), MAX_VERTICES, "vertices") {
                    return None;
                }
                match Polygon::new(vertices.clone()) {
                    Ok(polygon) => Some(SoleShape::Polygon(polygon)),
                    Err(error) => {
                        gate.fault(here, "a strictly convex polygon, counter-clockwise seen from +z", error.to_string());
                        None
                    }
                }
            }
        }
    }
}
