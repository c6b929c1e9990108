//! What changed between two answers, in physical units.

use std::collections::HashMap;

use crate::audit::tolerances::{Allowance, within};

/// A named number of an answer, e.g. `torque:left_knee` or `wrench:left:fz`.
#[derive(Debug, Clone, PartialEq)]
pub struct Amount {
    /// What.
    pub name: String,
    /// Its value (SI).
    pub value: f64,
}

/// A number that changed beyond tolerance, came or went.
#[derive(Debug, Clone, PartialEq)]
pub struct Change {
    /// What.
    pub name: String,
    /// Its unit; none for what went.
    pub unit: Option<&'static str>,
    /// Before; none for what is new.
    pub before: Option<f64>,
    /// Now; none for what went.
    pub now: Option<f64>,
    /// Largest difference that counts as none; none for what went.
    pub tolerance: Option<f64>,
}

/// What changed, in the order of `now`; what went comes last. An amount without an allowance is fixed by the question (a passive joint's
/// torque, the moment on a point) and left out.
pub fn changes(before: &[Amount], now: &[Amount], allowances: &[Allowance]) -> Vec<Change> {
    let known: HashMap<&str, &Allowance> = allowances.iter().map(|allowance| (allowance.name.as_str(), allowance)).collect();
    let earlier: HashMap<&str, f64> = before.iter().map(|amount| (amount.name.as_str(), amount.value)).collect();
    let kept: HashMap<&str, f64> = now.iter().map(|amount| (amount.name.as_str(), amount.value)).collect();
    let mut out = Vec::new();
    for amount in now {
        let Some(allowance) = known.get(amount.name.as_str()) else { continue };
        let old = earlier.get(amount.name.as_str()).copied();
        if old.is_some_and(|old| within(amount.value - old, allowance.tolerance)) {
            continue;
        }
        let (name, unit, tolerance) = (amount.name.clone(), Some(allowance.unit), Some(allowance.tolerance));
        out.push(Change { name, unit, before: old, now: Some(amount.value), tolerance });
    }
    for amount in before.iter().filter(|amount| !kept.contains_key(amount.name.as_str())) {
        out.push(Change { name: amount.name.clone(), unit: None, before: Some(amount.value), now: None, tolerance: None });
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    fn amounts(list: &[(&str, f64)]) -> Vec<Amount> {
        list.iter().map(|(name, value)| Amount { name: (*name).to_owned(), value: *value }).collect()
    }

    #[test]
    fn changes_are_those_beyond_tolerance_and_what_comes_and_goes() {
        let before = amounts(&[("torque:a", 1.0), ("torque:b", 2.0), ("torque:gone", 3.0), ("torque:passive", 0.0)]);
        let now = amounts(&[("torque:a", 1.05), ("torque:b", 2.2), ("torque:new", 4.0), ("torque:passive", 0.0)]);
        let allowances: Vec<Allowance> = ["torque:a", "torque:b", "torque:new"]
            .iter()
            .map(|name| Allowance { name: (*name).to_owned(), unit: "N m", tolerance: 0.1 })
            .collect();
        let found = changes(&before, &now, &allowances);
        let seen: Vec<_> = found.iter().map(|change| (change.name.as_str(), change.before, change.now)).collect();
        assert_eq!(seen, [("torque:b", Some(2.0), Some(2.2)), ("torque:new", None, Some(4.0)), ("torque:gone", Some(3.0), None)]);
        assert!(changes(&before, &before, &allowances).is_empty());
    }
}
