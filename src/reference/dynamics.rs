//! Rigid-body terms of one state, in the axes the user works in: the first thing to compare with one's own code.

use nalgebra::DMatrix;

use super::answer::{DynamicsReport, FrameReport};
use crate::dynamics::{self, AxesMap, VelocityAxes, Workspace};
use crate::model::{Model, State};
use crate::problem::layout::velocity_names;
use crate::spatial::{Pose, Vec3, Vec6, head, quaternion_of, tail};

/// Which frame to report: its name, body and placement on it.
pub struct Place<'a> {
    /// Name.
    pub name: &'a str,
    /// Body index.
    pub body: usize,
    /// Placement in the body's axes.
    pub placement: Pose,
}

/// Everything about one state. `places` come after the model's soles.
pub fn report(model: &Model, state: &State, axes: &VelocityAxes, gravity: &Vec3, places: &[Place]) -> DynamicsReport {
    let mut ws = Workspace::new(model);
    ws.update(model, state, gravity);
    let map = axes.map(model, state);
    let mut mass_matrix = ws.mass_matrix.clone();
    let mut bias = ws.bias.clone();
    map.bias_from_world(&ws.mass_matrix, &mut bias);
    map.mass_matrix_from_world(&mut mass_matrix);
    let momentum_bias = map.rate_from_world(&ws.momentum_matrix, &ws.momentum_bias);
    let mut momentum_matrix = ws.momentum_matrix.clone();
    map.jacobian_from_world(&mut momentum_matrix);
    let soles = model.soles.iter().map(|s| Place { name: &s.name, body: s.body, placement: s.placement });
    let frames = soles
        .map(|p| frame(model, &ws, &map, &p))
        .chain(places.iter().map(|p| frame(model, &ws, &map, p)))
        .collect();
    DynamicsReport {
        mass: ws.mass,
        velocities: velocity_names(model),
        mass_matrix: rows(&mass_matrix),
        bias: bias.iter().copied().collect(),
        friction: ws.friction.iter().copied().collect(),
        center_of_mass: ws.center_of_mass,
        center_of_mass_velocity: ws.center_of_mass_velocity,
        momentum: halves(&ws.momentum),
        momentum_matrix: rows(&momentum_matrix),
        momentum_bias: halves(&momentum_bias),
        kinetic_energy: ws.kinetic_energy,
        potential_energy: ws.potential_energy,
        frames,
    }
}

fn frame(model: &Model, ws: &Workspace, map: &AxesMap, place: &Place) -> FrameReport {
    let pose = dynamics::frame_pose(model, ws, place.body, &place.placement);
    let mut jacobian = DMatrix::zeros(6, model.velocities());
    dynamics::frame_jacobian(model, ws, place.body, &place.placement, &mut jacobian);
    let bias = dynamics::frame_bias_acceleration(model, ws, place.body, &place.placement);
    let bias = map.rate_from_world(&jacobian, &bias);
    map.jacobian_from_world(&mut jacobian);
    FrameReport {
        name: place.name.into(),
        position: pose.translation,
        orientation: quaternion_of(&pose.rotation),
        twist: halves(&dynamics::frame_twist(model, ws, place.body, &place.placement).to_vec6()),
        jacobian: rows(&jacobian),
        bias_acceleration: halves(&bias),
    }
}

fn rows(matrix: &DMatrix<f64>) -> Vec<Vec<f64>> {
    matrix.row_iter().map(|row| row.iter().copied().collect()).collect()
}

fn halves(v: &Vec6) -> [Vec3; 2] {
    [head(v), tail(v)]
}
