//! Small builders, and optimality conditions recomputed in plain code that shares nothing with the solver.
#![allow(dead_code)]

use underfoot::conic::{Column, Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName};
use underfoot::solve::{HierarchySolution, LevelOutcome};

pub fn name(group: &str) -> RowName {
    RowName { group: group.into(), part: String::new(), unit: "1", scale: 1.0, physics: false }
}

pub fn columns(n: usize) -> Vec<Column> {
    (0..n).map(|j| Column { name: format!("x{j}"), unit: "1", scale: 1.0 }).collect()
}

fn entries(row: &[f64]) -> Vec<(usize, f64)> {
    row.iter().copied().enumerate().collect()
}

/// Rows `a x + s = b` under the given cones.
pub fn conic(n: usize, cones: &[Cone], rows: &[(&[f64], f64)]) -> ConicRows {
    let mut out = ConicRows::new(n);
    for (row, rhs) in rows {
        out.matrix.push(entries(row));
        out.rhs.push(*rhs);
        out.names.push(name("limit"));
    }
    out.cones = cones.to_vec();
    out
}

/// Residuals `w (a x - b)^2`.
pub fn residuals(n: usize, rows: &[(f64, &[f64], f64)]) -> ResidualRows {
    let mut out = ResidualRows::new(n);
    for (weight, row, rhs) in rows {
        out.matrix.push(entries(row));
        out.rhs.push(*rhs);
        out.weight.push(*weight);
        out.names.push(name("task"));
    }
    out
}

pub fn level(priority: u32, residuals: ResidualRows) -> Level {
    let n = residuals.matrix.columns;
    Level { priority, residuals, soft: ConicRows::new(n), soft_weight: Vec::new() }
}

pub fn identity(n: usize) -> ResidualRows {
    let mut out = ResidualRows::new(n);
    for j in 0..n {
        out.matrix.push([(j, 1.0)]);
        out.rhs.push(0.0);
        out.weight.push(1.0);
        out.names.push(name("tie-break"));
    }
    out
}

pub fn hierarchy(n: usize, hard: ConicRows, levels: Vec<Level>) -> Hierarchy {
    Hierarchy { columns: columns(n), hard, levels, tie_break: identity(n), auxiliary: Vec::new() }
}

fn outside(cone: &Cone, v: &[f64], dual: bool) -> f64 {
    match cone {
        Cone::Zero(_) if dual => 0.0,
        Cone::Zero(_) => v.iter().fold(0.0, |m, x| f64::max(m, x.abs())),
        Cone::Nonnegative(_) => v.iter().fold(0.0, |m, x| f64::max(m, -x)),
        Cone::SecondOrder(_) => (v[1..].iter().map(|x| x * x).sum::<f64>().sqrt() - v[0]).max(0.0),
    }
}

/// The largest breach of the optimality conditions of one level at x, with the multipliers its outcome states,
/// per unit of the largest multiplier (a slack is known to rounding, its product with a multiplier to as much times that).
pub fn breach(level: &Level, outcome: &LevelOutcome, x: &[f64]) -> f64 {
    let mut worst = 0.0f64;
    let mut gradient = vec![0.0; x.len()];
    let r = &level.residuals;
    for i in 0..r.rhs.len() {
        let pull = 2.0 * r.weight[i] * (r.matrix.row_dot(i, x) - r.rhs[i]);
        r.matrix.row(i).for_each(|(j, v)| gradient[j] += v * pull);
    }
    let system = &outcome.system.rows;
    system.matrix.add_transpose_times(&outcome.multipliers, &mut gradient);
    let s = system.slack(x);
    let mut at = 0;
    for cone in &system.cones {
        let range = at..at + cone.dimension();
        at = range.end;
        worst = worst.max(outside(cone, &s[range.clone()], false));
        worst = worst.max(outside(cone, &outcome.multipliers[range.clone()], true));
        worst = worst.max(range.map(|i| s[i] * outcome.multipliers[i]).sum::<f64>().abs());
    }
    assert_eq!(at, s.len(), "cones cover the rows");
    if !level.soft.rhs.is_empty() {
        level.soft.matrix.add_transpose_times(&outcome.soft_multipliers, &mut gradient);
        let s = level.soft.slack(x);
        let (mut at, mut slack) = (0, 0);
        for cone in &level.soft.cones {
            let pieces: Vec<Cone> = match cone {
                Cone::Nonnegative(n) => vec![Cone::Nonnegative(1); *n],
                other => vec![*other],
            };
            for piece in pieces {
                let mut part = s[at..at + piece.dimension()].to_vec();
                let z = &outcome.soft_multipliers[at..at + piece.dimension()];
                part[0] += outcome.soft_slack[slack];
                worst = worst.max(outside(&piece, &part, false)).max(outside(&piece, z, true));
                worst = worst.max(part.iter().zip(z).map(|(a, b)| a * b).sum::<f64>().abs());
                worst = worst.max((2.0 * level.soft_weight[slack] * outcome.soft_slack[slack] - z[0]).abs());
                worst = worst.max(-outcome.soft_slack[slack]);
                at += piece.dimension();
                slack += 1;
            }
        }
    }
    let size = outcome.multipliers.iter().chain(&outcome.soft_multipliers).fold(1.0f64, |m, v| m.max(v.abs()));
    gradient.iter().fold(worst, |m, v| m.max(v.abs())) / size
}

/// The largest breach over all levels, at the final x.
pub fn breach_of_all(hierarchy: &Hierarchy, answer: &HierarchySolution) -> f64 {
    assert_eq!(answer.levels.len(), hierarchy.levels.len());
    let levels = hierarchy.levels.iter().zip(&answer.levels).map(|(l, o)| breach(l, o, &answer.x));
    levels.fold(0.0, f64::max)
}

pub fn close(found: &[f64], expected: &[f64], tolerance: f64) {
    assert_eq!(found.len(), expected.len());
    for (a, b) in found.iter().zip(expected) {
        assert!((a - b).abs() <= tolerance, "found {found:?}, expected {expected:?}");
    }
}
