//! Proof that hard rows contradict each other (Farkas): z in the dual cone with `A'z = 0` and `b'z < 0`.
//!
//! A candidate is projected onto the dual cone; then the multipliers of the equalities are chosen anew, so that
//! what is left of `A'z` is as small as can be; and the certificate states up to which |x_j| it still proves anything.

use super::answer::{InfeasibilityCertificate, RowSource};
use super::dense::{dot, norm};
use super::system::{Kind, System};
use crate::conic::ConicRows;

/// A certificate must hold for every point with |x_j| up to this (scaled columns near 1).
const SMALLEST_BOX: f64 = 1e4;

/// Projects onto the dual cone of a block (the cones are self-dual; an equality's dual is everything).
pub(super) fn project_dual(kind: Kind, z: &mut [f64]) {
    match kind {
        Kind::Equality => {}
        Kind::Nonnegative => z.iter_mut().for_each(|v| *v = v.max(0.0)),
        Kind::SecondOrder => {
            let radius = norm(&z[1..]);
            if radius <= z[0] {
                return;
            }
            if radius <= -z[0] {
                z.fill(0.0);
                return;
            }
            let mean = 0.5 * (z[0] + radius);
            z[0] = mean;
            z[1..].iter_mut().for_each(|v| *v *= mean / radius);
        }
    }
}

/// Makes a certificate of multipliers for the rows of the system's inequality blocks, if they prove anything.
/// Entries of equality rows are replaced.
pub(super) fn certify(system: &System, hard: &ConicRows, mut z: Vec<f64>) -> Option<InfeasibilityCertificate> {
    let mut gradient = vec![0.0; system.matrix.columns];
    for block in &system.blocks {
        let range = block.first..block.first + block.len;
        if block.kind == Kind::Equality {
            z[range].fill(0.0);
            continue;
        }
        project_dual(block.kind, &mut z[range.clone()]);
        for row in range {
            for (j, v) in system.matrix.row(row) {
                gradient[j] += v * z[row];
            }
        }
    }
    for (&row, y) in system.pivots.iter().zip(system.space.multipliers(&gradient)) {
        z[row] = -y;
    }
    finish(system, hard, &z)
}

/// A certificate from one equality row that the kept ones contradict.
pub(super) fn certify_equality(system: &System, hard: &ConicRows, row: usize) -> Option<InfeasibilityCertificate> {
    let mut dense = vec![0.0; system.matrix.columns];
    system.matrix.row(row).for_each(|(j, v)| dense[j] = v);
    let mut z = vec![0.0; system.rhs.len()];
    let off = system.rhs[row] - dot(&dense, &system.x);
    let sign = if off > 0.0 { -1.0 } else { 1.0 };
    for (&pivot, y) in system.pivots.iter().zip(system.space.multipliers(&dense)) {
        z[pivot] = -sign * y;
    }
    z[row] += sign;
    finish(system, hard, &z)
}

fn finish(system: &System, hard: &ConicRows, z: &[f64]) -> Option<InfeasibilityCertificate> {
    let mut multipliers = vec![0.0; hard.rhs.len()];
    for (value, source) in z.iter().zip(&system.source) {
        match *source {
            RowSource::Hard { row } | RowSource::HardFace { row } => multipliers[row] = *value,
            _ if *value == 0.0 => {}
            _ => return None,
        }
    }
    let largest = super::dense::largest(&multipliers);
    if largest.is_nan() || largest <= 0.0 {
        return None;
    }
    multipliers.iter_mut().for_each(|v| *v /= largest);
    let mut rest = vec![0.0; system.matrix.columns];
    hard.matrix.add_transpose_times(&multipliers, &mut rest);
    let spill: f64 = rest.iter().map(|v| v.abs()).sum();
    let value = dot(&hard.rhs, &multipliers);
    let box_radius = -value / spill;
    (value < 0.0 && box_radius >= SMALLEST_BOX).then_some(InfeasibilityCertificate { multipliers, value, spill, box_radius })
}
