//! Limits on joint position and speed, looked at over a horizon H of at least one tick.
//!
//! Position: `lower <= q + H q_dot + H^2 q_ddot / 2 <= upper`. Speed: `|q_dot + H q_ddot| <= bound`.

use super::super::layout::turns;
use super::super::question::{Limit, Question};
use super::{LimitBlock, between};

/// Position limits.
pub fn position(limit: &Limit, joints: &[(usize, f64, f64)], horizon: f64, question: &Question, out: &mut Vec<LimitBlock>) {
    let model = &*question.model;
    for &(j, lower, upper) in joints {
        let column = model.joint_offset() + j;
        let drift = question.state.position[j] + horizon * question.state.velocity[j];
        let unit = if turns(model, column) { "rad" } else { "m" };
        let entries = vec![(column, 0.5 * horizon * horizon)];
        let range = (lower - drift, upper - drift);
        let scale = scale(upper - lower);
        out.extend(between(&limit.name, &model.joints[j].name, unit, &entries, range, scale, limit.treatment));
    }
}

/// Speed limits.
pub fn velocity(limit: &Limit, joints: &[(usize, f64)], horizon: f64, question: &Question, out: &mut Vec<LimitBlock>) {
    let model = &*question.model;
    for &(j, bound) in joints {
        let column = model.joint_offset() + j;
        let speed = question.state.velocity[j];
        let unit = if turns(model, column) { "rad/s" } else { "m/s" };
        let entries = vec![(column, horizon)];
        let range = (-bound - speed, bound - speed);
        out.extend(between(&limit.name, &model.joints[j].name, unit, &entries, range, scale(bound), limit.treatment));
    }
}

fn scale(range: f64) -> f64 {
    if range > 0.0 { range } else { 1.0 }
}
