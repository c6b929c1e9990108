//! Underfoot: a reference solver for legged robots on ground that gives.
//!
//! Data flows down this list; a module uses only what stands above it
//! (`tests/structure.rs` enforces the table).

pub mod spatial;
pub mod conic;
pub mod model;
pub mod dynamics;
pub mod contact;
pub mod identify;
pub mod problem;
pub mod solve;
pub mod certify;
pub mod explain;
pub mod reference;
pub mod audit;
pub mod compare;
pub mod cases;
pub mod wire;
pub mod http;
pub mod cli;
