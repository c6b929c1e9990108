//! Where each unknown sits, and how it is scaled.
//!
//! Order: accelerations (nv), torques of actuated joints, wrench of each contact at the tick's end
//! (6, or 3 under a point), vertex forces where a friction set needs them.
//!
//! Scaling follows the mass matrix: with `c = g sqrt(m)`, coordinate i is measured in `c / sqrt(M_ii)`
//! and its row of the dynamics in `c sqrt(M_ii)`, so that the scaled mass matrix has ones on its
//! diagonal and a base acceleration of g, or a force of one body weight, counts 1. Moments under a
//! sole are scaled by the sole's radius of gyration: unscaled, the condition number grows from 1e3 to
//! 1e7 as soles shrink.

use super::question::{FrictionSet, Question};
use super::scene::Scene;
use crate::conic::Column;
use crate::model::Model;
use crate::spatial::polygon::SoleShape;

/// Standard acceleration used for scaling only (m/s^2), whatever gravity the request has.
const SCALE_ACCELERATION: f64 = 9.80665;
const FORCE_PARTS: [&str; 6] = ["fx", "fy", "fz", "mx", "my", "mz"];
const AXES: [&str; 3] = ["x", "y", "z"];

/// Columns of one contact.
#[derive(Debug, Clone, PartialEq)]
pub struct ContactColumns {
    /// First wrench column.
    pub wrench: usize,
    /// 6, or 3 under a point.
    pub dimension: usize,
    /// First vertex-force column, where the friction set has vertices.
    pub vertices: Option<usize>,
    /// Number of vertices (of forces), zero without.
    pub vertex_count: usize,
    /// Radius of gyration of the sole (m); 1 under a point.
    pub radius: f64,
}

/// The column layout of one question.
#[derive(Debug, Clone, PartialEq)]
pub struct Layout {
    /// Number of generalised velocities; accelerations are columns `0..velocities`.
    pub velocities: usize,
    /// Torque column of each joint; none for passive joints.
    pub torque: Vec<Option<usize>>,
    /// Columns of each contact.
    pub contacts: Vec<ContactColumns>,
    /// Names, units and scales.
    pub columns: Vec<Column>,
    /// Scale of each row of the dynamics (N or N m).
    pub dynamics_scale: Vec<f64>,
    /// Weight used for scaling forces (N).
    pub weight: f64,
}

impl Layout {
    /// Lays out the unknowns of `question`.
    pub fn new(question: &Question, scene: &Scene) -> Layout {
        let model = &*question.model;
        let velocities = model.velocities();
        let mass = scene.dynamics.mass.max(f64::MIN_POSITIVE);
        let weight = mass * SCALE_ACCELERATION;
        let c = SCALE_ACCELERATION * mass.sqrt();
        let mut columns = Vec::new();
        let mut dynamics_scale = Vec::with_capacity(velocities);
        for (i, name) in velocity_names(model).into_iter().enumerate() {
            let inertia = scene.dynamics.mass_matrix[(i, i)].max(1e-12 * mass);
            let unit = acceleration_unit(model, i);
            columns.push(Column { name: format!("acceleration:{name}"), unit, scale: c / inertia.sqrt() });
            dynamics_scale.push(c * inertia.sqrt());
        }
        let offset = model.joint_offset();
        let torque = model
            .joints
            .iter()
            .enumerate()
            .map(|(j, joint)| {
                joint.actuated.then(|| {
                    let scale = dynamics_scale[offset + j];
                    columns.push(Column { name: format!("torque:{}", joint.name), unit: force_unit(model, offset + j), scale });
                    columns.len() - 1
                })
            })
            .collect();
        let contacts = question
            .contacts
            .iter()
            .map(|contact| contact_columns(question, contact, weight, &mut columns))
            .collect();
        Layout { velocities, torque, contacts, columns, dynamics_scale, weight }
    }

    /// Physical values of scaled unknowns.
    pub fn physical(&self, scaled: &[f64]) -> Vec<f64> {
        self.columns.iter().zip(scaled).map(|(c, x)| c.scale * x).collect()
    }

    /// Columns that hold vertex forces.
    pub fn auxiliary(&self) -> Vec<usize> {
        self.contacts
            .iter()
            .filter_map(|c| c.vertices.map(|start| start..start + 3 * c.vertex_count))
            .flatten()
            .collect()
    }
}

fn contact_columns(
    question: &Question,
    contact: &super::question::Contact,
    weight: f64,
    columns: &mut Vec<Column>,
) -> ContactColumns {
    let sole = &question.model.soles[contact.sole];
    let (dimension, radius, corners) = match &sole.shape {
        SoleShape::Point => (3, 1.0, 0),
        SoleShape::Polygon(polygon) => {
            let m = polygon.moments();
            (6, ((m.second[0] + m.second[1]) / m.area).sqrt(), polygon.vertices().len())
        }
    };
    let wrench = columns.len();
    for (k, part) in FORCE_PARTS.iter().enumerate().take(dimension) {
        let (unit, scale) = if k < 3 { ("N", weight) } else { ("N m", weight * radius) };
        columns.push(Column { name: format!("wrench:{}:{part}", sole.name), unit, scale });
    }
    let with_vertices = corners > 0 && contact.friction.is_some_and(|f| f.set == FrictionSet::Vertex);
    let vertices = with_vertices.then_some(columns.len());
    let vertex_count = if with_vertices { corners } else { 0 };
    for i in 0..vertex_count {
        for axis in AXES {
            columns.push(Column {
                name: format!("vertex:{}:{i}:{axis}", sole.name),
                unit: "N",
                scale: weight / corners as f64,
            });
        }
    }
    ContactColumns { wrench, dimension, vertices, vertex_count, radius }
}

/// Names of the generalised velocities: `base:vx` ... `base:wz` on a floating base, then joints.
pub fn velocity_names(model: &Model) -> Vec<String> {
    let base = ["base:vx", "base:vy", "base:vz", "base:wx", "base:wy", "base:wz"];
    base.iter()
        .take(model.joint_offset())
        .map(|s| s.to_string())
        .chain(model.joints.iter().map(|j| j.name.clone()))
        .collect()
}

/// True where generalised velocity i is a rotation.
pub fn turns(model: &Model, i: usize) -> bool {
    let offset = model.joint_offset();
    if i < offset { i >= 3 } else { model.joints[i - offset].kind != crate::model::JointKind::Prismatic }
}

/// `rad/s^2` or `m/s^2`.
pub fn acceleration_unit(model: &Model, i: usize) -> &'static str {
    if turns(model, i) { "rad/s^2" } else { "m/s^2" }
}

/// `N m` or `N`.
pub fn force_unit(model: &Model, i: usize) -> &'static str {
    if turns(model, i) { "N m" } else { "N" }
}
