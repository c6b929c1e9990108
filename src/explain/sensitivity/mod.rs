//! How torques, wrenches and margins move with stiffness, damping and friction.
//!
//! The answer is the end of a cascade of optimality conditions. With the active set of every level known, each level is
//! differentiated in turn ([`level`]): what it decided (its residuals, the excess it granted, the rays its cones are held on)
//! enters the next one as equations that move with the parameters. Only the DATA are differenced; answers never are. Derivatives
//! are per relative change: `d/d ln p`, the change for p times (1 + e) being e times this.

mod constraint;
mod data;
mod level;
mod path;

use super::ExplainError;
use super::vary::{Parameter, ParameterKind, varied};
use crate::conic::Hierarchy;
use crate::problem::Assembly;
use crate::problem::limits::LimitBlock;
use crate::problem::question::Question;
use crate::solve::{HierarchySolution, Status};
use data::Data;
use nalgebra::DVector;

/// Relative step of the central differences of the data.
const STEP: f64 = 1e-5;
/// A multiplier below this part of its level's largest is about to leave the active set.
pub const NEAR_MULTIPLIER: f64 = 1e-4;
/// An inactive row or cone with less (scaled) slack than this is about to enter the active set.
pub const NEAR_SLACK: f64 = 1e-4;
/// A level whose gradient the active set leaves unexplained by more than this part is not differentiated.
const UNEXPLAINED: f64 = 1e-7;

/// The answer as found, and the problem it answers.
pub struct Base<'a> {
    /// The problem.
    pub assembly: &'a Assembly,
    /// Its solution.
    pub solution: &'a HierarchySolution,
}

/// Derivatives by one parameter.
#[derive(Debug, Clone, PartialEq)]
pub struct Derivative {
    /// The parameter.
    pub parameter: Parameter,
    /// Its present value; none where it stands for two different values. Divide by it for the derivative per unit.
    pub value: Option<f64>,
    /// Torque per joint (N m or N), per relative change.
    pub torques: Vec<f64>,
    /// Generalised acceleration, base part in world axes (m/s^2, rad/s^2), per relative change.
    pub accelerations: Vec<f64>,
    /// Wrench at the tick's end per contact (force N, moment N m, world axes), per relative change.
    pub wrenches: Vec<[f64; 6]>,
    /// Margins in the order of the answer's margins, each in its own unit, per relative change.
    pub margins: Vec<f64>,
    /// Relative change of the parameter at which, by linear prediction, a limit that does not bind yet comes to bind; none
    /// where no limit comes closer.
    pub reaches: Option<f64>,
}

/// A limit at which the active set is about to change, so that the derivatives hold on one side only, or nowhere near.
#[derive(Debug, Clone, PartialEq)]
pub struct NearChange {
    /// Limit.
    pub limit: String,
    /// The row, or the first of its cone.
    pub part: String,
    /// Slack (scaled) of a limit that does not bind, or multiplier relative to the largest of its level.
    pub value: f64,
    /// True where it binds now.
    pub binds: bool,
}

/// Derivatives of an answer.
#[derive(Debug, Clone, PartialEq)]
pub struct Sensitivity {
    /// Per contact: stiffness and damping (both parts together, then each), friction. Empty where there are none, see `why_not`.
    pub derivatives: Vec<Derivative>,
    /// Parameters by which there is no derivative: the answer jumps when one of them changes alone (a priority that does not care
    /// how it reaches its optimum, until the parameter makes it care).
    pub undefined: Vec<Parameter>,
    /// Where the active set is about to change.
    pub near: Vec<NearChange>,
    /// Why there are no derivatives, where there are none.
    pub why_not: Option<&'static str>,
}

impl Sensitivity {
    fn none(why: &'static str) -> Sensitivity {
        Sensitivity { derivatives: Vec::new(), undefined: Vec::new(), near: Vec::new(), why_not: Some(why) }
    }
}

/// Differentiates an answer. `build` assembles a variation of the question exactly as the answer's problem was assembled.
pub fn differentiate<E: From<ExplainError>>(
    question: &Question,
    base: &Base,
    build: &mut dyn FnMut(&Question) -> Result<Assembly, E>,
) -> Result<Sensitivity, E> {
    if base.solution.status == Status::IllPosed {
        return Ok(Sensitivity::none("the answer moves like the square root of the data: there is no derivative"));
    }
    let parameters = elementary(question);
    let mut varied_data: Vec<[Hierarchy; 2]> = Vec::with_capacity(parameters.len());
    let mut varied_limits = Vec::with_capacity(parameters.len());
    for &parameter in &parameters {
        let plus = build(&varied(question, parameter, 1.0 + STEP))?;
        let minus = build(&varied(question, parameter, 1.0 - STEP))?;
        varied_limits.push([plus.limits, minus.limits]);
        varied_data.push([plus.hierarchy, minus.hierarchy]);
    }
    let data = Data { base: &base.assembly.hierarchy, varied: varied_data, step: STEP };
    if !data.comparable() {
        return Ok(Sensitivity::none("the problem changes its shape with the parameters"));
    }
    let Some(walked) = path::walk(&data, base.solution) else {
        return Ok(Sensitivity::none("a second-order cone is held at a point where it has no direction"));
    };
    if walked.unexplained > UNEXPLAINED {
        return Ok(Sensitivity::none("the active set does not explain the answer to the accuracy derivatives need"));
    }
    let mut parts = Vec::with_capacity(parameters.len());
    for (p, &parameter) in parameters.iter().enumerate() {
        let moved = Moved { base, dx: &walked.dx[p], limits: &varied_limits[p] };
        parts.push(moved.report(parameter, question, walked.reaches[p]));
    }
    let jumping: Vec<Parameter> =
        parameters.iter().zip(&walked.jumps).filter(|(_, jumps)| **jumps).map(|(p, _)| *p).collect();
    let (undefined, derivatives): (Vec<_>, Vec<_>) = with_sums(question, &parts, &walked.slacks)
        .into_iter()
        .partition(|d| jumping.iter().any(|j| j.contact == d.parameter.contact && part_of(j.kind, d.parameter.kind)));
    let undefined = undefined.into_iter().map(|d| d.parameter).collect();
    Ok(Sensitivity { derivatives, undefined, near: walked.near, why_not: None })
}

/// The parameters that are differentiated one by one.
fn elementary(question: &Question) -> Vec<Parameter> {
    use ParameterKind::*;
    let kinds = [NormalStiffness, TangentialStiffness, NormalDamping, TangentialDamping, Friction];
    (0..question.contacts.len())
        .flat_map(|contact| kinds.map(|kind| Parameter { contact, kind }))
        .filter(|p| p.value(question).is_some_and(|v| v > 0.0))
        .collect()
}

/// One direction in which the answer moves.
struct Moved<'a> {
    base: &'a Base<'a>,
    dx: &'a DVector<f64>,
    limits: &'a [Vec<LimitBlock>; 2],
}

impl Moved<'_> {
    fn report(&self, parameter: Parameter, question: &Question, reaches: Option<f64>) -> Derivative {
        let layout = &self.base.assembly.layout;
        let change = layout.physical(self.dx.as_slice());
        Derivative {
            parameter,
            value: parameter.value(question),
            torques: layout.torque.iter().map(|column| column.map_or(0.0, |c| change[c])).collect(),
            accelerations: change[..layout.velocities].to_vec(),
            wrenches: layout
                .contacts
                .iter()
                .map(|c| std::array::from_fn(|k| if k < c.dimension { change[c.wrench + k] } else { 0.0 }))
                .collect(),
            margins: self.margins(&change),
            reaches,
        }
    }

    /// Central differences of the margins along the moving answer.
    fn margins(&self, change: &[f64]) -> Vec<f64> {
        let x = self.base.assembly.layout.physical(&self.base.solution.x);
        let at = |blocks: &[LimitBlock], h: f64| -> Vec<f64> {
            let moved: Vec<f64> = x.iter().zip(change).map(|(x, d)| x + h * d).collect();
            blocks.iter().map(|block| margin(block, &moved)).collect()
        };
        let (plus, minus) = (at(&self.limits[0], STEP), at(&self.limits[1], -STEP));
        plus.iter().zip(&minus).map(|(a, b)| (a - b) / (2.0 * STEP)).collect()
    }
}

/// Slack of a row, or `s_0 - |s_1..|` of a cone.
fn margin(block: &LimitBlock, x: &[f64]) -> f64 {
    let slack = |i: usize| block.rows[i].rhs - block.rows[i].entries.iter().map(|&(c, v)| v * x[c]).sum::<f64>();
    let beyond = (1..block.rows.len()).map(|i| slack(i).powi(2)).sum::<f64>().sqrt();
    if block.rows.is_empty() { 0.0 } else { slack(0) - beyond }
}

/// Whether `kind` moves with `whole`.
fn part_of(kind: ParameterKind, whole: ParameterKind) -> bool {
    use ParameterKind::*;
    match whole {
        Stiffness => matches!(kind, NormalStiffness | TangentialStiffness),
        Damping => matches!(kind, NormalDamping | TangentialDamping),
        other => kind == other,
    }
}

/// Adds stiffness and damping as a whole: the sums of their parts.
fn with_sums(question: &Question, parts: &[Derivative], slacks: &path::Slacks) -> Vec<Derivative> {
    use ParameterKind::*;
    let mut out = Vec::new();
    for contact in 0..question.contacts.len() {
        for (whole, kinds) in [(Stiffness, [NormalStiffness, TangentialStiffness]), (Damping, [NormalDamping, TangentialDamping])] {
            let own: Vec<usize> = (0..parts.len())
                .filter(|&i| parts[i].parameter.contact == contact && kinds.contains(&parts[i].parameter.kind))
                .collect();
            if let Some(sum) = sum(&own.iter().map(|&i| &parts[i]).collect::<Vec<_>>()) {
                let parameter = Parameter { contact, kind: whole };
                out.push(Derivative { parameter, value: parameter.value(question), reaches: slacks.reaches(&own), ..sum });
            }
        }
        out.extend(parts.iter().filter(|d| d.parameter.contact == contact).cloned());
    }
    out
}

fn sum(parts: &[&Derivative]) -> Option<Derivative> {
    let (first, rest) = parts.split_first()?;
    let mut out = (*first).clone();
    let add = |a: &mut [f64], b: &[f64]| a.iter_mut().zip(b).for_each(|(a, b)| *a += b);
    for part in rest {
        add(&mut out.torques, &part.torques);
        add(&mut out.accelerations, &part.accelerations);
        add(&mut out.margins, &part.margins);
        out.wrenches.iter_mut().zip(&part.wrenches).for_each(|(a, b)| add(a, b));
    }
    Some(out)
}
