//! Axes in which the base part of the generalised velocity is given.

/// World axes or the base link's own.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Axes {
    /// World axes.
    #[default]
    World,
    /// The base link's axes.
    Base,
}

/// Axes of the linear and of the angular base velocity.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct VelocityAxes {
    /// Of the linear velocity of the base link origin.
    pub linear: Axes,
    /// Of the angular velocity.
    pub angular: Axes,
}
