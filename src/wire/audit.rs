//! An audit request: a solve request, the controller's own answer to it, tolerances.

use std::sync::Arc;

use schemars::JsonSchema;
use serde::Deserialize;

use super::{ModelSource, Request};
use super::common::{Format, LinearAngularBody, WrenchBody};
use super::friction::positive;
use super::gate::{At, Gate, listed, quoted};
use super::limit::MAX_JOINTS;
use super::refusal::Refusal;
use super::solve::{MAX_NAME, SolveRequest};
use super::state::joint_index;
use super::strict::MAX_MAGNITUDE;
use crate::audit::{Claim, Tolerances};
use crate::model::Model;
use crate::problem::question::Question;
use crate::spatial::polygon::SoleShape;

/// Entries of any list in an answer: soles, tasks and their rows are fewer.
const MAX_ENTRIES: usize = 200;
/// Rows of one task.
const MAX_ROWS: usize = 400;

/// Asks what a controller's answer is worth (`POST /v1/audit`).
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "AuditRequest")]
pub(super) struct AuditRequest {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// The question the controller answered: a whole solve request (SI units). Its `include` and `spread` are not looked at.
    request: SolveRequest,
    /// What the controller answered (N m, N, rad/s^2). The members are named as in the answer to a solve request.
    answer: ClaimBody,
    /// What counts as no difference (each in its own unit); the defaults when left out.
    tolerances: Option<TolerancesBody>,
    /// False: no causes are looked for, which saves some thirty solves where the verdict is not `pass` (no unit); true when left out.
    causes: Option<bool>,
    /// What this case is called in reports (no unit): 1 to 200 characters.
    #[schemars(extend("minLength" = 1, "maxLength" = MAX_NAME))]
    name: Option<String>,
    /// For pinned cases, how they came to be (no unit); the verdict does not depend on it.
    #[serde(rename = "recorded")]
    _recorded: Option<RecordedBody>,
}

/// How a case was pinned.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Recorded")]
struct RecordedBody {
    /// Version of the program that pinned it (no unit). Another one today is no difference.
    #[serde(rename = "version")]
    _version: String,
    /// Whose the answer is (no unit): `reference`, this program's, which it may renew; `controller`, which only you change.
    #[serde(rename = "answer")]
    _answer: WhoseBody,
}

/// Whose an answer is.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum WhoseBody {
    Reference,
    Controller,
}

/// An audit request of which the form counts, and the model.
#[derive(Deserialize)]
#[serde(transparent)]
pub(super) struct AuditForm(AuditRequest);

impl Request for AuditForm {
    type Question = Arc<Model>;

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<Arc<Model>, Refusal> {
        self.0.request.find_model(&mut gate, At::ROOT.name("request"), models)?.ok_or_else(|| gate.refuse())
    }
}

/// A controller's answer.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "ControllerAnswer")]
struct ClaimBody {
    /// Torques, and accelerations where the controller says them (N m, rad/s^2; N, m/s^2 for sliding joints): every actuated
    /// joint exactly once.
    #[schemars(extend("maxItems" = MAX_JOINTS))]
    joints: Vec<ClaimJointBody>,
    /// Acceleration of the base in the request's velocity axes, where the controller says one (m/s^2, rad/s^2).
    base_acceleration: Option<LinearAngularBody>,
    /// Wrenches of the ground on the soles at the tick's end, where the controller says them (N, N m).
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    soles: Option<Vec<ClaimSoleBody>>,
    /// The controller's own targets, for tasks whose target it works out otherwise than the request does (each in its own unit).
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    tasks: Option<Vec<ClaimTaskBody>>,
}

/// One joint of a controller's answer.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "ControllerJoint")]
struct ClaimJointBody {
    /// Joint name as in the URDF (no unit).
    name: String,
    /// Torque or force held over the tick (N m or N). A passive joint takes none; its entry is for the acceleration.
    torque: Option<f64>,
    /// Acceleration the controller expects of it (rad/s^2 or m/s^2); not judged when left out.
    acceleration: Option<f64>,
}

/// One sole of a controller's answer.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "ControllerSole")]
struct ClaimSoleBody {
    /// Name of a sole among the contacts (no unit).
    name: String,
    /// Wrench the controller expects at the tick's end, of the ground on the robot, world axes about the sole origin (N, N m).
    wrench: WrenchBody,
}

/// One task as a controller understands it.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "ControllerTask")]
struct ClaimTaskBody {
    /// Name of a task of the request (no unit).
    name: String,
    /// Desired value of each row, as the answer to a solve request orders them (in the row's unit).
    #[schemars(extend("maxItems" = MAX_ROWS))]
    desired: Vec<f64>,
}

/// What counts as no difference. Natural sizes: an acceleration counts in `g sqrt(m / M_ii)`, a torque in `g sqrt(m M_ii)`, a force in body
/// weights, a moment under a sole in body weights times its radius of gyration, a limit in its own range, a task's row in what
/// the unknowns make of it at their natural sizes.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Tolerances")]
struct TolerancesBody {
    /// Share of the natural size, more than 0, for everything without a tolerance of its own (no unit); 1e-4 when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    relative: Option<f64>,
    /// Difference of a torque, where the question determines it, more than 0 (N m; N for sliding joints).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    torque: Option<f64>,
    /// Difference of a claimed linear acceleration, more than 0 (m/s^2).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    acceleration: Option<f64>,
    /// Difference of a claimed angular acceleration, more than 0 (rad/s^2).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    angular_acceleration: Option<f64>,
    /// Difference of a claimed force, more than 0 (N).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    force: Option<f64>,
    /// Difference of a claimed moment, more than 0 (N m).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    moment: Option<f64>,
    /// Violation of a limit and residual of a task that must hold, as a share of their natural size, more than 0 (no unit).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    limit: Option<f64>,
    /// Difference of a priority's weighted residuals, `sqrt(sum weight (residual / scale)^2)`, more than 0 (no unit).
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    loss: Option<f64>,
}

impl Request for AuditRequest {
    type Question = (Question, Claim, Tolerances);

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<(Question, Claim, Tolerances), Refusal> {
        let root = At::ROOT;
        let tolerances = match &self.tolerances {
            Some(body) => body.read(&mut gate, root.name("tolerances")),
            None => Tolerances::default(),
        };
        if let Some(name) = &self.name {
            let length = name.chars().count();
            if length == 0 || length > MAX_NAME {
                gate.fault(root.name("name"), format!("a name of 1 to {MAX_NAME} characters"), format!("{length} characters"));
            }
        }
        let question = self.request.read_in(&mut gate, root.name("request"), models)?;
        // An answer to a question that is wrong somewhere, or not whole, cannot be looked at: its names may be those of parts that lack.
        let whole = question.filter(|_| gate.clean() && !gate.partial());
        let read = whole.map(|question| {
            let claim = self.answer.read(&mut gate, root.name("answer"), &question);
            (question, Claim { find_causes: self.causes.unwrap_or(true), ..claim }, tolerances)
        });
        match read {
            Some(read) if gate.clean() => Ok(read),
            _ => Err(gate.refuse()),
        }
    }
}

impl ClaimBody {
    fn read(&self, gate: &mut Gate, at: At<'_>, question: &Question) -> Claim {
        let model = &*question.model;
        let (torques, joint_accelerations) = self.joints(gate, at.name("joints"), model);
        if self.base_acceleration.is_some() && model.joint_offset() == 0 {
            gate.fault(at.name("base_acceleration"), "no base acceleration: the base is fixed", "one");
        }
        Claim {
            torques,
            joint_accelerations,
            base_acceleration: self.base_acceleration.map(|body| body.vectors()),
            wrenches: self.wrenches(gate, at.name("soles"), question),
            targets: self.targets(gate, at.name("tasks"), question),
            find_causes: true,
        }
    }

    fn joints(&self, gate: &mut Gate, list: At<'_>, model: &Model) -> (Vec<f64>, Vec<Option<f64>>) {
        let mut torques: Vec<Option<f64>> = vec![None; model.joints.len()];
        let mut accelerations = vec![None; model.joints.len()];
        let mut seen = vec![false; model.joints.len()];
        if gate.at_most(list, self.joints.len(), MAX_JOINTS, "joints") {
            for (k, entry) in self.joints.iter().enumerate() {
                let here = list.index(k);
                let Some(i) = joint_index(gate, here.name("name"), model, &entry.name, k) else { continue };
                if std::mem::replace(&mut seen[i], true) {
                    gate.fault(here.name("name"), "each joint once", format!("{} again", quoted(&entry.name)));
                }
                if !model.joints[i].actuated && entry.torque.is_some_and(|torque| torque != 0.0) {
                    let got = format!("one for {}, which is passive", quoted(&entry.name));
                    gate.fault(here.name("torque"), "no torque, or zero", got);
                }
                torques[i] = entry.torque;
                accelerations[i] = entry.acceleration;
            }
        }
        let lacking = || torques.iter().zip(&model.joints).filter(|(torque, joint)| torque.is_none() && joint.actuated);
        let count = lacking().count();
        if count > 0 {
            let names = listed(lacking().map(|(_, joint)| joint.name.as_str()));
            gate.fault(list, "a torque for every actuated joint", format!("{count} missing: {names}"));
        }
        (torques.into_iter().map(Option::unwrap_or_default).collect(), accelerations)
    }

    fn wrenches(&self, gate: &mut Gate, list: At<'_>, question: &Question) -> Vec<Option<crate::spatial::Wrench>> {
        let mut out = vec![None; question.contacts.len()];
        let bodies = self.soles.as_deref().unwrap_or_default();
        if !gate.at_most(list, bodies.len(), MAX_ENTRIES, "soles") {
            return out;
        }
        let soles = &question.model.soles;
        for (k, body) in bodies.iter().enumerate() {
            let here = list.index(k);
            let Some(i) = question.contacts.iter().position(|c| soles[c.sole].name == body.name) else {
                let known = listed(question.contacts.iter().map(|c| soles[c.sole].name.as_str()));
                gate.fault(here.name("name"), format!("the name of a sole that is among the contacts: {known}"), quoted(&body.name));
                continue;
            };
            if out[i].is_some() {
                gate.fault(here.name("name"), "each sole once", format!("{} again", quoted(&body.name)));
            }
            let point = matches!(soles[question.contacts[i].sole].shape, SoleShape::Point);
            out[i] = Some(body.wrench.read(gate, here.name("wrench"), point));
        }
        out
    }

    fn targets(&self, gate: &mut Gate, list: At<'_>, question: &Question) -> Vec<Option<Vec<f64>>> {
        let mut out = vec![None; question.tasks.len()];
        let bodies = self.tasks.as_deref().unwrap_or_default();
        if !gate.at_most(list, bodies.len(), MAX_ENTRIES, "tasks") {
            return out;
        }
        for (k, body) in bodies.iter().enumerate() {
            let here = list.index(k);
            let Some(i) = question.tasks.iter().position(|task| task.name == body.name) else {
                let known = listed(question.tasks.iter().map(|task| task.name.as_str()));
                gate.fault(here.name("name"), format!("the name of a task: {known}"), quoted(&body.name));
                continue;
            };
            if out[i].is_some() {
                gate.fault(here.name("name"), "each task once", format!("{} again", quoted(&body.name)));
            }
            gate.at_most(here.name("desired"), body.desired.len(), MAX_ROWS, "rows");
            out[i] = Some(body.desired.clone());
        }
        out
    }
}

impl TolerancesBody {
    fn read(&self, gate: &mut Gate, at: At<'_>) -> Tolerances {
        let mut one = |name: &'static str, value: Option<f64>, unit: &'static str| {
            if let Some(value) = value {
                positive(gate, at.name(name), value, MAX_MAGNITUDE, unit);
            }
            value
        };
        Tolerances {
            relative: one("relative", self.relative, "").unwrap_or(crate::audit::tolerances::DEFAULT_RELATIVE),
            torque: one("torque", self.torque, "N m"),
            acceleration: one("acceleration", self.acceleration, "m/s^2"),
            angular_acceleration: one("angular_acceleration", self.angular_acceleration, "rad/s^2"),
            force: one("force", self.force, "N"),
            moment: one("moment", self.moment, "N m"),
            limit: one("limit", self.limit, ""),
            loss: one("loss", self.loss, ""),
        }
    }
}
