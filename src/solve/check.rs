//! Refuses hierarchies whose parts do not fit together, before anything indexes into them.

use super::answer::SolveError;
use crate::conic::{Cone, ConicRows, Hierarchy, ResidualRows, SparseRows};

/// Checks every dimension and every number.
pub(super) fn check(hierarchy: &Hierarchy) -> Result<(), SolveError> {
    let n = hierarchy.columns.len();
    conic("hard rows", &hierarchy.hard, n)?;
    residuals("tie-break", &hierarchy.tie_break, n)?;
    for level in &hierarchy.levels {
        let priority = level.priority;
        residuals(&format!("residuals of priority {priority}"), &level.residuals, n)?;
        let what = format!("soft limits of priority {priority}");
        conic(&what, &level.soft, n)?;
        let mut slacks = 0;
        for cone in &level.soft.cones {
            slacks += match *cone {
                Cone::Zero(rows) => return Err(dimension(format!("{what}: rows of an equality"), 0, rows)),
                Cone::Nonnegative(rows) => rows,
                Cone::SecondOrder(_) => 1,
            };
        }
        length(format!("{what}: weights"), slacks, level.soft_weight.len())?;
        numbers(&format!("{what}: weights"), &level.soft_weight, "positive and finite", |v| v > 0.0)?;
    }
    match hierarchy.auxiliary.iter().find(|&&j| j >= n) {
        Some(&j) => Err(dimension("auxiliary column index, below".into(), n, j)),
        None => Ok(()),
    }
}

fn dimension(what: String, expected: usize, found: usize) -> SolveError {
    SolveError::Dimension { what, expected, found }
}

fn length(what: String, expected: usize, found: usize) -> Result<(), SolveError> {
    if expected == found { Ok(()) } else { Err(dimension(what, expected, found)) }
}

fn numbers(what: &str, values: &[f64], expected: &'static str, good: impl Fn(f64) -> bool) -> Result<(), SolveError> {
    match values.iter().position(|&v| !(v.is_finite() && good(v))) {
        Some(index) => Err(SolveError::Number { what: what.into(), index, value: values[index], expected }),
        None => Ok(()),
    }
}

fn matrix(what: &str, matrix: &SparseRows, rows: usize, columns: usize) -> Result<(), SolveError> {
    // A default matrix over no rows has no offsets at all and counts as fitting any columns.
    if rows == 0 && matrix.rows() == 0 && matrix.index.is_empty() {
        return Ok(());
    }
    length(format!("{what}: columns"), columns, matrix.columns)?;
    length(format!("{what}: offsets"), rows + 1, matrix.start.len())?;
    length(format!("{what}: values"), matrix.index.len(), matrix.value.len())?;
    let ends = matrix.start.last().copied().unwrap_or(0);
    length(format!("{what}: last offset"), matrix.index.len(), ends)?;
    if let Some(i) = (0..rows).find(|&i| matrix.start[i] > matrix.start[i + 1]) {
        return Err(dimension(format!("{what}: offset {} at least", i + 1), matrix.start[i], matrix.start[i + 1]));
    }
    if let Some(&j) = matrix.index.iter().find(|&&j| j >= columns) {
        return Err(dimension(format!("{what}: column index below"), columns, j));
    }
    numbers(what, &matrix.value, "finite", |_| true)
}

fn conic(what: &str, rows: &ConicRows, columns: usize) -> Result<(), SolveError> {
    let count = rows.rhs.len();
    matrix(what, &rows.matrix, count, columns)?;
    numbers(&format!("{what}: right-hand side"), &rows.rhs, "finite", |_| true)?;
    let covered = rows.cones.iter().map(Cone::dimension).fold(0usize, usize::saturating_add);
    length(format!("{what}: rows covered by cones"), count, covered)?;
    if rows.cones.contains(&Cone::SecondOrder(0)) {
        return Err(dimension(format!("{what}: rows of a second-order cone, at least"), 1, 0));
    }
    Ok(())
}

fn residuals(what: &str, rows: &ResidualRows, columns: usize) -> Result<(), SolveError> {
    let count = rows.rhs.len();
    matrix(what, &rows.matrix, count, columns)?;
    numbers(&format!("{what}: right-hand side"), &rows.rhs, "finite", |_| true)?;
    length(format!("{what}: weights"), count, rows.weight.len())?;
    numbers(&format!("{what}: weights"), &rows.weight, "positive and finite", |v| v > 0.0)
}
