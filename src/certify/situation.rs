//! The question made ready for checking: rest poses found, soles listed, sizes fixed.

use super::ground::{Bed, rule_factors};
use super::held::Held;
use super::motion::{Motion, move_bodies};
use super::newton_euler::{Load, residual};
use super::rest;
use crate::contact::{Law, Patch, SoleMotion, TickRule};
use crate::problem::question::{Contact, Question};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Twist, Vec3, Wrench};

/// Gravity that stands in where a question has none (m/s^2): sizes have to come from somewhere.
const STANDARD_GRAVITY: f64 = 9.80665;

/// What a check needs to know of the question, found without solver or problem.
pub struct Situation<'a> {
    /// The question.
    pub question: &'a Question,
    /// One bed per contact: none on rigid ground, and where no rest pose carries what it should.
    pub beds: Vec<Option<Bed>>,
    /// The tick's motion under the rule `held`; none under other rules, or where it cannot be formed.
    pub held: Option<Held>,
    /// Mass times gravity (N): forces are relative to it, moments to it times one metre.
    pub weight: f64,
    /// Gravity (m/s^2): accelerations are relative to it.
    pub gravity: f64,
}

impl<'a> Situation<'a> {
    /// Kinematics at the present state and every rest pose.
    pub fn new(question: &'a Question) -> Self {
        let model = &*question.model;
        let strength = question.gravity.norm();
        let gravity = if strength > 0.0 { strength } else { STANDARD_GRAVITY };
        let motions = move_bodies(model, &question.state, &vec![0.0; model.velocities()]);
        let mut situation = Situation { question, beds: Vec::new(), held: None, weight: model.mass() * gravity, gravity };
        situation.beds = question
            .contacts
            .iter()
            .map(|contact| {
                let sole = &model.soles[contact.sole];
                let patch = Patch { shape: &sole.shape, ground: &contact.ground };
                rest::bed(&patch, &at_present(&situation.sole(contact, &motions)))
            })
            .collect();
        if situation.is_held() {
            situation.held = Held::new(&situation);
        }
        situation
    }

    /// True under the rule `held`.
    pub fn is_held(&self) -> bool {
        self.question.tick.rule == TickRule::Held
    }

    /// Length and rule of the tick.
    pub fn tick(&self) -> (f64, crate::contact::TickRule) {
        (self.question.tick.length, self.question.tick.rule)
    }

    /// Motion of the sole frame of a contact, bodies moving as given.
    pub fn sole(&self, contact: &Contact, motions: &[Motion]) -> Motion {
        let sole = &self.question.model.soles[contact.sole];
        motions[sole.body].carried(&sole.placement)
    }

    /// Surface of the sole of a contact.
    pub fn shape(&self, contact: &Contact) -> &SoleShape {
        &self.question.model.soles[contact.sole].shape
    }

    /// Name of the sole of a contact.
    pub fn name(&self, contact: &Contact) -> &str {
        &self.question.model.soles[contact.sole].name
    }

    /// Motion of all bodies under a generalised acceleration.
    pub fn motions(&self, acceleration: &[f64]) -> Vec<Motion> {
        move_bodies(&self.question.model, &self.question.state, acceleration)
    }

    /// Present wrench of contact i: the law's or the measured one; none on rigid ground without a measurement.
    pub fn now(&self, i: usize) -> Option<Wrench> {
        match &self.beds[i] {
            Some(bed) => Some(bed.now()),
            None => self.question.contacts[i].ground.measured,
        }
    }

    /// The wrench at the tick's end that the law gives contact i for a sole acceleration; none on rigid ground.
    /// Not a number where no rest pose was found.
    pub fn end(&self, i: usize, acceleration: &Twist) -> Option<Wrench> {
        match (&self.beds[i], self.question.contacts[i].ground.law) {
            (Some(bed), _) => Some(bed.end(self.tick(), acceleration)),
            (None, Law::Rigid { .. }) => None,
            (None, Law::Bonded(_)) => Some(unknown_wrench()),
        }
    }

    /// The acceleration prescribed on rigid ground: zero, or what stops the sole within the tick.
    pub fn prescribed(&self, contact: &Contact, motion: &Motion) -> Option<Twist> {
        let Law::Rigid { stop } = contact.ground.law else { return None };
        if !stop {
            return Some(Twist::zero());
        }
        let ground = &contact.ground.rest_twist;
        let length = self.question.tick.length;
        Some(Twist {
            linear: (ground.linear - motion.twist.linear) / length,
            angular: (ground.angular - motion.twist.angular) / length,
        })
    }

    /// What acts during the tick: `w_bar = (1 - theta) now + theta w+` on soft ground, `w+` on rigid ground.
    fn acting(&self, i: usize, end: &Wrench) -> Wrench {
        if matches!(self.question.contacts[i].ground.law, Law::Rigid { .. }) {
            return *end;
        }
        let theta = rule_factors(self.question.tick.rule).1;
        let now = self.now(i).unwrap_or_else(unknown_wrench);
        Wrench {
            force: now.force * (1.0 - theta) + end.force * theta,
            moment: now.moment * (1.0 - theta) + end.moment * theta,
        }
    }

    /// What is left of the balance of forces and moments for any acceleration, torques and tick-end wrenches (one
    /// per contact), see [`residual`].
    pub fn balance(&self, acceleration: &[f64], torques: &[f64], ends: &[Wrench]) -> Vec<f64> {
        let acting: Vec<Wrench> = ends.iter().enumerate().map(|(i, end)| self.acting(i, end)).collect();
        self.balance_under(acceleration, torques, &acting)
    }

    /// The same under the wrenches that act during the tick.
    pub fn balance_under(&self, acceleration: &[f64], torques: &[f64], acting: &[Wrench]) -> Vec<f64> {
        let question = self.question;
        let motions = self.motions(acceleration);
        let mut loads: Vec<Load> = Vec::new();
        for (contact, &wrench) in question.contacts.iter().zip(acting) {
            let point = self.sole(contact, &motions).pose.translation;
            let body = question.model.soles[contact.sole].body;
            loads.push(Load { body, point, wrench });
        }
        for external in &question.external {
            let frame = &question.model.frames[external.frame];
            let point = motions[frame.body].pose.point(&frame.placement.point(&external.point));
            loads.push(Load { body: frame.body, point, wrench: external.wrench });
        }
        residual(&question.model, &question.state, &question.gravity, &motions, torques, acceleration, &loads)
    }

    /// Name of entry `row` of the generalised velocity.
    pub fn velocity_name(&self, row: usize) -> String {
        const BASE: [&str; 6] = ["base force x", "base force y", "base force z", "base moment x", "base moment y", "base moment z"];
        match row.checked_sub(self.question.model.joint_offset()) {
            Some(j) => self.question.model.joints[j].name.clone(),
            None => BASE[row].to_string(),
        }
    }
}

/// Pose and velocity alone.
pub fn at_present(motion: &Motion) -> SoleMotion {
    SoleMotion { pose: motion.pose, twist: motion.twist }
}

/// A wrench that no check accepts.
pub fn unknown_wrench() -> Wrench {
    Wrench { force: Vec3::repeat(f64::NAN), moment: Vec3::repeat(f64::NAN) }
}
