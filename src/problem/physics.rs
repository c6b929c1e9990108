//! What always holds: the equation of motion, the contact law, and wrenches as sums of vertex forces.
//!
//! - `M nu_dot - S' tau - sum J' w_bar = external - h - friction`, `w_bar = (1 - theta) now + theta w_plus`;
//! - `acceleration_part (J nu_dot + J_dot nu) + wrench_part w_plus = right_side` for each sole;
//! - under the rule `held` all soft soles have one equality, and their w_bar follows from nu_dot and w_plus (`contact::held`);
//! - `w_plus = sum X_i f_i` where a friction set speaks of vertex forces.

use super::coupled::CoupledRows;
use super::layout::{Layout, force_unit, velocity_names};
use super::question::Question;
use super::rows::{Entries, PhysicalRow, Scaler};
use super::scene::{Scene, SoleScene};
use crate::conic::{Cone, ConicRows};
use crate::spatial::{Vec3, skew};

const PARTS: [&str; 6] = ["x", "y", "z", "rx", "ry", "rz"];

/// Adds every physics row.
pub fn push(question: &Question, scene: &Scene, layout: &Layout, scaler: &Scaler, out: &mut ConicRows) {
    push_dynamics(question, scene, layout, scaler, out);
    let starts = scene.coupled_starts();
    let contacts = scene.soles.iter().zip(&layout.contacts).zip(&starts);
    for ((sole, columns), _) in contacts.filter(|(_, start)| start.is_none()) {
        push_contact(sole, columns, layout, scaler, out);
    }
    if let Some(rows) = &scene.coupled {
        push_coupled(rows, scene, layout, scaler, out);
    }
    for (index, contact) in question.contacts.iter().enumerate() {
        push_vertex_sum(question, contact.sole, &scene.soles[index], &layout.contacts[index], layout, scaler, out);
    }
}

fn push_dynamics(question: &Question, scene: &Scene, layout: &Layout, scaler: &Scaler, out: &mut ConicRows) {
    let model = &*question.model;
    let ws = &scene.dynamics;
    let offset = model.joint_offset();
    let (starts, ends) = (scene.coupled_starts(), soft_columns(scene, layout));
    for (i, name) in velocity_names(model).into_iter().enumerate() {
        let mut entries: Entries = (0..layout.velocities).map(|j| (j, ws.mass_matrix[(i, j)])).collect();
        if let Some(column) = i.checked_sub(offset).and_then(|j| layout.torque[j]) {
            entries.push((column, -1.0));
        }
        let mut rhs = scene.external[i] - ws.bias[i] - ws.friction[i];
        let contacts = scene.soles.iter().zip(&layout.contacts).zip(&starts);
        for ((sole, columns), _) in contacts.filter(|(_, start)| start.is_none()) {
            let theta = sole.map.theta;
            let now = sole.map.now.to_vec6();
            for k in 0..columns.dimension {
                let lever = sole.jacobian[(k, i)];
                entries.push((columns.wrench + k, -theta * lever));
                rhs += (1.0 - theta) * lever * now[k];
            }
        }
        if let Some(rows) = &scene.coupled {
            entries.extend((0..layout.velocities).map(|j| (j, -rows.force_acceleration[(i, j)])));
            entries.extend(ends.iter().enumerate().map(|(l, &column)| (column, -rows.force_wrench[(i, l)])));
            rhs += rows.force_start[i];
        }
        let row = PhysicalRow { entries, rhs, part: name, unit: force_unit(model, i) };
        scaler.push_cone(out, Cone::Zero(1), "dynamics", true, layout.dynamics_scale[i], &[row]);
    }
}

fn push_contact(
    sole: &SoleScene,
    columns: &super::layout::ContactColumns,
    layout: &Layout,
    scaler: &Scaler,
    out: &mut ConicRows,
) {
    let group = format!("contact:{}", sole.name);
    let map = &sole.map;
    for k in 0..columns.dimension {
        let mut entries: Entries = Vec::new();
        for j in 0..layout.velocities {
            let lever: f64 = (0..columns.dimension).map(|l| map.acceleration_part[(k, l)] * sole.jacobian[(l, j)]).sum();
            entries.push((j, lever));
        }
        for l in 0..columns.dimension {
            entries.push((columns.wrench + l, map.wrench_part[(k, l)]));
        }
        let drift: f64 =
            (0..columns.dimension).map(|l| map.acceleration_part[(k, l)] * sole.bias_acceleration[l]).sum();
        let (unit, scale) = if k < 3 { ("m/s^2", 9.80665) } else { ("rad/s^2", 9.80665 / columns.radius) };
        let row = PhysicalRow { entries, rhs: map.right_side[k] - drift, part: PARTS[k].into(), unit };
        scaler.push_cone(out, Cone::Zero(1), &group, true, scale, &[row]);
    }
}

/// The equality of all soft soles under the rule `held`. Every row belongs to all of them; the names go by place.
fn push_coupled(rows: &CoupledRows, scene: &Scene, layout: &Layout, scaler: &Scaler, out: &mut ConicRows) {
    let ends = soft_columns(scene, layout);
    let soft = scene.soles.iter().zip(&layout.contacts).filter(|(sole, _)| !sole.map.rigid);
    let places = soft.flat_map(|(sole, columns)| (0..columns.dimension).map(move |k| (&sole.name, columns.radius, k)));
    for (i, (name, radius, k)) in places.enumerate() {
        let (unit, scale) = if k < 3 { ("m/s^2", 9.80665) } else { ("rad/s^2", 9.80665 / radius) };
        let mut entries: Entries = (0..layout.velocities).map(|j| (j, rows.contact_acceleration[(i, j)])).collect();
        entries.extend(ends.iter().enumerate().map(|(l, &column)| (column, rows.contact_wrench[(i, l)])));
        let row = PhysicalRow { entries, rhs: rows.contact_right[i], part: PARTS[k].into(), unit };
        scaler.push_cone(out, Cone::Zero(1), &format!("contact:{name}"), true, scale, &[row]);
    }
}

/// Wrench columns of all soft soles, one after the other.
fn soft_columns(scene: &Scene, layout: &Layout) -> Vec<usize> {
    let soft = scene.soles.iter().zip(&layout.contacts).filter(|(sole, _)| !sole.map.rigid);
    soft.flat_map(|(_, columns)| columns.wrench..columns.wrench + columns.dimension).collect()
}

fn push_vertex_sum(
    question: &Question,
    sole_index: usize,
    sole: &SoleScene,
    columns: &super::layout::ContactColumns,
    layout: &Layout,
    scaler: &Scaler,
    out: &mut ConicRows,
) {
    let Some(start) = columns.vertices else { return };
    let group = format!("vertices:{}", sole.name);
    let arms = vertex_arms(question, sole_index, sole);
    for k in 0..columns.dimension {
        let mut entries: Entries = vec![(columns.wrench + k, 1.0)];
        for (i, arm) in arms.iter().enumerate() {
            if k < 3 {
                entries.push((start + 3 * i + k, -1.0));
            } else {
                let cross = skew(arm);
                entries.extend((0..3).map(|l| (start + 3 * i + l, -cross[(k - 3, l)])));
            }
        }
        let unit = if k < 3 { "N" } else { "N m" };
        let row = PhysicalRow { entries, rhs: 0.0, part: layout.columns[columns.wrench + k].name.clone(), unit };
        let scale = layout.columns[columns.wrench + k].scale;
        scaler.push_cone(out, Cone::Zero(1), &group, true, scale, &[row]);
    }
}

/// Vertices relative to the sole origin, world axes (m).
pub fn vertex_arms(question: &Question, sole_index: usize, sole: &SoleScene) -> Vec<Vec3> {
    match &question.model.soles[sole_index].shape {
        crate::spatial::polygon::SoleShape::Point => vec![Vec3::zeros()],
        crate::spatial::polygon::SoleShape::Polygon(p) => {
            p.vertices().iter().map(|v| sole.motion.pose.rotation * Vec3::new(v[0], v[1], 0.0)).collect()
        }
    }
}
