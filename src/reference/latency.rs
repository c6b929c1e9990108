//! The state when the new torques take effect: the present one carried on under the torques that are
//! already on their way.
//!
//! The physics rows with the torques given are a square linear system in accelerations and wrenches; it is solved
//! substep by substep with the trapezoid rule (poses advance by `T v + T^2 a / 2`). A measured wrench is replaced by the
//! one predicted from it. The rest pose is fixed once, at the present state, and moves with moving ground.

use nalgebra::{DMatrix, DVector};

use super::Trouble;
use crate::contact::{Law, Patch, Rest, TickRule, rest, tick};
use crate::dynamics;
use crate::problem::coupled::CoupledRows;
use crate::problem::question::{Latency, Question};
use crate::problem::scene::{Scene, SoleScene};
use crate::spatial::{Vec6, Wrench};

/// Longest substep (s).
pub const LONGEST_SUBSTEP: f64 = 5e-4;
/// Most substeps; a longer delay takes longer ones.
pub const MOST_SUBSTEPS: usize = 400;

/// The question as it will stand after its latency, with no latency left.
pub fn predict(question: &Question) -> Result<Question, Trouble> {
    let Some(latency) = question.latency.clone() else { return Ok(question.clone()) };
    let mut ahead = question.clone();
    ahead.latency = None;
    fix_rest_poses(&mut ahead)?;
    let steps = ((latency.delay / LONGEST_SUBSTEP).ceil() as usize).clamp(1, MOST_SUBSTEPS);
    ahead.tick.length = latency.delay / steps as f64;
    ahead.tick.rule = TickRule::Trapezoid;
    for _ in 0..steps {
        advance(&mut ahead, &latency)?;
    }
    ahead.tick = question.tick;
    Ok(ahead)
}

/// Rest poses that depend on the present state become plain poses.
pub(super) fn fix_rest_poses(question: &mut Question) -> Result<(), Trouble> {
    let scene = Scene::new(question)?;
    let model = question.model.clone();
    for (index, contact) in question.contacts.iter_mut().enumerate() {
        if matches!(contact.ground.law, Law::Bonded(_)) {
            let patch = Patch { shape: &model.soles[contact.sole].shape, ground: &contact.ground };
            let sole = &scene.soles[index];
            let pose = rest::resolve(&patch, &sole.motion).map_err(|source| Trouble::contact(index, &sole.name, source))?;
            contact.ground.rest = Rest::Pose(pose);
        }
    }
    Ok(())
}

fn advance(question: &mut Question, latency: &Latency) -> Result<(), Trouble> {
    let scene = Scene::new(question)?;
    let (acceleration, wrenches) = respond(question, &scene, &latency.torques)?;
    let step = question.tick.length;
    question.state = dynamics::integrate(&question.model, &question.state, acceleration.as_slice(), step);
    for (contact, wrench) in question.contacts.iter_mut().zip(wrenches) {
        if contact.ground.measured.is_some() {
            contact.ground.measured = Some(wrench);
        }
        if let Rest::Pose(pose) = contact.ground.rest {
            let (moved, _) = tick::advance_ground(&contact.ground.normal, &pose, &contact.ground.rest_twist, step);
            contact.ground.rest = Rest::Pose(moved);
        }
    }
    Ok(())
}

/// What given torques lead to over the tick.
pub struct Response {
    /// Generalised acceleration (nv); under the rule `held` its average.
    pub acceleration: DVector<f64>,
    /// Wrench of each contact at the tick's end.
    pub wrenches: Vec<Wrench>,
    /// Wrench that acts during the tick, on average.
    pub over_tick: Vec<Wrench>,
}

/// Accelerations (nv) and tick-end wrenches that given torques (joint order) lead to: the physics rows solved with the torques known.
pub fn respond(question: &Question, scene: &Scene, torques: &[f64]) -> Result<(DVector<f64>, Vec<Wrench>), Trouble> {
    response(question, scene, torques).map(|r| (r.acceleration, r.wrenches))
}

/// As [`respond`], with the average wrenches too.
pub fn response(question: &Question, scene: &Scene, torques: &[f64]) -> Result<Response, Trouble> {
    let model = &*question.model;
    let ws = &scene.dynamics;
    let nv = model.velocities();
    let starts = scene.coupled_starts();
    let dimension = nv + scene.soles.iter().map(|s| s.map.dimension).sum::<usize>();
    let mut matrix = DMatrix::zeros(dimension, dimension);
    let mut right = DVector::zeros(dimension);
    matrix.view_mut((0, 0), (nv, nv)).copy_from(&ws.mass_matrix);
    for i in 0..nv {
        right[i] = scene.external[i] - ws.bias[i] - ws.friction[i];
    }
    for (j, _) in model.joints.iter().enumerate().filter(|(_, joint)| joint.actuated) {
        right[model.joint_offset() + j] += torques[j];
    }
    // Wrenches count in body weights, so that forces and accelerations are of one size.
    let unit = ws.mass * 10.0;
    let mut at = nv;
    let mut ends: Vec<usize> = Vec::new();
    for (sole, start) in scene.soles.iter().zip(&starts) {
        let d = sole.map.dimension;
        match start {
            Some(_) => ends.extend(at..at + d),
            None => own_rows(sole, at, (nv, unit), &mut matrix, &mut right),
        }
        at += d;
    }
    if let Some(rows) = &scene.coupled {
        coupled_rows(rows, &ends, (nv, unit), &mut matrix, &mut right);
    }
    let solution = matrix.lu().solve(&right).filter(|x| x.iter().all(|v| v.is_finite())).ok_or(Trouble::Latency)?;
    let mut wrenches = Vec::with_capacity(scene.soles.len());
    let mut at = nv;
    for sole in &scene.soles {
        let mut w = Vec6::zeros();
        for k in 0..sole.map.dimension {
            w[k] = solution[at + k] * unit;
        }
        at += sole.map.dimension;
        wrenches.push(Wrench::from_vec6(&w));
    }
    let acceleration = solution.rows(0, nv).into_owned();
    let over_tick = scene.over_tick(&acceleration, &wrenches);
    Ok(Response { acceleration, wrenches, over_tick })
}

/// Force and equality of a sole by itself, its wrench in columns (and rows) from `at` on, counted in `unit`.
fn own_rows(sole: &SoleScene, at: usize, (nv, unit): (usize, f64), matrix: &mut DMatrix<f64>, right: &mut DVector<f64>) {
    let (d, map) = (sole.map.dimension, &sole.map);
    let now = map.now.to_vec6();
    for k in 0..d {
        for j in 0..nv {
            let lever = sole.jacobian[(k, j)];
            matrix[(j, at + k)] -= map.theta * lever * unit;
            right[j] += (1.0 - map.theta) * lever * now[k];
            matrix[(at + k, j)] = (0..d).map(|l| map.acceleration_part[(k, l)] * sole.jacobian[(l, j)]).sum();
        }
        for l in 0..d {
            matrix[(at + k, at + l)] = map.wrench_part[(k, l)] * unit;
        }
        let drift: f64 = (0..d).map(|l| map.acceleration_part[(k, l)] * sole.bias_acceleration[l]).sum();
        right[at + k] = map.right_side[k] - drift;
    }
}

/// Force and equality of all soft soles under the rule `held`; `ends` are their wrench columns (and rows).
fn coupled_rows(rows: &CoupledRows, ends: &[usize], (nv, unit): (usize, f64), matrix: &mut DMatrix<f64>, right: &mut DVector<f64>) {
    for i in 0..nv {
        for j in 0..nv {
            matrix[(i, j)] -= rows.force_acceleration[(i, j)];
        }
        for (l, &end) in ends.iter().enumerate() {
            matrix[(i, end)] -= rows.force_wrench[(i, l)] * unit;
        }
        right[i] += rows.force_start[i];
    }
    for (i, &row) in ends.iter().enumerate() {
        for j in 0..nv {
            matrix[(row, j)] = rows.contact_acceleration[(i, j)];
        }
        for (l, &end) in ends.iter().enumerate() {
            matrix[(row, end)] = rows.contact_wrench[(i, l)] * unit;
        }
        right[row] = rows.contact_right[i];
    }
}
