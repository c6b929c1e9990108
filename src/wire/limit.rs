//! Limits of joints and torques in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::gate::{At, Gate, quoted};
use super::joints::{JointList, Named};
use super::kinds::{KindRule, KindTable, given};
use super::solve::{MAX_NAME, TICK};
use super::strict::MAX_MAGNITUDE;
use super::treatment::{TreatmentBody, treatment};
use crate::model::{Joint, MAX_MOVING_JOINTS, Model};
use crate::problem::question::{Limit, LimitKind, Tick};

/// Joints one list may hold: as many as a model can have.
pub(super) const MAX_JOINTS: usize = MAX_MOVING_JOINTS;
/// The smallest bound of a torque or speed, and the narrowest range that is not a single position: rows are divided by them,
/// which must not overflow (N m, N, rad/s, m/s, rad or m).
const MIN_BOUND: f64 = 1e-9;
/// The longest horizon of a joint limit (s).
const MAX_HORIZON: f64 = 10.0;
/// Ticks the horizon spans where the request gives none.
const DEFAULT_HORIZON_TICKS: f64 = 10.0;

/// Kinds of limit.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum LimitKindBody {
    Torque,
    TorqueSpeed,
    CoupledTorque,
    Position,
    Velocity,
}

/// Which members go with which kind.
pub(super) const LIMIT_KINDS: KindTable = KindTable {
    definition: "Limit",
    rules: &[
        KindRule { kind: "torque", needs: &[], may: &["joints"] },
        KindRule { kind: "torque_speed", needs: &[], may: &["joints"] },
        KindRule { kind: "coupled_torque", needs: &["joints", "bound"], may: &[] },
        KindRule { kind: "position", needs: &[], may: &["joints", "horizon"] },
        KindRule { kind: "velocity", needs: &[], may: &["joints", "horizon"] },
    ],
};

/// Which members an entry of `joints` may have, by the limit's kind.
const ENTRY_KINDS: KindTable = KindTable {
    definition: "LimitJoint",
    rules: &[
        KindRule { kind: "torque", needs: &[], may: &["bound"] },
        KindRule { kind: "torque_speed", needs: &[], may: &["stall", "no_load_speed"] },
        KindRule { kind: "coupled_torque", needs: &["coefficient"], may: &[] },
        KindRule { kind: "position", needs: &[], may: &["lower", "upper"] },
        KindRule { kind: "velocity", needs: &[], may: &["bound"] },
    ],
};

/// A limit of joints or torques. `torque`: |torque| at most `bound`. `torque_speed`: the torque
/// that falls linearly with speed. `coupled_torque`: sum of `coefficient` times torque at most
/// `bound`. `position` and `velocity`: the joint stays in its range over the horizon H,
/// lower <= q + H q_dot + H^2 q_ddot / 2 <= upper and |q_dot + H q_ddot| <= bound.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Limit")]
pub(super) struct LimitBody {
    /// Name by which the answer reports it, unique among limits and tasks (no unit); the kind when
    /// left out.
    #[schemars(extend("minLength" = 1, "maxLength" = MAX_NAME))]
    name: Option<String>,
    /// `torque`, `torque_speed`, `coupled_torque`, `position` or `velocity` (no unit).
    kind: LimitKindBody,
    /// Joints it holds for (bounds in N m or N, rad/s or m/s, rad or m). When left out: every joint
    /// for which the model gives such a limit. Not for `coupled_torque`, which needs them.
    #[schemars(extend("minItems" = 1, "maxItems" = MAX_JOINTS))]
    joints: Option<Vec<LimitJointBody>>,
    /// For `coupled_torque`: bound of the weighted sum of torques (N m, or N for sliding joints).
    bound: Option<f64>,
    /// For `position` and `velocity`: horizon H (s), at least one tick, at most 10 s; ten ticks when
    /// left out.
    #[schemars(extend("minimum" = TICK.0, "maximum" = MAX_HORIZON))]
    horizon: Option<f64>,
    /// How strictly it holds, `hard` or `soft` (excess in N m or N, rad or m, rad/s or m/s); hard
    /// when left out.
    treatment: Option<TreatmentBody>,
}

/// One joint of a limit. What is left out comes from the model.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "LimitJoint")]
struct LimitJointBody {
    /// Joint name as in the URDF (no unit).
    name: String,
    /// For `torque`: largest torque or force, 1e-9 or more (N m or N). For `velocity`: largest speed,
    /// 1e-9 or more (rad/s or m/s).
    #[schemars(extend("minimum" = MIN_BOUND))]
    bound: Option<f64>,
    /// For `position`: lower end (rad or m).
    lower: Option<f64>,
    /// For `position`: upper end (rad or m); the lower one, or at least 1e-9 above it.
    upper: Option<f64>,
    /// For `torque_speed`: torque at standstill, 1e-9 or more (N m or N).
    #[schemars(extend("minimum" = MIN_BOUND))]
    stall: Option<f64>,
    /// For `torque_speed`: speed at which no torque is left, 1e-9 or more (rad/s or m/s).
    #[schemars(extend("minimum" = MIN_BOUND))]
    no_load_speed: Option<f64>,
    /// For `coupled_torque`: coefficient of this joint's torque (no unit).
    coefficient: Option<f64>,
}

impl Named for LimitJointBody {
    fn name(&self) -> &str {
        &self.name
    }
}

impl LimitJointBody {
    fn named(name: &str) -> Self {
        LimitJointBody {
            name: name.to_string(),
            bound: None,
            lower: None,
            upper: None,
            stall: None,
            no_load_speed: None,
            coefficient: None,
        }
    }
}

impl LimitKindBody {
    fn word(self) -> &'static str {
        match self {
            LimitKindBody::Torque => "torque",
            LimitKindBody::TorqueSpeed => "torque_speed",
            LimitKindBody::CoupledTorque => "coupled_torque",
            LimitKindBody::Position => "position",
            LimitKindBody::Velocity => "velocity",
        }
    }

    /// True where the model gives the joint a limit of this kind.
    fn in_model(self, joint: &Joint) -> bool {
        match self {
            LimitKindBody::Torque => joint.actuated && joint.effort.is_some(),
            LimitKindBody::TorqueSpeed => joint.actuated && joint.torque_speed.is_some(),
            LimitKindBody::CoupledTorque => false,
            LimitKindBody::Position => joint.position.is_some(),
            LimitKindBody::Velocity => joint.speed.is_some(),
        }
    }

    fn on_torque(self) -> bool {
        !matches!(self, LimitKindBody::Position | LimitKindBody::Velocity)
    }
}

impl LimitBody {
    /// Its name.
    pub(super) fn name(&self) -> &str {
        self.name.as_deref().unwrap_or(self.kind.word())
    }

    /// The limit.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, model: &Model, tick: Tick) -> Limit {
        let word = self.kind.word();
        LIMIT_KINDS.check(gate, at, word, &given!(self, joints, bound, horizon));
        let list = at.name("joints");
        let kind = match self.kind {
            LimitKindBody::Torque => LimitKind::Torque(self.each(gate, list, model, torque_bound)),
            LimitKindBody::TorqueSpeed => {
                LimitKind::TorqueSpeed(self.each(gate, list, model, torque_speed))
            }
            LimitKindBody::CoupledTorque => LimitKind::CoupledTorque {
                coefficients: self.each(gate, list, model, |_, _, i, _, entry| {
                    Some((i, entry.coefficient.unwrap_or(0.0)))
                }),
                bound: self.bound.unwrap_or(0.0),
            },
            LimitKindBody::Position => LimitKind::Position {
                joints: self.each(gate, list, model, position_range),
                horizon: self.horizon(gate, at, tick),
            },
            LimitKindBody::Velocity => LimitKind::Velocity {
                joints: self.each(gate, list, model, speed_bound),
                horizon: self.horizon(gate, at, tick),
            },
        };
        let decay = Err("decay is for friction and normal force only");
        let treatment = treatment(gate, at, self.treatment.as_ref(), tick.length, decay);
        Limit { name: self.name().to_string(), kind, treatment }
    }

    fn horizon(&self, gate: &mut Gate, at: At<'_>, tick: Tick) -> f64 {
        let default = (DEFAULT_HORIZON_TICKS * tick.length).min(MAX_HORIZON);
        let horizon = self.horizon.unwrap_or(default);
        gate.within(at.name("horizon"), horizon, tick.length, MAX_HORIZON, "s, at least one tick")
    }

    /// What `read` makes of every joint listed, or of every joint with such a limit.
    fn each<T>(
        &self,
        gate: &mut Gate,
        at: At<'_>,
        model: &Model,
        read: impl Fn(&mut Gate, At<'_>, usize, &Joint, &LimitJointBody) -> Option<T>,
    ) -> Vec<T> {
        let Some(entries) = &self.joints else {
            let mut out = Vec::new();
            for (i, joint) in model.joints.iter().enumerate() {
                if self.kind.in_model(joint) {
                    let before = gate.kept();
                    out.extend(read(gate, at, i, joint, &LimitJointBody::named(&joint.name)));
                    if gate.kept() > before {
                        gate.gather(before, at, &format!("from the model's joint {}", quoted(&joint.name)));
                    }
                }
            }
            if out.is_empty() && self.kind != LimitKindBody::CoupledTorque {
                gate.missing(at, "joints, for the model gives none such a limit");
            }
            return out;
        };
        let list = JointList { at, model, actuated: self.kind.on_torque() };
        let check = |gate: &mut Gate, here: At<'_>, entry: &LimitJointBody| {
            let given = given!(entry, bound, lower, upper, stall, no_load_speed, coefficient);
            ENTRY_KINDS.check(gate, here, self.kind.word(), &given);
        };
        list.read(gate, entries, check, read)
    }
}

fn torque_bound(
    gate: &mut Gate,
    at: At<'_>,
    i: usize,
    joint: &Joint,
    entry: &LimitJointBody,
) -> Option<(usize, f64)> {
    let Some(bound) = entry.bound.or(joint.effort) else {
        gate.missing(at.name("bound"), "a bound, for the model gives this joint no effort limit");
        return None;
    };
    gate.within(at.name("bound"), bound, MIN_BOUND, MAX_MAGNITUDE, "N m or N");
    Some((i, bound))
}

fn speed_bound(
    gate: &mut Gate,
    at: At<'_>,
    i: usize,
    joint: &Joint,
    entry: &LimitJointBody,
) -> Option<(usize, f64)> {
    let Some(bound) = entry.bound.or(joint.speed) else {
        gate.missing(at.name("bound"), "a bound, for the model gives this joint no largest speed");
        return None;
    };
    gate.within(at.name("bound"), bound, MIN_BOUND, MAX_MAGNITUDE, "rad/s or m/s");
    Some((i, bound))
}

fn torque_speed(
    gate: &mut Gate,
    at: At<'_>,
    i: usize,
    joint: &Joint,
    entry: &LimitJointBody,
) -> Option<(usize, f64, f64)> {
    let line = joint.torque_speed;
    let stall = entry.stall.or(line.map(|line| line.stall));
    let speed = entry.no_load_speed.or(line.map(|line| line.no_load_speed));
    for (name, value, unit) in [("stall", stall, "N m or N"), ("no_load_speed", speed, "rad/s or m/s")] {
        match value {
            Some(value) => {
                gate.within(at.name(name), value, MIN_BOUND, MAX_MAGNITUDE, unit);
            }
            None => gate.missing(at.name(name), "a number, for the model gives no torque-speed line"),
        }
    }
    Some((i, stall?, speed?))
}

fn position_range(
    gate: &mut Gate,
    at: At<'_>,
    i: usize,
    joint: &Joint,
    entry: &LimitJointBody,
) -> Option<(usize, f64, f64)> {
    let lower = entry.lower.or(joint.position.map(|range| range.0));
    let upper = entry.upper.or(joint.position.map(|range| range.1));
    for (name, value) in [("lower", lower), ("upper", upper)] {
        if value.is_none() {
            gate.missing(at.name(name), "a number, for the model gives this joint no position limits");
        }
    }
    let (lower, upper) = (lower?, upper?);
    if lower > upper {
        gate.fault(at.name("upper"), format!("{lower} or more"), upper.to_string());
    } else if lower < upper && upper - lower < MIN_BOUND {
        let expected = format!("{lower}, or at least {MIN_BOUND} above it");
        gate.fault(at.name("upper"), expected, upper.to_string());
    }
    Some((i, lower, upper))
}
