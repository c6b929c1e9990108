//! Samples as JSON: elements of `samples` in a request, or one a line.

use schemars::JsonSchema;
use serde::Deserialize;

use super::settings::Settings;
use crate::identify::remarks::Remarks;
use crate::identify::setup::Source;
use crate::identify::{Row, SoleRow};
use crate::model::{BaseKind, Model, State};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Pose, Twist, Vec3, rotation_from_quaternion, stack};

/// How far a logged quaternion's length may be from 1: logs are rounded.
const UNIT_TOLERANCE: f64 = 1e-3;

/// One instant of the log.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Sample")]
pub(in crate::wire) struct SampleBody {
    /// Time (s); it must grow from sample to sample.
    time: f64,
    /// Readings of the soles (N, N m, m); a sole may be missing from a sample.
    soles: Vec<SoleSampleBody>,
    /// With a model: position of the base link origin [x, y, z], world axes (m). Not with a fixed base at the world origin.
    base_position: Option<[f64; 3]>,
    /// With a model: orientation of the base link, quaternion [x, y, z, w] of unit length within 1e-3 (no unit).
    base_orientation: Option<[f64; 4]>,
    /// With a model: velocity of the base link origin (m/s), axes as `velocity_axes.linear` says.
    base_linear_velocity: Option<[f64; 3]>,
    /// With a model: angular velocity of the base (rad/s), axes as `velocity_axes.angular` says.
    base_angular_velocity: Option<[f64; 3]>,
    /// With a model: joint positions in the order of `joints` (rad, or m for a sliding joint).
    positions: Option<Vec<f64>>,
    /// With a model: joint velocities (rad/s, or m/s for a sliding joint). Where any velocity is left out, twists are found
    /// from poses.
    velocities: Option<Vec<f64>>,
}

/// One sole at one instant.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "SoleSample")]
struct SoleSampleBody {
    /// Name of the sole (no unit).
    sole: String,
    /// Force reading [x, y, z] (N).
    force: [f64; 3],
    /// Moment reading [x, y, z] (N m); required but on a point sole.
    moment: Option<[f64; 3]>,
    /// Position of the sole origin [x, y, z], world axes (m); not with a model.
    position: Option<[f64; 3]>,
    /// Orientation of the sole frame, quaternion [x, y, z, w] of unit length within 1e-3 (no unit); that of the world when
    /// left out.
    orientation: Option<[f64; 4]>,
    /// Velocity of the sole origin [x, y, z], world axes (m/s); twists are found from poses when this or the next is left out.
    linear_velocity: Option<[f64; 3]>,
    /// Angular velocity [x, y, z], world axes (rad/s).
    angular_velocity: Option<[f64; 3]>,
    /// Whether the sole stands (no unit); needed where `touchdown.kind` is `logged`.
    stands: Option<bool>,
}

/// Figures of a row, whatever form they came in. Names of fields are those of [`SampleBody`].
#[derive(Debug, Clone, Default)]
pub(super) struct Figures {
    pub(super) time: f64,
    pub(super) soles: Vec<SoleFigures>,
    pub(super) base_position: Option<[f64; 3]>,
    pub(super) base_orientation: Option<[f64; 4]>,
    pub(super) base_linear: Option<[f64; 3]>,
    pub(super) base_angular: Option<[f64; 3]>,
    pub(super) positions: Option<Vec<f64>>,
    pub(super) velocities: Option<Vec<f64>>,
}

/// One sole's part of a row.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct SoleFigures {
    pub(super) sole: usize,
    pub(super) force: [f64; 3],
    pub(super) moment: Option<[f64; 3]>,
    pub(super) position: Option<[f64; 3]>,
    pub(super) orientation: Option<[f64; 4]>,
    pub(super) linear: Option<[f64; 3]>,
    pub(super) angular: Option<[f64; 3]>,
    pub(super) stands: Option<bool>,
}

impl SampleBody {
    /// The figures; soles that nobody told of are remarked on.
    pub(super) fn figures(self, settings: &Settings, line: u64, remarks: &mut Remarks) -> Figures {
        let mut soles = Vec::with_capacity(self.soles.len());
        for body in self.soles {
            let Some(sole) = settings.setup.soles.iter().position(|sole| sole.name == body.sole) else {
                let subject = format!("sole {:?}: ", shortened(&body.sole));
                remarks.note_about("unknown-sole", &subject, line, 1, || "the settings do not name it; its readings are left out".into());
                continue;
            };
            soles.push(SoleFigures {
                sole,
                force: body.force,
                moment: body.moment,
                position: body.position,
                orientation: body.orientation,
                linear: body.linear_velocity,
                angular: body.angular_velocity,
                stands: body.stands,
            });
        }
        Figures {
            time: self.time,
            soles,
            base_position: self.base_position,
            base_orientation: self.base_orientation,
            base_linear: self.base_linear_velocity,
            base_angular: self.base_angular_velocity,
            positions: self.positions,
            velocities: self.velocities,
        }
    }
}

impl Figures {
    /// The row; what cannot be used is remarked on, and left out.
    pub(super) fn row(self, settings: &Settings, line: u64, remarks: &mut Remarks) -> Option<Row> {
        let state = match &settings.setup.source {
            Source::Soles => None,
            Source::Model(model) => match self.state(settings, model) {
                Ok(state) => Some(state),
                Err(lacking) => {
                    remarks.note_about("incomplete-state", lacking, line, 1, || " is missing or unusable; the row is left out".into());
                    return None;
                }
            },
        };
        let posed = state.is_none();
        let soles = self.soles.iter().filter_map(|sole| match sole.read(settings, posed) {
            Ok(row) => Some(row),
            Err(lacking) => {
                let name = settings.setup.soles.get(sole.sole).map_or("", |sole| sole.name.as_str());
                let subject = format!("sole {:?}: {lacking}", shortened(name));
                remarks.note_about("incomplete-sample", &subject, line, 1, || " is missing or unusable; the reading is left out".into());
                None
            }
        });
        let soles = soles.collect();
        Some(Row { line, time: self.time, soles, state })
    }

    fn state(&self, settings: &Settings, model: &Model) -> Result<(State, bool), &'static str> {
        let floating = model.base == BaseKind::Floating;
        let base_pose = match (self.base_position, self.base_orientation) {
            (None, None) if !floating => Pose::identity(),
            (position, orientation) => Pose {
                translation: Vec3::from(position.or((!floating).then_some([0.0; 3])).ok_or("the base position")?),
                rotation: rotation(&orientation.ok_or("the base orientation")?).ok_or("the base orientation")?,
            },
        };
        let count = model.joints.len();
        let order = |values: &[f64]| {
            let mut out = vec![0.0; count];
            for (place, value) in settings.joints.iter().zip(values) {
                if let Some(slot) = out.get_mut(*place) {
                    *slot = *value;
                }
            }
            out
        };
        let positions = self.positions.as_deref().filter(|p| p.len() == count).ok_or("one position a joint")?;
        if self.velocities.as_ref().is_some_and(|v| v.len() != count) {
            return Err("one velocity a joint");
        }
        let moving = self.velocities.is_some() && (!floating || (self.base_linear.is_some() && self.base_angular.is_some()));
        let given = Twist {
            linear: Vec3::from(self.base_linear.unwrap_or_default()),
            angular: Vec3::from(self.base_angular.unwrap_or_default()),
        };
        let state = State {
            base_twist: settings.axes.twist_to_world(&base_pose.rotation, &given),
            base_pose,
            position: order(positions),
            velocity: order(self.velocities.as_deref().unwrap_or_default()),
        };
        Ok((state, moving))
    }
}

impl SoleFigures {
    fn read(&self, settings: &Settings, posed: bool) -> Result<SoleRow, &'static str> {
        let point = settings.setup.soles.get(self.sole).is_some_and(|sole| sole.shape == SoleShape::Point);
        let moment = match self.moment {
            Some(moment) => moment,
            None if point => [0.0; 3],
            None => return Err("the moment"),
        };
        let motion = if posed {
            let rotation = match &self.orientation {
                None => Mat3::identity(),
                Some(q) => rotation(q).ok_or("an orientation of unit length")?,
            };
            let pose = Pose { rotation, translation: Vec3::from(self.position.ok_or("the position")?) };
            let angular = self.angular.or((point && self.linear.is_some()).then_some([0.0; 3]));
            let twist = self.linear.zip(angular);
            Some((pose, twist.map(|(linear, angular)| Twist { linear: Vec3::from(linear), angular: Vec3::from(angular) })))
        } else {
            None
        };
        let wrench = stack(&Vec3::from(self.force), &Vec3::from(moment));
        Ok(SoleRow { sole: self.sole, wrench, motion, stands: self.stands })
    }
}

/// The rotation of a quaternion [x, y, z, w] that has nearly unit length.
fn rotation(q: &[f64; 4]) -> Option<Mat3> {
    let norm = q.iter().map(|c| c * c).sum::<f64>().sqrt();
    ((norm - 1.0).abs() <= UNIT_TOLERANCE).then(|| rotation_from_quaternion(&q.map(|c| c / norm)))
}

/// A name, cut to a length fit for a remark.
pub(super) fn shortened(text: &str) -> String {
    text.chars().take(80).collect()
}
