//! Content hashes: the same robot has the same id whatever its spelling.
//!
//! Hashed is what was read, not what was computed from it, so that the id does not depend on how a
//! machine rounds sines. Remarks count, so that everything in a model follows from its id. Left out
//! are white space, comments, attribute order, the spelling of numbers, and lines.

use super::SoleSpec;
use super::description::{Description, JointPart, LinkPart, Origin};
use super::options::ModelOptions;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Vec3};
use sha2::{Digest, Sha256};

/// Bytes of the hash that are shown.
const SHOWN: usize = 16;

/// Writes values so that no two different contents give the same bytes: texts and lists carry
/// their length, options a flag.
pub(super) struct Hasher(Sha256);

impl Hasher {
    pub(super) fn new(purpose: &str) -> Self {
        let mut hasher = Hasher(Sha256::new());
        hasher.text(purpose);
        hasher
    }

    pub(super) fn finish(self) -> String {
        let digits = self.0.finalize().into_iter().take(SHOWN).map(|byte| format!("{byte:02x}"));
        format!("m-{}", digits.collect::<String>())
    }

    pub(super) fn text(&mut self, text: &str) {
        self.count(text.len());
        self.0.update(text.as_bytes());
    }

    pub(super) fn count(&mut self, count: usize) {
        self.0.update((count as u64).to_le_bytes());
    }

    fn flag(&mut self, flag: bool) {
        self.0.update([u8::from(flag)]);
    }

    pub(super) fn number(&mut self, number: f64) {
        // Adding zero makes -0 and 0 the same.
        self.0.update((number + 0.0).to_le_bytes());
    }

    fn option(&mut self, number: Option<f64>) {
        self.flag(number.is_some());
        self.number(number.unwrap_or(0.0));
    }

    pub(super) fn vector(&mut self, v: &Vec3) {
        v.iter().for_each(|c| self.number(*c));
    }

    pub(super) fn matrix(&mut self, m: &Mat3) {
        m.iter().for_each(|c| self.number(*c));
    }

    fn origin(&mut self, origin: &Origin) {
        self.vector(&origin.xyz);
        self.vector(&origin.rpy);
    }

    fn link(&mut self, link: &LinkPart) {
        self.text(&link.name);
        self.flag(link.inertial.is_some());
        if let Some(inertial) = &link.inertial {
            self.origin(&inertial.origin);
            self.number(inertial.mass);
            inertial.moments.iter().for_each(|m| self.number(*m));
        }
    }

    fn joint(&mut self, joint: &JointPart) {
        self.text(&joint.name);
        self.text(joint.kind.name());
        self.text(&joint.parent);
        self.text(&joint.child);
        self.origin(&joint.origin);
        self.vector(&joint.axis);
        self.option(joint.position.map(|p| p.0));
        self.option(joint.position.map(|p| p.1));
        self.option(joint.effort);
        self.option(joint.speed);
        self.number(joint.viscous_friction);
        self.number(joint.coulomb_friction);
        self.number(joint.rotor_inertia);
        self.option(joint.torque_speed.map(|line| line.stall));
        self.option(joint.torque_speed.map(|line| line.no_load_speed));
        self.flag(joint.actuated);
        self.option(joint.locked_at);
    }

    fn sole(&mut self, sole: &SoleSpec) {
        self.text(&sole.name);
        self.text(&sole.link);
        self.matrix(&sole.placement.rotation);
        self.vector(&sole.placement.translation);
        match &sole.shape {
            SoleShape::Point => self.count(0),
            SoleShape::Polygon(polygon) => {
                self.count(polygon.vertices().len());
                polygon.vertices().iter().flatten().for_each(|c| self.number(*c));
            }
        }
    }
}

/// The id of a robot as read, its joint options already applied.
pub(super) fn of_description(
    description: &Description,
    options: &ModelOptions,
    remarks: &[String],
) -> String {
    let mut hasher = Hasher::new("underfoot model 1");
    hasher.text(&description.name);
    hasher.flag(options.fixed_base);
    hasher.count(description.links.len());
    description.links.iter().for_each(|link| hasher.link(link));
    hasher.count(description.joints.len());
    description.joints.iter().for_each(|joint| hasher.joint(joint));
    hasher.count(options.soles.len());
    options.soles.iter().for_each(|sole| hasher.sole(sole));
    hasher.count(remarks.len());
    remarks.iter().for_each(|remark| hasher.text(remark));
    hasher.finish()
}
