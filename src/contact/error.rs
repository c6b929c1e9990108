//! Why a question about the ground has no answer.

/// A direction of a material, seen from the ground normal.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Direction {
    /// Along the ground normal.
    Normal,
    /// In the ground plane.
    Tangential,
}

impl std::fmt::Display for Direction {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(match self {
            Direction::Normal => "normal",
            Direction::Tangential => "tangential",
        })
    }
}

/// Refusals of the contact module, with the numbers they rest on.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ContactError {
    /// The rest pose is to come from a measured wrench, and none is given.
    #[error("the rest pose is to follow from the measured wrench, but no measured wrench is given")]
    MissingMeasurement,
    /// No rest pose within reach carries the wrench on this material.
    #[error(
        "no rest pose carries the wrench: {force_residual} N and {moment_residual} N m are left over after \
         {iterations} iterations with the rest pose turned by {rotation} rad (at most {rotation_limit})"
    )]
    CannotCarry {
        /// Norm of the force not carried (N).
        force_residual: f64,
        /// Norm of the moment not carried (N m).
        moment_residual: f64,
        /// Angle between the best rest pose found and the present pose (rad).
        rotation: f64,
        /// The largest angle accepted (rad).
        rotation_limit: f64,
        /// Newton iterations spent.
        iterations: usize,
    },
    /// At touchdown the sole's z axis pointed away from the ground normal.
    #[error("at touchdown the sole's z axis made {cosine} with the ground normal (cosine); it must be positive")]
    TouchdownTilt {
        /// Cosine between the sole's z axis and the ground normal.
        cosine: f64,
    },
    /// The explicit rule on ground without damping in some direction.
    #[error("the explicit rule needs {direction} damping above zero, got {damping}")]
    ExplicitNeedsDamping {
        /// Which direction lacks it.
        direction: Direction,
        /// Its value, in the material's unit.
        damping: f64,
    },
    /// The explicit rule with a tick at or above 2 b/k.
    #[error(
        "the explicit rule needs a tick below 2 b/k = {limit} s in the {direction} direction \
         (k = {stiffness}, b = {damping}), got {tick} s"
    )]
    ExplicitTickTooLong {
        /// Which direction limits it.
        direction: Direction,
        /// Tick asked for (s).
        tick: f64,
        /// `2 b / k` (s).
        limit: f64,
        /// Stiffness in that direction, in the material's unit.
        stiffness: f64,
        /// Damping in that direction, in the material's unit.
        damping: f64,
    },
    /// A rigid sole has no law that gives a wrench.
    #[error("a rigid sole has no law that gives its wrench")]
    RigidHasNoLaw,
    /// A tick or a mass that is not positive and finite.
    #[error("{quantity} must be positive and finite, got {value}")]
    NotPositive {
        /// What was to be positive.
        quantity: &'static str,
        /// What came.
        value: f64,
    },
    /// The numbers overflow or the scaled contact equality has no inverse.
    #[error("the contact equality cannot be formed: largest gain entry {largest_gain}, largest drift entry {largest_drift}")]
    Degenerate {
        /// Largest magnitude in the gain.
        largest_gain: f64,
        /// Largest magnitude in the drift wrench.
        largest_drift: f64,
    },
    /// A pyramid with too few or too many facets.
    #[error("a friction pyramid has {least} to {most} facets, got {facets}")]
    FacetCount {
        /// What came.
        facets: usize,
        /// Fewest allowed.
        least: usize,
        /// Most allowed.
        most: usize,
    },
    /// A friction coefficient that is negative or not finite.
    #[error("{quantity} must be finite and not negative, got {value}")]
    FrictionCoefficient {
        /// Which coefficient.
        quantity: &'static str,
        /// What came.
        value: f64,
    },
}
