//! Every hard limit of the question, stated again from the question and evaluated on the claim.
//!
//! Figures are excesses relative to the limit's own range. Soft limits are the business of the
//! optimality check. A `decay` limit may stay violated, but no more than `(1 - lambda T) max(0, viol(now))`;
//! where the present wrench is unknown it must hold outright.

use super::friction;
use super::situation::{Situation, unknown_wrench};
use super::worst::Worst;
use super::{Check, Claim};
use crate::problem::question::{Contact, Limit, LimitKind, Treatment};
use crate::spatial::Wrench;

use super::physics::PHYSICS_BOUND;

/// Share of the weight below which no force range is taken to be: a limit of zero has no range of its own.
const LEAST_RANGE: f64 = 1e-2;

/// All hard and decaying limits.
pub fn limits(situation: &Situation, claim: &Claim) -> Check {
    let mut worst = Worst::default();
    passive_joints(situation, claim, &mut worst);
    for limit in &situation.question.limits {
        if limit.treatment == Treatment::Hard {
            joint_limit(situation, claim, limit, &mut worst);
        }
    }
    for (i, contact) in situation.question.contacts.iter().enumerate() {
        let end = claim.wrenches[i].unwrap_or_else(unknown_wrench);
        normal_force(situation, contact, i, &end, &mut worst);
        wrench_rate(situation, contact, i, &end, &mut worst);
        friction::hold(situation, claim, i, &end, &mut worst);
    }
    worst.check("limits", "of the limit's range", PHYSICS_BOUND)
}

/// Share of a present violation that may remain at the tick's end; none where the limit is soft.
pub fn remaining(situation: &Situation, treatment: Treatment) -> Option<f64> {
    match treatment {
        Treatment::Hard => Some(0.0),
        Treatment::Decay { rate } => Some(1.0 - rate * situation.question.tick.length),
        Treatment::Soft { .. } => None,
    }
}

fn passive_joints(situation: &Situation, claim: &Claim, worst: &mut Worst) {
    for (j, joint) in situation.question.model.joints.iter().enumerate() {
        if !joint.actuated {
            worst.record(claim.torques[j].abs() / situation.weight, || format!("passive joint {}", joint.name));
        }
    }
}

/// A bound's own size, or one where it has none.
fn size(bound: f64) -> f64 {
    if bound.abs() > 0.0 && bound.is_finite() { bound.abs() } else { 1.0 }
}

fn joint_limit(situation: &Situation, claim: &Claim, limit: &Limit, worst: &mut Worst) {
    let model = &situation.question.model;
    let state = &situation.question.state;
    let change = |j: usize| claim.acceleration[model.joint_offset() + j];
    let place = |j: usize| format!("{}: {}", limit.name, model.joints[j].name);
    match &limit.kind {
        LimitKind::Torque(joints) => {
            for &(j, bound) in joints {
                worst.record((claim.torques[j].abs() - bound) / size(bound), || place(j));
            }
        }
        LimitKind::TorqueSpeed(joints) => {
            for &(j, stall, no_load) in joints {
                let share = state.velocity[j] / no_load;
                let upper = (stall * (1.0 - share)).clamp(-stall, stall);
                let lower = (-stall * (1.0 + share)).clamp(-stall, stall);
                worst.record((claim.torques[j] - upper) / size(stall), || place(j));
                worst.record((lower - claim.torques[j]) / size(stall), || place(j));
            }
        }
        LimitKind::CoupledTorque { coefficients, bound } => {
            let sum: f64 = coefficients.iter().map(|&(j, c)| c * claim.torques[j]).sum();
            worst.record((sum - bound) / size(*bound), || limit.name.clone());
        }
        LimitKind::Position { joints, horizon } => {
            for &(j, lower, upper) in joints {
                let reached = state.position[j] + horizon * state.velocity[j] + 0.5 * horizon * horizon * change(j);
                let range = size(upper - lower);
                worst.record((reached - upper) / range, || place(j));
                worst.record((lower - reached) / range, || place(j));
            }
        }
        LimitKind::Velocity { joints, horizon } => {
            for &(j, bound) in joints {
                let reached = state.velocity[j] + horizon * change(j);
                worst.record((reached.abs() - bound) / size(bound), || place(j));
            }
        }
    }
}

fn normal_force(situation: &Situation, contact: &Contact, i: usize, end: &Wrench, worst: &mut Worst) {
    let Some(range) = contact.normal_force else { return };
    let Some(remaining) = remaining(situation, range.treatment) else { return };
    let along = |w: &Wrench| contact.ground.normal.dot(&w.force);
    let sides = [(range.least, -1.0, "least"), (range.largest, 1.0, "largest")];
    for (bound, sign, side) in sides {
        let Some(bound) = bound else { continue };
        let excess = |w: &Wrench| sign * (along(w) - bound);
        let allowed = remaining * situation.now(i).map_or(0.0, |now| excess(&now).max(0.0));
        let scale = bound.abs().max(LEAST_RANGE * situation.weight);
        worst.record((excess(end) - allowed) / scale, || {
            format!("{} {side} normal force", situation.name(contact))
        });
    }
}

fn wrench_rate(situation: &Situation, contact: &Contact, i: usize, end: &Wrench, worst: &mut Worst) {
    let Some(rate) = contact.wrench_rate else { return };
    if matches!(rate.treatment, Treatment::Soft { .. }) {
        return;
    }
    // On rigid ground without a measurement there is no present wrench to change from, hence no rate.
    let Some(now) = situation.now(i) else { return };
    let changes = [(rate.force, end.force - now.force, "force"), (rate.moment, end.moment - now.moment, "moment")];
    for (bound, change, kind) in changes {
        let Some(bound) = bound else { continue };
        let bound = bound * situation.question.tick.length;
        for (axis, value) in ["x", "y", "z"].iter().zip(change.iter()) {
            let scale = bound.max(LEAST_RANGE * situation.weight);
            worst.record((value.abs() - bound) / scale, || {
                format!("{} rate of {kind} {axis}", situation.name(contact))
            });
        }
    }
}
