//! Priority by priority: residuals of the claim against the reference's.
//!
//! Given all priorities above, the weighted residuals at an optimum are unique (the cost is strictly convex in them). So a priority
//! is met where their norm AND they themselves are the reference's within tolerance: the norm alone moves only with the square of an
//! error where tasks of one priority compete. Below the first that differs nothing can be said: what was lost above may have bought
//! something there.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::implied::Consequence;
use super::readings::{on_vertices, room};
use super::report::{LevelReading, TaskPart, TaskReading};
use super::tolerances::Tolerances;
use super::vertex;
use crate::problem::question::{Importance, Task, Treatment};
use crate::problem::rows::{PhysicalRow, Scaler};
use crate::problem::tasks::TargetRow;
use crate::reference::{Trouble, Work};

fn residual(row: &TargetRow, x: &[f64]) -> f64 {
    row.offset + row.entries.iter().map(|&(c, v)| v * x[c]).sum::<f64>() - row.desired
}

/// What the row amounts to with every unknown at its natural size.
fn natural(work: &Work, row: &TargetRow) -> f64 {
    let scaler = Scaler { columns: &work.assembly.layout.columns };
    scaler.natural_scale(&PhysicalRow { entries: row.entries.clone(), rhs: 0.0, part: String::new(), unit: row.unit })
}

/// Tasks that must hold, at `at`.
pub fn must_hold(work: &Work, at: &Consequence, reference: Option<&[f64]>, tolerances: &Tolerances) -> Vec<TaskReading> {
    let tasks = work.question.tasks.iter().zip(&work.assembly.targets);
    let held = tasks.filter(|(task, _)| task.importance == Importance::MustHold);
    held.map(|(task, rows)| {
        let inside = |row: &TargetRow| residual(row, &at.x).abs() <= tolerances.of_limit(natural(work, row));
        TaskReading { broken: !rows.iter().all(inside), ..reading(task, rows, &at.x, reference) }
    })
    .collect()
}

fn reading(task: &Task, rows: &[TargetRow], x: &[f64], reference: Option<&[f64]>) -> TaskReading {
    let mut parts: Vec<TaskPart> = Vec::new();
    for row in rows {
        let own = residual(row, x);
        let there = reference.map(|reference| residual(row, reference));
        let difference = own - there.unwrap_or(0.0);
        match parts.iter_mut().find(|part| part.unit == row.unit) {
            Some(part) => {
                part.norm = part.norm.hypot(own);
                part.reference_norm = part.reference_norm.zip(there).map(|(norm, r)| norm.hypot(r));
                if difference.abs() > part.worst_difference.abs() {
                    part.worst = row.part.clone();
                    part.worst_difference = difference;
                }
            }
            None => parts.push(TaskPart {
                unit: row.unit,
                norm: own.abs(),
                reference_norm: there.map(f64::abs),
                worst: row.part.clone(),
                worst_difference: difference,
            }),
        }
    }
    TaskReading { name: task.name.clone(), parts, broken: false }
}

/// Every priority, first to last.
pub fn levels(
    work: &Work,
    at: &Consequence,
    reference: &Consequence,
    tolerances: &Tolerances,
    cancel: &Arc<AtomicBool>,
) -> Result<Vec<LevelReading>, Trouble> {
    let mut out: Vec<LevelReading> = Vec::new();
    let mut comparable = true;
    for level in &work.assembly.hierarchy.levels {
        let mut sums = Sums::default();
        let mut tasks = Vec::new();
        for (task, rows) in work.question.tasks.iter().zip(&work.assembly.targets) {
            if task.importance != Importance::Priority(level.priority) {
                continue;
            }
            for row in rows {
                let scale = if row.angular { task.scale_angular } else { task.scale };
                let factor = task.weight.sqrt() / scale;
                sums.add(factor, residual(row, &at.x), residual(row, &reference.x), tolerances.relative * natural(work, row));
            }
            tasks.push(reading(task, rows, &at.x, Some(&reference.x)));
        }
        add_soft(work, level.priority, (at, reference), tolerances, &mut sums, cancel)?;
        let (norm, reference_norm) = (sums.own.sqrt(), sums.reference.sqrt());
        let tolerance = tolerances.loss.unwrap_or(sums.tolerance.sqrt());
        let matches = (norm - reference_norm).abs() <= tolerance && sums.distance.sqrt() <= tolerance;
        out.push(LevelReading {
            priority: level.priority,
            comparable,
            matches,
            norm,
            reference_norm,
            distance: sums.distance.sqrt(),
            tolerance,
            tasks,
        });
        comparable &= matches;
    }
    Ok(out)
}

/// Soft limits of one priority: their excess counts like a residual.
fn add_soft(
    work: &Work,
    level: u32,
    (at, reference): (&Consequence, &Consequence),
    tolerances: &Tolerances,
    sums: &mut Sums,
    cancel: &Arc<AtomicBool>,
) -> Result<(), Trouble> {
    for block in &work.assembly.limits {
        let Treatment::Soft { priority, weight, scale } = block.treatment else { continue };
        if priority != level || on_vertices(work, block) {
            continue;
        }
        let excess = |x: &[f64]| (-room(block, x)).max(0.0);
        sums.add(weight.sqrt() / scale, excess(&at.x), excess(&reference.x), tolerances.of_limit(block.scale));
    }
    for index in (0..work.scene.soles.len()).filter(|&i| vertex::spreads(work, i)) {
        let Some(block) = vertex::blocks(work, index).next() else { continue };
        let Treatment::Soft { priority, weight, scale } = block.treatment else { continue };
        if priority == level {
            let own = vertex::soft_cost(work, index, &at.wrenches[index], cancel)?.sqrt();
            let there = vertex::soft_cost(work, index, &reference.wrenches[index], cancel)?.sqrt();
            let factor = weight.sqrt() / scale;
            sums.add(factor, own / factor, there / factor, tolerances.of_limit(block.scale));
        }
    }
    Ok(())
}

/// Sums of squares over one priority.
#[derive(Default)]
struct Sums {
    own: f64,
    reference: f64,
    distance: f64,
    tolerance: f64,
}

impl Sums {
    fn add(&mut self, factor: f64, own: f64, reference: f64, tolerance: f64) {
        self.own += (factor * own).powi(2);
        self.reference += (factor * reference).powi(2);
        self.distance += (factor * (own - reference)).powi(2);
        self.tolerance += (factor * tolerance).powi(2);
    }
}
