//! One file per kind of limit. Each yields cone blocks `s = rhs - entries . x in cone` in physical
//! units; how strictly they hold (hard, soft, decay) is dealt with once, here.

mod joints;
mod torque;
mod wrench;

pub use wrench::{cone_form, friction_group};

use super::layout::Layout;
use super::question::{LimitKind, Question, Treatment};
use super::rows::PhysicalRow;
use super::scene::Scene;
use crate::conic::Cone;

/// Some rows of a limit that belong to one cone.
#[derive(Debug, Clone, PartialEq)]
pub struct LimitBlock {
    /// Name of the limit, as the answer reports it.
    pub group: String,
    /// `Nonnegative(1)` or `SecondOrder(n)`.
    pub cone: Cone,
    /// Its rows.
    pub rows: Vec<PhysicalRow>,
    /// Divisor of every row (physical unit); a natural size of the limit.
    pub scale: f64,
    /// How strictly it holds.
    pub treatment: Treatment,
    /// Under `Decay`: how much the limit is violated now (physical unit), zero inside.
    pub violation_now: f64,
}

/// Facts about the present that only a solver can tell: for contacts whose vertex friction set decays,
/// how far the present wrench lies outside it (N), in contact order.
pub type VertexViolations = [f64];

/// Every limit block of the question.
pub fn blocks(question: &Question, scene: &Scene, layout: &Layout, violations: &VertexViolations) -> Vec<LimitBlock> {
    let mut out = Vec::new();
    for limit in &question.limits {
        match &limit.kind {
            LimitKind::Torque(list) => torque::bounds(limit, list, question, layout, &mut out),
            LimitKind::TorqueSpeed(list) => torque::speed_line(limit, list, question, layout, &mut out),
            LimitKind::CoupledTorque { coefficients, bound } => {
                torque::coupled(limit, coefficients, *bound, question, layout, &mut out)
            }
            LimitKind::Position { joints, horizon } => joints::position(limit, joints, *horizon, question, &mut out),
            LimitKind::Velocity { joints, horizon } => joints::velocity(limit, joints, *horizon, question, &mut out),
        }
    }
    for index in 0..question.contacts.len() {
        let excess = violations.get(index).copied().unwrap_or(0.0);
        wrench::friction(index, question, scene, layout, excess, &mut out);
        wrench::normal_force(index, question, scene, layout, &mut out);
        wrench::rate(index, question, scene, layout, &mut out);
    }
    out
}

/// A one-row block `entries . x <= bound`.
fn at_most(
    group: &str,
    part: String,
    unit: &'static str,
    entries: super::rows::Entries,
    bound: f64,
    scale: f64,
    treatment: Treatment,
) -> LimitBlock {
    LimitBlock {
        group: group.into(),
        cone: Cone::Nonnegative(1),
        rows: vec![PhysicalRow { entries, rhs: bound, part, unit }],
        scale,
        treatment,
        violation_now: 0.0,
    }
}

/// The two blocks of `lower <= entries . x <= upper`.
fn between(
    group: &str,
    part: &str,
    unit: &'static str,
    entries: &super::rows::Entries,
    range: (f64, f64),
    scale: f64,
    treatment: Treatment,
) -> [LimitBlock; 2] {
    let negative = entries.iter().map(|&(c, v)| (c, -v)).collect();
    [
        at_most(group, format!("{part} upper"), unit, entries.clone(), range.1, scale, treatment),
        at_most(group, format!("{part} lower"), unit, negative, -range.0, scale, treatment),
    ]
}
