//! The robot's state in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::common::pose;
use super::gate::{At, Gate, listed, quoted};
use super::limit::MAX_JOINTS;
use crate::dynamics::axes::{Axes, VelocityAxes};
use crate::model::{BaseKind, Model, State};
use crate::spatial::{Twist, Vec3};

/// World axes or the base link's own.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum AxesBody {
    World,
    Base,
}

/// In which axes the base velocity is given; results that hold base velocities or accelerations
/// follow it.
#[derive(Debug, Clone, Copy, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "VelocityAxes")]
pub(super) struct VelocityAxesBody {
    /// Axes of the linear velocity of the base link origin (m/s): `world` (default) or `base`.
    linear: Option<AxesBody>,
    /// Axes of the angular velocity (rad/s): `world` (default) or `base`.
    angular: Option<AxesBody>,
}

impl VelocityAxesBody {
    /// As the domain has it.
    pub(super) fn axes(&self) -> VelocityAxes {
        VelocityAxes { linear: domain(self.linear), angular: domain(self.angular) }
    }
}

/// Pose and velocity of the base link.
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "BaseState")]
pub(super) struct BaseBody {
    /// Position of the base link origin [x, y, z], world axes (m).
    position: [f64; 3],
    /// Orientation of the base link, quaternion [x, y, z, w] of unit length within 1e-6 (no unit).
    orientation: [f64; 4],
    /// Velocity of the base link origin [x, y, z] (m/s), axes as `velocity_axes.linear` says; zero
    /// when left out.
    linear_velocity: Option<[f64; 3]>,
    /// Angular velocity [x, y, z] (rad/s), axes as `velocity_axes.angular` says; zero when left out.
    angular_velocity: Option<[f64; 3]>,
}

/// One joint's position and velocity.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "JointState")]
pub(super) struct JointStateBody {
    /// Joint name as in the URDF (no unit).
    name: String,
    /// Position (rad, or m for a sliding joint).
    position: f64,
    /// Velocity (rad/s, or m/s for a sliding joint); zero when left out.
    velocity: Option<f64>,
}

/// State of the robot. Every moving joint must be given exactly once, either one by one in
/// `joints` or in bulk in `names`, `positions` and `velocities`.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "State")]
pub(super) struct StateBody {
    /// Base link (position m, velocities m/s and rad/s). Required with a floating base; with a
    /// fixed base the pose may be given and velocities must be zero.
    base: Option<BaseBody>,
    /// In which axes the base velocity (m/s, rad/s) is given; world when left out.
    velocity_axes: Option<VelocityAxesBody>,
    /// Joints one by one, in any order (rad, rad/s; m, m/s for sliding joints).
    #[schemars(extend("maxItems" = MAX_JOINTS))]
    joints: Option<Vec<JointStateBody>>,
    /// Joints in bulk: their names (no unit), in any order.
    #[schemars(extend("maxItems" = MAX_JOINTS))]
    names: Option<Vec<String>>,
    /// Joints in bulk: position of each of `names` (rad, or m for a sliding joint).
    positions: Option<Vec<f64>>,
    /// Joints in bulk: velocity of each of `names` (rad/s, or m/s for a sliding joint); zero when
    /// left out.
    velocities: Option<Vec<f64>>,
}

impl StateBody {
    /// The state, base velocity brought to world axes, and the axes it came in.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, model: &Model) -> (State, VelocityAxes) {
        let axes = self.velocity_axes.unwrap_or_default().axes();
        let none = BaseBody { orientation: [0.0, 0.0, 0.0, 1.0], ..BaseBody::default() };
        if self.base.is_none() && model.base == BaseKind::Floating {
            gate.missing(at.name("base"), "the state of the floating base");
        }
        let base = self.base.as_ref().unwrap_or(&none);
        let here = at.name("base");
        let base_pose = pose(gate, here, Some(base.position), Some(base.orientation));
        let given = Twist {
            linear: Vec3::from(base.linear_velocity.unwrap_or_default()),
            angular: Vec3::from(base.angular_velocity.unwrap_or_default()),
        };
        if model.base == BaseKind::Fixed {
            let zero = "zero, for the base is fixed";
            for (name, value) in [("linear_velocity", given.linear), ("angular_velocity", given.angular)] {
                if value != Vec3::zeros() {
                    gate.fault(here.name(name), zero, format!("{:?}", value.as_slice()));
                }
            }
        }
        let base_twist = axes.twist_to_world(&base_pose.rotation, &given);
        let (position, velocity) = self.joints(gate, at, model);
        (State { base_pose, base_twist, position, velocity }, axes)
    }

    fn joints(&self, gate: &mut Gate, at: At<'_>, model: &Model) -> (Vec<f64>, Vec<f64>) {
        let mut slots = Slots::new(model);
        let bulk = self.names.is_some() || self.positions.is_some() || self.velocities.is_some();
        match &self.joints {
            Some(_) if bulk => {
                gate.fault(at.name("names"), "joints one by one or in bulk", "both");
            }
            Some(joints) => {
                let list = at.name("joints");
                if !gate.at_most(list, joints.len(), MAX_JOINTS, "joints") {
                    return (Vec::new(), Vec::new());
                }
                for (i, joint) in joints.iter().enumerate() {
                    let entry = list.index(i);
                    let values = [joint.position, joint.velocity.unwrap_or(0.0)];
                    slots.set(gate, entry.name("name"), &joint.name, i, values);
                }
                slots.complete(gate, list);
            }
            None => {
                self.bulk(gate, at, &mut slots);
                slots.complete(gate, at.name(if bulk { "names" } else { "joints" }));
            }
        }
        let split = |k: usize| slots.values.iter().map(|v| v.map_or(0.0, |v| v[k])).collect();
        (split(0), split(1))
    }

    fn bulk(&self, gate: &mut Gate, at: At<'_>, slots: &mut Slots<'_>) {
        let names = self.names.as_deref().unwrap_or_default();
        let positions = self.positions.as_deref().unwrap_or_default();
        let comparable = !gate.lacks(at.name("names"));
        if comparable && positions.len() != names.len() {
            let got = format!("{} for {} names", positions.len(), names.len());
            gate.fault(at.name("positions"), "one position for each of names", got);
        }
        if let Some(velocities) = &self.velocities
            && comparable
            && velocities.len() != names.len()
        {
            let got = format!("{} for {} names", velocities.len(), names.len());
            gate.fault(at.name("velocities"), "one velocity for each of names", got);
        }
        let list = at.name("names");
        if !gate.at_most(list, names.len(), MAX_JOINTS, "joints") {
            return;
        }
        for (i, name) in names.iter().enumerate() {
            let velocity = self.velocities.as_ref().and_then(|v| v.get(i).copied());
            let values = [positions.get(i).copied().unwrap_or(0.0), velocity.unwrap_or(0.0)];
            slots.set(gate, list.index(i), name, i, values);
        }
    }
}

fn domain(axes: Option<AxesBody>) -> Axes {
    match axes {
        Some(AxesBody::Base) => Axes::Base,
        _ => Axes::World,
    }
}

/// One place per joint of the model, each to be filled once.
struct Slots<'m> {
    model: &'m Model,
    values: Vec<Option<[f64; 2]>>,
}

impl<'m> Slots<'m> {
    fn new(model: &'m Model) -> Self {
        Slots { model, values: vec![None; model.joints.len()] }
    }

    fn set(&mut self, gate: &mut Gate, at: At<'_>, name: &str, guess: usize, values: [f64; 2]) {
        let Some(index) = joint_index(gate, at, self.model, name, guess) else { return };
        if let Some(slot) = self.values.get_mut(index) {
            if slot.is_some() {
                gate.fault(at, "each joint once", format!("{} again", quoted(name)));
            }
            *slot = Some(values);
        }
    }

    fn complete(&self, gate: &mut Gate, at: At<'_>) {
        let lacking = || self.values.iter().zip(&self.model.joints).filter(|(v, _)| v.is_none());
        let count = lacking().count();
        if count > 0 {
            let names = listed(lacking().map(|(_, joint)| joint.name.as_str()));
            gate.fault(at, "every moving joint exactly once", format!("{count} missing: {names}"));
        }
    }
}

/// Index of a joint by name; `guess` is where it would be in model order.
pub(super) fn joint_index(
    gate: &mut Gate,
    at: At<'_>,
    model: &Model,
    name: &str,
    guess: usize,
) -> Option<usize> {
    if model.joints.get(guess).is_some_and(|joint| joint.name == name) {
        return Some(guess);
    }
    let index = model.joint(name);
    if index.is_none() && !gate.is_full() {
        let known = listed(model.joints.iter().map(|joint| joint.name.as_str()));
        gate.fault(at, format!("the name of a moving joint: {known}"), quoted(name));
    }
    index
}

/// Index of a frame (link) by name.
pub(super) fn frame_index(gate: &mut Gate, at: At<'_>, model: &Model, name: &str) -> Option<usize> {
    let index = model.frame(name);
    if index.is_none() && !gate.is_full() {
        let known = listed(model.frames.iter().map(|frame| frame.name.as_str()));
        gate.fault(at, format!("the name of a link: {known}"), quoted(name));
    }
    index
}
