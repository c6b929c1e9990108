//! The answer to a solve request, as a document.

use schemars::JsonSchema;
use serde::Serialize;

use super::common::Format;
use super::dynamics::{AxesOut, DynamicsOut};
use super::explained::ExplainedOut;
use super::export::ProblemOut;
use super::number::{LinearAngularOut, Number, Numbers, Tuple, WrenchOut};
use super::report::{BindingOut, BlockingOut, CertificateOut, FreeOut, GroundOut, LevelOut, MarginOut};
use super::sensitivity::SensitivityOut;
use super::solve::RuleBody;
use super::spread::SpreadOut;
use super::uniqueness::UniquenessOut;
use super::withheld;
use crate::model::Model;
use crate::problem::question::{Question, Tick};
use crate::reference::answer::{Answer, Motion, SoleAnswer, Status, TaskAnswer};

/// How a request ended. `solved`: the certificate holds. `infeasible`: no answer obeys what must
/// hold. `not_reachable`: no answer within one tick, though there would be one if the wrenches of
/// the soft soles at the tick's end were free: what must hold does not contradict itself. `ill_posed`: exact,
/// but the answer moves like the square root of the data. `inaccurate`: the certificate's bounds are
/// missed; the bounds reached are stated. `cancelled`: the work was called off.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
pub(super) enum StatusOut {
    Solved,
    Infeasible,
    NotReachable,
    IllPosed,
    Inaccurate,
    Cancelled,
}

/// The answer to a solve request.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "SolveAnswer")]
pub(super) struct AnswerOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Version of the service that answered (no unit).
    version: &'static str,
    /// SHA-256 of the canonical request and the version: same fingerprint, same question (no unit).
    fingerprint: &'a str,
    /// How it ended (no unit). `solved`: the certificate holds. `infeasible`: no answer obeys what
    /// must hold. `not_reachable`: no answer within one tick, though there would be one if the wrenches of
    /// the soft soles at the tick's end were free: what must hold does not contradict itself. `ill_posed`:
    /// exact, but the answer moves like the square root of the data. `inaccurate`: the certificate's
    /// bounds are missed; the bounds reached are stated. `cancelled`: the work was called off.
    status: StatusOut,
    /// Id of the model, carried loads included (no unit).
    model: &'a str,
    /// The control tick (s), and the rule by which the wrench over it was predicted.
    tick: TickOut,
    /// Axes of `base_acceleration` (m/s^2, rad/s^2), as the request gave them.
    velocity_axes: AxesOut,
    /// Torque and acceleration of every moving joint in model order (N m, rad/s^2; N, m/s^2); null
    /// where nothing was found.
    joints: Option<Vec<JointOut<'a>>>,
    /// Acceleration of the base, the time derivative of the base velocity in `velocity_axes` (m/s^2,
    /// rad/s^2); null on a fixed base or where nothing was found.
    base_acceleration: Option<LinearAngularOut>,
    /// One entry per contact, in request order (N, N m, m).
    soles: Vec<SoleOut<'a>>,
    /// One entry per task, in request order, each in its own unit.
    tasks: Vec<TaskOut<'a>>,
    /// One entry per priority (cost without unit).
    levels: Vec<LevelOut<'a>>,
    /// Limits that bind, with multipliers (cost per unit of the limit).
    binding: Vec<BindingOut<'a>>,
    /// Room left to each limit, each in its own unit.
    margins: Vec<MarginOut<'a>>,
    /// Directions the question left free before the least-effort tie-break, parts in the unit each
    /// names (N m, rad/s^2, N and others); empty where the answer is unique.
    free: Vec<FreeOut<'a>>,
    /// What was verified without the solver (figures without unit); null where there was nothing to
    /// verify.
    certificate: Option<CertificateOut<'a>>,
    /// Where nothing is feasible (`infeasible`, `not_reachable`): the limits and must-hold tasks that carry
    /// the proof (shares, no unit).
    blocking: Vec<BlockingOut<'a>>,
    /// Ground and tick in figures (rad/s, N m/rad, m, s).
    ground: GroundOut<'a>,
    /// Remarks to read (no unit).
    warnings: Vec<WarningOut<'a>>,
    /// The assembled problem (scaled, no unit; `physical = scaled * scale`), where `include` asked
    /// for it.
    #[serde(skip_serializing_if = "Option::is_none")]
    problem: Option<ProblemOut<'a>>,
    /// Rigid-body terms (kg, m, N m), where `include` asked for them.
    #[serde(skip_serializing_if = "Option::is_none")]
    dynamics: Option<DynamicsOut<'a>>,
    /// Why nothing is feasible (amounts each in its own unit), where `include` asked for it and the
    /// status is `infeasible` or `not_reachable`.
    #[serde(skip_serializing_if = "Option::is_none")]
    explained: Option<ExplainedOut<'a>>,
    /// What the question leaves open (values each in its own unit), where `include` asked for it and an answer was
    /// found.
    #[serde(skip_serializing_if = "Option::is_none")]
    uniqueness: Option<UniquenessOut<'a>>,
    /// Derivatives by the ground (N m, rad/s^2, N and others, per relative change), where `include` asked for
    /// them and an answer was found.
    #[serde(skip_serializing_if = "Option::is_none")]
    sensitivity: Option<SensitivityOut<'a>>,
    /// Spread under uncertain ground (N m, N and units of the margins), where the request holds
    /// `spread` and an answer was found.
    #[serde(skip_serializing_if = "Option::is_none")]
    spread: Option<SpreadOut<'a>>,
}

/// One joint.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "JointAnswer")]
pub(super) struct JointOut<'a> {
    /// Joint name as in the URDF (no unit).
    name: &'a str,
    /// Torque or force to apply over the tick (N m, or N for a sliding joint); zero on a passive
    /// joint.
    torque: Number,
    /// Acceleration (rad/s^2, or m/s^2 for a sliding joint).
    acceleration: Number,
}

/// One sole on the ground. Wrenches are what the ground exerts on the robot, about the sole origin.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "SoleAnswer")]
pub(super) struct SoleOut<'a> {
    /// Sole name (no unit).
    name: &'a str,
    /// Wrench at the tick's end, world axes (N, N m); null where nothing was found.
    wrench: Option<WrenchOut>,
    /// The same in sole axes (N, N m).
    wrench_in_sole_axes: Option<WrenchOut>,
    /// Wrench that acts in the dynamics over the tick, world axes (N, N m); null where nothing was
    /// found.
    wrench_over_tick: Option<WrenchOut>,
    /// Present wrench, measured or modelled, world axes (N, N m); null on rigid ground without a
    /// measured one.
    present: Option<WrenchOut>,
    /// The same in sole axes (N, N m).
    present_in_sole_axes: Option<WrenchOut>,
    /// Normal force at the tick's end, along the ground normal (N); null where nothing was found.
    normal_force: Option<Number>,
    /// Centre of pressure at the tick's end [x, y], sole axes (m); null without normal force or on a
    /// point.
    center_of_pressure: Option<Tuple<2>>,
    /// Tangential force over friction coefficient times normal force at the tick's end (no unit);
    /// null without friction limit or normal force.
    friction_use: Option<Number>,
    /// Distance of the centre of pressure from the nearest edge, negative outside (m); null where
    /// there is no centre of pressure.
    edge_distance: Option<Number>,
    /// Forces at the vertices, world axes [x, y, z] each (N), where the friction set uses them; not
    /// unique.
    vertex_forces: Vec<Tuple<3>>,
    /// Acceleration of the sole, world axes (m/s^2, rad/s^2); null where nothing was found.
    acceleration: Option<LinearAngularOut>,
    /// How far the linear map is from the law itself at the predicted state (N, N m); null where
    /// nothing was found, or on rigid ground.
    linearisation_error: Option<LinearisationOut>,
}

/// Difference between the linear map and the law.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "LinearisationError")]
struct LinearisationOut {
    /// Size of the force difference (N).
    force: Number,
    /// Size of the moment difference (N m).
    moment: Number,
}

/// One task, row by row: `rows`, `units`, `desired`, `achieved` and `residual` are equally long.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "TaskAnswer")]
pub(super) struct TaskOut<'a> {
    /// Name (no unit).
    name: &'a str,
    /// Priority (no unit); null where it must hold.
    priority: Option<u32>,
    /// Unit of the linear or only rows (no unit).
    unit: &'a str,
    /// Name of each row, an axis or a joint (no unit).
    rows: &'a [String],
    /// Unit of each row (no unit).
    units: &'a [&'static str],
    /// Wanted value of each row (unit in `units`).
    desired: Numbers<'a>,
    /// Reached value of each row (unit in `units`); empty where nothing was found.
    achieved: Numbers<'a>,
    /// Achieved minus desired of each row (unit in `units`); empty where nothing was found.
    residual: Numbers<'a>,
}

/// The control tick of an answer.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "TickAnswer")]
struct TickOut {
    /// Length T (s).
    length: Number,
    /// Tick rule (no unit): `held`, `backward_euler`, `trapezoid` or `explicit`.
    rule: RuleBody,
    /// True where the request named no rule, so that the default was taken (no unit).
    rule_by_default: bool,
}

impl From<Tick> for TickOut {
    fn from(tick: Tick) -> Self {
        TickOut { length: Number(tick.length), rule: tick.rule.into(), rule_by_default: !tick.chosen }
    }
}

/// A remark.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Warning")]
struct WarningOut<'a> {
    /// Stable short code (no unit).
    code: &'a str,
    /// The sentence (no unit).
    text: &'a str,
}

/// Room to begin with (bytes): an answer for two soles and some twenty joints.
const USUAL_LENGTH: usize = 32 * 1024;

/// The document. Should a number not be finite, it is withheld with all others: the status then is
/// `inaccurate` and a warning says so.
pub(super) fn write(question: &Question, answer: &Answer, fingerprint: &str) -> Vec<u8> {
    let document = AnswerOut::of(question, answer, fingerprint);
    let mut bytes = Vec::with_capacity(USUAL_LENGTH);
    match serde_json::to_writer(&mut bytes, &document) {
        Ok(()) => bytes,
        Err(error) => {
            let text = withheld::reason(question, answer, &document.not_finite(), &error.to_string());
            let withheld = document.withheld(&text);
            serde_json::to_vec(&withheld).unwrap_or_else(|_| b"{\"status\":\"inaccurate\"}".to_vec())
        }
    }
}

impl<'a> AnswerOut<'a> {
    fn of(question: &'a Question, answer: &'a Answer, fingerprint: &'a str) -> Self {
        let motion = answer.motion.as_ref();
        AnswerOut {
            format: Format::One,
            version: env!("CARGO_PKG_VERSION"),
            fingerprint,
            status: answer.status.into(),
            model: &question.model.id,
            tick: question.tick.into(),
            velocity_axes: question.velocity_axes.into(),
            joints: motion.map(|motion| JointOut::all(&question.model, motion)),
            base_acceleration: motion.and_then(|motion| motion.base_acceleration).map(Into::into),
            soles: answer.soles.iter().map(SoleOut::of).collect(),
            tasks: answer.tasks.iter().map(TaskOut::of).collect(),
            levels: answer.levels.iter().map(LevelOut::of).collect(),
            binding: answer.binding.iter().map(BindingOut::of).collect(),
            margins: answer.margins.iter().map(MarginOut::of).collect(),
            free: answer.free.iter().map(FreeOut::of).collect(),
            certificate: answer.certificate.as_ref().map(CertificateOut::of),
            blocking: answer.blocking.iter().map(BlockingOut::of).collect(),
            ground: GroundOut::of(&answer.ground),
            warnings: answer
                .warnings
                .iter()
                .map(|warning| WarningOut { code: warning.code, text: &warning.text })
                .collect(),
            problem: answer.problem.as_deref().map(ProblemOut::of),
            dynamics: answer.dynamics.as_deref().map(DynamicsOut::of),
            explained: answer.explained.as_deref().map(|why| ExplainedOut::of(&question.model, why)),
            uniqueness: answer.uniqueness.as_deref().map(UniquenessOut::of),
            sensitivity: answer.sensitivity.as_deref().map(|found| SensitivityOut::of(question, answer, found)),
            spread: answer.spread.as_deref().map(|spread| SpreadOut::of(&question.model, answer, spread)),
        }
    }

    /// The parts that hold a number that is not finite.
    fn not_finite(&self) -> Vec<&'static str> {
        fn bad<T: Serialize>(name: &'static str, part: &T) -> Option<&'static str> {
            serde_json::to_vec(part).is_err().then_some(name)
        }
        let parts = [
            bad("joints", &self.joints), bad("base_acceleration", &self.base_acceleration), bad("soles", &self.soles),
            bad("tasks", &self.tasks), bad("levels", &self.levels), bad("binding", &self.binding),
            bad("margins", &self.margins), bad("free", &self.free), bad("certificate", &self.certificate),
            bad("blocking", &self.blocking), bad("ground", &self.ground), bad("problem", &self.problem),
            bad("dynamics", &self.dynamics), bad("explained", &self.explained), bad("uniqueness", &self.uniqueness),
            bad("sensitivity", &self.sensitivity), bad("spread", &self.spread),
        ];
        parts.into_iter().flatten().collect()
    }

    fn withheld(self, text: &'a str) -> Self {
        let mut warnings = self.warnings;
        warnings.push(WarningOut { code: "not-finite", text });
        AnswerOut {
            status: StatusOut::Inaccurate,
            joints: None,
            base_acceleration: None,
            soles: Vec::new(),
            tasks: Vec::new(),
            levels: Vec::new(),
            binding: Vec::new(),
            margins: Vec::new(),
            free: Vec::new(),
            certificate: None,
            blocking: Vec::new(),
            ground: GroundOut::nothing(),
            warnings,
            problem: None,
            dynamics: None,
            explained: None,
            uniqueness: None,
            sensitivity: None,
            spread: None,
            ..self
        }
    }
}

impl From<Status> for StatusOut {
    fn from(status: Status) -> Self {
        match status {
            Status::Solved => StatusOut::Solved,
            Status::Infeasible => StatusOut::Infeasible,
            Status::NotReachable => StatusOut::NotReachable,
            Status::IllPosed => StatusOut::IllPosed,
            Status::Inaccurate => StatusOut::Inaccurate,
            Status::Cancelled => StatusOut::Cancelled,
        }
    }
}

impl<'a> JointOut<'a> {
    /// Every joint, in model order.
    pub(super) fn all(model: &'a Model, motion: &Motion) -> Vec<Self> {
        let values = motion.torques.iter().zip(&motion.joint_accelerations);
        let joints = model.joints.iter().zip(values);
        joints
            .map(|(joint, (torque, acceleration))| JointOut {
                name: &joint.name,
                torque: Number(*torque),
                acceleration: Number(*acceleration),
            })
            .collect()
    }
}

impl<'a> SoleOut<'a> {
    /// From the answer.
    pub(super) fn of(sole: &'a SoleAnswer) -> Self {
        SoleOut {
            name: &sole.name,
            wrench: sole.wrench.map(Into::into),
            wrench_in_sole_axes: sole.wrench_in_sole_axes.map(Into::into),
            wrench_over_tick: sole.wrench_over_tick.map(Into::into),
            present: sole.present.map(Into::into),
            present_in_sole_axes: sole.present_in_sole_axes.map(Into::into),
            normal_force: sole.normal_force.map(Number),
            center_of_pressure: sole.center_of_pressure.map(Tuple),
            friction_use: sole.friction_use.map(Number),
            edge_distance: sole.edge_distance.map(Number),
            vertex_forces: sole.vertex_forces.iter().map(|force| (*force).into()).collect(),
            acceleration: sole.acceleration.map(Into::into),
            linearisation_error: sole
                .linearisation_error
                .map(|[force, moment]| LinearisationOut { force: Number(force), moment: Number(moment) }),
        }
    }
}

impl<'a> TaskOut<'a> {
    /// From the answer.
    pub(super) fn of(task: &'a TaskAnswer) -> Self {
        TaskOut {
            name: &task.name,
            priority: task.priority,
            unit: task.unit,
            rows: &task.rows,
            units: &task.units,
            desired: Numbers(&task.desired),
            achieved: Numbers(&task.achieved),
            residual: Numbers(&task.residual),
        }
    }
}
