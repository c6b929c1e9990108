//! Lists of joints in a request, each joint at most once: those of limits and those of tasks.

use super::gate::{At, Gate, quoted};
use super::limit::MAX_JOINTS;
use super::state::joint_index;
use crate::model::{Joint, Model};

/// An entry that names a joint.
pub(super) trait Named {
    /// The joint's name.
    fn name(&self) -> &str;
}

/// What a list of joints must be.
pub(super) struct JointList<'a> {
    /// Where it stands.
    pub(super) at: At<'a>,
    pub(super) model: &'a Model,
    /// True where every joint needs a motor.
    pub(super) actuated: bool,
}

impl JointList<'_> {
    /// What `read` makes of every entry whose joint is known; `check` sees all entries.
    pub(super) fn read<E: Named, T>(
        &self,
        gate: &mut Gate,
        entries: &[E],
        check: impl Fn(&mut Gate, At<'_>, &E),
        read: impl Fn(&mut Gate, At<'_>, usize, &Joint, &E) -> Option<T>,
    ) -> Vec<T> {
        let mut out = Vec::new();
        if entries.is_empty() {
            gate.fault(self.at, "at least one joint", "none");
        }
        if !gate.at_most(self.at, entries.len(), MAX_JOINTS, "joints") {
            return out;
        }
        let mut seen = vec![false; self.model.joints.len()];
        for (k, entry) in entries.iter().enumerate() {
            let here = self.at.index(k);
            check(gate, here, entry);
            let name = here.name("name");
            let Some(i) = joint_index(gate, name, self.model, entry.name(), k) else { continue };
            let Some(joint) = self.model.joints.get(i) else { continue };
            if let Some(seen) = seen.get_mut(i)
                && std::mem::replace(seen, true)
            {
                gate.fault(name, "each joint once", format!("{} again", quoted(entry.name())));
            }
            if self.actuated && !joint.actuated {
                let got = format!("{}, which is passive", quoted(entry.name()));
                gate.fault(name, "the name of an actuated joint", got);
            }
            out.extend(read(gate, here, i, joint, entry));
        }
        out
    }
}
