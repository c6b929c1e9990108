//! The certificate: what makes an answer believable, recomputed without the solver and without the
//! problem's own mass matrix, bias and Jacobians.

/// What was verified, and how well it holds.
#[derive(Debug, Clone, PartialEq)]
pub struct Certificate {
    /// True where every figure is inside its bound.
    pub holds: bool,
    /// Every figure with its bound.
    pub checks: Vec<Check>,
    /// Priority by priority: stationarity and complementarity of the one final answer.
    pub levels: Vec<LevelCheck>,
}

/// One figure of a certificate.
#[derive(Debug, Clone, PartialEq)]
pub struct Check {
    /// Stable short name, kebab-case, e.g. `dynamics`, `contact`, `limits`.
    pub name: &'static str,
    /// What it is relative to, in words, e.g. `of the robot's weight`.
    pub relative_to: &'static str,
    /// The figure.
    pub value: f64,
    /// The bound it has to meet.
    pub bound: f64,
    /// Where the largest value sits, e.g. a joint, sole or limit.
    pub worst: String,
}

/// Optimality of the final answer for one priority.
#[derive(Debug, Clone, PartialEq)]
pub struct LevelCheck {
    /// Priority.
    pub priority: u32,
    /// Largest entry of the stationarity residual, relative.
    pub stationarity: f64,
    /// `s'z`, relative.
    pub complementarity: f64,
    /// Largest distance of a multiplier from its dual cone, relative.
    pub dual_violation: f64,
    /// The bound all three have to meet.
    pub bound: f64,
}
