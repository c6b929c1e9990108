//! Rigid-body dynamics of a tree: kinematics, mass matrix, bias, centroidal momentum.
//!
//! Everything is in world axes. The generalised velocity is
//! `nu = (v_B, omega_B, q_dot)`: velocity of the base link origin (m/s), angular velocity of the
//! base (rad/s), joint speeds in model order. A fixed base leaves only `q_dot`. The equation of
//! motion is
//!
//! ```text
//! M nu_dot + h + friction = S' tau + sum J' w
//! ```
//!
//! where `h` holds the velocity products and gravity, `friction` the joints' viscous and Coulomb
//! friction, `tau` the torques of the actuated joints and `w` every wrench acting on the robot.
//! `nu_dot` is the plain time derivative of those numbers, so its first three entries are the
//! classical acceleration of the base origin.
//!
//! The functions expect a state of the model they are given (as many positions and velocities as
//! the model has joints) and a [`Workspace`] built for that model; other sizes are a mistake of
//! the program, not of its input, and stop it.

pub mod axes;
mod forward;
mod frames;
mod inverse;
mod kinematics;
mod mass_matrix;
mod newton_euler;
mod workspace;

pub use axes::{Axes, AxesMap, VelocityAxes};
pub use forward::{forward_dynamics, forward_dynamics_into, integrate, predict};
pub use frames::{
    external_generalised_force, frame_bias_acceleration, frame_jacobian, frame_pose, frame_twist,
};
pub use inverse::{ExternalWrench, InverseScratch, inverse_dynamics};
pub use workspace::Workspace;

/// Why accelerations could not be computed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum DynamicsError {
    /// The mass matrix is not positive definite: part of the robot has no inertia to move.
    #[error(
        "the mass matrix is not positive definite at {coordinate} (row {row}): pivot {pivot:e}, \
         needed more than {needed:e}"
    )]
    MassMatrixNotPositiveDefinite {
        /// Row of the generalised velocity.
        row: usize,
        /// What moves there: the joint's name, or the base.
        coordinate: String,
        /// Pivot of the Cholesky factorisation.
        pivot: f64,
        /// Smallest pivot accepted.
        needed: f64,
    },
    /// A prediction was asked over a time that is negative, not finite, or too long.
    #[error("cannot predict over {duration} s: expected 0 to {longest} s")]
    PredictionTime {
        /// What was asked (s).
        duration: f64,
        /// The longest that is allowed (s).
        longest: f64,
    },
}
