//! Builds the model: welds what does not move, keeps every link as a frame.

use super::description::{Description, JointPart, JointType, label};
use super::error::{Fault, ModelError, Subject};
use super::options::{ModelOptions, SoleSpec};
use super::singular::{self, Unresisted};
use super::tree::{Tree, arrange};
use super::{BaseKind, Body, Frame, Joint, JointKind, Model, Sole, identity, mass, settings, urdf};
use crate::spatial::{Inertia, Mat3, Pose, Vec3, exp_so3};
use std::collections::HashMap;

/// Most moving joints: matrices grow with the square.
pub const MAX_MOVING_JOINTS: usize = 256;
/// Most soles.
pub const MAX_SOLES: usize = 64;
/// How far a sole's rotation may be from orthonormal.
const ROTATION_TOLERANCE: f64 = 1e-9;

/// Reads a URDF and builds the robot.
///
/// Fixed and locked joints weld their links together: masses merge, and each link stays as a frame.
/// Elements that are not understood are listed in the remarks.
///
/// # Errors
/// [`ModelError`] with the element at fault and its line, or the option at fault.
pub fn read_urdf(xml: &str, options: &ModelOptions) -> Result<Model, ModelError> {
    let mut description = urdf::read(xml)?;
    settings::apply(&mut description, &options.joints)?;
    let mut remarks = std::mem::take(&mut description.remarks);
    let tree = arrange(&description, &mut remarks)?;
    let base = if options.fixed_base { BaseKind::Fixed } else { BaseKind::Floating };
    let welded = weld(&description, &tree)?;
    check_resistance(base, &description, &tree, &welded)?;
    let frames = frames(&description, &welded);
    let soles = attach_soles(&options.soles, &frames)?;
    Ok(Model {
        name: description.name.clone(),
        id: identity::of_description(&description, options, &remarks),
        base,
        bodies: welded.bodies,
        joints: welded.joints,
        frames,
        soles,
        remarks,
    })
}

/// Bodies and joints, and where each link went.
struct Welded {
    bodies: Vec<Body>,
    joints: Vec<Joint>,
    /// Per model joint, its number in the description.
    sources: Vec<usize>,
    /// Per link, its body and placement there; none for a dropped root.
    links: Vec<Option<(usize, Pose)>>,
}

/// The kind of motion, or none if the joint welds.
fn moving_kind(joint: &JointPart) -> Option<JointKind> {
    match (joint.locked_at, joint.kind) {
        (Some(_), _) => None,
        (None, JointType::Revolute) => Some(JointKind::Revolute),
        (None, JointType::Continuous) => Some(JointKind::Continuous),
        (None, JointType::Prismatic) => Some(JointKind::Prismatic),
        (None, JointType::Fixed | JointType::Floating | JointType::Planar) => None,
    }
}

/// Unit vector along `axis`, scaled first so that no square underflows. An axis that is a unit vector
/// to the last digit stays as written.
fn unit(axis: &Vec3) -> Vec3 {
    if (axis.norm() - 1.0).abs() <= f64::EPSILON {
        return *axis;
    }
    let scaled = axis / axis.amax();
    scaled / scaled.norm()
}

/// Where a joint that welds holds its child, in the parent link's axes.
fn welded_pose(joint: &JointPart) -> Pose {
    let origin = joint.origin.pose();
    let at = joint.locked_at.unwrap_or(0.0);
    let moved = match joint.kind {
        JointType::Revolute | JointType::Continuous => {
            // Whole turns are taken off first: the exponential loses digits on large angles.
            let turn = unit(&joint.axis) * (at % std::f64::consts::TAU);
            Pose { rotation: exp_so3(&turn), translation: Vec3::zeros() }
        }
        JointType::Prismatic => {
            Pose { rotation: Mat3::identity(), translation: unit(&joint.axis) * at }
        }
        JointType::Fixed | JointType::Floating | JointType::Planar => Pose::identity(),
    };
    origin.compose(&moved)
}

fn weld(description: &Description, tree: &Tree) -> Result<Welded, ModelError> {
    let (joints, sources) = moving_joints(description, tree)?;
    let number_of: HashMap<usize, usize> =
        sources.iter().enumerate().map(|(number, source)| (*source, number)).collect();
    let mut welded =
        Welded { bodies: Vec::new(), joints, sources, links: vec![None; description.links.len()] };
    for index in &tree.order {
        let link = &description.links[*index];
        let held = tree.held_by[*index].and_then(|(joint, parent)| {
            welded.links[parent].map(|(body, placement)| (joint, body, placement))
        });
        let mut new_body = |parent, joint, placement| {
            let (name, inertia) = (link.name.clone(), Inertia::zero());
            welded.bodies.push(Body { name, parent, joint, placement, inertia });
            (welded.bodies.len() - 1, Pose::identity())
        };
        let (body, placement) = match held {
            None => new_body(None, None, Pose::identity()),
            Some((source, parent, above)) => {
                let joint = &description.joints[source];
                match number_of.get(&source) {
                    Some(number) => {
                        let placement = above.compose(&joint.origin.pose());
                        let place = new_body(Some(parent), Some(*number), placement);
                        welded.joints[*number].body = place.0;
                        place
                    }
                    None => (parent, above.compose(&welded_pose(joint))),
                }
            }
        };
        welded.links[*index] = Some((body, placement));
        let own = mass::link_inertia(link)?.placed(&placement);
        let whole = welded.bodies[body].inertia.combined(&own);
        welded.bodies[body].inertia = symmetric(whole);
    }
    Ok(welded)
}

/// Rotating an inertia leaves it unsymmetric in the last digits.
fn symmetric(mut inertia: Inertia) -> Inertia {
    inertia.about_center = (inertia.about_center + inertia.about_center.transpose()) * 0.5;
    inertia
}

/// Joints that move, in document order, their bodies still to be numbered.
fn moving_joints(
    description: &Description,
    tree: &Tree,
) -> Result<(Vec<Joint>, Vec<usize>), ModelError> {
    let mut in_tree = vec![false; description.joints.len()];
    for (joint, _) in tree.order.iter().filter_map(|link| tree.held_by[*link]) {
        in_tree[joint] = true;
    }
    let (mut joints, mut sources) = (Vec::new(), Vec::new());
    for (index, part) in description.joints.iter().enumerate().filter(|(i, _)| in_tree[*i]) {
        let Some(kind) = moving_kind(part) else { continue };
        if joints.len() == MAX_MOVING_JOINTS {
            let limit = MAX_MOVING_JOINTS;
            return Err(part.error(Fault::TooLarge { what: "moving joints", limit }));
        }
        joints.push(Joint {
            name: part.name.clone(),
            kind,
            body: 0,
            axis: unit(&part.axis),
            position: part.position,
            speed: part.speed,
            effort: part.effort,
            rotor_inertia: part.rotor_inertia,
            viscous_friction: part.viscous_friction,
            coulomb_friction: part.coulomb_friction,
            torque_speed: part.torque_speed,
            actuated: part.actuated,
        });
        sources.push(index);
    }
    Ok((joints, sources))
}

/// Refuses a joint or floating base that nothing resists, and a robot where nothing moves.
fn check_resistance(
    base: BaseKind,
    description: &Description,
    tree: &Tree,
    welded: &Welded,
) -> Result<(), ModelError> {
    let base_error = |fault| match tree.order.first() {
        Some(link) => {
            let link = &description.links[*link];
            link.error_at(link.place, fault)
        }
        None => ModelError {
            fault,
            element: "robot description".to_string(),
            subject: description.place,
        },
    };
    if base == BaseKind::Fixed && welded.joints.is_empty() {
        return Err(base_error(Fault::NothingMoves));
    }
    match singular::find(base, &welded.bodies, &welded.joints) {
        None => Ok(()),
        Some(Unresisted::Joint(number)) => Err(description.joints[welded.sources[number]].error(
            Fault::Singular(
                "nothing beyond this joint resists its motion: expected mass or inertia about its \
                 axis, or a rotor inertia"
                    .to_string(),
            ),
        )),
        Some(Unresisted::Base) => Err(base_error(Fault::Singular(
            "the floating base has a direction in which nothing resists it: expected mass and \
             inertia on the base link, or links welded to it"
                .to_string(),
        ))),
    }
}

fn frames(description: &Description, welded: &Welded) -> Vec<Frame> {
    let placed = description.links.iter().zip(&welded.links);
    placed
        .filter_map(|(link, place)| {
            place.map(|(body, placement)| Frame { name: link.name.clone(), body, placement })
        })
        .collect()
}

fn attach_soles(specs: &[SoleSpec], frames: &[Frame]) -> Result<Vec<Sole>, ModelError> {
    let mut soles: Vec<Sole> = Vec::with_capacity(specs.len().min(MAX_SOLES));
    for (index, spec) in specs.iter().enumerate() {
        let fail = |fault| ModelError {
            fault,
            element: label("sole", &spec.name),
            subject: Subject::Sole(index),
        };
        if index == MAX_SOLES {
            return Err(fail(Fault::TooLarge { what: "soles", limit: MAX_SOLES }));
        }
        if let Some(first) = soles.iter().position(|sole| sole.name == spec.name) {
            return Err(fail(Fault::DuplicateName(format!("sole option {first}"))));
        }
        check_sole(spec).map_err(fail)?;
        let Some(frame) = frames.iter().find(|frame| frame.name == spec.link) else {
            return Err(fail(Fault::Unknown { what: "link", name: spec.link.clone() }));
        };
        soles.push(Sole {
            name: spec.name.clone(),
            link: spec.link.clone(),
            body: frame.body,
            placement: frame.placement.compose(&spec.placement),
            shape: spec.shape.clone(),
        });
    }
    Ok(soles)
}

/// Name and placement of a sole; its polygon is valid by construction.
fn check_sole(spec: &SoleSpec) -> Result<(), Fault> {
    let bad = |what: &str, expected, got| {
        Err(Fault::BadValue { what: what.to_string(), expected, got })
    };
    if spec.name.trim().is_empty() {
        return bad("name", "a text that is not empty", format!("{:?}", spec.name));
    }
    let Pose { rotation, translation } = &spec.placement;
    if !translation.iter().all(|c| c.is_finite() && c.abs() <= super::xml::MAX_MAGNITUDE) {
        return bad("placement", "a finite position", format!("{:?}", translation.as_slice()));
    }
    let error = (rotation.transpose() * rotation - Mat3::identity()).amax();
    // Written so that NaN is refused.
    if !(error <= ROTATION_TOLERANCE && rotation.determinant() > 0.0) {
        return bad("placement", "a rotation", format!("a matrix {error:e} from one"));
    }
    Ok(())
}
