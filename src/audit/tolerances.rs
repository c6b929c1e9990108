//! What counts as no difference.
//!
//! Natural sizes are those of the assembled problem: with `c = g sqrt(m)` an acceleration counts in `c / sqrt(M_ii)`, a torque in
//! `c sqrt(M_ii)`, a force in body weights, a moment under a sole in body weights times the sole's radius of gyration, a limit in its
//! own range, a task's row in what the unknowns make of it at their natural sizes. One share of them serves everything that has no
//! tolerance of its own.

use crate::conic::Column;

/// Share of natural sizes where a request says nothing.
pub const DEFAULT_RELATIVE: f64 = 1e-4;

/// Tolerances of one audit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Tolerances {
    /// Share of the natural size, positive.
    pub relative: f64,
    /// Joint torques (N m, or N for sliding joints) in place of the share.
    pub torque: Option<f64>,
    /// Claimed accelerations, linear (m/s^2).
    pub acceleration: Option<f64>,
    /// Claimed accelerations, angular (rad/s^2).
    pub angular_acceleration: Option<f64>,
    /// Claimed wrenches: forces (N).
    pub force: Option<f64>,
    /// Claimed wrenches: moments (N m).
    pub moment: Option<f64>,
    /// Violation of limits, as a share of each limit's natural size.
    pub limit: Option<f64>,
    /// Difference of a priority's weighted residual norm (no unit, the request's weights and scales).
    pub loss: Option<f64>,
}

impl Default for Tolerances {
    fn default() -> Self {
        Tolerances {
            relative: DEFAULT_RELATIVE,
            torque: None,
            acceleration: None,
            angular_acceleration: None,
            force: None,
            moment: None,
            limit: None,
            loss: None,
        }
    }
}

impl Tolerances {
    /// Tolerance of a joint torque.
    pub fn of_torque(&self, column: &Column) -> f64 {
        self.torque.unwrap_or(self.relative * column.scale)
    }

    /// Tolerance of a claimed acceleration or wrench component.
    pub fn of_claim(&self, column: &Column) -> f64 {
        let own = match column.unit {
            "m/s^2" => self.acceleration,
            "rad/s^2" => self.angular_acceleration,
            "N" => self.force,
            _ => self.moment,
        };
        own.unwrap_or(self.relative * column.scale)
    }

    /// What counts as no difference of every torque, acceleration and wrench among `columns`.
    pub fn allowances(&self, columns: &[Column]) -> Vec<Allowance> {
        let of = |column: &Column| {
            let tolerance = match column.name.split(':').next()? {
                "torque" => self.of_torque(column),
                "acceleration" | "wrench" => self.of_claim(column),
                _ => return None,
            };
            Some(Allowance { name: column.name.clone(), unit: column.unit, tolerance })
        };
        columns.iter().filter_map(of).collect()
    }

    /// Tolerance of a limit's violation, in the limit's unit.
    pub fn of_limit(&self, natural: f64) -> f64 {
        self.limit.unwrap_or(self.relative) * natural
    }
}

/// Largest difference of one named number that counts as none.
#[derive(Debug, Clone, PartialEq)]
pub struct Allowance {
    /// What, as the columns of the problem are named, e.g. `torque:left_knee`, `acceleration:base:vx` or `wrench:left:fz`.
    pub name: String,
    /// Unit.
    pub unit: &'static str,
    /// The difference.
    pub tolerance: f64,
}

/// True where a difference counts as none; what is no number never does.
pub fn within(difference: f64, tolerance: f64) -> bool {
    difference.abs() <= tolerance
}
