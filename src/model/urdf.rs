//! Reads URDF text: the elements and attributes this project understands, everything else tallied.

use super::description::{
    Description, InertialPart, JointPart, JointType, LinkPart, Origin, label,
};
use super::error::{Fault, ModelError, shortened};
use super::xml::{Element, Lines, MAX_MAGNITUDE, Reader, bad, is_named, parse};
use crate::spatial::Vec3;
use roxmltree::Node;
use std::collections::{BTreeMap, HashMap};

/// Most links.
pub const MAX_LINKS: usize = 4096;

/// An axis shorter than this has no direction worth trusting.
const SHORTEST_AXIS: f64 = 1e-9;

/// Reads the text into a description. Order is document order.
pub(super) fn read(text: &str) -> Result<Description, ModelError> {
    let lines = Lines::new(text);
    let document = parse(text, &lines)?;
    let mut reader = Reader { lines, ignored: BTreeMap::new() };
    let root = document.root_element();
    let robot = Element { node: root, label: "robot description".to_string() };
    if root.tag_name().name() != "robot" {
        let fault = Fault::NotARobot(shortened(root.tag_name().name()));
        return Err(reader.error(&robot, root, fault));
    }
    reader.known_attributes(root, &["name", "version"]);
    let mut description = Description {
        name: reader.text(&robot, root, "name")?.to_string(),
        place: reader.place(root),
        links: Vec::new(),
        joints: Vec::new(),
        remarks: Vec::new(),
    };
    for node in root.children().filter(Node::is_element) {
        if is_named(node, "link") {
            if description.links.len() == MAX_LINKS {
                let fault = Fault::TooLarge { what: "links", limit: MAX_LINKS };
                return Err(reader.error(&robot, node, fault));
            }
            description.links.push(read_link(&mut reader, node)?);
        } else if is_named(node, "joint") {
            if description.joints.len() == 2 * MAX_LINKS {
                let fault = Fault::TooLarge { what: "joints", limit: 2 * MAX_LINKS };
                return Err(reader.error(&robot, node, fault));
            }
            description.joints.push(read_joint(&mut reader, node, &mut description.remarks)?);
        } else {
            reader.ignore(format!("<{}>", shortened(node.tag_name().name())));
        }
    }
    check_names(&description)?;
    for (what, count) in &reader.ignored {
        description.remarks.push(format!("ignored: {what} ({count})"));
    }
    Ok(description)
}

/// The element itself, named as errors name it.
fn named_element<'a, 'i>(
    reader: &Reader<'_>,
    node: Node<'a, 'i>,
    kind: &str,
) -> Result<(String, Element<'a, 'i>), ModelError> {
    let nameless = Element { node, label: format!("{kind} without a usable name") };
    let name = reader.text(&nameless, node, "name")?.to_string();
    let label = label(kind, &name);
    Ok((name, Element { node, label }))
}

fn read_link(reader: &mut Reader<'_>, node: Node<'_, '_>) -> Result<LinkPart, ModelError> {
    let (name, element) = named_element(reader, node, "link")?;
    reader.known_attributes(node, &["name"]);
    let [inertial] = reader.children(&element, node, ["inertial"])?;
    let inertial = inertial.map(|inner| read_inertial(reader, &element, inner)).transpose()?;
    Ok(LinkPart { name, place: reader.place(node), inertial })
}

fn read_inertial(
    reader: &mut Reader<'_>,
    element: &Element<'_, '_>,
    node: Node<'_, '_>,
) -> Result<InertialPart, ModelError> {
    let [origin, mass, inertia] = reader.children(element, node, ["origin", "mass", "inertia"])?;
    let missing = |reader: &Reader<'_>, name| reader.error(element, node, Fault::MissingElement(name));
    let mass_node = mass.ok_or_else(|| missing(reader, "mass"))?;
    let inertia = inertia.ok_or_else(|| missing(reader, "inertia"))?;
    reader.known_attributes(mass_node, &["value"]);
    let mass = reader.number(element, mass_node, "value")?;
    if !(0.0..=MAX_MAGNITUDE).contains(&mass) {
        let fault = Fault::Inertia(format!("expected a mass of 0 to 1e9 kg, got {mass}"));
        return Err(reader.error(element, mass_node, fault));
    }
    const NAMES: [&str; 6] = ["ixx", "ixy", "ixz", "iyy", "iyz", "izz"];
    reader.known_attributes(inertia, &NAMES);
    let mut moments = [0.0; 6];
    for (moment, name) in moments.iter_mut().zip(NAMES) {
        *moment = reader.number(element, inertia, name)?;
        if moment.abs() > MAX_MAGNITUDE {
            let fault = bad(inertia, name, "at most 1e9 kg m^2", &moment.to_string());
            return Err(reader.error(element, inertia, fault));
        }
    }
    let origin = read_origin(reader, element, origin)?;
    Ok(InertialPart { place: reader.place(inertia), origin, mass, moments })
}

fn read_origin(
    reader: &mut Reader<'_>,
    element: &Element<'_, '_>,
    node: Option<Node<'_, '_>>,
) -> Result<Origin, ModelError> {
    let Some(node) = node else { return Ok(Origin { xyz: Vec3::zeros(), rpy: Vec3::zeros() }) };
    reader.known_attributes(node, &["xyz", "rpy"]);
    Ok(Origin {
        xyz: reader.vector(element, node, "xyz")?.unwrap_or_else(Vec3::zeros),
        rpy: reader.vector(element, node, "rpy")?.unwrap_or_else(Vec3::zeros),
    })
}

fn read_joint(
    reader: &mut Reader<'_>,
    node: Node<'_, '_>,
    remarks: &mut Vec<String>,
) -> Result<JointPart, ModelError> {
    let (name, element) = named_element(reader, node, "joint")?;
    reader.known_attributes(node, &["name", "type"]);
    let type_name = reader.text(&element, node, "type")?;
    let kind = JointType::named(type_name).ok_or_else(|| {
        reader.error(&element, node, Fault::UnknownJointType(shortened(type_name)))
    })?;
    let [parent, child, origin, axis, limit, dynamics, mimic] = reader.children(
        &element,
        node,
        ["parent", "child", "origin", "axis", "limit", "dynamics", "mimic"],
    )?;
    let place = reader.place(node);
    let mut end = |found: Option<Node<'_, '_>>, tag| {
        let found = found.ok_or_else(|| reader.error(&element, node, Fault::MissingElement(tag)))?;
        reader.known_attributes(found, &["link"]);
        Ok((reader.text(&element, found, "link")?.to_string(), reader.place(found)))
    };
    let (parent, parent_place) = end(parent, "parent")?;
    let (child, child_place) = end(child, "child")?;
    let mut joint = JointPart {
        name,
        place,
        kind,
        parent,
        parent_place,
        child,
        child_place,
        origin: read_origin(reader, &element, origin)?,
        axis: read_axis(reader, &element, axis, kind)?,
        position: None,
        effort: None,
        speed: None,
        viscous_friction: 0.0,
        coulomb_friction: 0.0,
        mimic: None,
        rotor_inertia: 0.0,
        torque_speed: None,
        actuated: true,
        locked_at: None,
    };
    if let (Some(found), true) = (mimic, kind.has_axis()) {
        let follows = reader.text(&element, found, "joint")?.to_string();
        joint.mimic = Some((follows, reader.place(found)));
    }
    if kind.has_axis() {
        read_limit(reader, &element, limit, &mut joint, remarks)?;
        read_dynamics(reader, &element, dynamics, &mut joint)?;
    }
    Ok(joint)
}

/// Axis as written; the URDF standard's default is 1 0 0.
fn read_axis(
    reader: &mut Reader<'_>,
    element: &Element<'_, '_>,
    node: Option<Node<'_, '_>>,
    kind: JointType,
) -> Result<Vec3, ModelError> {
    let (Some(node), true) = (node, kind.has_axis()) else { return Ok(Vec3::x()) };
    reader.known_attributes(node, &["xyz"]);
    let axis = reader.vector(element, node, "xyz")?.unwrap_or_else(Vec3::x);
    if axis.norm() < SHORTEST_AXIS {
        let got = node.attribute("xyz").unwrap_or("");
        let fault = bad(node, "xyz", "an axis longer than zero", got);
        return Err(reader.error(element, node, fault));
    }
    Ok(axis)
}

/// Limits. Revolute and prismatic joints must have them, `lower` and `upper` being 0 by default as
/// the standard says; on continuous joints only effort and velocity count.
fn read_limit(
    reader: &mut Reader<'_>,
    element: &Element<'_, '_>,
    node: Option<Node<'_, '_>>,
    joint: &mut JointPart,
    remarks: &mut Vec<String>,
) -> Result<(), ModelError> {
    let bounded = joint.kind != JointType::Continuous;
    let Some(node) = node else {
        if bounded {
            return Err(reader.error(element, element.node, Fault::MissingElement("limit")));
        }
        return Ok(());
    };
    reader.known_attributes(node, &["lower", "upper", "effort", "velocity"]);
    let lower = reader.numbers::<1>(element, node, "lower")?;
    let upper = reader.numbers::<1>(element, node, "upper")?;
    if bounded {
        if lower.is_none() && upper.is_none() {
            remarks.push(format!(
                "{}: its limit gives neither lower nor upper, both 0 by the URDF standard",
                element.label
            ));
        }
        let ([lower], [upper]) = (lower.unwrap_or([0.0]), upper.unwrap_or([0.0]));
        if lower > upper {
            let got = format!("lower {lower}, upper {upper}");
            return Err(reader.error(element, node, bad(node, "lower", "lower <= upper", &got)));
        }
        joint.position = Some((lower, upper));
    }
    for (attribute, slot) in [("effort", &mut joint.effort), ("velocity", &mut joint.speed)] {
        let value = reader.number(element, node, attribute)?;
        if value < 0.0 {
            let fault = bad(node, attribute, "a number >= 0", &value.to_string());
            return Err(reader.error(element, node, fault));
        }
        *slot = Some(value);
    }
    Ok(())
}

fn read_dynamics(
    reader: &mut Reader<'_>,
    element: &Element<'_, '_>,
    node: Option<Node<'_, '_>>,
    joint: &mut JointPart,
) -> Result<(), ModelError> {
    let Some(node) = node else { return Ok(()) };
    reader.known_attributes(node, &["damping", "friction"]);
    for (attribute, slot) in
        [("damping", &mut joint.viscous_friction), ("friction", &mut joint.coulomb_friction)]
    {
        let Some([value]) = reader.numbers::<1>(element, node, attribute)? else { continue };
        if value < 0.0 {
            let fault = bad(node, attribute, "a number >= 0", &value.to_string());
            return Err(reader.error(element, node, fault));
        }
        *slot = value;
    }
    Ok(())
}

/// Link names are unique among links, joint names among joints.
fn check_names(description: &Description) -> Result<(), ModelError> {
    let mut links = HashMap::new();
    for link in &description.links {
        if let Some(first) = links.insert(link.name.as_str(), link.place) {
            let fault = Fault::DuplicateName(format!("the link at {first}"));
            return Err(link.error_at(link.place, fault));
        }
    }
    let mut joints = HashMap::new();
    for joint in &description.joints {
        if let Some(first) = joints.insert(joint.name.as_str(), joint.place) {
            let fault = Fault::DuplicateName(format!("the joint at {first}"));
            return Err(joint.error(fault));
        }
    }
    Ok(())
}
