//! A robot description as read: one entry per element, in document order, each with its place in
//! the text. Values are checked one by one; how they fit together is the builder's concern.

use super::TorqueSpeedLine;
use super::error::{Fault, ModelError, Subject};
use crate::spatial::{Pose, Vec3, rotation_from_rpy};

/// A link.
#[derive(Debug, Clone)]
pub(super) struct LinkPart {
    pub(super) name: String,
    pub(super) place: Subject,
    pub(super) inertial: Option<InertialPart>,
}

/// Mass properties as written.
#[derive(Debug, Clone)]
pub(super) struct InertialPart {
    pub(super) place: Subject,
    pub(super) origin: Origin,
    pub(super) mass: f64,
    /// ixx, ixy, ixz, iyy, iyz, izz (kg m^2).
    pub(super) moments: [f64; 6],
}

/// A placement as written: position (m) and fixed-axis roll, pitch, yaw (rad).
#[derive(Debug, Clone, Copy)]
pub(super) struct Origin {
    pub(super) xyz: Vec3,
    pub(super) rpy: Vec3,
}

impl Origin {
    /// The placement as rotation and translation.
    pub(super) fn pose(&self) -> Pose {
        Pose {
            rotation: rotation_from_rpy(self.rpy.x, self.rpy.y, self.rpy.z),
            translation: self.xyz,
        }
    }
}

/// Joint types of the URDF standard.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum JointType {
    Revolute,
    Continuous,
    Prismatic,
    Fixed,
    Floating,
    Planar,
}

impl JointType {
    /// From its name in the URDF.
    pub(super) fn named(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|kind| kind.name() == name)
    }

    const ALL: [JointType; 6] = [
        JointType::Revolute,
        JointType::Continuous,
        JointType::Prismatic,
        JointType::Fixed,
        JointType::Floating,
        JointType::Planar,
    ];

    /// Its name in the URDF.
    pub(super) fn name(self) -> &'static str {
        match self {
            JointType::Revolute => "revolute",
            JointType::Continuous => "continuous",
            JointType::Prismatic => "prismatic",
            JointType::Fixed => "fixed",
            JointType::Floating => "floating",
            JointType::Planar => "planar",
        }
    }

    /// True for the types with one axis.
    pub(super) fn has_axis(self) -> bool {
        matches!(self, JointType::Revolute | JointType::Continuous | JointType::Prismatic)
    }
}

/// A joint, with what the options say about it.
#[derive(Debug, Clone)]
pub(super) struct JointPart {
    pub(super) name: String,
    pub(super) place: Subject,
    pub(super) kind: JointType,
    pub(super) parent: String,
    pub(super) parent_place: Subject,
    pub(super) child: String,
    pub(super) child_place: Subject,
    pub(super) origin: Origin,
    /// Axis as written, of any length but zero.
    pub(super) axis: Vec3,
    pub(super) position: Option<(f64, f64)>,
    /// Zero: none given.
    pub(super) effort: Option<f64>,
    /// Zero: none given.
    pub(super) speed: Option<f64>,
    pub(super) viscous_friction: f64,
    pub(super) coulomb_friction: f64,
    /// The joint it follows and the place where that is said.
    pub(super) mimic: Option<(String, Subject)>,
    pub(super) rotor_inertia: f64,
    pub(super) torque_speed: Option<TorqueSpeedLine>,
    pub(super) actuated: bool,
    pub(super) locked_at: Option<f64>,
}

impl JointPart {
    /// An error about this joint as a whole.
    pub(super) fn error(&self, fault: Fault) -> ModelError {
        self.error_at(self.place, fault)
    }

    /// An error about this joint at one of its elements.
    pub(super) fn error_at(&self, subject: Subject, fault: Fault) -> ModelError {
        ModelError { fault, element: label("joint", &self.name), subject }
    }
}

impl LinkPart {
    /// An error about this link.
    pub(super) fn error_at(&self, subject: Subject, fault: Fault) -> ModelError {
        ModelError { fault, element: label("link", &self.name), subject }
    }
}

/// A whole description.
#[derive(Debug, Clone)]
pub(super) struct Description {
    pub(super) name: String,
    pub(super) place: Subject,
    pub(super) links: Vec<LinkPart>,
    pub(super) joints: Vec<JointPart>,
    pub(super) remarks: Vec<String>,
}

/// How errors name an element: `joint "left_knee"`.
pub(super) fn label(kind: &str, name: &str) -> String {
    format!("{kind} {name:?}")
}
