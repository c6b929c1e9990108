//! What a request says about a robot beyond its URDF: base, soles, motors, locks.

use super::TorqueSpeedLine;
use crate::spatial::Pose;
use crate::spatial::polygon::SoleShape;

/// Choices that a URDF does not hold.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct ModelOptions {
    /// Weld the base link to the world instead of letting it float.
    pub fixed_base: bool,
    /// Soles, in the order the model keeps.
    pub soles: Vec<SoleSpec>,
    /// Settings of single joints, at most one entry a joint.
    pub joints: Vec<JointSpec>,
}

/// A sole attached to a link.
#[derive(Debug, Clone, PartialEq)]
pub struct SoleSpec {
    /// Name, unique among soles.
    pub name: String,
    /// Link that carries it.
    pub link: String,
    /// Sole frame in the link's axes (m); z points out of the ground into the robot.
    pub placement: Pose,
    /// Its surface.
    pub shape: SoleShape,
}

/// Settings of one joint. What is absent keeps the URDF's value. Units are rad and N m for turning
/// joints, m and N for sliding ones.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct JointSpec {
    /// Joint name as in the URDF.
    pub name: String,
    /// Reflected rotor inertia (kg m^2 or kg), >= 0.
    pub rotor_inertia: Option<f64>,
    /// Viscous friction (N m s/rad or N s/m), >= 0; default the URDF's `damping`.
    pub viscous_friction: Option<f64>,
    /// Coulomb friction (N m or N), >= 0; default the URDF's `friction`.
    pub coulomb_friction: Option<f64>,
    /// Torque-speed line, both numbers > 0.
    pub torque_speed: Option<TorqueSpeedLine>,
    /// False for a joint without motor; default true.
    pub actuated: Option<bool>,
    /// Weld the joint at this position (rad or m). Planar and floating joints can only be locked at
    /// 0. A locked joint that would close a loop is left out: the loop is cut there.
    pub locked_at: Option<f64>,
    /// Position limits, lower <= upper.
    pub position: Option<(f64, f64)>,
    /// Largest speed, > 0.
    pub speed: Option<f64>,
    /// Largest torque or force, > 0.
    pub effort: Option<f64>,
}

impl JointSpec {
    /// No settings for the joint of this name.
    pub fn named(name: &str) -> Self {
        JointSpec { name: name.to_string(), ..JointSpec::default() }
    }

    /// True if it sets anything that only a moving joint has.
    pub(super) fn sets_motion(&self) -> bool {
        self.rotor_inertia.is_some()
            || self.viscous_friction.is_some()
            || self.coulomb_friction.is_some()
            || self.torque_speed.is_some()
            || self.actuated.is_some()
            || self.position.is_some()
            || self.speed.is_some()
            || self.effort.is_some()
    }
}
