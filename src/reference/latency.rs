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
use crate::problem::question::{Latency, Question};
use crate::problem::scene::Scene;
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
fn fix_rest_poses(question: &mut Question) -> Result<(), Trouble> {
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

/// Accelerations (nv) and tick-end wrenches that given torques (joint order) lead to: the physics rows solved with the torques known.
pub fn respond(question: &Question, scene: &Scene, torques: &[f64]) -> Result<(DVector<f64>, Vec<Wrench>), Trouble> {
    let model = &*question.model;
    let ws = &scene.dynamics;
    let nv = model.velocities();
    let dimension = nv + scene.soles.iter().map(|s| s.map.dimension).sum::<usize>();
    let mut matrix = DMatrix::zeros(dimension, dimension);
    let mut right = DVector::zeros(dimension);
    matrix.view_mut((0, 0), (nv, nv)).copy_from(&ws.mass_matrix);
    for i in 0..nv {
        right[i] = scene.external[i] - ws.bias[i] - ws.friction[i];
    }
    for (j, joint) in model.joints.iter().enumerate().filter(|(_, joint)| joint.actuated) {
        debug_assert!(joint.actuated);
        right[model.joint_offset() + j] += torques[j];
    }
    // Wrenches count in body weights, so that forces and accelerations are of one size.
    let unit = ws.mass * 10.0;
    let mut at = nv;
    for sole in &scene.soles {
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
        at += d;
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
    Ok((solution.rows(0, nv).into_owned(), wrenches))
}
