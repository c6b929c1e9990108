//! The ground laws, one file each.

pub mod bonded;
pub(super) mod rigid;

pub use bonded::{bonded_wrench, stiffness_and_damping};
