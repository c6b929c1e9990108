//! Limits on torques: bounds, torque-speed lines, coupled drives.

use super::super::layout::{Layout, force_unit};
use super::super::question::{Limit, Question};
use super::{LimitBlock, at_most, between};

/// `|tau_j| <= bound_j`.
pub fn bounds(limit: &Limit, list: &[(usize, f64)], question: &Question, layout: &Layout, out: &mut Vec<LimitBlock>) {
    let lines: Vec<_> = list.iter().map(|&(j, bound)| (j, -bound, bound, bound)).collect();
    ranges(limit, &lines, question, layout, out);
}

/// A motor at speed has less torque left in the direction of motion:
/// `tau <= stall (1 - q_dot / v0)`, `tau >= -stall (1 + q_dot / v0)`, and never more than the stall torque.
/// Beyond the no-load speed the motor can only brake.
pub fn speed_line(
    limit: &Limit,
    list: &[(usize, f64, f64)],
    question: &Question,
    layout: &Layout,
    out: &mut Vec<LimitBlock>,
) {
    let lines: Vec<_> = list
        .iter()
        .map(|&(j, stall, no_load)| {
            let ratio = question.state.velocity[j] / no_load;
            let upper = (stall * (1.0 - ratio)).min(stall);
            let lower = (-stall * (1.0 + ratio)).max(-stall);
            (j, lower, upper, stall)
        })
        .collect();
    ranges(limit, &lines, question, layout, out);
}

fn ranges(
    limit: &Limit,
    lines: &[(usize, f64, f64, f64)],
    question: &Question,
    layout: &Layout,
    out: &mut Vec<LimitBlock>,
) {
    let model = &*question.model;
    for &(j, lower, upper, scale) in lines {
        if let Some(column) = layout.torque[j] {
            let unit = force_unit(model, model.joint_offset() + j);
            let entries = vec![(column, 1.0)];
            out.extend(between(&limit.name, &model.joints[j].name, unit, &entries, (lower, upper), positive(scale), limit.treatment));
        }
    }
}

/// `sum coefficient tau <= bound`; joints without a motor contribute nothing.
pub fn coupled(
    limit: &Limit,
    coefficients: &[(usize, f64)],
    bound: f64,
    question: &Question,
    layout: &Layout,
    out: &mut Vec<LimitBlock>,
) {
    let entries: Vec<_> = coefficients.iter().filter_map(|&(j, c)| Some((layout.torque[j]?, c))).collect();
    let largest = entries.iter().map(|&(column, c)| (c * layout.columns[column].scale).abs()).fold(0.0, f64::max);
    let unit = coefficients.first().map_or("N m", |&(j, _)| force_unit(&question.model, question.model.joint_offset() + j));
    out.push(at_most(&limit.name, "sum".into(), unit, entries, bound, positive(bound.abs().max(largest)), limit.treatment));
}

/// A scale must be positive: a bound of zero scales by one.
fn positive(scale: f64) -> f64 {
    if scale > 0.0 { scale } else { 1.0 }
}
