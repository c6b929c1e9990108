//! The conventions that are tried, one by one and in pairs.
//!
//! They are what robotics texts and general-purpose physics engines do differently from each other: axes and order of the base's six
//! velocities, order of a quaternion's four numbers, order of the joints, what counts into the bias, about which point momentum is
//! taken, in which axes a Jacobian's rows are written.

use super::order;
use crate::dynamics::axes::{Axes, VelocityAxes};
use crate::model::{BaseKind, Model};
use crate::problem::question::DynamicsQuestion;

/// A way in which somebody else's terms may differ from ours although nothing is wrong, or one thing is.
#[derive(Debug, Clone, PartialEq)]
pub enum Assumption {
    /// The base part of generalised velocities is in these axes.
    VelocityAxes(VelocityAxes),
    /// The numbers of the base velocity were read as if in these axes, and the results are in them.
    VelocityReadIn(VelocityAxes),
    /// The quaternion's four numbers were taken in another order, or for the inverse rotation.
    Quaternion(QuaternionMistake),
    /// Gravity times this factor: -1 or 0.
    Gravity(f64),
    /// Rotor inertia is left out of the mass matrix.
    NoRotorInertia,
    /// Joint friction is counted into the bias.
    FrictionInBias,
    /// The bias is on the other side of the equation.
    BiasNegated,
    /// The bias holds gravity alone.
    BiasAtRest,
    /// Angular before linear.
    AngularFirst {
        /// In the base part of generalised velocities.
        columns: bool,
        /// In the six rows of Jacobians, accelerations and momentum.
        rows: bool,
    },
    /// Rows of Jacobians and accelerations are in the frame's own axes.
    FrameAxes,
    /// `J_dot nu` is the rate of the spatial velocity, `omega x v` less than the acceleration of the frame's origin.
    SpatialAcceleration,
    /// Angular momentum about the base origin instead of the centre of mass.
    MomentumAboutBase,
    /// Angular momentum about the world's origin instead of the centre of mass.
    MomentumAboutOrigin,
    /// Momentum in base axes.
    MomentumInBaseAxes,
    /// Joints in another order: entry i belongs to joint `order[i]` of the model.
    JointOrder {
        /// What orders them so.
        name: &'static str,
        /// Joint of the model for each entry.
        order: Vec<usize>,
    },
    /// The state's numbers were taken in this order as well, so that the joints stand elsewhere.
    StateInOrder {
        /// What orders them so.
        name: &'static str,
        /// Joint of the model for each entry.
        order: Vec<usize>,
    },
}

/// What became of `[x, y, z, w]`.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum QuaternionMistake {
    /// `[x, y, z, w]` was read as `[w, x, y, z]`.
    ReadScalarFirst,
    /// `[w, x, y, z]` was read as `[x, y, z, w]`.
    ReadScalarLast,
    /// The rotation was taken the other way round, world to base.
    Inverse,
}

impl Assumption {
    /// Conventions of one group exclude each other.
    pub fn group(&self) -> u8 {
        match self {
            Assumption::VelocityAxes(_) | Assumption::VelocityReadIn(_) => 0,
            Assumption::Quaternion(_) => 1,
            Assumption::Gravity(_) => 2,
            Assumption::NoRotorInertia => 3,
            Assumption::FrictionInBias => 4,
            Assumption::BiasNegated => 5,
            Assumption::BiasAtRest => 6,
            Assumption::AngularFirst { .. } => 7,
            Assumption::FrameAxes => 8,
            Assumption::SpatialAcceleration => 9,
            Assumption::MomentumAboutBase | Assumption::MomentumAboutOrigin => 10,
            Assumption::MomentumInBaseAxes => 11,
            Assumption::JointOrder { .. } | Assumption::StateInOrder { .. } => 12,
        }
    }

    /// True for conventions about the order of joints.
    pub fn orders_joints(&self) -> bool {
        matches!(self, Assumption::JointOrder { .. } | Assumption::StateInOrder { .. })
    }

    /// True where both do the same, whatever they are called.
    pub fn same(&self, other: &Assumption) -> bool {
        match (self, other) {
            (Assumption::JointOrder { order: a, .. }, Assumption::JointOrder { order: b, .. }) => a == b,
            _ => self == other,
        }
    }

    /// A stable short code.
    pub fn code(&self) -> &'static str {
        match self {
            Assumption::VelocityAxes(_) => "velocity-axes",
            Assumption::VelocityReadIn(_) => "velocity-read-in-other-axes",
            Assumption::Quaternion(QuaternionMistake::ReadScalarFirst) => "quaternion-read-scalar-first",
            Assumption::Quaternion(QuaternionMistake::ReadScalarLast) => "quaternion-read-scalar-last",
            Assumption::Quaternion(QuaternionMistake::Inverse) => "quaternion-inverse",
            Assumption::Gravity(factor) if *factor < 0.0 => "gravity-sign",
            Assumption::Gravity(_) => "gravity-missing",
            Assumption::NoRotorInertia => "rotor-inertia-missing",
            Assumption::FrictionInBias => "friction-in-bias",
            Assumption::BiasNegated => "bias-negated",
            Assumption::BiasAtRest => "bias-at-rest",
            Assumption::AngularFirst { columns: true, rows: true } => "angular-first",
            Assumption::AngularFirst { columns: true, .. } => "angular-first-columns",
            Assumption::AngularFirst { .. } => "angular-first-rows",
            Assumption::FrameAxes => "rows-in-frame-axes",
            Assumption::SpatialAcceleration => "spatial-acceleration",
            Assumption::MomentumAboutBase => "momentum-about-base",
            Assumption::MomentumAboutOrigin => "momentum-about-world-origin",
            Assumption::MomentumInBaseAxes => "momentum-in-base-axes",
            Assumption::JointOrder { .. } => "joint-order",
            Assumption::StateInOrder { .. } => "state-in-other-joint-order",
        }
    }

    /// A sentence: what yours do and ours do not.
    pub fn text(&self) -> String {
        let axes = |axes: &VelocityAxes| format!("linear part in {} axes, angular part in {} axes", word(axes.linear), word(axes.angular));
        match self {
            Assumption::VelocityAxes(a) => format!("the base part of your generalised velocity has its {}", axes(a)),
            Assumption::VelocityReadIn(a) => {
                format!("the numbers of the base velocity were read as if in other axes ({}), and your results are in these", axes(a))
            }
            Assumption::Quaternion(QuaternionMistake::ReadScalarFirst) => {
                "the orientation [x, y, z, w] was read as [w, x, y, z]".to_string()
            }
            Assumption::Quaternion(QuaternionMistake::ReadScalarLast) => {
                "an orientation [w, x, y, z] was read as [x, y, z, w]".to_string()
            }
            Assumption::Quaternion(QuaternionMistake::Inverse) => {
                "the orientation was taken as the rotation from world to base".to_string()
            }
            Assumption::Gravity(factor) if *factor < 0.0 => "gravity has the other sign".to_string(),
            Assumption::Gravity(_) => "gravity is missing".to_string(),
            Assumption::NoRotorInertia => "rotor inertia is missing in your mass matrix".to_string(),
            Assumption::FrictionInBias => "your bias contains joint friction".to_string(),
            Assumption::BiasNegated => "your bias stands on the other side of the equation of motion".to_string(),
            Assumption::BiasAtRest => "your bias holds gravity alone, without Coriolis and centrifugal terms".to_string(),
            Assumption::AngularFirst { columns: true, rows: true } => {
                "angular comes before linear, in the base velocity and in the rows of Jacobians and momentum".to_string()
            }
            Assumption::AngularFirst { columns: true, .. } => "angular comes before linear in your base velocity".to_string(),
            Assumption::AngularFirst { .. } => "angular comes before linear in the rows of your Jacobians and momentum".to_string(),
            Assumption::FrameAxes => "your Jacobians and accelerations are in the frame's own axes".to_string(),
            Assumption::SpatialAcceleration => {
                "your J_dot nu is the rate of the spatial velocity, without omega x v of the frame's origin".to_string()
            }
            Assumption::MomentumAboutBase => "your angular momentum is about the base origin".to_string(),
            Assumption::MomentumAboutOrigin => "your angular momentum is about the world's origin".to_string(),
            Assumption::MomentumInBaseAxes => "your momentum is in base axes".to_string(),
            Assumption::JointOrder { name, .. } => format!("your joints are in another order: {name}"),
            Assumption::StateInOrder { name, .. } => {
                format!("the joint values were taken in another order ({name}), and your results are in it")
            }
        }
    }

    /// The joint names in the user's order, for conventions about it.
    pub fn joints<'m>(&self, model: &'m Model) -> Vec<&'m str> {
        match self {
            Assumption::JointOrder { order, .. } | Assumption::StateInOrder { order, .. } => {
                order.iter().filter_map(|j| model.joints.get(*j)).map(|joint| joint.name.as_str()).collect()
            }
            _ => Vec::new(),
        }
    }
}

fn word(axes: Axes) -> &'static str {
    match axes {
        Axes::World => "world",
        Axes::Base => "base",
    }
}

/// The documented list, for this question: commonest first.
pub fn all(question: &DynamicsQuestion) -> Vec<Assumption> {
    let mut list = Vec::new();
    if question.model.base == BaseKind::Floating {
        let both = [Axes::World, Axes::Base];
        let others = || {
            let all = both.into_iter().flat_map(|linear| both.map(|angular| VelocityAxes { linear, angular }));
            all.filter(|axes| *axes != question.velocity_axes)
        };
        list.extend(others().map(Assumption::VelocityAxes));
        list.push(Assumption::AngularFirst { columns: true, rows: true });
        list.push(Assumption::AngularFirst { columns: true, rows: false });
        for mistake in [QuaternionMistake::ReadScalarFirst, QuaternionMistake::ReadScalarLast, QuaternionMistake::Inverse] {
            list.push(Assumption::Quaternion(mistake));
        }
        list.extend(others().map(Assumption::VelocityReadIn));
    }
    list.push(Assumption::AngularFirst { columns: false, rows: true });
    let orders = order::named(&question.model);
    list.extend(orders.iter().map(|(name, order)| Assumption::JointOrder { name, order: order.clone() }));
    list.extend([
        Assumption::Gravity(-1.0),
        Assumption::Gravity(0.0),
        Assumption::NoRotorInertia,
        Assumption::FrictionInBias,
        Assumption::BiasNegated,
        Assumption::BiasAtRest,
        Assumption::FrameAxes,
        Assumption::SpatialAcceleration,
        Assumption::MomentumAboutBase,
        Assumption::MomentumAboutOrigin,
        Assumption::MomentumInBaseAxes,
    ]);
    list.extend(orders.into_iter().map(|(name, order)| Assumption::StateInOrder { name, order }));
    list
}
