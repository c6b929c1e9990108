//! Stiffness and damping of the ground from what a robot can measure, with error bars.
//!
//! The bonded law is linear in stiffness, damping and their products with an unknown rest pose ([`regressor`]), so that
//! recursive least squares ([`estimator`], on [`square_root`]) applies, sample by sample or in blocks. A [`Session`] takes a
//! log row by row in bounded memory; a [`follower::Follower`] alone serves whoever has matched samples at hand.
//!
//! Knows no JSON, no files and no clock: times are the log's.

pub mod change;
pub mod estimator;
pub mod excitation;
pub mod follower;
pub mod noise;
pub mod parameters;
pub mod regressor;
pub mod remarks;
pub mod report;
pub mod session;
pub mod setup;
pub mod smoother;
pub mod square_root;
mod stance;
mod track;
pub mod whiteness;

pub use estimator::{Estimate, Estimator, Prior};
pub use follower::{Follower, Frame, Matched};
pub use report::Report;
pub use session::{Row, Session, SoleRow};
pub use setup::Setup;
