//! What an audit says, as a document.

use schemars::JsonSchema;
use serde::Serialize;

use super::answer::StatusOut;
use super::common::Format;
use super::number::{LinearAngularOut, Number, WrenchOut};
use crate::audit::report::*;
use crate::audit::tolerances::Tolerances;
use crate::contact::TickRule;
use crate::model::Model;
use crate::problem::question::Question;

/// What an audit concludes.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum VerdictOut {
    Pass,
    Fail,
    Undecided,
}

/// Tick rules.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum RuleOut {
    BackwardEuler,
    Trapezoid,
    Explicit,
    Held,
}

/// The answer to an audit request.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "AuditAnswer")]
pub(super) struct AuditOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Version of the service that answered (no unit).
    version: &'static str,
    /// SHA-256 of the canonical request and the version: same fingerprint, same question (no unit).
    fingerprint: &'a str,
    /// Id of the model, carried loads included (no unit).
    model: &'a str,
    /// `pass`: every limit is obeyed and the reference's answer met wherever the question decides, within the tolerances. `fail`:
    /// not so. `undecided`: neither can be said. It is the verdict under the request's own tick rule (no unit).
    verdict: VerdictOut,
    /// True where the other judgement leads to another verdict (no unit).
    rule_dependent: bool,
    /// Under the request's tick rule first; then under `held`, the nearest to what held torques do, unless that is the request's.
    /// Figures each in their own unit.
    judgements: Vec<JudgementOut<'a>>,
    /// What may have gone wrong: hypotheses (N m); null where the verdict is `pass`, where the reference has no answer, or where
    /// the request did not want them.
    causes: Option<CausesOut<'a>>,
    /// The tolerances used, as the request names them (each in its own unit).
    tolerances: TolerancesOut,
    /// Remarks to read (no unit).
    warnings: Vec<String>,
}

/// The answer judged under one tick rule.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Judgement")]
struct JudgementOut<'a> {
    /// The tick rule (no unit).
    rule: RuleOut,
    /// Verdict under it (no unit).
    verdict: VerdictOut,
    /// Why it is not `pass`; empty where it is (no unit).
    reasons: Vec<ReasonOut<'a>>,
    /// What the torques lead to (rad/s^2, m/s^2, N, N m); null where rigid soles contradict each other.
    implied: Option<ImpliedOut<'a>>,
    /// Claimed accelerations and wrenches beside the implied ones, each in its own unit.
    claimed: Vec<DiscrepancyOut<'a>>,
    /// Every limit at what the torques lead to, each in its own unit.
    limits: Vec<LimitReadingOut<'a>>,
    /// Against the reference: with the controller's own targets, where it gave some, then with the request's; figures each in their
    /// own unit.
    comparisons: Vec<ComparisonOut<'a>>,
}

/// One reason.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Reason")]
struct ReasonOut<'a> {
    /// Kind (no unit): `claimed_physics`, `limit_broken`, `must_hold_broken`, `priority_lost`, `torques_differ`, `reference`
    /// or `undetermined`.
    kind: &'static str,
    /// The limit, task, priority, joint or status at fault (no unit).
    subject: &'a str,
    /// The sentence (no unit).
    text: &'a str,
    /// False where this reason alone leaves the verdict undecided (no unit).
    fails: bool,
}

/// What the torques lead to over one tick.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Implied")]
struct ImpliedOut<'a> {
    /// Acceleration of every joint (rad/s^2, m/s^2).
    joints: Vec<ImpliedJointOut<'a>>,
    /// Acceleration of the base in the request's velocity axes (m/s^2, rad/s^2); null on a fixed base.
    base_acceleration: Option<LinearAngularOut>,
    /// Soles (N, N m).
    soles: Vec<ImpliedSoleOut<'a>>,
    /// Independent combinations of wrenches under rigid soles that torques leave open (no unit): 0 where all are implied.
    open_wrenches: usize,
    /// With open wrenches: true where the claimed ones balance, so that limits are read at them; false: at the smallest, and limits
    /// on wrenches then say nothing (no unit).
    at_claimed_wrenches: bool,
}

/// Acceleration of one joint.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ImpliedJoint")]
struct ImpliedJointOut<'a> {
    /// Joint name as in the URDF (no unit).
    name: &'a str,
    /// Acceleration (rad/s^2 or m/s^2).
    acceleration: Number,
}

/// One sole.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ImpliedSole")]
struct ImpliedSoleOut<'a> {
    /// Sole name (no unit).
    name: &'a str,
    /// Wrench at the tick's end, world axes (N, N m).
    wrench: WrenchOut,
    /// Wrench that acts over the tick on average, world axes (N, N m).
    wrench_over_tick: WrenchOut,
    /// Normal force at the tick's end, along the ground normal (N).
    normal_force: Number,
}

/// A claimed number beside the implied one.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Discrepancy")]
struct DiscrepancyOut<'a> {
    /// What, e.g. `acceleration:left_knee` (no unit).
    name: &'a str,
    /// Unit of the figures (no unit).
    unit: &'a str,
    /// As claimed (in `unit`).
    claimed: Number,
    /// As the torques imply it (in `unit`).
    implied: Number,
    /// Largest difference that counts as none (in `unit`).
    tolerance: Number,
    /// True where they differ beyond it (no unit).
    broken: bool,
}

/// One limit.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "LimitReading")]
struct LimitReadingOut<'a> {
    /// The limit (no unit).
    limit: &'a str,
    /// The row within it; `best vertex forces` for a friction set over vertex forces, read at those that leave most room (no unit).
    part: &'a str,
    /// Unit of the figures (no unit).
    unit: &'a str,
    /// Positive: room left; negative: violation (in `unit`).
    margin: Number,
    /// Violation that is allowed while a present one shrinks (in `unit`); 0 unless the limit decays.
    allowed: Number,
    /// Violation beyond it that counts as none (in `unit`).
    tolerance: Number,
    /// How strictly it holds (no unit): `hard`, `soft` or `decay`.
    treatment: &'static str,
    /// False where torques leave the wrench open, so that the margin is one of many (no unit).
    determined: bool,
    /// True where it is broken beyond tolerance (no unit); a soft limit counts in its priority instead.
    broken: bool,
}

/// The answer against the reference's.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Comparison")]
struct ComparisonOut<'a> {
    /// Whose targets the tasks have (no unit): `own`, the controller's, which tests its optimiser; `request`, which tests its tuning too.
    targets: &'static str,
    /// How the reference's solve ended (no unit), as in the answer to a solve request.
    reference: StatusOut,
    /// Verdict of this comparison alone (no unit).
    verdict: VerdictOut,
    /// Tasks that must hold, each in its own unit.
    must_hold: Vec<TaskReadingOut<'a>>,
    /// Priority by priority (no unit); empty without a reference answer.
    levels: Vec<LevelReadingOut<'a>>,
    /// The first priority that differs (no unit); null where none does.
    first_difference: Option<u32>,
    /// Torques, joint by joint (N m; N for sliding joints); empty without a reference answer.
    torques: Vec<TorqueReadingOut<'a>>,
    /// Independent directions of torque that the question leaves open (no unit).
    free: usize,
}

/// One priority.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "LevelReading")]
struct LevelReadingOut<'a> {
    /// Priority (no unit).
    priority: u32,
    /// `met`, `differs`, or `not_comparable` below the first that differs (no unit).
    outcome: &'static str,
    /// `sqrt(sum weight (residual / scale)^2)`, soft limits included (no unit).
    norm: Number,
    /// The reference's (no unit).
    reference_norm: Number,
    /// Distance between the weighted residuals here and there (no unit).
    distance: Number,
    /// Largest difference of the norms, or distance, that counts as none (no unit).
    tolerance: Number,
    /// Its tasks, each in its own unit.
    tasks: Vec<TaskReadingOut<'a>>,
}

/// One task.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "TaskReading")]
struct TaskReadingOut<'a> {
    /// Name (no unit).
    name: &'a str,
    /// Rows of one unit each (in `unit`).
    parts: Vec<TaskPartOut<'a>>,
    /// For a task that must hold: true where a row misses it beyond tolerance (no unit).
    broken: bool,
}

/// Rows of a task that share a unit.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "TaskPart")]
struct TaskPartOut<'a> {
    /// Unit of the figures (no unit).
    unit: &'a str,
    /// Length of the residual vector (in `unit`).
    norm: Number,
    /// The reference's (in `unit`); null without a reference answer.
    reference_norm: Option<Number>,
    /// What is lost against the reference, `norm - reference_norm` (in `unit`); null without a reference answer.
    loss: Option<Number>,
    /// Row that differs most from the reference's, or without one from its target (no unit).
    worst_row: &'a str,
    /// By how much (in `unit`).
    worst_difference: Number,
}

/// One joint's torque.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "TorqueReading")]
struct TorqueReadingOut<'a> {
    /// Joint name as in the URDF (no unit).
    name: &'a str,
    /// As claimed (N m or N).
    claimed: Number,
    /// The reference's (N m or N).
    reference: Number,
    /// What is left of the difference once directions that the question leaves open are taken out (N m or N).
    determined_difference: Number,
    /// Largest difference that counts as none (N m or N).
    tolerance: Number,
    /// True where it is more (no unit).
    differs: bool,
}

/// What may have gone wrong: hypotheses, no proof.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Causes")]
struct CausesOut<'a> {
    /// `consistent`: a mistake explains the torques. `broken_constraint`: none does, but something is broken. `unknown`: neither (no unit).
    conclusion: &'static str,
    /// The sentence (no unit).
    text: &'a str,
    /// How many mistakes were tried (no unit).
    tried: usize,
    /// Largest torque difference from the reference without any mistake (N m or N).
    distance: Number,
    /// Those that explain the torques, and the twelve nearest besides, nearest first (N m or N).
    hypotheses: Vec<HypothesisOut<'a>>,
}

/// One mistake.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Hypothesis")]
struct HypothesisOut<'a> {
    /// Stable short code (no unit).
    mistake: &'static str,
    /// What it concerns; empty where all of the request (no unit).
    subject: &'a str,
    /// The sentence (no unit).
    text: &'a str,
    /// Largest determined torque difference left (N m or N); null where the mistaken question has no answer, and for mistakes in
    /// claimed wrenches and accelerations.
    distance_left: Option<Number>,
    /// The largest difference left, in tolerances (no unit): explained up to 1; null where the mistaken question has no answer.
    in_tolerances: Option<Number>,
    /// True where the mistake explains the torques within tolerance (no unit).
    consistent: bool,
}

/// The tolerances used.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "TolerancesUsed")]
struct TolerancesOut {
    /// Share of the natural size, for everything without a tolerance of its own (no unit).
    relative: Number,
    /// Of torques (N m or N); null: the share.
    torque: Option<Number>,
    /// Of claimed linear accelerations (m/s^2); null: the share.
    acceleration: Option<Number>,
    /// Of claimed angular accelerations (rad/s^2); null: the share.
    angular_acceleration: Option<Number>,
    /// Of claimed forces (N); null: the share.
    force: Option<Number>,
    /// Of claimed moments (N m); null: the share.
    moment: Option<Number>,
    /// Of limits and tasks that must hold, as a share of their natural size (no unit); null: the share above.
    limit: Option<Number>,
    /// Of a priority's weighted residuals (no unit); null: what the share makes of its rows.
    loss: Option<Number>,
}

/// The document. Should a number not be finite, everything that rests on numbers is withheld: the verdict then is `undecided` and a
/// warning says so.
pub(super) fn write(question: &Question, report: &AuditReport, fingerprint: &str) -> Vec<u8> {
    let document = AuditOut::of(question, report, fingerprint);
    match serde_json::to_vec(&document) {
        Ok(bytes) => bytes,
        Err(error) => {
            let warnings = vec![format!("the audit is withheld: {error}")];
            let withheld =
                AuditOut { verdict: VerdictOut::Undecided, rule_dependent: false, judgements: Vec::new(), causes: None, warnings, ..document };
            serde_json::to_vec(&withheld).unwrap_or_else(|_| b"{\"verdict\":\"undecided\"}".to_vec())
        }
    }
}

impl<'a> AuditOut<'a> {
    fn of(question: &'a Question, report: &'a AuditReport, fingerprint: &'a str) -> Self {
        let model = &*question.model;
        let mut warnings = Vec::new();
        if report.rule_dependent {
            let verdicts: Vec<String> =
                report.judgements.iter().map(|j| format!("{} under {}", verdict_word(j.verdict), rule_word(j.rule))).collect();
            warnings.push(format!("the verdict depends on the tick rule: {}", verdicts.join(", ")));
        }
        if report.judgements.iter().flat_map(|j| &j.implied).any(|i| i.open_wrenches > 0) {
            warnings.push("rigid soles state a constraint twice, so that torques leave wrenches open which balance each other".into());
        }
        if report.judgements.iter().flat_map(|j| &j.comparisons).any(|c| c.free > 0) {
            warnings.push("the question leaves torques open: differences in those directions do not count".into());
        }
        AuditOut {
            format: Format::One,
            version: env!("CARGO_PKG_VERSION"),
            fingerprint,
            model: &model.id,
            verdict: report.verdict.into(),
            rule_dependent: report.rule_dependent,
            judgements: report.judgements.iter().map(|judgement| JudgementOut::of(model, judgement)).collect(),
            causes: report.causes.as_ref().map(CausesOut::of),
            tolerances: TolerancesOut::of(&report.tolerances),
            warnings,
        }
    }
}

impl<'a> JudgementOut<'a> {
    fn of(model: &'a Model, judgement: &'a Judgement) -> Self {
        JudgementOut {
            rule: judgement.rule.into(),
            verdict: judgement.verdict.into(),
            reasons: judgement.reasons.iter().map(ReasonOut::of).collect(),
            implied: judgement.implied.as_ref().map(|implied| ImpliedOut::of(model, implied)),
            claimed: judgement.claimed.iter().map(DiscrepancyOut::of).collect(),
            limits: judgement.limits.iter().map(LimitReadingOut::of).collect(),
            comparisons: judgement.comparisons.iter().map(|comparison| ComparisonOut::of(model, comparison)).collect(),
        }
    }
}

impl<'a> ReasonOut<'a> {
    fn of(reason: &'a Reason) -> Self {
        let kind = match reason.kind {
            ReasonKind::ClaimedPhysics => "claimed_physics",
            ReasonKind::LimitBroken => "limit_broken",
            ReasonKind::MustHoldBroken => "must_hold_broken",
            ReasonKind::PriorityLost => "priority_lost",
            ReasonKind::TorquesDiffer => "torques_differ",
            ReasonKind::Reference => "reference",
            ReasonKind::Undetermined => "undetermined",
        };
        ReasonOut { kind, subject: &reason.subject, text: &reason.text, fails: reason.fails }
    }
}

impl<'a> ImpliedOut<'a> {
    fn of(model: &'a Model, implied: &'a Implied) -> Self {
        let joints = model.joints.iter().zip(&implied.joint_accelerations);
        ImpliedOut {
            joints: joints.map(|(joint, a)| ImpliedJointOut { name: &joint.name, acceleration: Number(*a) }).collect(),
            base_acceleration: implied.base_acceleration.map(Into::into),
            soles: implied
                .soles
                .iter()
                .map(|sole| ImpliedSoleOut {
                    name: &sole.name,
                    wrench: sole.wrench.into(),
                    wrench_over_tick: sole.over_tick.into(),
                    normal_force: Number(sole.normal_force),
                })
                .collect(),
            open_wrenches: implied.open_wrenches,
            at_claimed_wrenches: implied.at_claimed_wrenches,
        }
    }
}

impl<'a> DiscrepancyOut<'a> {
    fn of(found: &'a Discrepancy) -> Self {
        DiscrepancyOut {
            name: &found.name,
            unit: found.unit,
            claimed: Number(found.claimed),
            implied: Number(found.implied),
            tolerance: Number(found.tolerance),
            broken: found.broken,
        }
    }
}

impl<'a> LimitReadingOut<'a> {
    fn of(limit: &'a LimitReading) -> Self {
        LimitReadingOut {
            limit: &limit.limit,
            part: &limit.part,
            unit: limit.unit,
            margin: Number(limit.margin),
            allowed: Number(limit.allowed),
            tolerance: Number(limit.tolerance),
            treatment: match limit.strictness {
                Strictness::Hard => "hard",
                Strictness::Soft => "soft",
                Strictness::Decay => "decay",
            },
            determined: limit.determined,
            broken: limit.broken,
        }
    }
}

impl<'a> ComparisonOut<'a> {
    fn of(model: &'a Model, comparison: &'a Comparison) -> Self {
        ComparisonOut {
            targets: match comparison.targets {
                TargetSource::Own => "own",
                TargetSource::Request => "request",
            },
            reference: comparison.reference.into(),
            verdict: comparison.verdict.into(),
            must_hold: comparison.must_hold.iter().map(TaskReadingOut::of).collect(),
            levels: comparison.levels.iter().map(LevelReadingOut::of).collect(),
            first_difference: comparison.first_difference,
            torques: comparison
                .torques
                .iter()
                .map(|torque| TorqueReadingOut {
                    name: &model.joints[torque.joint].name,
                    claimed: Number(torque.claimed),
                    reference: Number(torque.reference),
                    determined_difference: Number(torque.determined_difference),
                    tolerance: Number(torque.tolerance),
                    differs: torque.differs,
                })
                .collect(),
            free: comparison.free,
        }
    }
}

impl<'a> LevelReadingOut<'a> {
    fn of(level: &'a LevelReading) -> Self {
        LevelReadingOut {
            priority: level.priority,
            outcome: match (level.comparable, level.matches) {
                (false, _) => "not_comparable",
                (true, true) => "met",
                (true, false) => "differs",
            },
            norm: Number(level.norm),
            reference_norm: Number(level.reference_norm),
            distance: Number(level.distance),
            tolerance: Number(level.tolerance),
            tasks: level.tasks.iter().map(TaskReadingOut::of).collect(),
        }
    }
}

impl<'a> TaskReadingOut<'a> {
    fn of(task: &'a TaskReading) -> Self {
        let part = |part: &'a TaskPart| TaskPartOut {
            unit: part.unit,
            norm: Number(part.norm),
            reference_norm: part.reference_norm.map(Number),
            loss: part.reference_norm.map(|reference| Number(part.norm - reference)),
            worst_row: &part.worst,
            worst_difference: Number(part.worst_difference),
        };
        TaskReadingOut { name: &task.name, parts: task.parts.iter().map(part).collect(), broken: task.broken }
    }
}

impl<'a> CausesOut<'a> {
    fn of(causes: &'a Causes) -> Self {
        let hypothesis = |found: &'a Hypothesis| HypothesisOut {
            mistake: found.mistake,
            subject: &found.subject,
            text: &found.text,
            distance_left: found.distance_left.map(Number),
            in_tolerances: found.in_tolerances.map(Number),
            consistent: found.consistent,
        };
        CausesOut {
            conclusion: match causes.conclusion {
                Conclusion::Consistent => "consistent",
                Conclusion::BrokenConstraint => "broken_constraint",
                Conclusion::Unknown => "unknown",
            },
            text: &causes.text,
            tried: causes.tried,
            distance: Number(causes.distance),
            hypotheses: causes.hypotheses.iter().map(hypothesis).collect(),
        }
    }
}

impl TolerancesOut {
    fn of(used: &Tolerances) -> Self {
        TolerancesOut {
            relative: Number(used.relative),
            torque: used.torque.map(Number),
            acceleration: used.acceleration.map(Number),
            angular_acceleration: used.angular_acceleration.map(Number),
            force: used.force.map(Number),
            moment: used.moment.map(Number),
            limit: used.limit.map(Number),
            loss: used.loss.map(Number),
        }
    }
}

impl From<Verdict> for VerdictOut {
    fn from(verdict: Verdict) -> Self {
        match verdict {
            Verdict::Pass => VerdictOut::Pass,
            Verdict::Fail => VerdictOut::Fail,
            Verdict::Undecided => VerdictOut::Undecided,
        }
    }
}

impl From<TickRule> for RuleOut {
    fn from(rule: TickRule) -> Self {
        match rule {
            TickRule::BackwardEuler => RuleOut::BackwardEuler,
            TickRule::Trapezoid => RuleOut::Trapezoid,
            TickRule::Explicit => RuleOut::Explicit,
            TickRule::Held => RuleOut::Held,
        }
    }
}

fn verdict_word(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Pass => "pass",
        Verdict::Fail => "fail",
        Verdict::Undecided => "undecided",
    }
}

fn rule_word(rule: TickRule) -> &'static str {
    match rule {
        TickRule::BackwardEuler => "backward_euler",
        TickRule::Trapezoid => "trapezoid",
        TickRule::Explicit => "explicit",
        TickRule::Held => "held",
    }
}
