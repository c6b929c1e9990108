//! From a task in a request to a task of the problem.

use super::common::{LinearAngularGainBody, WrenchBody};
use super::friction::positive;
use super::gate::{At, Gate, listed, quoted};
use super::joints::{JointList, Named};
use super::kinds::given;
use super::state::frame_index;
use super::task::{
    AxisBody, GainsBody, TASK_JOINT_KINDS, TASK_KINDS, TaskBody, TaskJointBody, TaskKindBody,
};
use super::treatment::{priority, ratio};
use crate::contact::{Law, TickRule};
use crate::model::{BaseKind, Joint, Model};
use crate::problem::question::{
    Contact, Gains, Importance, MomentumAim, OrientationAim, PointAim, Task, TaskKind, Tick,
};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Vec3};

/// What the conversion of tasks has to know. Contacts that could not be read are none.
pub(super) struct Surroundings<'a> {
    pub(super) model: &'a Model,
    pub(super) tick: Tick,
    /// Sole names of the request's contacts, in its order.
    pub(super) soles: Vec<&'a str>,
    /// The contacts, in the same order.
    pub(super) contacts: &'a [Option<Contact>],
    /// False where contacts were left out of what is read.
    pub(super) complete: bool,
}

impl Surroundings<'_> {
    fn is_point(&self, contact: &Contact) -> bool {
        self.model.soles.get(contact.sole).is_some_and(|sole| sole.shape == SoleShape::Point)
    }

    /// Soles whose present wrench is not known: rigid ground without a measured wrench.
    fn unknown(&self) -> impl Iterator<Item = usize> + '_ {
        let unknown = |c: &Contact| matches!(c.ground.law, Law::Rigid { .. }) && c.ground.measured.is_none();
        self.contacts.iter().enumerate().filter(move |(_, c)| c.as_ref().is_some_and(unknown)).map(|(i, _)| i)
    }

    /// True where contact forces over the tick are the present ones whatever the robot does, so that
    /// the rate of momentum cannot be chosen.
    fn momentum_rate_is_given(&self) -> bool {
        let soft = |c: &Option<Contact>| c.as_ref().is_none_or(|c| matches!(c.ground.law, Law::Bonded(_)));
        self.complete
            && self.tick.rule == TickRule::Explicit
            && self.model.base == BaseKind::Floating
            && self.contacts.iter().all(soft)
    }

    /// Index in `contacts` of a sole by name.
    fn contact(&self, gate: &mut Gate, at: At<'_>, name: &str) -> Option<usize> {
        let index = self.soles.iter().position(|sole| *sole == name);
        if index.is_none() && (self.complete || self.model.sole(name).is_none()) {
            let known = listed(self.soles.iter().copied());
            let got = match self.model.sole(name) {
                Some(_) => format!("{}, which is in the air", quoted(name)),
                None => quoted(name),
            };
            gate.fault(at, format!("the name of a sole that is among the contacts: {known}"), got);
        }
        index
    }
}

impl TaskBody {
    /// The task; none where its kind cannot be read.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>) -> Option<Task> {
        let given = given!(
            self, axes, scale_angular, frame, point, sole, joints, acceleration, velocity, position,
            gains, angular_acceleration, angular_velocity, orientation, gains_angular, second_rate,
            rate, reference, center, rate_gain, momentum_gain, position_gain, wrench, approach,
        );
        TASK_KINDS.check(gate, at, self.kind.word(), &given);
        let importance = self.importance(gate, at);
        let weight = ratio(gate, at.name("weight"), self.weight);
        let scale = ratio(gate, at.name("scale"), self.scale);
        let scale_angular = ratio(gate, at.name("scale_angular"), self.scale_angular);
        let mut axes = self.axes(gate, at);
        let kind = self.aim(gate, at, around)?;
        if let TaskKind::Wrench { contact, .. } | TaskKind::WrenchSmoothness { contact: Some(contact) } = kind
            && let Some(Some(contact)) = around.contacts.get(contact)
            && around.is_point(contact)
        {
            if self.axes.is_some() && axes.iter().skip(3).any(|on| *on) {
                gate.fault(at.name("axes"), "x, y, z: a point sole carries no moment", "rx, ry or rz");
            }
            axes.iter_mut().skip(3).for_each(|on| *on = false);
        }
        Some(Task { name: self.name.clone(), importance, weight, scale, scale_angular, axes, kind })
    }

    fn importance(&self, gate: &mut Gate, at: At<'_>) -> Importance {
        match (self.priority, self.must_hold.unwrap_or(false)) {
            (Some(value), false) => Importance::Priority(priority(gate, at.name("priority"), value)),
            (None, true) => Importance::MustHold,
            (Some(_), true) => {
                gate.fault(at.name("must_hold"), "either priority or must_hold: true", "both");
                Importance::MustHold
            }
            (None, false) => {
                if !gate.lacks(at.name("must_hold")) {
                    gate.missing(at.name("priority"), "a priority, or must_hold: true");
                }
                Importance::MustHold
            }
        }
    }

    fn axes(&self, gate: &mut Gate, at: At<'_>) -> [bool; 6] {
        let (linear, angular) = self.kind.parts();
        let all = [linear, linear, linear, angular, angular, angular];
        let Some(wanted) = &self.axes else { return all };
        let here = at.name("axes");
        let mut axes = [false; 6];
        if wanted.is_empty() {
            gate.fault(here, "at least one axis", "none");
        }
        for (i, axis) in wanted.iter().enumerate() {
            let (k, name) = match axis {
                AxisBody::X => (0, "x"),
                AxisBody::Y => (1, "y"),
                AxisBody::Z => (2, "z"),
                AxisBody::Rx => (3, "rx"),
                AxisBody::Ry => (4, "ry"),
                AxisBody::Rz => (5, "rz"),
            };
            if axes[k] {
                gate.fault(here.index(i), "each axis once", format!("{name:?} again"));
            }
            if !all[k] && (linear || angular) {
                let part = if linear { "x, y or z" } else { "rx, ry or rz" };
                let expected = format!("{part}, for the kind is {:?}", self.kind.word());
                gate.fault(here.index(i), expected, format!("{name:?}"));
            }
            axes[k] = true;
        }
        axes
    }

    fn aim(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>) -> Option<TaskKind> {
        let kind = match self.kind {
            TaskKindBody::MomentumRate => {
                self.needs_choice(gate, at, around);
                TaskKind::MomentumRate(self.momentum(gate, at))
            }
            TaskKindBody::MomentumSecondRate => {
                self.needs_present(gate, at, around, None);
                TaskKind::MomentumSecondRate(self.momentum(gate, at))
            }
            TaskKindBody::CenterOfMass => {
                self.needs_choice(gate, at, around);
                TaskKind::CenterOfMass(self.point_aim(gate, at))
            }
            TaskKindBody::FramePosition => TaskKind::FramePosition {
                frame: self.frame(gate, at, around)?,
                point: Vec3::from(self.point.unwrap_or_default()),
                aim: self.point_aim(gate, at),
            },
            TaskKindBody::FrameOrientation => TaskKind::FrameOrientation {
                frame: self.frame(gate, at, around)?,
                aim: self.orientation_aim(gate, at),
            },
            TaskKindBody::FramePose => TaskKind::FramePose {
                frame: self.frame(gate, at, around)?,
                point: Vec3::from(self.point.unwrap_or_default()),
                position: self.point_aim(gate, at),
                orientation: self.orientation_aim(gate, at),
            },
            TaskKindBody::Posture => TaskKind::Posture {
                joints: self.joints(gate, at, around.model, |i, _, entry| {
                    let zero = |value: Option<f64>| value.unwrap_or(0.0);
                    (i, zero(entry.position), zero(entry.velocity), zero(entry.acceleration))
                }),
                gains: gains(gate, at.name("gains"), self.gains),
            },
            TaskKindBody::JointAcceleration => {
                let value = |i, _: &Joint, entry: &TaskJointBody| (i, entry.acceleration.unwrap_or(0.0));
                TaskKind::JointAcceleration(self.joints(gate, at, around.model, value))
            }
            TaskKindBody::BaseAcceleration => self.base_acceleration(gate, at, around),
            TaskKindBody::Wrench => self.wrench_aim(gate, at, around)?,
            TaskKindBody::WrenchSmoothness => {
                let here = at.name("sole");
                let contact = match &self.sole {
                    Some(name) => Some(around.contact(gate, here, name)?),
                    None => None,
                };
                if contact.is_some() {
                    self.needs_present(gate, at, around, contact);
                }
                TaskKind::WrenchSmoothness { contact }
            }
            TaskKindBody::Effort => self.effort(gate, at, around.model),
        };
        Some(kind)
    }

    /// Under the explicit rule the present wrenches act over the tick, and with them the rate of
    /// momentum is given: a task on it would have nothing to choose.
    fn needs_choice(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>) {
        if around.momentum_rate_is_given() {
            let expected = "momentum_second_rate, or another tick rule: under the explicit rule the present \
                            wrenches of soft soles act all through the tick, so the rate of momentum is \
                            given and leaves no freedom";
            gate.fault(at.name("kind"), expected, format!("{:?}", self.kind.word()));
        }
    }

    /// Notes soles (one, or all) whose present wrench this task needs but nothing tells.
    fn needs_present(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>, only: Option<usize>) {
        for contact in around.unknown().filter(|i| only.is_none_or(|only| only == *i)) {
            let sole = around.soles.get(contact).copied().unwrap_or_default();
            let expected = format!(
                "a measured_wrench on the sole {}: its ground is rigid, and this task needs its present \
                 wrench",
                quoted(sole)
            );
            gate.fault(at.name("kind"), expected, format!("{:?}", self.kind.word()));
        }
    }

    fn momentum(&self, gate: &mut Gate, at: At<'_>) -> MomentumAim {
        let position_gain = gain(gate, at.name("position_gain"), self.position_gain);
        if position_gain != 0.0 && self.center.is_none() {
            gate.missing(at.name("center"), "the reference of the centre of mass, for position_gain is given");
        }
        let vectors = |body: Option<super::common::LinearAngularBody>| body.unwrap_or_default().vectors();
        MomentumAim {
            second_rate: vectors(self.second_rate),
            rate: vectors(self.rate),
            reference: vectors(self.reference),
            center: Vec3::from(self.center.unwrap_or_default()),
            rate_gain: gain_pair(gate, at.name("rate_gain"), self.rate_gain),
            momentum_gain: gain_pair(gate, at.name("momentum_gain"), self.momentum_gain),
            position_gain,
        }
    }

    fn point_aim(&self, gate: &mut Gate, at: At<'_>) -> PointAim {
        let gains = gains(gate, at.name("gains"), self.gains);
        if gains.position != 0.0 && self.position.is_none() {
            gate.missing(at.name("position"), "the reference position, for gains.position is given");
        }
        PointAim {
            acceleration: Vec3::from(self.acceleration.unwrap_or_default()),
            velocity: Vec3::from(self.velocity.unwrap_or_default()),
            position: Vec3::from(self.position.unwrap_or_default()),
            gains,
        }
    }

    fn orientation_aim(&self, gate: &mut Gate, at: At<'_>) -> OrientationAim {
        let gains = gains(gate, at.name("gains_angular"), self.gains_angular);
        let here = at.name("orientation");
        let orientation = match &self.orientation {
            Some(q) => gate.rotation(here, q),
            None => Mat3::identity(),
        };
        if gains.position != 0.0 && self.orientation.is_none() {
            gate.missing(here, "the reference orientation, for gains_angular.position is given");
        }
        OrientationAim {
            acceleration: Vec3::from(self.angular_acceleration.unwrap_or_default()),
            velocity: Vec3::from(self.angular_velocity.unwrap_or_default()),
            orientation,
            gains,
        }
    }

    fn frame(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>) -> Option<usize> {
        frame_index(gate, at.name("frame"), around.model, self.frame.as_deref()?)
    }

    fn base_acceleration(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>) -> TaskKind {
        if around.model.base == BaseKind::Fixed {
            gate.fault(at.name("kind"), "another kind: the base is fixed", "\"base_acceleration\"");
        }
        TaskKind::BaseAcceleration {
            linear: Vec3::from(self.acceleration.unwrap_or_default()),
            angular: Vec3::from(self.angular_acceleration.unwrap_or_default()),
        }
    }

    fn wrench_aim(&self, gate: &mut Gate, at: At<'_>, around: &Surroundings<'_>) -> Option<TaskKind> {
        let contact = around.contact(gate, at.name("sole"), self.sole.as_deref()?)?;
        let point = around.contacts.get(contact)?.as_ref().is_some_and(|c| around.is_point(c));
        let body: WrenchBody = self.wrench?;
        let value = body.read(gate, at.name("wrench"), point);
        if let Some(rate) = self.approach {
            let most = (1.0 + 1e-12) / around.tick.length;
            positive(gate, at.name("approach"), rate, most, "1/s, one per tick");
            self.needs_present(gate, at, around, Some(contact));
        }
        Some(TaskKind::Wrench { contact, value, approach: self.approach })
    }

    fn effort(&self, gate: &mut Gate, at: At<'_>, model: &Model) -> TaskKind {
        if self.joints.is_none() {
            let actuated = model.joints.iter().enumerate().filter(|(_, joint)| joint.actuated);
            return TaskKind::Effort(actuated.map(|(i, _)| (i, 0.0)).collect());
        }
        let value = |i, _: &Joint, entry: &TaskJointBody| (i, entry.torque.unwrap_or(0.0));
        TaskKind::Effort(self.joints(gate, at, model, value))
    }

    fn joints<T>(
        &self,
        gate: &mut Gate,
        at: At<'_>,
        model: &Model,
        read: impl Fn(usize, &Joint, &TaskJointBody) -> T,
    ) -> Vec<T> {
        let Some(entries) = &self.joints else { return Vec::new() };
        let list = JointList { at: at.name("joints"), model, actuated: self.kind == TaskKindBody::Effort };
        let check = |gate: &mut Gate, here: At<'_>, entry: &TaskJointBody| {
            let given = given!(entry, position, velocity, acceleration, torque);
            TASK_JOINT_KINDS.check(gate, here, self.kind.word(), &given);
        };
        list.read(gate, entries, check, |_, _, i, joint, entry| Some(read(i, joint, entry)))
    }
}

impl Named for TaskJointBody {
    fn name(&self) -> &str {
        &self.name
    }
}

fn gain(gate: &mut Gate, at: At<'_>, value: Option<f64>) -> f64 {
    let value = value.unwrap_or(0.0);
    if value < 0.0 {
        gate.fault(at, "a gain, 0 or more", value.to_string());
    }
    value
}

fn gains(gate: &mut Gate, at: At<'_>, body: Option<GainsBody>) -> Gains {
    let body = body.unwrap_or_default();
    Gains {
        position: gain(gate, at.name("position"), body.position),
        velocity: gain(gate, at.name("velocity"), body.velocity),
    }
}

fn gain_pair(gate: &mut Gate, at: At<'_>, body: Option<LinearAngularGainBody>) -> [f64; 2] {
    let body = body.unwrap_or_default();
    [gain(gate, at.name("linear"), body.linear), gain(gate, at.name("angular"), body.angular)]
}
