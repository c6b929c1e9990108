//! Momentum at first and second rate, and the centre of mass.
//!
//! L = (linear momentum, angular momentum about the centre of mass c), both in world axes.
//!
//! - First rate, the habit on rigid ground: `L_dot = A nu_dot + A_dot nu`, A the centroidal momentum matrix. By the
//!   equation of motion it equals `sum X w_bar + m g`.
//! - Second rate, for ground that gives: with the wrench moving from `now` to `w_plus` within the tick,
//!   `w_dot = (w_plus - now)/T` and `L_ddot = sum X w_dot + X_dot now`:
//!   linear `sum f_dot`, angular `sum (p - c) x f_dot + m_dot + (p_dot - c_dot) x f`. Loads from outside are
//!   constant, so they enter by their moving lever alone.

use super::super::question::{MomentumAim, PointAim, Task};
use super::super::rows::Entries;
use super::{Context, TargetRow, vector_rows};
use crate::spatial::{Vec3, skew};

/// `desired = rate + momentum_gain (reference - L) + position_gain m (center - c)`.
pub fn first_rate(task: &Task, aim: &MomentumAim, context: &Context) -> Vec<TargetRow> {
    let ws = &context.scene.dynamics;
    vector_rows(&task.axes, 0..6, ["N", "N m"], |k| {
        let (part, i) = (k / 3, k % 3);
        let mut desired = aim.rate[part][i] + aim.momentum_gain[part] * (aim.reference[part][i] - ws.momentum[k]);
        if part == 0 {
            desired += aim.position_gain * ws.mass * (aim.center[i] - ws.center_of_mass[i]);
        }
        (momentum_entries(context, k, 1.0), ws.momentum_bias[k], desired)
    })
}

/// `desired = second_rate + rate_gain (rate - L_dot) + momentum_gain (reference - L) + position_gain m (center - c)`.
pub fn second_rate(task: &Task, aim: &MomentumAim, context: &Context) -> Vec<TargetRow> {
    let ws = &context.scene.dynamics;
    let rate = context.scene.momentum_rate_now(&context.question.gravity);
    let (entries, offsets) = second_rate_map(context);
    vector_rows(&task.axes, 0..6, ["N/s", "N m/s"], |k| {
        let (part, i) = (k / 3, k % 3);
        let mut desired = aim.second_rate[part][i]
            + aim.rate_gain[part] * (aim.rate[part][i] - rate[part][i])
            + aim.momentum_gain[part] * (aim.reference[part][i] - ws.momentum[k]);
        if part == 0 {
            desired += aim.position_gain * ws.mass * (aim.center[i] - ws.center_of_mass[i]);
        }
        (entries[k].clone(), offsets[k], desired)
    })
}

/// Acceleration of the centre of mass, `c_ddot = (A nu_dot + A_dot nu) / m`.
pub fn center_of_mass(task: &Task, aim: &PointAim, context: &Context) -> Vec<TargetRow> {
    let ws = &context.scene.dynamics;
    vector_rows(&task.axes, 0..3, ["m/s^2", "rad/s^2"], |k| {
        let desired = aim.acceleration[k]
            + aim.gains.velocity * (aim.velocity[k] - ws.center_of_mass_velocity[k])
            + aim.gains.position * (aim.position[k] - ws.center_of_mass[k]);
        (momentum_entries(context, k, 1.0 / ws.mass), ws.momentum_bias[k] / ws.mass, desired)
    })
}

fn momentum_entries(context: &Context, k: usize, factor: f64) -> Entries {
    let a = &context.scene.dynamics.momentum_matrix;
    (0..context.layout.velocities).map(|j| (j, factor * a[(k, j)])).collect()
}

/// `L_ddot` as entries on the wrench columns, and its value when every `w_plus` is zero.
fn second_rate_map(context: &Context) -> (Vec<Entries>, [f64; 6]) {
    let ws = &context.scene.dynamics;
    let tick = context.question.tick.length;
    let mut entries: Vec<Entries> = vec![Vec::new(); 6];
    let mut offsets = [0.0; 6];
    let mut moving_lever = |velocity: &Vec3, force: &Vec3| {
        let turn = (velocity - ws.center_of_mass_velocity).cross(force);
        for k in 0..3 {
            offsets[3 + k] += turn[k];
        }
    };
    for sole in &context.scene.soles {
        moving_lever(&sole.motion.twist.linear, &sole.map.now.force);
    }
    for load in &context.scene.loads {
        moving_lever(&load.velocity, &load.wrench.force);
    }
    for (sole, columns) in context.scene.soles.iter().zip(&context.layout.contacts) {
        let lever = skew(&(sole.motion.pose.translation - ws.center_of_mass));
        let now = sole.map.now.to_vec6();
        let mut add = |k: usize, l: usize, factor: f64| {
            if factor != 0.0 && l < columns.dimension {
                entries[k].push((columns.wrench + l, factor / tick));
                offsets[k] -= factor * now[l] / tick;
            }
        };
        for k in 0..3 {
            add(k, k, 1.0);
            add(3 + k, 3 + k, 1.0);
            for l in 0..3 {
                add(3 + k, l, lever[(k, l)]);
            }
        }
    }
    (entries, offsets)
}
