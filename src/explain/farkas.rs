//! The proof that hard rows contradict each other, checked without the solver.
//!
//! For z in the dual cone and any x with `s = b - A x` in the cone, `0 <= z's = b'z - (A'z)'x`. So if
//! `b'z + sum_j |A'z|_j X_j < 0`, no x with every `|x_j| <= X_j` satisfies the rows. The multipliers are first projected
//! onto the dual cone, then every sum is formed in twice the working precision. Where the spill is not small beside the value,
//! the multipliers are corrected by least squares to make it smaller, and projected again.

use super::blame::{Kind, pieces};
use super::sums::Sum;
use crate::conic::Hierarchy;
use nalgebra::{DMatrix, DVector};

/// No acceleration a legged robot has is larger than this (m/s^2, rad/s^2).
pub const LARGEST_ACCELERATION: f64 = 1e4;
/// No torque, force or moment is larger than this (N m, N).
pub const LARGEST_FORCE: f64 = 1e6;
/// A spill above this part of the value is worth a correction.
const SMALL_SPILL: f64 = 1e-6;
/// Most corrections of one proof.
const MOST_CORRECTIONS: usize = 4;
/// Equalities count as dependent below this relative singular value when multipliers are corrected.
const DEPENDENT: f64 = 1e-10;
/// Blocks with a multiplier above this part of the largest take part in a correction.
const CARRIES: f64 = 1e-6;
/// Multipliers below this part of the largest are not listed.
const LISTED: f64 = 1e-9;

/// One multiplier of a proof.
#[derive(Debug, Clone, PartialEq)]
pub struct Multiplier {
    /// Limit, must-hold task or law.
    pub group: String,
    /// The row.
    pub part: String,
    /// True for rows of physics.
    pub physics: bool,
    /// The multiplier of the scaled row.
    pub value: f64,
}

/// A checked proof.
#[derive(Debug, Clone, PartialEq)]
pub struct Farkas {
    /// `b'z`.
    pub value: f64,
    /// `sum_j |A'z|_j X_j`.
    pub spill: f64,
    /// `value + spill < 0`.
    pub holds: bool,
    /// X for accelerations (m/s^2, rad/s^2).
    pub acceleration_bound: f64,
    /// X for torques, forces and moments (N m, N).
    pub force_bound: f64,
    /// The multipliers that carry the proof.
    pub multipliers: Vec<Multiplier>,
    /// Every multiplier after projection, one per hard row.
    pub projected: Vec<f64>,
}

/// Checks `multipliers` (one per hard row) as a proof that the hard rows of `hierarchy` contradict each other.
pub fn verify(hierarchy: &Hierarchy, multipliers: &[f64]) -> Farkas {
    let hard = &hierarchy.hard;
    let mut z = multipliers.to_vec();
    z.resize(hard.rhs.len(), 0.0);
    for (first, len, kind) in pieces(&hard.cones) {
        project(kind, &mut z[first..first + len]);
    }
    let (mut value, mut spill, mut gradient) = weigh(hierarchy, &z);
    for _ in 0..MOST_CORRECTIONS {
        if spill <= SMALL_SPILL * value.abs() {
            break;
        }
        let Some(corrected) = correct(hierarchy, &z, &gradient) else { break };
        let (new_value, new_spill, new_gradient) = weigh(hierarchy, &corrected);
        if new_value + new_spill >= value + spill {
            break;
        }
        (z, value, spill, gradient) = (corrected, new_value, new_spill, new_gradient);
    }
    let largest = z.iter().fold(0.0f64, |m, v| m.max(v.abs()));
    let carried = z
        .iter()
        .zip(&hard.names)
        .filter(|(v, _)| v.abs() > LISTED * largest)
        .map(|(&value, name)| Multiplier { group: name.group.clone(), part: name.part.clone(), physics: name.physics, value });
    Farkas {
        value,
        spill,
        holds: value + spill < 0.0,
        acceleration_bound: LARGEST_ACCELERATION,
        force_bound: LARGEST_FORCE,
        multipliers: carried.collect(),
        projected: z.clone(),
    }
}

/// (`b'z`, `sum_j |A'z|_j X_j`, `A'z`).
fn weigh(hierarchy: &Hierarchy, z: &[f64]) -> (f64, f64, Vec<f64>) {
    let hard = &hierarchy.hard;
    let mut value = Sum::default();
    let mut gradient = vec![Sum::default(); hierarchy.columns.len()];
    for (row, &multiplier) in z.iter().enumerate() {
        value.add_product(hard.rhs[row], multiplier);
        for (column, entry) in hard.matrix.row(row) {
            gradient[column].add_product(entry, multiplier);
        }
    }
    let gradient: Vec<f64> = gradient.into_iter().map(Sum::value).collect();
    let mut spill = Sum::default();
    for (entry, column) in gradient.iter().zip(&hierarchy.columns) {
        spill.add_product(entry.abs(), bound(column.unit) / column.scale);
    }
    (value.value(), spill.value(), gradient)
}

/// Changes the multipliers of equalities, and of the blocks that carry the proof, by least squares so that `A'z`, weighted by
/// the bounds X, shrinks; then projects again.
fn correct(hierarchy: &Hierarchy, z: &[f64], gradient: &[f64]) -> Option<Vec<f64>> {
    let hard = &hierarchy.hard;
    let mut rows = Vec::new();
    let largest = z.iter().fold(0.0f64, |m, v| m.max(v.abs()));
    for (first, len, kind) in pieces(&hard.cones) {
        if kind == Kind::Equality || z[first] > CARRIES * largest {
            rows.extend(first..first + len);
        }
    }
    let weight = |j: usize| bound(hierarchy.columns[j].unit) / hierarchy.columns[j].scale;
    let mut matrix = DMatrix::zeros(hierarchy.columns.len(), rows.len());
    for (k, &row) in rows.iter().enumerate() {
        hard.matrix.row(row).for_each(|(j, v)| matrix[(j, k)] = v * weight(j));
    }
    let target = DVector::from_iterator(gradient.len(), gradient.iter().enumerate().map(|(j, g)| -g * weight(j)));
    let size = matrix.amax();
    let step = matrix.svd(true, true).solve(&target, DEPENDENT * size).ok()?;
    let mut corrected = z.to_vec();
    for (&row, change) in rows.iter().zip(step.iter()) {
        corrected[row] += change;
    }
    for (first, len, kind) in pieces(&hard.cones) {
        project(kind, &mut corrected[first..first + len]);
    }
    Some(corrected)
}

/// X of a column by its unit.
pub fn bound(unit: &str) -> f64 {
    if matches!(unit, "m/s^2" | "rad/s^2") { LARGEST_ACCELERATION } else { LARGEST_FORCE }
}

/// Nearest point of the dual cone; the cones are self-dual, an equality's dual is everything.
fn project(kind: Kind, z: &mut [f64]) {
    match (kind, z) {
        (Kind::Equality, _) | (_, []) => {}
        (Kind::Nonnegative, z) => z.iter_mut().for_each(|v| *v = v.max(0.0)),
        (Kind::SecondOrder, [head, tail @ ..]) => {
            let radius = tail.iter().map(|v| v * v).sum::<f64>().sqrt();
            if radius <= *head {
            } else if radius <= -*head {
                *head = 0.0;
                tail.fill(0.0);
            } else {
                let mean = 0.5 * (*head + radius);
                *head = mean;
                tail.iter_mut().for_each(|v| *v *= mean / radius);
            }
        }
    }
}
