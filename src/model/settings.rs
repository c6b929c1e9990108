//! Applies the options to a description: overrides, motors and locks.

use super::description::{Description, JointPart, JointType, label};
use super::error::{Fault, ModelError, Subject};
use super::options::JointSpec;
use std::collections::HashMap;

/// Writes each joint option into its joint, then drops the zero efforts and speeds that remain.
pub(super) fn apply(description: &mut Description, specs: &[JointSpec]) -> Result<(), ModelError> {
    let by_name: HashMap<String, usize> =
        description.joints.iter().enumerate().map(|(i, j)| (j.name.clone(), i)).collect();
    let mut seen: HashMap<&str, usize> = HashMap::new();
    for (index, spec) in specs.iter().enumerate() {
        let fail = |fault| ModelError {
            fault,
            element: label("joint", &spec.name),
            subject: Subject::Joint(index),
        };
        if let Some(first) = seen.insert(&spec.name, index) {
            return Err(fail(Fault::DuplicateName(format!("joint option {first}"))));
        }
        let joint = by_name.get(&spec.name).and_then(|i| description.joints.get_mut(*i));
        let Some(joint) = joint else {
            return Err(fail(Fault::Unknown { what: "joint", name: spec.name.clone() }));
        };
        check(spec, joint.kind).map_err(fail)?;
        write(spec, joint);
    }
    let Description { joints, remarks, .. } = description;
    for joint in joints.iter_mut().filter(|j| j.kind.has_axis()) {
        drop_zero_limits(joint, remarks);
    }
    Ok(())
}

/// Checks the numbers of one option. Written so that NaN fails every comparison.
fn check(spec: &JointSpec, kind: JointType) -> Result<(), Fault> {
    let bad = |what: &str, expected, got: String| {
        Err(Fault::BadValue { what: what.to_string(), expected, got })
    };
    let not_negative = [
        ("rotor_inertia", spec.rotor_inertia),
        ("viscous_friction", spec.viscous_friction),
        ("coulomb_friction", spec.coulomb_friction),
    ];
    for (what, value) in not_negative {
        if let Some(v) = value.filter(|v| !(v.is_finite() && *v >= 0.0)) {
            return bad(what, "a finite number >= 0", v.to_string());
        }
    }
    let positive = [
        ("speed", spec.speed),
        ("effort", spec.effort),
        ("torque_speed.stall", spec.torque_speed.map(|line| line.stall)),
        ("torque_speed.no_load_speed", spec.torque_speed.map(|line| line.no_load_speed)),
    ];
    for (what, value) in positive {
        if let Some(v) = value.filter(|v| !(v.is_finite() && *v > 0.0)) {
            return bad(what, "a finite number > 0", v.to_string());
        }
    }
    if let Some((lower, upper)) = spec.position
        && !(lower.is_finite() && upper.is_finite() && lower <= upper)
    {
        let got = format!("lower {lower}, upper {upper}");
        return bad("position", "finite numbers, lower <= upper", got);
    }
    if let Some(at) = spec.locked_at {
        if !at.is_finite() {
            return bad("locked_at", "a finite number", at.to_string());
        }
        if !kind.has_axis() && at != 0.0 {
            return bad("locked_at", "0, as the joint has no single axis", at.to_string());
        }
    }
    if !kind.has_axis() && spec.sets_motion() {
        return Err(Fault::DoesNotMove(kind.name()));
    }
    Ok(())
}

fn write(spec: &JointSpec, joint: &mut JointPart) {
    // Adding zero turns -0 into 0, which must not tell two equal robots apart.
    let plain = |value: Option<f64>| value.map(|v| v + 0.0);
    joint.rotor_inertia = plain(spec.rotor_inertia).unwrap_or(joint.rotor_inertia);
    joint.viscous_friction = plain(spec.viscous_friction).unwrap_or(joint.viscous_friction);
    joint.coulomb_friction = plain(spec.coulomb_friction).unwrap_or(joint.coulomb_friction);
    joint.torque_speed = spec.torque_speed.or(joint.torque_speed);
    joint.actuated = spec.actuated.unwrap_or(joint.actuated);
    joint.locked_at = plain(spec.locked_at);
    joint.position = spec.position.map(|(l, u)| (l + 0.0, u + 0.0)).or(joint.position);
    joint.speed = spec.speed.or(joint.speed);
    joint.effort = spec.effort.or(joint.effort);
}

/// An effort or velocity limit of 0 in a URDF is a place-holder: a joint that can exert nothing, or
/// never move, would be written as passive or fixed.
fn drop_zero_limits(joint: &mut JointPart, remarks: &mut Vec<String>) {
    let name = label("joint", &joint.name);
    for (slot, what) in [(&mut joint.effort, "effort"), (&mut joint.speed, "velocity")] {
        if *slot == Some(0.0) {
            *slot = None;
            remarks.push(format!("{name}: {what} limit 0 is taken as none given"));
        }
    }
    if let (Some(at), Some((lower, upper))) = (joint.locked_at, joint.position)
        && !(lower..=upper).contains(&at)
    {
        remarks.push(format!(
            "{name}: locked at {at}, outside its position limits {lower} to {upper}"
        ));
    }
}
