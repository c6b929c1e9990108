//! Tasks in a request: the document. `aim` turns it into what the problem understands.

use schemars::JsonSchema;
use serde::Deserialize;

use super::common::{LinearAngularBody, LinearAngularGainBody, Whole, WrenchBody};
use super::kinds::{KindRule, KindTable};
use super::limit::MAX_JOINTS;
use super::solve::MAX_NAME;
use super::treatment::{MAX_PRIORITY, MAX_RATIO, MIN_RATIO};

/// Kinds of task.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
pub(super) enum TaskKindBody {
    MomentumRate,
    MomentumSecondRate,
    CenterOfMass,
    FramePosition,
    FrameOrientation,
    FramePose,
    Posture,
    JointAcceleration,
    BaseAcceleration,
    Wrench,
    WrenchSmoothness,
    Effort,
}

/// Which members go with which kind.
pub(super) const TASK_KINDS: KindTable = KindTable {
    definition: "Task",
    rules: &[
        KindRule {
            kind: "momentum_rate",
            needs: &[],
            may: &[
                "axes", "scale_angular", "rate", "reference", "center", "momentum_gain", "position_gain",
            ],
        },
        KindRule {
            kind: "momentum_second_rate",
            needs: &[],
            may: &[
                "axes", "scale_angular", "second_rate", "rate", "reference", "center", "rate_gain",
                "momentum_gain", "position_gain",
            ],
        },
        KindRule {
            kind: "center_of_mass",
            needs: &[],
            may: &["axes", "acceleration", "velocity", "position", "gains"],
        },
        KindRule {
            kind: "frame_position",
            needs: &["frame"],
            may: &["axes", "point", "acceleration", "velocity", "position", "gains"],
        },
        KindRule {
            kind: "frame_orientation",
            needs: &["frame"],
            may: &["axes", "angular_acceleration", "angular_velocity", "orientation", "gains_angular"],
        },
        KindRule {
            kind: "frame_pose",
            needs: &["frame"],
            may: &[
                "axes", "scale_angular", "point", "acceleration", "velocity", "position", "gains",
                "angular_acceleration", "angular_velocity", "orientation", "gains_angular",
            ],
        },
        KindRule { kind: "posture", needs: &["joints"], may: &["gains"] },
        KindRule { kind: "joint_acceleration", needs: &["joints"], may: &[] },
        KindRule {
            kind: "base_acceleration",
            needs: &[],
            may: &["axes", "scale_angular", "acceleration", "angular_acceleration"],
        },
        KindRule {
            kind: "wrench",
            needs: &["sole", "wrench"],
            may: &["axes", "scale_angular", "approach"],
        },
        KindRule { kind: "wrench_smoothness", needs: &[], may: &["axes", "scale_angular", "sole"] },
        KindRule { kind: "effort", needs: &[], may: &["joints"] },
    ],
};

/// Which members an entry of `joints` may have, by the task's kind.
pub(super) const TASK_JOINT_KINDS: KindTable = KindTable {
    definition: "TaskJoint",
    rules: &[
        KindRule { kind: "posture", needs: &["position"], may: &["velocity", "acceleration"] },
        KindRule { kind: "joint_acceleration", needs: &["acceleration"], may: &[] },
        KindRule { kind: "effort", needs: &["torque"], may: &[] },
    ],
};

/// A component of a linear (x, y, z) or angular (rx, ry, rz: about x, y, z) quantity.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
pub(super) enum AxisBody {
    X,
    Y,
    Z,
    Rx,
    Ry,
    Rz,
}

/// Gains of a second-order follow law: acceleration = feedforward + velocity gain times velocity
/// error + position gain times position error.
#[derive(Debug, Clone, Copy, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Gains")]
pub(super) struct GainsBody {
    /// Gain on the position error, 0 or more (1/s^2); zero when left out.
    #[schemars(extend("minimum" = 0.0))]
    pub(super) position: Option<f64>,
    /// Gain on the velocity error, 0 or more (1/s); zero when left out.
    #[schemars(extend("minimum" = 0.0))]
    pub(super) velocity: Option<f64>,
}

/// One joint of a task.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "TaskJoint")]
pub(super) struct TaskJointBody {
    /// Joint name as in the URDF (no unit).
    pub(super) name: String,
    /// For `posture`: wanted position (rad or m).
    pub(super) position: Option<f64>,
    /// For `posture`: wanted velocity (rad/s or m/s); zero when left out.
    pub(super) velocity: Option<f64>,
    /// For `joint_acceleration`: wanted acceleration; for `posture`: feedforward, zero when left out
    /// (rad/s^2 or m/s^2).
    pub(super) acceleration: Option<f64>,
    /// For `effort`: torque or force to stay near (N m or N).
    pub(super) torque: Option<f64>,
}

/// Something wanted. It costs `weight * sum of (residual / scale)^2`, residual = achieved - desired.
/// Exactly one of `priority` and `must_hold: true` says when it counts.
///
/// Desired values, c the centre of mass, m the mass, L the momentum (angular part about c):
/// `momentum_rate`: L_dot = rate + momentum_gain (reference - L) + position_gain m (center - c);
/// `momentum_second_rate`: L_ddot = second_rate + rate_gain (rate - L_dot) + momentum_gain
/// (reference - L) + position_gain m (center - c); `center_of_mass`, `frame_position`,
/// `frame_orientation`, `frame_pose`, `posture`: acceleration = feedforward + gains times errors;
/// `joint_acceleration`, `base_acceleration`: the value given; `wrench`: the value given, or
/// approached at a rate; `wrench_smoothness`: the present wrench; `effort`: torques near a reference.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Task")]
pub(super) struct TaskBody {
    /// Name by which the answer reports it, unique among tasks and limits (no unit).
    #[schemars(extend("minLength" = 1, "maxLength" = MAX_NAME))]
    pub(super) name: String,
    /// What is wanted (no unit); decides which of the members below may be given.
    pub(super) kind: TaskKindBody,
    /// Priority, 1 to 100, 1 first, strictly in order (no unit).
    #[schemars(extend("minimum" = 1, "maximum" = MAX_PRIORITY))]
    pub(super) priority: Option<Whole>,
    /// True: it holds like physics, though it may be blamed when nothing is feasible (no unit).
    pub(super) must_hold: Option<bool>,
    /// Weight within the priority, more than 0 (no unit); 1 when left out.
    #[schemars(extend("minimum" = MIN_RATIO, "maximum" = MAX_RATIO))]
    pub(super) weight: Option<f64>,
    /// Residual of the linear (or only) part that costs `weight`, more than 0, in the task's unit
    /// (N, N/s, m/s^2, rad/s^2, N m or N); 1 when left out.
    #[schemars(extend("minimum" = MIN_RATIO, "maximum" = MAX_RATIO))]
    pub(super) scale: Option<f64>,
    /// The same for the angular part of tasks that have a linear and an angular one (N m, N m/s or
    /// rad/s^2); 1 when left out.
    #[schemars(extend("minimum" = MIN_RATIO, "maximum" = MAX_RATIO))]
    pub(super) scale_angular: Option<f64>,
    /// Which components count, world axes (no unit): x, y, z of the linear part; rx, ry, rz, about
    /// x, y, z, of the angular part. All that the kind has when left out.
    #[schemars(extend("minItems" = 1))]
    pub(super) axes: Option<Vec<AxisBody>>,
    /// Link whose frame moves, as named in the URDF (no unit).
    pub(super) frame: Option<String>,
    /// Point of the frame that is meant [x, y, z], in the frame's axes (m); its origin when left out.
    pub(super) point: Option<[f64; 3]>,
    /// Sole whose wrench is meant (no unit). For `wrench_smoothness` all soles when left out.
    pub(super) sole: Option<String>,
    /// Joints (rad, rad/s, rad/s^2, N m; m, m/s, m/s^2, N for sliding joints). For `effort` all
    /// actuated joints at zero torque when left out.
    #[schemars(extend("minItems" = 1, "maxItems" = MAX_JOINTS))]
    pub(super) joints: Option<Vec<TaskJointBody>>,
    /// Linear acceleration [x, y, z], world axes: feedforward or value (m/s^2); zero when left out.
    pub(super) acceleration: Option<[f64; 3]>,
    /// Reference velocity [x, y, z], world axes (m/s); zero when left out.
    pub(super) velocity: Option<[f64; 3]>,
    /// Reference position [x, y, z], world axes (m); required where `gains.position` is not zero.
    pub(super) position: Option<[f64; 3]>,
    /// Gains of the linear (or only) part (1/s^2, 1/s); zero when left out.
    pub(super) gains: Option<GainsBody>,
    /// Angular acceleration [x, y, z], world axes: feedforward or value (rad/s^2); zero when left out.
    pub(super) angular_acceleration: Option<[f64; 3]>,
    /// Reference angular velocity [x, y, z], world axes (rad/s); zero when left out.
    pub(super) angular_velocity: Option<[f64; 3]>,
    /// Reference orientation, quaternion [x, y, z, w] of unit length within 1e-6 (no unit);
    /// required where `gains_angular.position` is not zero.
    pub(super) orientation: Option<[f64; 4]>,
    /// Gains of the angular part (1/s^2, 1/s); zero when left out.
    pub(super) gains_angular: Option<GainsBody>,
    /// Feedforward of the second rate of momentum (linear N/s, angular N m/s); zero when left out.
    pub(super) second_rate: Option<LinearAngularBody>,
    /// Rate of momentum: feedforward at first rate, reference at second (linear N, angular N m);
    /// zero when left out.
    pub(super) rate: Option<LinearAngularBody>,
    /// Reference momentum (linear kg m/s, angular kg m^2/s); zero when left out.
    pub(super) reference: Option<LinearAngularBody>,
    /// Reference of the centre of mass [x, y, z], world axes (m); required where `position_gain` is
    /// not zero.
    pub(super) center: Option<[f64; 3]>,
    /// Gain on the error of the rate of momentum (1/s); zero when left out.
    pub(super) rate_gain: Option<LinearAngularGainBody>,
    /// Gain on the momentum error (1/s at first rate, 1/s^2 at second); zero when left out.
    pub(super) momentum_gain: Option<LinearAngularGainBody>,
    /// Gain on the centre-of-mass error times mass, linear part, 0 or more (1/s^2 at first rate,
    /// 1/s^3 at second); zero when left out.
    #[schemars(extend("minimum" = 0.0))]
    pub(super) position_gain: Option<f64>,
    /// Wanted wrench of the ground on the sole, about the sole origin, world axes (N, N m).
    pub(super) wrench: Option<WrenchBody>,
    /// Rate at which the wrench is approached, more than 0 and at most one per tick (1/s): wanted is
    /// present + tick * rate * (wrench - present). The wrench itself when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    pub(super) approach: Option<f64>,
}

impl TaskKindBody {
    /// As the request spells it.
    pub(super) fn word(self) -> &'static str {
        match self {
            TaskKindBody::MomentumRate => "momentum_rate",
            TaskKindBody::MomentumSecondRate => "momentum_second_rate",
            TaskKindBody::CenterOfMass => "center_of_mass",
            TaskKindBody::FramePosition => "frame_position",
            TaskKindBody::FrameOrientation => "frame_orientation",
            TaskKindBody::FramePose => "frame_pose",
            TaskKindBody::Posture => "posture",
            TaskKindBody::JointAcceleration => "joint_acceleration",
            TaskKindBody::BaseAcceleration => "base_acceleration",
            TaskKindBody::Wrench => "wrench",
            TaskKindBody::WrenchSmoothness => "wrench_smoothness",
            TaskKindBody::Effort => "effort",
        }
    }

    /// Which components it has: (linear, angular). None at all for tasks on joints.
    pub(super) fn parts(self) -> (bool, bool) {
        match self {
            TaskKindBody::CenterOfMass | TaskKindBody::FramePosition => (true, false),
            TaskKindBody::FrameOrientation => (false, true),
            TaskKindBody::Posture | TaskKindBody::JointAcceleration | TaskKindBody::Effort => {
                (false, false)
            }
            _ => (true, true),
        }
    }
}
