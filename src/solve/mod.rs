//! Solving a hierarchy of conic programs in strict order of priority.
//!
//! [`solve`] takes plain data ([`crate::conic::Hierarchy`], scaled near 1) and returns the answer with
//! everything an independent certificate needs: per level the rows it was solved over, multipliers that
//! hold at the final point, rank and face decisions. It knows no robot.

mod answer;
mod cascade;
mod check;
mod dense;
mod engine;
mod faces;
mod free;
mod freeze;
mod infeasible;
mod level;
mod proximal;
mod rank;
mod refine;
mod system;

pub use answer::*;
pub use cascade::solve;
