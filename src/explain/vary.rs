//! The ground parameters of a question, one at a time.

use crate::contact::{Law, Material};
use crate::problem::question::Question;

/// What is varied under one contact.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ParameterKind {
    /// Normal and tangential stiffness by the same factor.
    Stiffness,
    /// Normal and tangential damping by the same factor.
    Damping,
    /// Normal stiffness k_n alone.
    NormalStiffness,
    /// Tangential stiffness k_t alone.
    TangentialStiffness,
    /// Normal damping b_n alone.
    NormalDamping,
    /// Tangential damping b_t alone.
    TangentialDamping,
    /// Friction coefficient mu.
    Friction,
}

/// One parameter of one contact.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Parameter {
    /// Index in `contacts`.
    pub contact: usize,
    /// Which.
    pub kind: ParameterKind,
}

impl Parameter {
    /// Its present value (per area or per sole, as the material is given); none where it does not exist: rigid ground, no
    /// friction limit, or the normal and tangential values together when they differ.
    pub fn value(&self, question: &Question) -> Option<f64> {
        let contact = question.contacts.get(self.contact)?;
        let material = match contact.ground.law {
            Law::Bonded(m) => Some(m),
            Law::Rigid { .. } => None,
        };
        let both = |a: f64, b: f64| (a == b).then_some(a);
        match self.kind {
            ParameterKind::Stiffness => material.and_then(|m| both(m.normal_stiffness, m.tangential_stiffness)),
            ParameterKind::Damping => material.and_then(|m| both(m.normal_damping, m.tangential_damping)),
            ParameterKind::NormalStiffness => material.map(|m| m.normal_stiffness),
            ParameterKind::TangentialStiffness => material.map(|m| m.tangential_stiffness),
            ParameterKind::NormalDamping => material.map(|m| m.normal_damping),
            ParameterKind::TangentialDamping => material.map(|m| m.tangential_damping),
            ParameterKind::Friction => contact.friction.map(|f| f.coefficient),
        }
    }
}

/// The question with one parameter multiplied by `factor`; unchanged where the parameter does not exist.
pub fn varied(question: &Question, parameter: Parameter, factor: f64) -> Question {
    let mut out = question.clone();
    let Some(contact) = out.contacts.get_mut(parameter.contact) else { return out };
    if parameter.kind == ParameterKind::Friction {
        if let Some(friction) = &mut contact.friction {
            friction.coefficient *= factor;
        }
    } else if let Law::Bonded(material) = &mut contact.ground.law {
        scale(material, parameter.kind, factor);
    }
    out
}

fn scale(material: &mut Material, kind: ParameterKind, factor: f64) {
    use ParameterKind::*;
    if matches!(kind, Stiffness | NormalStiffness) {
        material.normal_stiffness *= factor;
    }
    if matches!(kind, Stiffness | TangentialStiffness) {
        material.tangential_stiffness *= factor;
    }
    if matches!(kind, Damping | NormalDamping) {
        material.normal_damping *= factor;
    }
    if matches!(kind, Damping | TangentialDamping) {
        material.tangential_damping *= factor;
    }
}
