//! The certificate: what makes an answer believable, recomputed without the solver and without the
//! problem's own mass matrix, bias and Jacobians.
//!
//! | check | what is recomputed, and how |
//! |---|---|
//! | `dynamics` | balance of every body, by Newton-Euler in world axes |
//! | `contact` | tick-end wrench of every sole, by quadrature of the traction and of its derivative; under the rule `held` by carrying the motion through the tick from the torques alone |
//! | `vertex-sum` | vertex forces against the wrench they stand for |
//! | `limits` | every hard and decaying limit, from the question |
//! | `must-hold`, `hard-rows` | every row no priority may break, at the answer |
//! | `answer-point` | the claim is the point the problem was solved at |
//! | `problem-matches` | the problem's physics rows, against balance and law |
//! | `faces` | no priority took more for granted than earlier ones imply |
//! | levels | stationarity, dual cones, complementarity, feasibility, priority by priority |
//!
//! The last two together prove the answer optimal for each priority in turn. A figure that is not a number
//! never passes.

mod assembled;
mod faces;
mod friction;
mod ground;
mod held;
mod limits;
mod motion;
mod newton_euler;
mod optimality;
mod physics;
mod rest;
mod rows;
mod situation;
mod worst;

use crate::conic::{Hierarchy, Level, LevelProof};
use crate::problem::question::{Importance, Question};
use crate::spatial::{Vec3, Wrench};
use situation::Situation;
use worst::Worst;

/// What was verified, and how well it holds.
#[derive(Debug, Clone, PartialEq)]
pub struct Certificate {
    /// True where every figure is inside its bound.
    pub holds: bool,
    /// Every figure with its bound.
    pub checks: Vec<Check>,
    /// Priority by priority: stationarity and complementarity of the one final answer.
    pub levels: Vec<LevelCheck>,
}

/// One figure of a certificate.
#[derive(Debug, Clone, PartialEq)]
pub struct Check {
    /// Stable short name, kebab-case, e.g. `dynamics`, `contact`, `limits`.
    pub name: &'static str,
    /// What it is relative to, in words, e.g. `of the robot's weight`.
    pub relative_to: &'static str,
    /// The figure.
    pub value: f64,
    /// The bound it has to meet.
    pub bound: f64,
    /// Where the largest value sits, e.g. a joint, sole or limit; empty where there was nothing to check.
    pub worst: String,
}

/// Optimality of the final answer for one priority.
#[derive(Debug, Clone, PartialEq)]
pub struct LevelCheck {
    /// Priority.
    pub priority: u32,
    /// Largest entry of the stationarity residual, relative.
    pub stationarity: f64,
    /// `s'z`, relative.
    pub complementarity: f64,
    /// Largest distance of a multiplier from its dual cone, relative.
    pub dual_violation: f64,
    /// Largest excess over a row the level had to obey, and largest difference between a soft limit's
    /// stated and actual excess, relative.
    pub feasibility: f64,
    /// The bound all four have to meet.
    pub bound: f64,
}

/// What is claimed to happen over the tick.
#[derive(Debug, Clone, Copy)]
pub struct Claim<'a> {
    /// Generalised acceleration: base linear and angular in WORLD axes (m/s^2, rad/s^2; floating base only), then
    /// joints in model order.
    pub acceleration: &'a [f64],
    /// Joint torques (N m or N) in model order; zero on passive joints.
    pub torques: &'a [f64],
    /// Tick-end wrench per entry of `question.contacts`, world axes about the sole origin. None fails.
    pub wrenches: &'a [Option<Wrench>],
    /// Vertex forces (N, world axes) per contact, in the polygon's order; empty where no vertex set is used.
    pub vertex_forces: &'a [Vec<Vec3>],
}

impl Check {
    /// True where the figure is a number inside its bound.
    pub fn passes(&self) -> bool {
        self.value.is_finite() && self.value <= self.bound
    }
}

impl LevelCheck {
    /// True where all figures are numbers inside the bound.
    pub fn passes(&self) -> bool {
        [self.stationarity, self.complementarity, self.dual_violation, self.feasibility]
            .iter()
            .all(|figure| figure.is_finite() && *figure <= self.bound)
    }
}

/// Verifies a claim against the question, and the point `x` of `hierarchy` (scaled) with one proof per
/// level, in order. A further proof, if any, is held against the tie-break.
///
/// The state in `question` is the one the tick starts from: with a latency, the predicted one.
///
/// Never fails: what does not fit is a figure that does not pass.
pub fn certify(
    question: &Question,
    claim: &Claim,
    hierarchy: &Hierarchy,
    x: &[f64],
    proofs: &[LevelProof],
) -> Certificate {
    let mut checks = Vec::new();
    if let Err(what) = fitting(question, claim).and_then(|()| point_fits(hierarchy, x)) {
        let (value, worst) = (f64::NAN, what.to_string());
        checks.push(Check { name: "shape", relative_to: "lengths of what was handed in", value, bound: 0.0, worst });
        return Certificate { holds: false, checks, levels: Vec::new() };
    }
    let situation = Situation::new(question);
    checks.push(physics::dynamics(&situation, claim));
    checks.push(physics::contact(&situation, claim));
    checks.extend(physics::vertex_sum(&situation, claim));
    checks.push(limits::limits(&situation, claim));
    checks.extend(hard_rows(question, hierarchy, x));
    checks.push(assembled::answer(&situation, claim, hierarchy, x));
    checks.push(assembled::rows(&situation, hierarchy, x));
    checks.push(faces::check(hierarchy, x, proofs));
    let levels = level_checks(hierarchy, x, proofs);
    let holds = checks.iter().all(Check::passes) && levels.iter().all(LevelCheck::passes);
    Certificate { holds, checks, levels }
}

/// Optimality of x for every level of a hierarchy, and for the tie-break where a proof is given: the part of
/// [`certify`] that needs no robot. The first entry says whether each level's premises were justified.
pub fn certify_optimality(hierarchy: &Hierarchy, x: &[f64], proofs: &[LevelProof]) -> (Check, Vec<LevelCheck>) {
    (faces::check(hierarchy, x, proofs), level_checks(hierarchy, x, proofs))
}

/// Per contact, on soft ground: distance `[force (N), moment (N m)]` between the ground law itself at the state the
/// claim leads to and the claimed wrench. What linearising the law over one tick costs. None on rigid
/// ground, or where the claim does not fit the question.
pub fn linearisation_error(question: &Question, claim: &Claim) -> Vec<Option<[f64; 2]>> {
    match fitting(question, claim) {
        Ok(()) => physics::linearisation(&Situation::new(question), claim),
        Err(_) => vec![None; question.contacts.len()],
    }
}

fn level_checks(hierarchy: &Hierarchy, x: &[f64], proofs: &[LevelProof]) -> Vec<LevelCheck> {
    let mut out: Vec<LevelCheck> = Vec::new();
    for (k, level) in hierarchy.levels.iter().enumerate() {
        out.push(optimality::check(level, x, proofs.get(k)));
    }
    for proof in proofs.iter().skip(hierarchy.levels.len()) {
        let tie_break =
            Level { priority: proof.priority, residuals: hierarchy.tie_break.clone(), ..Level::default() };
        let soft_rows = crate::conic::ConicRows::new(x.len());
        out.push(optimality::check(&Level { soft: soft_rows, ..tie_break }, x, Some(proof)));
    }
    out
}

/// The hard rows at x: those of must-hold tasks and all of them, each relative to the larger of 1 and the size
/// of its terms.
fn hard_rows(question: &Question, hierarchy: &Hierarchy, x: &[f64]) -> Vec<Check> {
    let hard = &hierarchy.hard;
    let must: Vec<&str> = question
        .tasks
        .iter()
        .filter(|t| t.importance == Importance::MustHold)
        .map(|t| t.name.as_str())
        .collect();
    let (mut all, mut held) = (Worst::default(), Worst::default());
    let mut found = vec![false; must.len()];
    for block in rows::blocks(hard) {
        let slack: Vec<f64> = block.rows.clone().map(|i| hard.rhs[i] - hard.matrix.row_dot(i, x)).collect();
        let size = block.rows.clone().fold(1.0, |s, i| {
            rows::larger(s, rows::row_size(&hard.matrix, &hard.rhs, i, x))
        });
        let value = rows::excess(block.cone, &slack) / size;
        let name = &hard.names[block.rows.start];
        let place = || format!("{} {}", name.group, name.part);
        all.record(value, place);
        if let Some(k) = must.iter().position(|m| *m == name.group) {
            found[k] = true;
            held.record(value, place);
        }
    }
    for (name, _) in must.iter().zip(&found).filter(|(_, found)| !**found) {
        held.record(f64::NAN, || format!("{name}: no rows"));
    }
    let relative_to = "of the row's natural size or its terms";
    let mut out = vec![all.check("hard-rows", relative_to, physics::PHYSICS_BOUND)];
    if !must.is_empty() {
        out.push(held.check("must-hold", relative_to, physics::PHYSICS_BOUND));
    }
    out
}

/// Lengths of question and claim agree.
fn fitting(question: &Question, claim: &Claim) -> Result<(), &'static str> {
    let model = &question.model;
    let contacts = question.contacts.len();
    let pairs = [
        (claim.acceleration.len() == model.velocities(), "accelerations"),
        (claim.torques.len() == model.joints.len(), "torques"),
        (claim.wrenches.len() == contacts, "wrenches"),
        (claim.vertex_forces.len() == contacts, "vertex forces"),
        (question.state.position.len() == model.joints.len(), "joint positions"),
        (question.state.velocity.len() == model.joints.len(), "joint velocities"),
    ];
    pairs.into_iter().try_for_each(|(fits, what)| if fits { Ok(()) } else { Err(what) })
}

/// Hierarchy and point agree.
fn point_fits(hierarchy: &Hierarchy, x: &[f64]) -> Result<(), &'static str> {
    let hard = &hierarchy.hard;
    let fits = hierarchy.columns.len() == x.len() && rows::fits(hard, x.len()) && hard.names.len() == hard.rhs.len();
    if fits { Ok(()) } else { Err("hierarchy") }
}
