//! What an answer holds on request: the explanation of infeasibility, ranges, derivatives, spread. And one thing it
//! always says: whether nothing is feasible because the request contradicts itself, or because one tick is too short.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::answer::{Answer, Explained, RelaxedAnswer, Status};
use super::report::{self, Found};
use super::{Trouble, Work, assembled, limits, work};
use crate::certify;
use crate::conic::LevelProof;
use crate::explain::{ExplainError, infeasible, relax, sensitivity, spread, uniqueness};
use crate::problem::Assembly;
use crate::problem::question::Question;
use crate::solve;

/// What every limit that gives way is granted beyond the least relaxation, relative to its natural size, so that the
/// answer at the relaxation is a point of a set with an interior (the solver calls thinner ones than 1e-6 ill posed).
const RELAXED_SLACK: f64 = 5e-5;

/// Adds to `answer` what the question asks for beyond it. `original` is the question before its latency was dealt with.
pub(super) fn add(answer: &mut Answer, original: &Question, work: &Work, cancel: &Arc<AtomicBool>) -> Result<(), Trouble> {
    match fill(answer, original, work, cancel) {
        Err(Trouble::Explain(ExplainError::Cancelled)) => {
            answer.status = Status::Cancelled;
            Ok(())
        }
        outcome => outcome,
    }
}

fn fill(answer: &mut Answer, original: &Question, work: &Work, cancel: &Arc<AtomicBool>) -> Result<(), Trouble> {
    let include = &work.question.include;
    if answer.status == Status::Infeasible {
        tell_unreachable(answer, work, cancel)?;
        if include.explain {
            answer.explained = Some(Box::new(explained(work, cancel)?));
        }
        return Ok(());
    }
    if answer.motion.is_none() {
        return Ok(());
    }
    if include.uniqueness {
        let found = uniqueness::ranges(&work.assembly.hierarchy, &work.solution, Some(cancel))?;
        answer.uniqueness = Some(Box::new(found));
    }
    if include.sensitivity {
        let mut build = |question: &Question| -> Result<Assembly, Trouble> { Ok(assembled(question, cancel)?.2) };
        let base = sensitivity::Base { assembly: &work.assembly, solution: &work.solution };
        answer.sensitivity = Some(Box::new(sensitivity::differentiate(original, &base, &mut build)?));
    }
    if let Some(aim) = &include.spread {
        let mut evaluate = |question: &Question| outcome(question, cancel);
        answer.spread = Some(Box::new(spread::spread(original, aim, &mut evaluate)?));
    }
    Ok(())
}

/// Tells a request that only the tick stands in the way of from one that contradicts itself.
pub(super) fn tell_unreachable(answer: &mut Answer, work: &Work, cancel: &Arc<AtomicBool>) -> Result<(), Trouble> {
    let infeasible = answer.status == Status::Infeasible;
    if infeasible && infeasible::feasible_without(&work.assembly.hierarchy, &soft_contacts(work), Some(cancel))? {
        answer.status = Status::NotReachable;
    }
    Ok(())
}

/// Names of the contact laws that a tick stands behind: those of soft soles.
fn soft_contacts(work: &Work) -> Vec<String> {
    work.scene.soles.iter().filter(|s| !s.map.rigid).map(|s| format!("contact:{}", s.name)).collect()
}

fn explained(work: &Work, cancel: &Arc<AtomicBool>) -> Result<Explained, Trouble> {
    let hierarchy = &work.assembly.hierarchy;
    let sizes = infeasible::natural_sizes(hierarchy);
    let explanation = infeasible::explain(hierarchy, &sizes, &work.solution, Some(cancel))?;
    let relaxed = match &explanation.relaxation {
        Some(relaxation) => at_relaxation(work, &relaxation.deltas, cancel)?,
        None => None,
    };
    Ok(Explained { explanation, relaxed })
}

/// The question answered to its end with its limits relaxed.
fn at_relaxation(work: &Work, deltas: &[f64], cancel: &Arc<AtomicBool>) -> Result<Option<RelaxedAnswer>, Trouble> {
    let hierarchy = relax::relaxed(&work.assembly.hierarchy, deltas, 1.0, RELAXED_SLACK);
    let Some(solution) = infeasible::solve_relaxed(&hierarchy, Some(cancel))? else { return Ok(None) };
    let work = Work {
        question: work.question.clone(),
        scene: work.scene.clone(),
        assembly: Assembly { hierarchy, ..work.assembly.clone() },
        solution,
    };
    let found = Found::new(&work);
    let proofs: Vec<LevelProof> = work.solution.levels.iter().map(report::proof).collect();
    let (faces, levels) = certify::certify_optimality(&work.assembly.hierarchy, &work.solution.x, &proofs);
    let optimal = faces.passes() && levels.iter().all(|l| l.passes());
    let status = match work.solution.status {
        solve::Status::IllPosed => Status::IllPosed,
        _ if optimal => Status::Solved,
        _ => Status::Inaccurate,
    };
    Ok(Some(RelaxedAnswer {
        status,
        slack: RELAXED_SLACK,
        motion: found.motion(&work),
        soles: report::soles(&work, Some(&found)),
        tasks: report::tasks(&work, Some(&found)),
        levels: report::levels(&work),
        margins: limits::margins(&work, &found),
    }))
}

/// Torques and margins of one variation of the question; none where it has no certified answer.
fn outcome(question: &Question, cancel: &Arc<AtomicBool>) -> Result<Option<spread::Outcome>, Trouble> {
    let work = work(question, cancel)?;
    match work.solution.status {
        solve::Status::Solved | solve::Status::IllPosed => {}
        solve::Status::Cancelled => return Err(ExplainError::Cancelled.into()),
        solve::Status::Infeasible | solve::Status::Inaccurate => return Ok(None),
    }
    let found = Found::new(&work);
    Ok(Some(spread::Outcome {
        margins: limits::margins(&work, &found).into_iter().map(|m| m.margin).collect(),
        torques: found.torques,
    }))
}
