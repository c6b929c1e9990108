//! Orders of joints: those that programs commonly use, and the one that the numbers suggest.

use nalgebra::DMatrix;

use super::Given;
use super::terms::Terms;
use crate::model::Model;
use crate::problem::question::DynamicsQuestion;

/// Size below which a number counts as zero when joints are told apart (SI units).
const FLOOR: f64 = 1e-3;

/// Common orders that differ from the model's own (document order), each with its name, no two alike.
pub fn named(model: &Model) -> Vec<(&'static str, Vec<usize>)> {
    let count = model.joints.len();
    let own: Vec<usize> = (0..count).collect();
    let mut alphabetical = own.clone();
    alphabetical.sort_by(|a, b| model.joints[*a].name.cmp(&model.joints[*b].name));
    let by_name = |a: &usize, b: &usize| model.joints[*a].name.cmp(&model.joints[*b].name);
    let candidates = [
        ("depth first through the tree", walk(model, true, Ord::cmp)),
        ("breadth first through the tree", walk(model, false, Ord::cmp)),
        ("alphabetical", alphabetical),
        ("depth first through the tree, children by name", walk(model, true, by_name)),
        ("breadth first through the tree, children by name", walk(model, false, by_name)),
        ("the other way round", own.iter().rev().copied().collect()),
    ];
    let mut orders: Vec<(&'static str, Vec<usize>)> = Vec::new();
    for (name, order) in candidates {
        if order != own && order.len() == count && !orders.iter().any(|(_, known)| *known == order) {
            orders.push((name, order));
        }
    }
    orders
}

/// Joints met on a walk through the tree from the base.
fn walk(model: &Model, deep: bool, order: impl Fn(&usize, &usize) -> std::cmp::Ordering) -> Vec<usize> {
    let mut found = Vec::with_capacity(model.joints.len());
    let mut waiting = std::collections::VecDeque::from([0usize]);
    while let Some(body) = if deep { waiting.pop_back() } else { waiting.pop_front() } {
        found.extend(model.bodies.get(body).and_then(|body| body.joint));
        let below = |joint: &usize| model.joints.get(*joint).and_then(|j| model.bodies.get(j.body)).and_then(|b| b.parent) == Some(body);
        let mut children: Vec<usize> = (0..model.joints.len()).filter(below).collect();
        children.sort_by(&order);
        if deep {
            children.reverse();
        }
        waiting.extend(children.iter().filter_map(|joint| model.joints.get(*joint)).map(|joint| joint.body));
    }
    found
}

/// The order in which the user's joints look most like ours: each joint's own numbers (diagonal of the mass matrix, coupling with
/// the base, bias, Jacobian columns) are compared, and the likest pairs joined first. None where it is the model's own, or where
/// nothing was given that tells joints apart.
pub fn suggested(question: &DynamicsQuestion, given: &Given, ours: &Terms) -> Option<Vec<usize>> {
    let (offset, count) = (question.model.joint_offset(), question.model.joints.len());
    let mut features: Vec<(Vec<f64>, Vec<f64>)> = Vec::new();
    if let (Some(theirs), Some(ours)) = (&given.mass_matrix, &ours.mass_matrix) {
        let diagonal = |m: &DMatrix<f64>| (0..count).map(|j| m[(offset + j, offset + j)]).collect();
        features.push((diagonal(theirs), diagonal(ours)));
        features.extend((0..offset).map(|i| (row(theirs, i, offset), row(ours, i, offset))));
        let total = |m: &DMatrix<f64>| (0..count).map(|j| (0..count).map(|k| m[(offset + j, offset + k)].abs()).sum()).collect();
        features.push((total(theirs), total(ours)));
    }
    if let (Some(theirs), Some(ours)) = (&given.bias, &ours.bias) {
        features.push((theirs.iter().skip(offset).copied().collect(), ours.iter().skip(offset).copied().collect()));
    }
    for frame in &given.frames {
        let ours = ours.frames.get(frame.index).and_then(|(jacobian, _)| jacobian.as_ref());
        if let (Some(theirs), Some(ours)) = (&frame.jacobian, ours) {
            features.extend((0..6).map(|i| (row(theirs, i, offset), row(ours, i, offset))));
        }
    }
    if features.is_empty() {
        return None;
    }
    let order = matched(count, &features);
    let own = order.iter().enumerate().all(|(i, j)| i == *j);
    (!own).then_some(order)
}

fn row(matrix: &DMatrix<f64>, i: usize, offset: usize) -> Vec<f64> {
    matrix.row(i).iter().skip(offset).copied().collect()
}

/// For each of the user's joints one of ours, likest pairs first.
fn matched(count: usize, features: &[(Vec<f64>, Vec<f64>)]) -> Vec<usize> {
    let scales: Vec<f64> = features.iter().map(|(_, ours)| ours.iter().fold(FLOOR, |most, x| most.max(x.abs()))).collect();
    let mut pairs = Vec::with_capacity(count * count);
    for i in 0..count {
        for j in 0..count {
            let distance: f64 = features.iter().zip(&scales).map(|((theirs, ours), scale)| (theirs[i] - ours[j]).abs() / scale).sum();
            pairs.push((distance, i, j));
        }
    }
    pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
    let (mut order, mut taken) = (vec![None; count], vec![false; count]);
    for (_, i, j) in pairs {
        if order[i].is_none() && !taken[j] {
            order[i] = Some(j);
            taken[j] = true;
        }
    }
    order.into_iter().enumerate().map(|(i, j)| j.unwrap_or(i)).collect()
}
