//! Stand-ins with the signatures of `reference`, until that module is there.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use crate::problem::question::{DynamicsQuestion, Question};
use crate::reference::answer::{Answer, DynamicsReport};

/// Why there is no answer at all.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("not merged yet")]
pub struct Trouble;

/// From question to answer.
pub fn solve(_: &Question, _: &Arc<AtomicBool>) -> Result<Answer, Trouble> {
    Err(Trouble)
}

/// Rigid-body terms.
pub fn dynamics(_: &DynamicsQuestion) -> DynamicsReport {
    DynamicsReport {
        mass: 0.0,
        velocities: vec![],
        mass_matrix: vec![],
        bias: vec![],
        friction: vec![],
        center_of_mass: Default::default(),
        center_of_mass_velocity: Default::default(),
        momentum: Default::default(),
        momentum_matrix: vec![],
        momentum_bias: Default::default(),
        kinetic_energy: 0.0,
        potential_energy: 0.0,
        frames: vec![],
    }
}
