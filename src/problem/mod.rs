//! From a question to a hierarchy of conic levels: column layout, scaling, one file per kind of
//! task and limit, assembly.

pub mod assemble;
pub mod coupled;
pub mod layout;
pub mod limits;
mod physics;
pub mod question;
pub mod rows;
pub mod scene;
pub mod tasks;

pub use assemble::{Assembly, assemble};
pub use physics::vertex_arms;
