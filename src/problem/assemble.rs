//! The hierarchy: physics and hard limits for every level, then tasks and soft limits by priority,
//! then the tie-break.

use std::collections::BTreeMap;

use super::layout::Layout;
use super::limits::{self, LimitBlock, VertexViolations};
use super::physics;
use super::question::{Importance, Question, Treatment};
use super::rows::{PhysicalRow, Scaler, merge_cones};
use super::scene::Scene;
use super::tasks::{self, Context, TargetRow};
use crate::conic::{Cone, ConicRows, Hierarchy, Level, ResidualRows};

/// Weight of accelerations, wrenches and vertex forces (scaled) in the tie-break, beside torques at 1: part of
/// the definition of the answer where the question leaves freedom, not a numerical crutch.
const TIE_BREAK_REST: f64 = 1e-4;

/// The question as numbers.
#[derive(Debug, Clone)]
pub struct Assembly {
    /// Columns.
    pub layout: Layout,
    /// The scaled hierarchy.
    pub hierarchy: Hierarchy,
    /// Rows of each task, in request order.
    pub targets: Vec<Vec<TargetRow>>,
    /// Every limit block, in the order they were made.
    pub limits: Vec<LimitBlock>,
    /// Per level: `physical cost = scaled cost * cost_unit`.
    pub cost_unit: Vec<f64>,
}

/// Assembles the question. `violations`: see [`VertexViolations`].
pub fn assemble(question: &Question, scene: &Scene, violations: &VertexViolations) -> Assembly {
    let layout = Layout::new(question, scene);
    let context = Context { question, scene, layout: &layout };
    let targets: Vec<Vec<TargetRow>> = question.tasks.iter().map(|task| tasks::rows(task, &context)).collect();
    let limits = limits::blocks(question, scene, &layout, violations);
    let scaler = Scaler { columns: &layout.columns };
    let columns = layout.columns.len();

    let mut hard = ConicRows::new(columns);
    physics::push(question, scene, &layout, &scaler, &mut hard);
    for (task, rows) in question.tasks.iter().zip(&targets) {
        if task.importance == Importance::MustHold {
            let rows: Vec<PhysicalRow> = rows.iter().map(equation).collect();
            scaler.push_each(&mut hard, true, &task.name, false, &rows);
        }
    }
    let mut levels: BTreeMap<u32, Level> = BTreeMap::new();
    for block in &limits {
        push_limit(block, question.tick.length, &scaler, &mut hard, &mut levels, columns);
    }
    merge_cones(&mut hard);
    for (task, rows) in question.tasks.iter().zip(&targets) {
        if let Importance::Priority(priority) = task.importance {
            let level = levels.entry(priority).or_insert_with(|| empty_level(priority, columns));
            for row in rows {
                let scale = if row.angular { task.scale_angular } else { task.scale };
                scaler.push_residual(&mut level.residuals, &task.name, task.weight, scale, &equation(row));
            }
        }
    }
    let mut levels: Vec<Level> = levels.into_values().collect();
    let cost_unit = levels.iter_mut().map(normalise).collect();
    let hierarchy = Hierarchy {
        tie_break: tie_break(&layout),
        auxiliary: layout.auxiliary(),
        columns: layout.columns.clone(),
        hard,
        levels,
    };
    Assembly { layout, hierarchy, targets, limits, cost_unit }
}

fn empty_level(priority: u32, columns: usize) -> Level {
    Level {
        priority,
        residuals: ResidualRows::new(columns),
        soft: ConicRows::new(columns),
        soft_weight: Vec::new(),
    }
}

/// `entries . x = desired - offset`.
fn equation(row: &TargetRow) -> PhysicalRow {
    PhysicalRow {
        entries: row.entries.clone(),
        rhs: row.desired - row.offset,
        part: row.part.clone(),
        unit: row.unit,
    }
}

fn push_limit(
    block: &LimitBlock,
    tick: f64,
    scaler: &Scaler,
    hard: &mut ConicRows,
    levels: &mut BTreeMap<u32, Level>,
    columns: usize,
) {
    match block.treatment {
        Treatment::Hard => scaler.push_cone(hard, block.cone, &block.group, false, block.scale, &block.rows),
        Treatment::Decay { rate } => {
            // The violation may be as large as what is left of the present one: `s + allowance e in K`.
            let mut rows = block.rows.clone();
            if let Some(first) = rows.first_mut() {
                first.rhs += (1.0 - rate * tick) * block.violation_now;
            }
            scaler.push_cone(hard, block.cone, &block.group, false, block.scale, &rows);
        }
        Treatment::Soft { priority, weight, scale } => {
            let level = levels.entry(priority).or_insert_with(|| empty_level(priority, columns));
            scaler.push_cone(&mut level.soft, block.cone, &block.group, false, block.scale, &block.rows);
            let ratio = block.scale / scale;
            let slacks = if matches!(block.cone, Cone::SecondOrder(_)) { 1 } else { block.rows.len() };
            level.soft_weight.extend(std::iter::repeat_n(weight * ratio * ratio, slacks));
        }
    }
}

/// Divides the weights of a level by the largest, so that its cost is near one unit per scaled residual; returns the divisor.
fn normalise(level: &mut Level) -> f64 {
    merge_cones(&mut level.soft);
    let largest = level.residuals.weight.iter().chain(&level.soft_weight).copied().fold(0.0, f64::max);
    if largest <= 0.0 {
        return 1.0;
    }
    level.residuals.weight.iter_mut().chain(&mut level.soft_weight).for_each(|w| *w /= largest);
    largest
}

/// Least torque (scaled), with a small weight on everything else so that one point is left.
fn tie_break(layout: &Layout) -> ResidualRows {
    let mut rows = ResidualRows::new(layout.columns.len());
    for (i, column) in layout.columns.iter().enumerate() {
        rows.matrix.push([(i, 1.0)]);
        rows.rhs.push(0.0);
        rows.weight.push(if layout.torque.contains(&Some(i)) { 1.0 } else { TIE_BREAK_REST });
        rows.names.push(crate::conic::RowName {
            group: "tie-break".into(),
            part: column.name.clone(),
            unit: column.unit,
            scale: column.scale,
            physics: false,
        });
    }
    rows
}
