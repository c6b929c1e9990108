//! One function: from a question to its answer.
//!
//! The order is that of the method: predict over the latency, work out the state, assemble, solve by priority,
//! certify, report.

pub mod answer;
mod dynamics;
mod extras;
mod ground;
mod latency;
mod limits;
pub mod program;
mod report;
mod warnings;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use crate::certify;
use crate::contact::ContactError;
use crate::explain::ExplainError;
use crate::problem::question::{DynamicsQuestion, Question};
use crate::problem::scene::{Scene, SceneError};
use crate::problem::{Assembly, assemble};
use crate::solve::{self, HierarchySolution, SolveError};
use answer::{Answer, DynamicsReport, Status};
pub use latency::Response;

/// Above this `omega_max T` the tick is long for the bed, and the answer warns.
pub const TICK_WARNING: f64 = 0.3;
/// Above this share of the normal force the linearisation error is warned about.
pub const LINEARISATION_WARNING: f64 = 0.01;

/// Largest stated error (scaled) of a level that Newton refinement did not confirm, for an answer to count as solved.
pub const UNREFINED_BOUND: f64 = 1e-8;

/// Why a valid question has no answer at all.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum Trouble {
    /// The ground under a sole cannot be worked out at this state (e.g. the explicit rule would be unstable).
    #[error(transparent)]
    Scene(#[from] SceneError),
    /// The state after the latency cannot be predicted: the physics rows are singular (rigid soles that fight).
    #[error("the state after the latency cannot be predicted: rigid soles constrain the robot more than once")]
    Latency,
    /// The solver refused its input: a mistake of ours.
    #[error("the assembled problem was refused: {0}")]
    Solver(#[from] SolveError),
    /// What was to be explained could not be.
    #[error(transparent)]
    Explain(#[from] ExplainError),
}

impl Trouble {
    fn contact(contact: usize, sole: &str, source: ContactError) -> Trouble {
        Trouble::Scene(SceneError::Contact { contact, sole: sole.into(), source })
    }

    /// The contact at fault, where there is one.
    pub fn contact_index(&self) -> Option<usize> {
        match self {
            Trouble::Scene(SceneError::Contact { contact, .. }) => Some(*contact),
            _ => None,
        }
    }
}

/// Everything worked out on the way to an answer.
#[derive(Debug, Clone)]
pub struct Work {
    /// The question as it stands once its latency has been dealt with.
    pub question: Question,
    /// Its state worked out.
    pub scene: Scene,
    /// As numbers.
    pub assembly: Assembly,
    /// What the solver made of them.
    pub solution: HierarchySolution,
}

/// Answers `question`. Setting `cancel` ends the work early with [`Status::Cancelled`].
pub fn solve(question: &Question, cancel: &Arc<AtomicBool>) -> Result<Answer, Trouble> {
    let work = work(question, cancel)?;
    let mut answer = answer(&work);
    extras::add(&mut answer, question, &work, cancel)?;
    Ok(answer)
}

/// The solver's answer to `question` without certificate and report, the assembled problem changed by `adjust` first (other
/// targets for the same tasks).
///
/// # Errors
/// As [`solve`].
pub fn work_on(question: &Question, adjust: impl FnOnce(&mut Assembly), cancel: &Arc<AtomicBool>) -> Result<Work, Trouble> {
    let (question, scene, mut assembly) = assembled(question, cancel)?;
    adjust(&mut assembly);
    finished(question, scene, assembly, cancel)
}

/// The certified answer that `work` leads to, without the extras a question may ask for.
///
/// # Errors
/// As [`solve`].
pub fn answer_from(work: &Work, cancel: &Arc<AtomicBool>) -> Result<Answer, Trouble> {
    let mut answer = answer(work);
    extras::tell_unreachable(&mut answer, work, cancel)?;
    Ok(answer)
}

/// Rest poses that depend on the present state become plain poses, so that the state can be changed under them.
///
/// # Errors
/// [`Trouble::Scene`] where one cannot be found.
pub fn fix_rest_poses(question: &mut Question) -> Result<(), Trouble> {
    latency::fix_rest_poses(question)
}

fn work(question: &Question, cancel: &Arc<AtomicBool>) -> Result<Work, Trouble> {
    let (question, scene, assembly) = assembled(question, cancel)?;
    finished(question, scene, assembly, cancel)
}

fn finished(question: Question, scene: Scene, assembly: Assembly, cancel: &Arc<AtomicBool>) -> Result<Work, Trouble> {
    let solution = solve::solve(&assembly.hierarchy, &solve::Options::default(), Some(cancel))?;
    Ok(Work { question, scene, assembly, solution })
}

fn assembled(question: &Question, cancel: &Arc<AtomicBool>) -> Result<(Question, Scene, Assembly), Trouble> {
    let question = latency::predict(question)?;
    let scene = Scene::new(&question)?;
    let violations = limits::vertex_violations(&question, &scene, cancel)?;
    let assembly = assemble(&question, &scene, &violations);
    Ok((question, scene, assembly))
}

/// The assembled problem of `question` over the unknowns that general-purpose solvers take; nothing is solved.
///
/// # Errors
/// As [`solve`]; [`Trouble::Solver`] does not occur.
pub fn export(question: &Question, cancel: &Arc<AtomicBool>) -> Result<program::Program, Trouble> {
    let (_, _, assembly) = assembled(question, cancel)?;
    Ok(program::program(&assembly.hierarchy))
}

/// What given torques (joint order, N m or N) lead to over `question`'s tick, by its rule. A latency in the question is not
/// looked at: the state is the one the tick starts from.
///
/// # Errors
/// [`Trouble::Scene`]; [`Trouble::Latency`] where rigid soles that fight leave the wrenches undetermined.
pub fn respond(question: &Question, torques: &[f64]) -> Result<Response, Trouble> {
    latency::response(question, &Scene::new(question)?, torques)
}

/// Rigid-body terms of a state.
pub fn dynamics(question: &DynamicsQuestion) -> DynamicsReport {
    let model = &*question.model;
    let places: Vec<_> = question
        .frames
        .iter()
        .map(|&f| &model.frames[f])
        .map(|f| dynamics::Place { name: &f.name, body: f.body, placement: f.placement })
        .collect();
    dynamics::report(model, &question.state, &question.velocity_axes, &question.gravity, &places)
}

fn answer(work: &Work) -> Answer {
    let mut warnings = Vec::new();
    let ground = ground::report(&work.question, &work.scene);
    let found = match work.solution.status {
        solve::Status::Infeasible | solve::Status::Cancelled => None,
        _ => Some(report::Found::new(work)),
    };
    let certificate = found.as_ref().map(|found| found.certify(work));
    let status = status(&work.solution, certificate.as_ref());
    warnings::of_accuracy(status, &work.solution, certificate.as_ref(), &mut warnings);
    warnings::of_model(&work.question, &mut warnings);
    warnings::of_ground(&work.question, &ground, &mut warnings);
    let soles = report::soles(work, found.as_ref());
    warnings::of_linearisation(&soles, &mut warnings);
    Answer {
        status,
        motion: found.as_ref().map(|f| f.motion(work)),
        tasks: report::tasks(work, found.as_ref()),
        levels: if found.is_some() { report::levels(work) } else { Vec::new() },
        binding: if found.is_some() { report::binding(work) } else { Vec::new() },
        margins: found.as_ref().map(|f| limits::margins(work, f)).unwrap_or_default(),
        free: if found.is_some() { report::free(work) } else { Vec::new() },
        blocking: report::blocking(work),
        dynamics: work.question.include.dynamics.then(|| Box::new(dynamics_of(&work.question))),
        problem: work.question.include.problem.then(|| Box::new(work.assembly.hierarchy.clone())),
        soles,
        certificate,
        ground,
        warnings,
        explained: None,
        uniqueness: None,
        sensitivity: None,
        spread: None,
    }
}

/// `Solved` is only said when the certificate holds and every level was either sharpened by Newton steps or comes with a bound on
/// its error that meets the same target: a level that is nearly flat can pass the optimality figures and yet be far off.
fn status(solution: &HierarchySolution, certificate: Option<&certify::Certificate>) -> Status {
    let sharp = solution.levels.iter().all(|level| level.refined || level.bound <= UNREFINED_BOUND);
    let holds = sharp && certificate.is_some_and(|c| c.holds);
    match solution.status {
        solve::Status::Infeasible => Status::Infeasible,
        solve::Status::Cancelled => Status::Cancelled,
        solve::Status::IllPosed => Status::IllPosed,
        solve::Status::Solved | solve::Status::Inaccurate if holds => Status::Solved,
        solve::Status::Solved | solve::Status::Inaccurate => Status::Inaccurate,
    }
}

fn dynamics_of(question: &Question) -> DynamicsReport {
    dynamics::report(&question.model, &question.state, &question.velocity_axes, &question.gravity, &[])
}
