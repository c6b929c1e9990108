//! The proof that hard rows contradict each other, checked without the solver.
//!
//! For z in the dual cone and any x with `s = b - A x` in the cone, `0 <= z's = b'z - (A'z)'x`. So if
//! `b'z + sum_j |A'z|_j X_j < 0`, no x with every `|x_j| <= X_j` satisfies the rows. The multipliers are first projected
//! onto the dual cone, then every sum is formed in twice the working precision.

use super::blame::{Kind, pieces};
use super::sums::Sum;
use crate::conic::Hierarchy;

/// No acceleration a legged robot has is larger than this (m/s^2, rad/s^2).
pub const LARGEST_ACCELERATION: f64 = 1e4;
/// No torque, force or moment is larger than this (N m, N).
pub const LARGEST_FORCE: f64 = 1e6;
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
    let mut value = Sum::default();
    let mut gradient = vec![Sum::default(); hierarchy.columns.len()];
    for (row, &multiplier) in z.iter().enumerate() {
        value.add_product(hard.rhs[row], multiplier);
        for (column, entry) in hard.matrix.row(row) {
            gradient[column].add_product(entry, multiplier);
        }
    }
    let mut spill = Sum::default();
    for (sum, column) in gradient.iter().zip(&hierarchy.columns) {
        spill.add_product(sum.value().abs(), bound(column.unit) / column.scale);
    }
    let largest = z.iter().fold(0.0f64, |m, v| m.max(v.abs()));
    let carried = z
        .iter()
        .zip(&hard.names)
        .filter(|(v, _)| v.abs() > LISTED * largest)
        .map(|(&value, name)| Multiplier { group: name.group.clone(), part: name.part.clone(), physics: name.physics, value });
    Farkas {
        value: value.value(),
        spill: spill.value(),
        holds: value.value() + spill.value() < 0.0,
        acceleration_bound: LARGEST_ACCELERATION,
        force_bound: LARGEST_FORCE,
        multipliers: carried.collect(),
        projected: z.clone(),
    }
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
