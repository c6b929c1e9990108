//! Friction sets, stated again from their definition.
//!
//! Force cone about the ground normal n: `|f_t| <= mu f_n`. Inscribed pyramid of N facets: for
//! j = 0 .. N-1, `u_j . f_t <= mu cos(pi/N) f_n`, u_j at the angle `2 pi j / N` from the sole's x axis
//! projected onto the ground plane (its y axis where x is along the normal). Both imply `f_n >= 0`, which
//! is stated on its own where mu = 0.
//!
//! `Wrench` set: the cone on the force; the centre of pressure `(-m_y, m_x) / f_z` (sole axes) on the inner
//! side of every edge, multiplied by f_z; `|n . m_c| <= mu_z f_n`, m_c the moment about the polygon's centroid.
//! `Vertex` set: the claimed vertex forces, each in the cone. They witness that a pressure exists; how far a
//! wrench outside the set is from it has no witness, so for a decaying vertex set the rows of the problem alone
//! (check `hard-rows`) are held against the answer.

use super::limits::remaining;
use super::physics::vertex_arms;
use super::situation::Situation;
use super::worst::Worst;
use super::Claim;
use crate::problem::question::{Contact, Friction, FrictionSet, Treatment};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Vec3, Wrench};

/// Records how far the claim is outside the friction set of contact i, relative to the robot's weight.
pub fn hold(situation: &Situation, claim: &Claim, i: usize, end: &Wrench, worst: &mut Worst) {
    let contact = &situation.question.contacts[i];
    let Some(friction) = contact.friction else { return };
    let Some(remaining) = remaining(situation, friction.treatment) else { return };
    let rotation = present_rotation(situation, contact);
    if !spread(situation, contact) {
        let ends = excesses(situation, contact, &friction, &rotation, end);
        let now = situation.now(i).map(|now| excesses(situation, contact, &friction, &rotation, &now));
        for (k, (part, excess)) in ends.into_iter().enumerate() {
            let before = now.as_ref().and_then(|now| now.get(k)).map_or(0.0, |n| n.1.max(0.0));
            worst.record((excess - remaining * before) / situation.weight, || {
                format!("{} {part}", situation.name(contact))
            });
        }
    } else if friction.treatment == Treatment::Hard {
        hold_vertices(situation, contact, &friction, &rotation, &claim.vertex_forces[i], worst);
    }
}

fn hold_vertices(
    situation: &Situation,
    contact: &Contact,
    friction: &Friction,
    rotation: &Mat3,
    forces: &[Vec3],
    worst: &mut Worst,
) {
    if forces.len() != vertex_arms(situation, contact).len() {
        worst.record(f64::NAN, || format!("{} vertex forces missing", situation.name(contact)));
    }
    for (v, force) in forces.iter().enumerate() {
        for (part, excess) in cone(&contact.ground.normal, rotation, friction, force) {
            worst.record(excess / situation.weight, || {
                format!("{} vertex {} {part}", situation.name(contact), v + 1)
            });
        }
    }
}

/// True where the friction set of a contact rests on vertex forces. A point foot has one vertex, its origin: there the
/// wrench itself is the vertex force.
pub fn spread(situation: &Situation, contact: &Contact) -> bool {
    let polygon = matches!(situation.shape(contact), SoleShape::Polygon(_));
    polygon && matches!(contact.friction, Some(f) if f.set == FrictionSet::Vertex)
}

fn present_rotation(situation: &Situation, contact: &Contact) -> Mat3 {
    let still = vec![0.0; situation.question.model.velocities()];
    situation.sole(contact, &situation.motions(&still)).pose.rotation
}

/// Excesses over the force cone or its inscribed pyramid (N); positive means outside.
fn cone(normal: &Vec3, rotation: &Mat3, friction: &Friction, force: &Vec3) -> Vec<(String, f64)> {
    let pressing = normal.dot(force);
    let sliding = force - normal * pressing;
    let mut out = Vec::new();
    if friction.coefficient == 0.0 {
        // With mu > 0 the cone itself says so.
        out.push(("pressing".to_string(), -pressing));
    }
    match friction.facets {
        None => out.push(("friction".to_string(), sliding.norm() - friction.coefficient * pressing)),
        Some(facets) => {
            let (x, y): (Vec3, Vec3) = (rotation.column(0).into(), rotation.column(1).into());
            let flat = |v: Vec3| v - normal * normal.dot(&v);
            let first = if flat(x).norm() > 1e-6 { flat(x).normalize() } else { flat(y).normalize() };
            let second = normal.cross(&first);
            let slope = friction.coefficient * (std::f64::consts::PI / facets as f64).cos();
            for j in 0..facets {
                let (sine, cosine) = (std::f64::consts::TAU * j as f64 / facets as f64).sin_cos();
                let along = (first * cosine + second * sine).dot(&sliding);
                out.push((format!("facet {}", j + 1), along - slope * pressing));
            }
        }
    }
    out
}

/// Excesses over the wrench set (N; N m).
fn excesses(
    situation: &Situation,
    contact: &Contact,
    friction: &Friction,
    rotation: &Mat3,
    wrench: &Wrench,
) -> Vec<(String, f64)> {
    let normal = &contact.ground.normal;
    let mut out = cone(normal, rotation, friction, &wrench.force);
    let SoleShape::Polygon(polygon) = situation.shape(contact) else { return out };
    let local = wrench.rotated(&rotation.transpose());
    let vertices = polygon.vertices();
    for (e, a) in vertices.iter().enumerate() {
        let b = vertices[(e + 1) % vertices.len()];
        let edge = Vec3::new(b[0] - a[0], b[1] - a[1], 0.0).normalize();
        let inward = Vec3::z().cross(&edge);
        // Inward distance of the centre of pressure from the edge, times f_z.
        let about_corner = Vec3::new(-local.moment.y - a[0] * local.force.z, local.moment.x - a[1] * local.force.z, 0.0);
        out.push((format!("centre of pressure, edge {}", e + 1), -inward.dot(&about_corner)));
    }
    if let Some(radius) = friction.torsion {
        let m = polygon.moments();
        let centroid = rotation * Vec3::new(m.first[0] / m.area, m.first[1] / m.area, 0.0);
        let about = wrench.moment - centroid.cross(&wrench.force);
        let (turning, room) = (normal.dot(&about), radius * normal.dot(&wrench.force));
        out.push(("yaw friction, one way".to_string(), turning - room));
        out.push(("yaw friction, other way".to_string(), -turning - room));
    }
    out
}
