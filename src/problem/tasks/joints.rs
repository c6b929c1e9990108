//! Posture and joint accelerations: `q_ddot = reference + gain_v (q_dot_ref - q_dot) + gain_p (q_ref - q)`.

use super::super::layout::acceleration_unit;
use super::super::question::Gains;
use super::{Context, TargetRow};

/// Joint accelerations that lead to a posture.
pub fn posture(joints: &[(usize, f64, f64, f64)], gains: &Gains, context: &Context) -> Vec<TargetRow> {
    let state = &context.question.state;
    joints
        .iter()
        .map(|&(j, position, velocity, feedforward)| {
            let desired = feedforward
                + gains.velocity * (velocity - state.velocity[j])
                + gains.position * (position - state.position[j]);
            joint_row(j, desired, context)
        })
        .collect()
}

/// Given joint accelerations.
pub fn acceleration(list: &[(usize, f64)], context: &Context) -> Vec<TargetRow> {
    list.iter().map(|&(j, desired)| joint_row(j, desired, context)).collect()
}

fn joint_row(joint: usize, desired: f64, context: &Context) -> TargetRow {
    let model = &*context.question.model;
    let column = model.joint_offset() + joint;
    TargetRow {
        entries: vec![(column, 1.0)],
        offset: 0.0,
        desired,
        part: model.joints[joint].name.clone(),
        unit: acceleration_unit(model, column),
        angular: false,
    }
}
