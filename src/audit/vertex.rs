//! A wrench against a friction set over vertex forces: the forces are no part of what torques imply, so the best ones are looked for.
//!
//! Margin: the largest t for which forces f_i with `sum X_i f_i = w` exist whose cone slacks satisfy `s_i - t e in K`. Negative: every
//! way of spreading the wrench over the vertices leaves some cone by -t at least. It is found as the minimum of `(t - R)^2` with R out
//! of reach. Cost of a soft set: the minimum of `sum weight (excess / scale)^2`.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use crate::conic::{Column, Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName};
use crate::problem::limits::{LimitBlock, friction_group};
use crate::problem::question::Treatment;
use crate::problem::vertex_arms;
use crate::reference::{Trouble, Work};
use crate::solve;
use crate::spatial::{Wrench, skew};

/// R in sizes of the wrench: no cone has so much room.
const OUT_OF_REACH: f64 = 100.0;

/// True where contact `index` has such a set.
pub fn spreads(work: &Work, index: usize) -> bool {
    work.assembly.layout.contacts[index].vertices.is_some()
}

/// The blocks of contact `index`'s set.
pub fn blocks(work: &Work, index: usize) -> impl Iterator<Item = &LimitBlock> {
    let group = friction_group(&work.scene.soles[index].name);
    work.assembly.limits.iter().filter(move |block| block.group == group)
}

/// Room that `wrench` has in the set of contact `index` (N, negative outside).
pub fn margin(work: &Work, index: usize, wrench: &Wrench, cancel: &Arc<AtomicBool>) -> Result<f64, Trouble> {
    let mut program = Program::new(work, index, wrench);
    let t = program.columns;
    program.columns += 1;
    let (mut hard, cones) = program.rows(work, index, Some(t));
    append(&mut hard, cones);
    let mut residuals = ResidualRows::new(program.columns);
    residuals.matrix.push([(t, 1.0)]);
    residuals.rhs.push(OUT_OF_REACH);
    residuals.weight.push(1.0);
    residuals.names.push(program.name("room"));
    let level = Level { priority: 1, residuals, soft: ConicRows::new(program.columns), soft_weight: Vec::new() };
    let solution = solve::solve(&program.hierarchy(hard, level), &solve::Options::default(), Some(cancel))?;
    Ok(solution.x.get(t).map_or(f64::NAN, |t| t * program.size))
}

/// Least cost at which `wrench` can be had where the set of contact `index` is soft; zero elsewhere.
pub fn soft_cost(work: &Work, index: usize, wrench: &Wrench, cancel: &Arc<AtomicBool>) -> Result<f64, Trouble> {
    let Some(Treatment::Soft { weight, scale, .. }) = blocks(work, index).next().map(|b| b.treatment) else { return Ok(0.0) };
    let program = Program::new(work, index, wrench);
    let (hard, soft) = program.rows(work, index, None);
    let slacks: usize = soft.cones.iter().map(|c| if matches!(c, Cone::SecondOrder(_)) { 1 } else { c.dimension() }).sum();
    let level = Level { priority: 1, residuals: ResidualRows::new(program.columns), soft, soft_weight: vec![1.0; slacks] };
    let solution = solve::solve(&program.hierarchy(hard, level), &solve::Options::default(), Some(cancel))?;
    let excess = solution.levels.first().map_or(f64::NAN, |level| level.cost);
    Ok(weight * excess * (program.size / scale).powi(2))
}

struct Program {
    columns: usize,
    size: f64,
    wrench: Wrench,
}

impl Program {
    fn new(work: &Work, index: usize, wrench: &Wrench) -> Program {
        let columns = 3 * work.assembly.layout.contacts[index].vertex_count;
        let size = wrench.force.norm().max(1e-3 * work.assembly.layout.weight);
        Program { columns, size, wrench: *wrench }
    }

    fn name(&self, part: &str) -> RowName {
        RowName { group: "vertex forces".into(), part: part.into(), unit: "N", scale: self.size, physics: true }
    }

    /// `sum X_i f_i = w`, and the cones, with `t` taken off their slacks where there is such a column.
    fn rows(&self, work: &Work, index: usize, t: Option<usize>) -> (ConicRows, ConicRows) {
        let columns = &work.assembly.layout.contacts[index];
        let start = columns.vertices.unwrap_or(0);
        let arms = vertex_arms(&work.question, work.question.contacts[index].sole, &work.scene.soles[index]);
        let mut sums = ConicRows::new(self.columns);
        let wanted = self.wrench.to_vec6();
        for k in 0..6 {
            let divisor = if k < 3 { 1.0 } else { columns.radius };
            let lever = |i: usize, l: usize| {
                if k < 3 { f64::from(u8::from(k == l)) } else { skew(&arms[i])[(k - 3, l)] / divisor }
            };
            sums.matrix.push((0..arms.len()).flat_map(|i| (0..3).map(move |l| (i, l))).map(|(i, l)| (3 * i + l, lever(i, l))));
            sums.rhs.push(wanted[k] / divisor / self.size);
            sums.names.push(self.name("sum"));
        }
        sums.cones.push(Cone::Zero(6));
        let mut cones = ConicRows::new(self.columns);
        for block in blocks(work, index) {
            for (r, row) in block.rows.iter().enumerate() {
                let shift = t.filter(|_| r == 0).map(|t| (t, 1.0));
                cones.matrix.push(row.entries.iter().map(|&(c, v)| (c - start, v)).chain(shift));
                cones.rhs.push(row.rhs / self.size);
                cones.names.push(self.name(&row.part));
            }
            cones.cones.push(block.cone);
        }
        (sums, cones)
    }

    fn hierarchy(&self, hard: ConicRows, level: Level) -> Hierarchy {
        let mut tie_break = ResidualRows::new(self.columns);
        for i in 0..self.columns {
            tie_break.matrix.push([(i, 1.0)]);
            tie_break.rhs.push(0.0);
            tie_break.weight.push(1.0);
            tie_break.names.push(self.name("size"));
        }
        let column = |i| Column { name: format!("vertex force:{i}"), unit: "N", scale: self.size };
        Hierarchy {
            columns: (0..self.columns).map(column).collect(),
            hard,
            levels: vec![level],
            tie_break,
            auxiliary: Vec::new(),
        }
    }
}

fn append(rows: &mut ConicRows, more: ConicRows) {
    for i in 0..more.rhs.len() {
        rows.matrix.push(more.matrix.row(i).collect::<Vec<_>>());
    }
    rows.rhs.extend(more.rhs);
    rows.names.extend(more.names);
    rows.cones.extend(more.cones);
}
