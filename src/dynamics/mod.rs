//! Rigid-body dynamics.

pub mod axes;
