//! What else acts on the robot, in a request: carried loads, wrenches from outside, torques already
//! on their way.

use std::sync::Arc;

use schemars::JsonSchema;
use serde::Deserialize;

use super::common::WrenchBody;
use super::friction::positive;
use super::gate::{At, Gate, listed, quoted};
use super::limit::MAX_JOINTS;
use super::state::{frame_index, joint_index};
use crate::model::{Load, LoadError, Model, with_loads};
use crate::problem::question::{ExternalWrench, Latency};
use crate::spatial::{Mat3, Vec3};

/// Loads and external wrenches of one request, each.
pub(super) const MAX_ENTRIES: usize = 200;
/// The largest mass of a load (kg).
const MAX_MASS: f64 = 1e9;
/// The longest latency (s).
const MAX_DELAY: f64 = 1.0;

/// A mass the robot carries, fixed to a link.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Load")]
pub(super) struct LoadBody {
    /// Link that carries it, as named in the URDF (no unit).
    frame: String,
    /// Mass, 0 to 1e9 (kg).
    #[schemars(extend("minimum" = 0.0, "maximum" = MAX_MASS))]
    mass: f64,
    /// Centre of mass in the link's frame [x, y, z] (m); its origin when left out.
    center: Option<[f64; 3]>,
    /// Rotational inertia about the centre of mass, link axes, three rows (kg m^2); a point mass when
    /// left out.
    inertia: Option<[[f64; 3]; 3]>,
}

/// The model with its loads; the model itself where they are refused.
pub(super) fn loaded(
    gate: &mut Gate,
    at: At<'_>,
    model: Arc<Model>,
    bodies: Option<&[LoadBody]>,
) -> Arc<Model> {
    let bodies = bodies.unwrap_or_default();
    if bodies.is_empty() || !gate.at_most(at, bodies.len(), MAX_ENTRIES, "loads") {
        return model;
    }
    let mut loads = Vec::with_capacity(bodies.len());
    for (i, body) in bodies.iter().enumerate() {
        let here = at.index(i);
        let before = gate.seen();
        gate.within(here.name("mass"), body.mass, 0.0, MAX_MASS, "kg");
        let Some(frame) = frame_index(gate, here.name("frame"), &model, &body.frame) else { continue };
        if gate.seen() > before {
            continue;
        }
        loads.push(Load {
            frame,
            mass: body.mass,
            center: Vec3::from(body.center.unwrap_or_default()),
            about_center: rows(&body.inertia.unwrap_or_default()),
        });
    }
    if loads.len() < bodies.len() {
        return model;
    }
    match with_loads(&model, &loads) {
        Ok(model) => Arc::new(model),
        Err(error) => {
            let (LoadError::UnknownFrame { load, .. } | LoadError::NonPhysical { load, .. }) = &error;
            gate.fault(at.index(*load), "mass properties a body can have", error.to_string());
            model
        }
    }
}

fn rows(rows: &[[f64; 3]; 3]) -> Mat3 {
    Mat3::from_fn(|i, j| rows[i][j])
}

/// A load on a link from outside, other than the ground.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "ExternalWrench")]
pub(super) struct ExternalBody {
    /// Link it acts on, as named in the URDF (no unit).
    frame: String,
    /// Point of application in the link's frame [x, y, z] (m); its origin when left out.
    point: Option<[f64; 3]>,
    /// Force [x, y, z], world axes (N).
    force: [f64; 3],
    /// Moment about the point of application [x, y, z], world axes (N m); zero when left out.
    moment: Option<[f64; 3]>,
}

impl ExternalBody {
    /// The external wrenches.
    pub(super) fn read_all(
        gate: &mut Gate,
        at: At<'_>,
        bodies: Option<&[ExternalBody]>,
        model: &Model,
    ) -> Vec<ExternalWrench> {
        let bodies = bodies.unwrap_or_default();
        let mut out = Vec::with_capacity(bodies.len());
        if !gate.at_most(at, bodies.len(), MAX_ENTRIES, "external wrenches") {
            return out;
        }
        for (i, body) in bodies.iter().enumerate() {
            let here = at.index(i);
            let Some(frame) = frame_index(gate, here.name("frame"), model, &body.frame) else { continue };
            let wrench = WrenchBody { force: body.force, moment: body.moment };
            out.push(ExternalWrench {
                frame,
                point: Vec3::from(body.point.unwrap_or_default()),
                wrench: wrench.read(gate, here, false),
            });
        }
        out
    }
}

/// Torques that act until the answer takes effect.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Latency")]
pub(super) struct LatencyBody {
    /// Time until the new torques act, more than 0, at most 1 (s).
    #[schemars(extend("exclusiveMinimum" = 0.0, "maximum" = MAX_DELAY))]
    delay: f64,
    /// Torques that act until then (N m, or N for sliding joints): every actuated joint exactly once.
    #[schemars(extend("maxItems" = MAX_JOINTS))]
    torques: Vec<JointTorqueBody>,
}

/// One joint's torque.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "JointTorque")]
struct JointTorqueBody {
    /// Joint name as in the URDF (no unit).
    name: String,
    /// Torque or force (N m or N).
    torque: f64,
}

impl LatencyBody {
    /// The latency.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, model: &Model) -> Latency {
        positive(gate, at.name("delay"), self.delay, MAX_DELAY, "s");
        let list = at.name("torques");
        let mut torques: Vec<Option<f64>> = vec![None; model.joints.len()];
        if gate.at_most(list, self.torques.len(), MAX_JOINTS, "torques") {
            for (k, entry) in self.torques.iter().enumerate() {
                let here = list.index(k);
                let name = here.name("name");
                let Some(i) = joint_index(gate, name, model, &entry.name, k) else { continue };
                if model.joints.get(i).is_some_and(|joint| !joint.actuated) {
                    let got = format!("{}, which is passive", quoted(&entry.name));
                    gate.fault(name, "the name of an actuated joint", got);
                }
                if let Some(slot) = torques.get_mut(i) {
                    if slot.is_some() {
                        gate.fault(name, "each joint once", format!("{} again", quoted(&entry.name)));
                    }
                    *slot = Some(entry.torque);
                }
            }
        }
        let joints = || torques.iter().zip(&model.joints);
        let lacking = || joints().filter(|(torque, joint)| torque.is_none() && joint.actuated);
        let count = lacking().count();
        if count > 0 {
            let names = listed(lacking().map(|(_, joint)| joint.name.as_str()));
            gate.fault(list, "every actuated joint exactly once", format!("{count} missing: {names}"));
        }
        let torques = torques.into_iter().map(Option::unwrap_or_default).collect();
        Latency { delay: self.delay, torques }
    }
}
