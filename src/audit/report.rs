//! What an audit says, as plain data. Every number is physical (SI) unless it is called scaled or a share.

use super::tolerances::Tolerances;
use crate::contact::TickRule;
use crate::reference::answer::Status;
use crate::spatial::{Vec3, Wrench};

/// What an audit concludes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verdict {
    /// The answer obeys every limit and equals the reference wherever the question decides, within the tolerances.
    Pass,
    /// It does not; `reasons` say where.
    Fail,
    /// Neither can be said: see the reasons.
    Undecided,
}

/// Why a verdict is not `Pass`.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ReasonKind {
    /// Claimed accelerations or wrenches do not follow from the claimed torques.
    ClaimedPhysics,
    /// A limit is broken.
    LimitBroken,
    /// A task that must hold does not.
    MustHoldBroken,
    /// A priority is not as good as it can be.
    PriorityLost,
    /// Torques differ where the question determines them.
    TorquesDiffer,
    /// The reference has no answer to compare with, or none that is certified.
    Reference,
    /// What the torques lead to cannot be worked out.
    Undetermined,
}

/// One reason.
#[derive(Debug, Clone, PartialEq)]
pub struct Reason {
    /// Kind.
    pub kind: ReasonKind,
    /// The limit, task, priority or joint at fault.
    pub subject: String,
    /// The sentence.
    pub text: String,
    /// False where this reason alone leaves the verdict undecided.
    pub fails: bool,
}

/// The whole audit.
#[derive(Debug, Clone, PartialEq)]
pub struct AuditReport {
    /// That of the request's own tick rule.
    pub verdict: Verdict,
    /// True where another rule leads to another verdict.
    pub rule_dependent: bool,
    /// Under the request's rule first; then under `held`, unless that is the request's.
    pub judgements: Vec<Judgement>,
    /// What may have gone wrong; none where nothing did, or where it was not asked for.
    pub causes: Option<Causes>,
    /// The tolerances used.
    pub tolerances: Tolerances,
}

/// The answer judged under one tick rule.
#[derive(Debug, Clone, PartialEq)]
pub struct Judgement {
    /// The rule.
    pub rule: TickRule,
    /// Verdict under it.
    pub verdict: Verdict,
    /// Why it is not `Pass`.
    pub reasons: Vec<Reason>,
    /// What the torques lead to; none where it cannot be worked out.
    pub implied: Option<Implied>,
    /// Claimed accelerations and wrenches beside the implied ones.
    pub claimed: Vec<Discrepancy>,
    /// Every limit at what the torques lead to.
    pub limits: Vec<LimitReading>,
    /// Against the reference: with the controller's own targets, where it gave some, then with the request's.
    pub comparisons: Vec<Comparison>,
}

/// What the torques lead to over one tick.
#[derive(Debug, Clone, PartialEq)]
pub struct Implied {
    /// Acceleration per joint (rad/s^2 or m/s^2).
    pub joint_accelerations: Vec<f64>,
    /// Base acceleration in the request's velocity axes (m/s^2, rad/s^2); none on a fixed base.
    pub base_acceleration: Option<[Vec3; 2]>,
    /// One entry per contact.
    pub soles: Vec<ImpliedSole>,
    /// Independent combinations of wrenches under rigid soles that the torques leave open: 0 where all are implied.
    pub open_wrenches: usize,
    /// With open wrenches: true where the claimed ones balance, so that limits are read at them.
    pub at_claimed_wrenches: bool,
}

/// One sole.
#[derive(Debug, Clone, PartialEq)]
pub struct ImpliedSole {
    /// Sole name.
    pub name: String,
    /// Wrench at the tick's end, world axes about the sole origin.
    pub wrench: Wrench,
    /// Wrench that acts over the tick on average.
    pub over_tick: Wrench,
    /// Along the ground normal at the tick's end (N).
    pub normal_force: f64,
}

/// A claimed number beside the implied one.
#[derive(Debug, Clone, PartialEq)]
pub struct Discrepancy {
    /// What, e.g. `acceleration:left_knee` or `wrench:left:fz`.
    pub name: String,
    /// Unit.
    pub unit: &'static str,
    /// As claimed.
    pub claimed: f64,
    /// As the torques imply it.
    pub implied: f64,
    /// Largest difference that counts as none.
    pub tolerance: f64,
    /// True where they differ beyond it.
    pub broken: bool,
}

/// How strictly a limit holds, in a word.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Strictness {
    /// Always.
    Hard,
    /// At a cost.
    Soft,
    /// A present violation must shrink.
    Decay,
}

/// One limit.
#[derive(Debug, Clone, PartialEq)]
pub struct LimitReading {
    /// The limit.
    pub limit: String,
    /// The row within it.
    pub part: String,
    /// Unit.
    pub unit: &'static str,
    /// Positive: room left. Negative: violation.
    pub margin: f64,
    /// Violation that is allowed (under `Decay` while the present one shrinks; zero otherwise).
    pub allowed: f64,
    /// Violation beyond it that counts as none.
    pub tolerance: f64,
    /// How strictly it holds.
    pub strictness: Strictness,
    /// False where the torques leave the wrench open, so that the margin is only one of many.
    pub determined: bool,
    /// True where it is broken beyond tolerance: never for soft limits, whose excess counts in their priority.
    pub broken: bool,
}

/// Whose targets the tasks have.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TargetSource {
    /// The controller's own: tests its optimiser.
    Own,
    /// The request's: tests its tuning as well.
    Request,
}

/// The answer against the reference's.
#[derive(Debug, Clone, PartialEq)]
pub struct Comparison {
    /// Whose targets.
    pub targets: TargetSource,
    /// How the reference's solve ended.
    pub reference: Status,
    /// Verdict of this comparison alone.
    pub verdict: Verdict,
    /// Tasks that must hold.
    pub must_hold: Vec<TaskReading>,
    /// Priority by priority; empty without a reference answer.
    pub levels: Vec<LevelReading>,
    /// The first priority that differs.
    pub first_difference: Option<u32>,
    /// Torques, joint by joint; empty without a reference answer.
    pub torques: Vec<TorqueReading>,
    /// Independent directions of torque that the question leaves open.
    pub free: usize,
}

/// One priority.
#[derive(Debug, Clone, PartialEq)]
pub struct LevelReading {
    /// Priority.
    pub priority: u32,
    /// False below the first that differs: what is lost or won there says nothing.
    pub comparable: bool,
    /// True where residuals and their norm are the reference's within tolerance.
    pub matches: bool,
    /// `sqrt(sum weight (residual / scale)^2)`, soft limits included, no unit.
    pub norm: f64,
    /// The reference's.
    pub reference_norm: f64,
    /// Distance between the two vectors of weighted residuals.
    pub distance: f64,
    /// Largest difference of norms or distance that counts as none.
    pub tolerance: f64,
    /// Its tasks, each in its own unit.
    pub tasks: Vec<TaskReading>,
}

/// One task.
#[derive(Debug, Clone, PartialEq)]
pub struct TaskReading {
    /// Name.
    pub name: String,
    /// Rows of one unit each.
    pub parts: Vec<TaskPart>,
    /// For a task that must hold: true where a row misses it beyond tolerance.
    pub broken: bool,
}

/// The rows of a task that have one unit.
#[derive(Debug, Clone, PartialEq)]
pub struct TaskPart {
    /// Unit.
    pub unit: &'static str,
    /// Euclidean norm of the residual.
    pub norm: f64,
    /// The reference's; none without a reference answer.
    pub reference_norm: Option<f64>,
    /// Row that differs most from the reference's (or, without one, from its target).
    pub worst: String,
    /// By how much: achieved here minus achieved there (or minus desired).
    pub worst_difference: f64,
}

/// One joint's torque.
#[derive(Debug, Clone, PartialEq)]
pub struct TorqueReading {
    /// Joint index.
    pub joint: usize,
    /// Claimed (N m or N).
    pub claimed: f64,
    /// The reference's.
    pub reference: f64,
    /// What is left of the difference once directions the question leaves open are taken out.
    pub determined_difference: f64,
    /// Largest difference that counts as none.
    pub tolerance: f64,
    /// True where it is more.
    pub differs: bool,
}

/// What may have gone wrong.
#[derive(Debug, Clone, PartialEq)]
pub struct Causes {
    /// Conclusion in a word.
    pub conclusion: Conclusion,
    /// The sentence.
    pub text: String,
    /// Mistakes that were tried, nearest first, at most [`super::causes::MOST_REPORTED`] besides those that explain the answer.
    pub hypotheses: Vec<Hypothesis>,
    /// How many were tried.
    pub tried: usize,
    /// Distance from the reference without any mistake, measured like `distance_left` (N m or N).
    pub distance: f64,
}

/// What the hypotheses amount to.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Conclusion {
    /// At least one mistake explains the torques within tolerance.
    Consistent,
    /// None does, but limits or must-hold tasks are broken.
    BrokenConstraint,
    /// None does, and nothing is broken.
    Unknown,
}

/// One mistake.
#[derive(Debug, Clone, PartialEq)]
pub struct Hypothesis {
    /// Stable short code, snake_case.
    pub mistake: &'static str,
    /// What of the request it concerns, e.g. a joint or a limit; empty where all of it.
    pub subject: String,
    /// The sentence, to follow "consistent with".
    pub text: String,
    /// Largest determined torque difference that is left (N m or N); none where the mistaken question has no answer, and for mistakes
    /// in claimed wrenches and accelerations.
    pub distance_left: Option<f64>,
    /// The largest difference left, in tolerances: explained up to 1.
    pub in_tolerances: Option<f64>,
    /// True where the mistake explains the torques within tolerance.
    pub consistent: bool,
}

impl Verdict {
    /// The worse of two: `Fail` before `Undecided` before `Pass`.
    pub fn and(self, other: Verdict) -> Verdict {
        match (self, other) {
            (Verdict::Fail, _) | (_, Verdict::Fail) => Verdict::Fail,
            (Verdict::Undecided, _) | (_, Verdict::Undecided) => Verdict::Undecided,
            _ => Verdict::Pass,
        }
    }
}
