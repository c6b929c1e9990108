//! A controller's own answer, judged.
//!
//! Its torques are carried through the physics of the tick (`implied`), what follows is held against every limit (`readings`) and, from
//! the first priority on, against the reference's optimum (`losses`); torques are compared where the question determines them
//! (`torques`). Where they differ, the question is solved again with each of a list of common mistakes made on purpose (`mistakes`),
//! and those that lead to the claimed torques are named (`causes`): hypotheses, no proof. Claimed wrenches and accelerations have
//! mistakes of their own (`claims`).
//!
//! The verdict is that of the request's own tick rule, the one the controller was asked to plan with. Under the rule `held`, which is
//! the nearest to what happens under held torques, everything is judged a second time, and it is said where the verdict would differ.

pub mod causes;
mod claims;
mod earlier;
mod implied;
mod losses;
mod mistakes;
mod readings;
pub mod report;
pub mod tolerances;
mod torques;
mod vertex;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use crate::contact::TickRule;
use crate::explain::ExplainError;
use crate::problem::Assembly;
use crate::problem::question::{Importance, Include, Question};
use crate::reference::answer::{Answer, Status};
use crate::reference::{self, Trouble, UNREFINED_BOUND, Work};
use crate::spatial::{Vec3, Wrench};
use implied::Consequence;
use report::{AuditReport, Comparison, Judgement, Reason, ReasonKind, TargetSource, TorqueReading, Verdict};
pub use tolerances::{Allowance, Tolerances};
use torques::Determined;

/// What a controller answered.
#[derive(Debug, Clone, PartialEq)]
pub struct Claim {
    /// Torque per joint in model order (N m or N); zero on passive joints.
    pub torques: Vec<f64>,
    /// Acceleration per joint in model order (rad/s^2 or m/s^2), where it said one.
    pub joint_accelerations: Vec<Option<f64>>,
    /// Base acceleration in the request's velocity axes (m/s^2, rad/s^2), where it said one.
    pub base_acceleration: Option<[Vec3; 2]>,
    /// Tick-end wrench per entry of `contacts`, world axes about the sole origin, where it said one.
    pub wrenches: Vec<Option<Wrench>>,
    /// Its own targets: desired value per row of a task, one entry per task; none where the request's are its own.
    pub targets: Vec<Option<Vec<f64>>>,
    /// False: no causes are looked for where the verdict is not `Pass` (saves some thirty solves).
    pub find_causes: bool,
}

impl Claim {
    /// Torques alone.
    pub fn of_torques(question: &Question, torques: Vec<f64>) -> Claim {
        Claim {
            torques,
            joint_accelerations: vec![None; question.model.joints.len()],
            base_acceleration: None,
            wrenches: vec![None; question.contacts.len()],
            targets: vec![None; question.tasks.len()],
            find_causes: true,
        }
    }

    /// True where every list has the length `question` asks for; the gate sees to it.
    fn fits(&self, question: &Question) -> bool {
        let joints = question.model.joints.len();
        self.torques.len() == joints
            && self.joint_accelerations.len() == joints
            && self.wrenches.len() == question.contacts.len()
            && self.targets.len() == question.tasks.len()
    }

    fn has_own_targets(&self) -> bool {
        self.targets.iter().any(Option::is_some)
    }
}

/// Why an answer could not be judged.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum AuditError {
    /// The question itself leads nowhere, or the work was called off.
    #[error(transparent)]
    Trouble(#[from] Trouble),
    /// The claim's lists do not have the question's lengths.
    #[error("torques, accelerations, wrenches and targets do not have one entry per joint, contact and task")]
    Shape,
    /// A task has another number of rows than its claimed targets.
    #[error("task {task} has {expected} rows, but {found} targets")]
    Targets {
        /// Index of the task.
        task: usize,
        /// Its rows.
        expected: usize,
        /// Targets that came.
        found: usize,
    },
}

/// Judges `claim` as an answer to `question`. What the question asks an answer to include is not looked at.
///
/// # Errors
/// See [`AuditError`].
pub fn audit(question: &Question, claim: &Claim, tolerances: &Tolerances, cancel: &Arc<AtomicBool>) -> Result<AuditReport, AuditError> {
    if !claim.fits(question) {
        return Err(AuditError::Shape);
    }
    let mut question = question.clone();
    question.include = Include::default();
    let own = judge(&question, claim, tolerances, cancel)?;
    let mut judgements = vec![own.judgement];
    if question.tick.rule != TickRule::Held {
        let mut held = question.clone();
        held.tick.rule = TickRule::Held;
        // A state that the exact rule cannot work out is no reason to withhold the rest.
        match judge(&held, claim, tolerances, cancel) {
            Ok(judged) => judgements.push(judged.judgement),
            Err(AuditError::Trouble(Trouble::Scene(_))) => {}
            Err(trouble) => return Err(trouble),
        }
    }
    let verdict = judgements[0].verdict;
    let causes = match own.reference {
        Some(determined) if verdict != Verdict::Pass && claim.find_causes => {
            let known = causes::Known { work: &own.work, determined: &determined, judgement: &judgements[0], at: own.at.as_ref() };
            Some(causes::find(&question, claim, &known, tolerances, cancel)?)
        }
        _ => None,
    };
    let rule_dependent = judgements.iter().any(|judgement| judgement.verdict != verdict);
    Ok(AuditReport { verdict, rule_dependent, judgements, causes, tolerances: *tolerances })
}

/// What counts as no difference of every torque, acceleration and wrench that answers `question`.
///
/// # Errors
/// Where the question leads nowhere, or the work was called off.
pub fn allowances(question: &Question, tolerances: &Tolerances, cancel: &Arc<AtomicBool>) -> Result<Vec<Allowance>, Trouble> {
    let work = reference::work_on(question, |_| {}, cancel)?;
    Ok(tolerances.allowances(&work.assembly.layout.columns))
}

/// Puts the controller's own targets in place of the request's, in targets and rows alike.
pub(crate) fn retarget(assembly: &mut Assembly, question: &Question, targets: &[Option<Vec<f64>>]) {
    for ((task, rows), own) in question.tasks.iter().zip(&mut assembly.targets).zip(targets) {
        let Some(own) = own.as_ref().filter(|own| own.len() == rows.len()) else { continue };
        let shifts: Vec<f64> = rows.iter().zip(own).map(|(row, own)| own - row.desired).collect();
        rows.iter_mut().zip(own).for_each(|(row, own)| row.desired = *own);
        let shift = |names: &[crate::conic::RowName], rhs: &mut [f64]| {
            let places = (0..rhs.len()).filter(|&i| !names[i].physics && names[i].group == task.name);
            for (i, shift) in places.collect::<Vec<_>>().into_iter().zip(&shifts) {
                rhs[i] += shift / names[i].scale;
            }
        };
        match task.importance {
            Importance::MustHold => shift(&assembly.hierarchy.hard.names, &mut assembly.hierarchy.hard.rhs),
            Importance::Priority(priority) => {
                for level in assembly.hierarchy.levels.iter_mut().filter(|level| level.priority == priority) {
                    shift(&level.residuals.names, &mut level.residuals.rhs);
                }
            }
        }
    }
}

/// One rule's judgement with what the search for causes needs.
struct Judged {
    judgement: Judgement,
    work: Work,
    at: Option<Consequence>,
    reference: Option<Determined>,
}

fn judge(question: &Question, claim: &Claim, tolerances: &Tolerances, cancel: &Arc<AtomicBool>) -> Result<Judged, AuditError> {
    let work = reference::work_on(question, |_| {}, cancel)?;
    for (task, (rows, own)) in work.assembly.targets.iter().zip(&claim.targets).enumerate() {
        if let Some(own) = own.as_ref().filter(|own| own.len() != rows.len()) {
            return Err(AuditError::Targets { task, expected: rows.len(), found: own.len() });
        }
    }
    let mut reasons = Vec::new();
    let at = match implied::follow(&work, claim, tolerances) {
        Ok(at) => Some(at),
        Err(Trouble::Latency) => {
            let text = "rigid soles prescribe accelerations that contradict each other, so that nothing follows from torques";
            reasons.push(reason(ReasonKind::Undetermined, "", text, false));
            None
        }
        Err(trouble) => return Err(trouble.into()),
    };
    let (claimed, limits) = match &at {
        Some(at) => (readings::claimed(&work, claim, at, tolerances), readings::limits(&work, at, tolerances, cancel)?),
        None => (Vec::new(), Vec::new()),
    };
    let mut comparisons = Vec::new();
    let mut reference = None;
    if claim.has_own_targets() {
        let own = reference::work_on(question, |assembly| retarget(assembly, question, &claim.targets), cancel)?;
        let compared = compare(&own, TargetSource::Own, claim, at.as_ref(), tolerances, &mut reasons, cancel)?;
        reference = compared.1;
        comparisons.push(compared.0);
    }
    let compared = compare(&work, TargetSource::Request, claim, at.as_ref(), tolerances, &mut reasons, cancel)?;
    comparisons.push(compared.0);
    let reference = reference.or(compared.1);
    let possible = !comparisons.iter().any(|c| matches!(c.reference, Status::Infeasible | Status::NotReachable));
    let mut first = physics_reasons(&claimed);
    first.extend(limit_reasons(&limits, possible));
    first.append(&mut reasons);
    let verdict = first.iter().map(|r| if r.fails { Verdict::Fail } else { Verdict::Undecided }).fold(Verdict::Pass, Verdict::and);
    let implied = at.as_ref().map(|at| implied::reported(&work, at));
    let judgement = Judgement { rule: question.tick.rule, verdict, reasons: first, implied, claimed, limits, comparisons };
    Ok(Judged { judgement, work, at, reference })
}

pub(crate) fn reason(kind: ReasonKind, subject: &str, text: impl Into<String>, fails: bool) -> Reason {
    Reason { kind, subject: subject.into(), text: text.into(), fails }
}

fn physics_reasons(claimed: &[report::Discrepancy]) -> Vec<Reason> {
    let broken = claimed.iter().filter(|d| d.broken).collect::<Vec<_>>();
    let ratio = |d: &report::Discrepancy| (d.claimed - d.implied).abs() / d.tolerance;
    let Some(worst) = broken.iter().copied().max_by(|a, b| ratio(a).total_cmp(&ratio(b))) else { return Vec::new() };
    let text = format!(
        "{} of what is claimed to follow from the torques does not; worst {}: claimed {:.6} {unit}, implied {:.6} {unit}",
        broken.len(), worst.name, worst.claimed, worst.implied, unit = worst.unit
    );
    vec![reason(ReasonKind::ClaimedPhysics, &worst.name, text, true)]
}

fn limit_reasons(limits: &[report::LimitReading], possible: bool) -> Vec<Reason> {
    let broken = limits.iter().filter(|l| l.broken);
    broken
        .map(|l| {
            let allowed = if l.allowed > 0.0 { format!(" ({:.4} {} of it allowed)", l.allowed, l.unit) } else { String::new() };
            let text = format!("{} {}: exceeded by {:.6} {}{allowed}", l.limit, l.part, -l.margin, l.unit);
            reason(ReasonKind::LimitBroken, &l.limit, text, possible)
        })
        .collect()
}

/// One comparison, and the reference's torques where it has some.
fn compare(
    work: &Work,
    targets: TargetSource,
    claim: &Claim,
    at: Option<&Consequence>,
    tolerances: &Tolerances,
    reasons: &mut Vec<Reason>,
    cancel: &Arc<AtomicBool>,
) -> Result<(Comparison, Option<Determined>), Trouble> {
    let answer = reference::answer_from(work, cancel)?;
    if answer.status == Status::Cancelled {
        return Err(ExplainError::Cancelled.into());
    }
    let mut out = Comparison {
        targets,
        reference: answer.status,
        verdict: Verdict::Pass,
        must_hold: Vec::new(),
        levels: Vec::new(),
        first_difference: None,
        torques: Vec::new(),
        free: 0,
    };
    let mut own = Vec::new();
    let x = answer.motion.is_some().then(|| work.assembly.layout.physical(&work.solution.x));
    if let Some(at) = at {
        out.must_hold = losses::must_hold(work, at, x.as_deref(), tolerances);
    }
    for task in out.must_hold.iter().filter(|task| task.broken) {
        let text = format!("{} does not hold: {}", task.name, in_units(task));
        own.push(reason(ReasonKind::MustHoldBroken, &task.name, text, x.is_some()));
    }
    let mut determined = None;
    if let Some(x) = x {
        let known = Determined::new(work, tolerances);
        let there = at_reference(work, x);
        if let Some(at) = at {
            out.levels = losses::levels(work, at, &there, tolerances, cancel)?;
        }
        out.torques = torque_readings(&known, claim, work);
        out.free = known.free();
        out.first_difference = out.levels.iter().find(|level| !level.matches).map(|level| level.priority);
        own.extend(difference_reasons(&out, work, &answer));
        determined = Some(known);
    } else {
        let text = format!("the reference has no answer to compare with: {}", word(answer.status));
        own.push(reason(ReasonKind::Reference, word(answer.status), text, false));
    }
    out.verdict = own.iter().map(|r| if r.fails { Verdict::Fail } else { Verdict::Undecided }).fold(Verdict::Pass, Verdict::and);
    if targets == TargetSource::Own {
        own.iter_mut().for_each(|r| r.text.push_str(" (with the controller's own targets)"));
    }
    reasons.append(&mut own);
    Ok((out, determined))
}

fn at_reference(work: &Work, x: Vec<f64>) -> Consequence {
    let wrenches = work.assembly.layout.contacts.iter().map(|c| {
        let part = |k: usize| if k < c.dimension { x[c.wrench + k] } else { 0.0 };
        Wrench::from_vec6(&crate::spatial::Vec6::from_fn(|k, _| part(k)))
    });
    Consequence { wrenches: wrenches.collect(), over_tick: Vec::new(), open: 0, at_claimed: false, x }
}

fn torque_readings(known: &Determined, claim: &Claim, work: &Work) -> Vec<TorqueReading> {
    let left = known.difference(&claim.torques);
    let joints = work.question.model.joints.iter().enumerate().filter(|(_, joint)| joint.actuated);
    joints
        .map(|(j, _)| TorqueReading {
            joint: j,
            claimed: claim.torques[j],
            reference: known.reference[j],
            determined_difference: left[j],
            tolerance: known.tolerance[j],
            differs: !tolerances::within(left[j], known.tolerance[j]),
        })
        .collect()
}

/// What differs from the reference, and whether that proves anything.
///
/// A certified reference proves it. One that is not (`inaccurate`, `ill_posed`) still is a point that obeys everything: where it is
/// better at the first priority that differs, and the priorities above are sharp, the claim is not the best there is. Anything else is
/// left undecided.
fn difference_reasons(comparison: &Comparison, work: &Work, answer: &Answer) -> Vec<Reason> {
    let mut out = Vec::new();
    let certified = answer.status == Status::Solved;
    let obeys = |name: &str| matches!(name, "dynamics" | "contact" | "vertex-sum" | "limits" | "hard-rows" | "must-hold");
    let feasible = answer.certificate.as_ref().is_some_and(|c| c.checks.iter().filter(|c| obeys(c.name)).all(|c| c.passes()));
    let caveat = if certified { String::new() } else { format!("; the reference is {}", word(answer.status)) };
    if let Some(level) = comparison.levels.iter().find(|level| !level.matches) {
        let mut above = work.solution.levels.iter().take_while(|l| l.priority != level.priority);
        let sharp = above.all(|l| l.refined || l.bound <= UNREFINED_BOUND);
        let worse = level.norm - level.reference_norm > level.tolerance;
        let tasks: Vec<String> = level.tasks.iter().map(|task| format!("{}: {}", task.name, in_units(task))).collect();
        let text = format!("priority {} is not met as well as it can be: {}{caveat}", level.priority, tasks.join("; "));
        out.push(reason(ReasonKind::PriorityLost, &level.priority.to_string(), text, certified || (feasible && sharp && worse)));
    }
    let differing = comparison.torques.iter().filter(|t| t.differs);
    let worst = differing.max_by(|a, b| ratio(a).total_cmp(&ratio(b)));
    if let Some(worst) = worst {
        let count = comparison.torques.iter().filter(|t| t.differs).count();
        let name = &work.question.model.joints[worst.joint].name;
        let text = format!(
            "{count} torques differ where the question determines them; worst {name}: {:.6} against {:.6}{caveat}",
            worst.claimed, worst.reference
        );
        out.push(reason(ReasonKind::TorquesDiffer, name, text, certified));
    }
    out
}

fn ratio(torque: &TorqueReading) -> f64 {
    torque.determined_difference.abs() / torque.tolerance
}

/// `residual 12.3 N/s, best 0.0; worst z by 12.0` for every unit of a task.
fn in_units(task: &report::TaskReading) -> String {
    let part = |part: &report::TaskPart| match part.reference_norm {
        Some(best) => format!(
            "residual {:.4} {unit} against {best:.4} (most at {}: {:+.4})", part.norm, part.worst, part.worst_difference, unit = part.unit
        ),
        None => format!("residual {:.4} {} (most at {}: {:+.4})", part.norm, part.unit, part.worst, part.worst_difference),
    };
    task.parts.iter().map(part).collect::<Vec<_>>().join(", ")
}

fn word(status: Status) -> &'static str {
    match status {
        Status::Solved => "solved",
        Status::Infeasible => "infeasible",
        Status::NotReachable => "not_reachable",
        Status::IllPosed => "ill_posed",
        Status::Inaccurate => "inaccurate",
        Status::Cancelled => "cancelled",
    }
}
