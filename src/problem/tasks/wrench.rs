//! Wrench of a sole at the tick's end, as a value, approached at a rate, or kept near the present one.
//!
//! Approach: `w_plus = now + T rate (value - now)`, a first-order decay of the difference. Smoothness: the same
//! with `value = now`.

use super::super::question::Task;
use super::{Context, TargetRow, vector_rows};
use crate::spatial::Wrench;

/// A wanted wrench under one contact.
pub fn wrench(task: &Task, contact: usize, value: &Wrench, approach: Option<f64>, context: &Context) -> Vec<TargetRow> {
    let now = context.scene.soles[contact].map.now.to_vec6();
    let value = value.to_vec6();
    let desired = match approach {
        None => value,
        Some(rate) => now + (value - now) * (context.question.tick.length * rate),
    };
    contact_rows(task, contact, context, |k| desired[k])
}

/// Every known present wrench, or one, is wanted again.
pub fn smoothness(task: &Task, contact: Option<usize>, context: &Context) -> Vec<TargetRow> {
    let mut rows = Vec::new();
    for (index, sole) in context.scene.soles.iter().enumerate() {
        if contact.is_none_or(|c| c == index) && sole.map.now_known {
            let now = sole.map.now.to_vec6();
            rows.extend(contact_rows(task, index, context, |k| now[k]).into_iter().map(|mut row| {
                row.part = format!("{}:{}", sole.name, row.part);
                row
            }));
        }
    }
    rows
}

fn contact_rows(task: &Task, contact: usize, context: &Context, desired: impl Fn(usize) -> f64) -> Vec<TargetRow> {
    let columns = &context.layout.contacts[contact];
    vector_rows(&task.axes, 0..columns.dimension, ["N", "N m"], |k| {
        (vec![(columns.wrench + k, 1.0)], 0.0, desired(k))
    })
}
