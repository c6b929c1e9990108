//! Which mistakes explain the torques.
//!
//! Every mistake of the list in `mistakes` leads to torques of its own; what is left of the claimed torques beside them, directions
//! that the mistaken question leaves open taken out, is how well the mistake explains them. Mistakes of sign and order are undone
//! in the claimed torques instead. Up to one tolerance left the claim is called consistent with the mistake: a hypothesis, for two
//! mistakes may lead to the same torques.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::implied::Consequence;
use super::mistakes;
use super::readings::{on_vertices, room};
use super::report::{Causes, Conclusion, Hypothesis, Judgement, ReasonKind};
use super::tolerances::Tolerances;
use super::torques::Determined;
use super::{Claim, claims, retarget, vertex};
use crate::explain::ExplainError;
use crate::problem::question::Question;
use crate::reference::{self, Trouble, Work};
use crate::solve::Status;

/// Hypotheses reported besides the consistent ones.
pub const MOST_REPORTED: usize = 12;
/// A limit with less room than this share of its natural size binds.
const BINDS: f64 = 1e-6;

/// What the judgement under the request's rule has worked out.
pub struct Known<'a> {
    /// The question's own solve.
    pub(super) work: &'a Work,
    /// The reference without mistakes.
    pub(super) determined: &'a Determined,
    /// The judgement.
    pub(super) judgement: &'a Judgement,
    /// What the torques lead to.
    pub(super) at: Option<&'a Consequence>,
}

/// Tries every mistake on `claim`.
pub fn find(
    question: &Question,
    claim: &Claim,
    known: &Known,
    tolerances: &Tolerances,
    cancel: &Arc<AtomicBool>,
) -> Result<Causes, Trouble> {
    let Known { work, determined, judgement, .. } = *known;
    let (distance, in_tolerances) = determined.distance(&claim.torques);
    let mut tried: Vec<Hypothesis> = Vec::new();
    if in_tolerances > 1.0 {
        in_torques(question, claim, determined, &mut tried);
        let suspects = suspects(work, judgement, cancel)?;
        for mistaken in mistakes::all(question, work, &suspects, &claim.torques) {
            let adjust = |assembly: &mut crate::problem::Assembly| {
                if mistaken.keeps_targets {
                    retarget(assembly, &mistaken.question, &claim.targets);
                }
            };
            let outcome = match reference::work_on(&mistaken.question, adjust, cancel) {
                Ok(work) => outcome(&work, claim, tolerances)?,
                // A mistake may lead to a question that cannot be worked out, e.g. the explicit rule on stiff ground.
                Err(Trouble::Explain(ExplainError::Cancelled)) => return Err(ExplainError::Cancelled.into()),
                Err(_) => None,
            };
            tried.push(hypothesis(mistaken.code, &mistaken.subject, mistaken.text, outcome));
        }
    }
    if let Some(at) = known.at {
        tried.extend(claims::tried(work, claim, at, tolerances));
    }
    let count = tried.len();
    let key = |h: &Hypothesis| h.in_tolerances.unwrap_or(f64::INFINITY);
    tried.sort_by(|a, b| key(a).total_cmp(&key(b)));
    let consistent = tried.iter().filter(|h| h.consistent).count();
    tried.truncate(consistent + MOST_REPORTED);
    let (conclusion, text) = conclude(&tried[..consistent], judgement, in_tolerances);
    Ok(Causes { conclusion, text, hypotheses: tried, tried: count, distance })
}

fn outcome(work: &Work, claim: &Claim, tolerances: &Tolerances) -> Result<Option<(f64, f64)>, Trouble> {
    match work.solution.status {
        Status::Cancelled => Err(ExplainError::Cancelled.into()),
        Status::Infeasible => Ok(None),
        _ => Ok(Some(Determined::new(work, tolerances).distance(&claim.torques))),
    }
}

fn hypothesis(mistake: &'static str, subject: &str, text: String, outcome: Option<(f64, f64)>) -> Hypothesis {
    Hypothesis {
        mistake,
        subject: subject.into(),
        text,
        distance_left: outcome.map(|o| o.0),
        in_tolerances: outcome.map(|o| o.1),
        consistent: outcome.is_some_and(|o| o.1 <= 1.0),
    }
}

/// Signs flipped and joints exchanged: undone in the claim, and compared with the reference.
fn in_torques(question: &Question, claim: &Claim, determined: &Determined, out: &mut Vec<Hypothesis>) {
    let model = &*question.model;
    let actuated: Vec<usize> = (0..model.joints.len()).filter(|&j| model.joints[j].actuated).collect();
    let mut tried = claim.torques.clone();
    for (place, &j) in actuated.iter().enumerate() {
        let name = &model.joints[j].name;
        // What changes nothing explains nothing.
        if (2.0 * tried[j]).abs() > determined.tolerance[j] {
            tried[j] = -tried[j];
            out.push(hypothesis("torque_sign", name, format!("the torque of {name} with its sign flipped"), Some(determined.distance(&tried))));
            tried[j] = -tried[j];
        }
        for &k in &actuated[place + 1..] {
            if (tried[j] - tried[k]).abs() <= determined.tolerance[j].min(determined.tolerance[k]) {
                continue;
            }
            tried.swap(j, k);
            let other = &model.joints[k].name;
            let text = format!("the torques of {name} and {other} exchanged");
            out.push(hypothesis("joints_swapped", &format!("{name} and {other}"), text, Some(determined.distance(&tried))));
            tried.swap(j, k);
        }
    }
    let flipped: Vec<f64> = claim.torques.iter().map(|t| -t).collect();
    out.push(hypothesis("torque_sign", "", "all torques with their signs flipped".into(), Some(determined.distance(&flipped))));
}

/// Limits worth leaving out: those that bind the reference, and those that the claim breaks. To leave out any other changes nothing.
fn suspects(work: &Work, judgement: &Judgement, cancel: &Arc<AtomicBool>) -> Result<Vec<String>, Trouble> {
    let mut out: Vec<String> = Vec::new();
    let mut note = |name: &str| {
        if !out.iter().any(|known| known == name) {
            out.push(name.into());
        }
    };
    judgement.limits.iter().filter(|limit| limit.margin < limit.tolerance).for_each(|limit| note(&limit.limit));
    if work.solution.status != Status::Infeasible {
        let at: Consequence = super::at_reference(work, work.assembly.layout.physical(&work.solution.x));
        for block in work.assembly.limits.iter().filter(|block| !on_vertices(work, block)) {
            if room(block, &at.x) < BINDS * block.scale {
                note(&block.group);
            }
        }
        for index in (0..at.wrenches.len()).filter(|&i| vertex::spreads(work, i)) {
            let Some(block) = vertex::blocks(work, index).next() else { continue };
            if vertex::margin(work, index, &at.wrenches[index], cancel)? < BINDS * block.scale {
                note(&block.group);
            }
        }
    }
    Ok(out)
}

fn conclude(consistent: &[Hypothesis], judgement: &Judgement, in_tolerances: f64) -> (Conclusion, String) {
    if !consistent.is_empty() {
        let names: Vec<&str> = consistent.iter().map(|h| h.text.as_str()).collect();
        return (Conclusion::Consistent, format!("consistent with {}", names.join("; or with ")));
    }
    let broken = judgement.reasons.iter().filter(|r| matches!(r.kind, ReasonKind::LimitBroken | ReasonKind::MustHoldBroken));
    let broken: Vec<&str> = broken.map(|r| r.text.as_str()).collect();
    if !broken.is_empty() {
        return (Conclusion::BrokenConstraint, format!("no mistake of the list explains it; broken: {}", broken.join("; ")));
    }
    let text = if in_tolerances > 1.0 {
        "unknown: no mistake of the list leads to these torques"
    } else {
        "unknown: the torques are the reference's where the question determines them"
    };
    (Conclusion::Unknown, text.into())
}
