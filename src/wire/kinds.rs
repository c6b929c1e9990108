//! Objects whose `kind` decides which other members they have. One table per object serves the
//! conversion and the published schema alike, so that both refuse the same requests.

use super::gate::{At, Gate};

/// The members that go with one kind, besides those that go with every kind.
#[derive(Debug, Clone, Copy)]
pub(super) struct KindRule {
    /// The kind.
    pub(super) kind: &'static str,
    /// Members it needs.
    pub(super) needs: &'static [&'static str],
    /// Members it may have.
    pub(super) may: &'static [&'static str],
}

/// An object with a `kind`.
pub(super) struct KindTable {
    /// Name of the object in the schemas.
    pub(super) definition: &'static str,
    /// Its kinds.
    pub(super) rules: &'static [KindRule],
}

impl KindTable {
    /// The rule of a kind.
    pub(super) fn rule(&self, kind: &str) -> Option<&'static KindRule> {
        self.rules.iter().find(|rule| rule.kind == kind)
    }

    /// Every member that belongs to some kind but not to this one.
    pub(super) fn foreign(&self, own: &KindRule) -> Vec<&'static str> {
        let mut names: Vec<&str> = Vec::new();
        for rule in self.rules {
            for &name in rule.needs.iter().chain(rule.may) {
                if !own.needs.contains(&name) && !own.may.contains(&name) && !names.contains(&name) {
                    names.push(name);
                }
            }
        }
        names
    }

    /// Notes members that are missing for this kind, and members that belong to other kinds.
    /// `given` lists the members that depend on the kind and whether they are there.
    pub(super) fn check(&self, gate: &mut Gate, at: At<'_>, kind: &str, given: &[(&str, bool)]) {
        let Some(rule) = self.rule(kind) else { return };
        for &(name, there) in given {
            if rule.needs.contains(&name) {
                if !there {
                    gate.missing(at.name(name), format!("a member {name:?}, for the kind is {kind:?}"));
                }
            } else if there && !rule.may.contains(&name) {
                let expected = format!("no member {name:?}, for the kind is {kind:?}");
                gate.fault(at.name(name), expected, "one");
            }
        }
    }
}

/// Pairs of member name and presence: `given!(body, stiffness, damping)`.
macro_rules! given {
    ($body:expr, $($name:ident),+ $(,)?) => {
        [$((stringify!($name), $body.$name.is_some())),+]
    };
}
pub(super) use given;
