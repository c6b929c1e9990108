//! What always holds: the equation of motion, the contact law, and wrenches as sums of vertex forces.
//!
//! - `M nu_dot - S' tau - sum J' w_bar = external - h - friction`, `w_bar = (1 - theta) now + theta w_plus`;
//! - `acceleration_part (J nu_dot + J_dot nu) + wrench_part w_plus = right_side` for each sole;
//! - under the rule `held`, w_bar of a soft sole is an unknown, and the soles' equality is coupled (`contact::held`);
//! - `w_plus = sum X_i f_i` where a friction set speaks of vertex forces.

use nalgebra::DMatrix;

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
    for (sole, columns) in scene.soles.iter().zip(&layout.contacts).filter(|(_, columns)| columns.mean.is_none()) {
        push_contact(sole, columns, layout, scaler, out);
    }
    if let Some(map) = &scene.coupled {
        push_coupled(map, scene, layout, scaler, out);
    }
    for (index, contact) in question.contacts.iter().enumerate() {
        push_vertex_sum(question, contact.sole, &scene.soles[index], &layout.contacts[index], layout, scaler, out);
    }
}

fn push_dynamics(question: &Question, scene: &Scene, layout: &Layout, scaler: &Scaler, out: &mut ConicRows) {
    let model = &*question.model;
    let ws = &scene.dynamics;
    let offset = model.joint_offset();
    for (i, name) in velocity_names(model).into_iter().enumerate() {
        let mut entries: Entries = (0..layout.velocities).map(|j| (j, ws.mass_matrix[(i, j)])).collect();
        if let Some(column) = i.checked_sub(offset).and_then(|j| layout.torque[j]) {
            entries.push((column, -1.0));
        }
        let mut rhs = scene.external[i] - ws.bias[i] - ws.friction[i];
        for (sole, columns) in scene.soles.iter().zip(&layout.contacts) {
            let (acting, theta) = columns.mean.map_or((columns.wrench, sole.map.theta), |mean| (mean, 1.0));
            let now = sole.map.now.to_vec6();
            for k in 0..columns.dimension {
                let lever = sole.jacobian[(k, i)];
                entries.push((acting + k, -theta * lever));
                rhs += (1.0 - theta) * lever * now[k];
            }
        }
        if let Some(rows) = &scene.coupled {
            push_friction(i, rows, layout, &mut entries, &mut rhs);
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

/// Mean and end rows of every soft sole under the rule `held`, see `contact::held`.
fn push_coupled(rows: &CoupledRows, scene: &Scene, layout: &Layout, scaler: &Scaler, out: &mut ConicRows) {
    let coordinates = soft_coordinates(layout);
    for (i, &(contact, _, _, k)) in coordinates.iter().enumerate() {
        let group = format!("contact:{}", scene.soles[contact].name);
        let radius = layout.contacts[contact].radius;
        let (unit, scale) = if k < 3 { ("m/s^2", 9.80665) } else { ("rad/s^2", 9.80665 / radius) };
        let mut push = |part: String, entries: Entries, rhs: f64| {
            let row = PhysicalRow { entries, rhs, part, unit };
            scaler.push_cone(out, Cone::Zero(1), &group, true, scale, &[row]);
        };
        let on_acceleration = |m: &DMatrix<f64>| (0..layout.velocities).map(|j| (j, m[(i, j)])).collect::<Entries>();
        let mut entries = on_acceleration(&rows.mean_acceleration);
        entries.extend(coordinates.iter().enumerate().map(|(l, c)| (c.1, rows.mean_mean[(i, l)])));
        push(format!("mean {}", PARTS[k]), entries, rows.mean_right[i]);
        let mut entries = on_acceleration(&rows.end_acceleration);
        entries.extend(coordinates.iter().enumerate().map(|(l, c)| (c.1, rows.end_mean[(i, l)])));
        entries.extend(coordinates.iter().enumerate().map(|(l, c)| (c.2, rows.end_end[(i, l)])));
        push(format!("end {}", PARTS[k]), entries, rows.end_right[i]);
    }
}

/// For each coordinate of the coupled rows: its contact, its average-wrench column, its end-wrench column, its part.
fn soft_coordinates(layout: &Layout) -> Vec<(usize, usize, usize, usize)> {
    let contacts = layout.contacts.iter().enumerate();
    contacts
        .filter_map(|(i, columns)| columns.mean.map(|mean| (i, mean, columns)))
        .flat_map(|(i, mean, columns)| (0..columns.dimension).map(move |k| (i, mean + k, columns.wrench + k, k)))
        .collect()
}

/// What the change of friction over the tick adds to row i of the dynamics, and to its right side.
fn push_friction(i: usize, rows: &CoupledRows, layout: &Layout, entries: &mut Entries, rhs: &mut f64) {
    let Some(f) = rows.damped.iter().position(|&row| row == i) else { return };
    entries.extend((0..layout.velocities).map(|j| (j, -rows.friction_acceleration[(f, j)])));
    entries.extend(soft_coordinates(layout).iter().enumerate().map(|(l, c)| (c.1, -rows.friction_mean[(f, l)])));
    *rhs += rows.friction_right[f];
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
