//! What an answer alone does not say: why nothing is feasible and how little more would do, what the question leaves
//! open, and how the answer moves with the ground.
//!
//! Infeasibility is explained on the assembled hierarchy alone ([`infeasible`]): only named rows (limits and must-hold
//! tasks) can be blamed, rows marked as physics never. [`uniqueness`] works on what the cascade left after its last level.
//! [`sensitivity`] and [`spread`] vary the question's ground and are handed functions that assemble or solve a question.

mod alone;
mod blame;
pub mod farkas;
pub mod infeasible;
mod random;
pub mod relax;
pub mod sensitivity;
pub mod spread;
mod sums;
pub mod uniqueness;
mod vary;

use crate::solve::SolveError;
pub use vary::{Parameter, ParameterKind, varied};

/// Why something could not be explained.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ExplainError {
    /// The caller asked to stop.
    #[error("called off")]
    Cancelled,
    /// The solver refused its input: a mistake of ours.
    #[error(transparent)]
    Solver(#[from] SolveError),
    /// The natural sizes handed in do not fit the rows.
    #[error("natural sizes: expected {expected} positive finite numbers, found {found}")]
    Sizes {
        /// Rows of the hierarchy.
        expected: usize,
        /// Usable sizes handed in.
        found: usize,
    },
}
