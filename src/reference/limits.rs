//! Room left to every limit, and how far a present wrench lies outside a set that has to be re-entered.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::answer::Margin;
use super::report::Found;
use super::{Trouble, Work};
use crate::conic::{Column, Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName};
use crate::contact::friction::vertex::vertex_set;
use crate::problem::limits::cone_form;
use crate::problem::question::{Contact, FrictionSet, Question, Treatment};
use crate::problem::scene::{Scene, SoleScene};
use crate::solve;
use crate::spatial::polygon::{Polygon, SoleShape};

/// Margins of every limit at the point found, in request units: the slack of a row, or `s0 - |s1..|` of a cone.
pub(super) fn margins(work: &Work, found: &Found) -> Vec<Margin> {
    work.assembly
        .limits
        .iter()
        .map(|block| {
            let slack: Vec<f64> = block
                .rows
                .iter()
                .map(|row| row.rhs - row.entries.iter().map(|&(c, v)| v * found.x[c]).sum::<f64>())
                .collect();
            let beyond = slack.iter().skip(1).map(|s| s * s).sum::<f64>().sqrt();
            Margin {
                limit: block.group.clone(),
                part: block.rows[0].part.clone(),
                margin: slack[0] - beyond,
                unit: block.rows[0].unit,
            }
        })
        .collect()
}

/// Distance of a point from the nearest edge of a sole, negative outside (m).
pub(super) fn edge_distance(polygon: &Polygon, point: &[f64; 2]) -> f64 {
    let vertices = polygon.vertices();
    let n = vertices.len();
    (0..n)
        .map(|i| {
            let (a, b) = (vertices[i], vertices[(i + 1) % n]);
            let (dx, dy) = (b[0] - a[0], b[1] - a[1]);
            (dx * (point[1] - a[1]) - dy * (point[0] - a[0])) / dx.hypot(dy)
        })
        .fold(f64::INFINITY, f64::min)
}

/// For each contact whose vertex friction set decays: the least t (N) for which the present wrench is a sum of vertex
/// forces that each violate their cone by at most t. Zero elsewhere.
pub(super) fn vertex_violations(question: &Question, scene: &Scene, cancel: &Arc<AtomicBool>) -> Result<Vec<f64>, Trouble> {
    question
        .contacts
        .iter()
        .zip(&scene.soles)
        .map(|(contact, sole)| {
            let decays = contact
                .friction
                .is_some_and(|f| f.set == FrictionSet::Vertex && matches!(f.treatment, Treatment::Decay { .. }));
            if decays && sole.map.now_known { vertex_violation(question, contact, sole, cancel) } else { Ok(0.0) }
        })
        .collect()
}

fn vertex_violation(question: &Question, contact: &Contact, sole: &SoleScene, cancel: &Arc<AtomicBool>) -> Result<f64, Trouble> {
    let Some(friction) = contact.friction else { return Ok(0.0) };
    let shape = &question.model.soles[contact.sole].shape;
    let size = sole.map.now.force.norm().max(1.0);
    let rotation = &sole.motion.pose.rotation;
    let Ok(set) = vertex_set(shape, rotation, &contact.ground.normal, friction.coefficient, cone_form(&friction), size) else {
        return Ok(0.0);
    };
    let lever = match shape {
        SoleShape::Point => 1.0,
        SoleShape::Polygon(p) => p.vertices().iter().map(|v| v[0].hypot(v[1])).fold(1e-3, f64::max),
    };
    let columns = 3 * set.vertices.len();
    let name = |part: &str| RowName { group: "present wrench".into(), part: part.into(), unit: "N", scale: size, physics: true };
    let mut hard = ConicRows::new(columns);
    let now = sole.map.now.to_vec6();
    for k in 0..sole.map.dimension {
        let divisor = if k < 3 { 1.0 } else { lever };
        hard.matrix.push(set.vertices.iter().enumerate().flat_map(|(i, v)| (0..3).map(move |l| (3 * i + l, v.map[(k, l)] / divisor))));
        hard.rhs.push(now[k] / divisor / size);
        hard.names.push(name("sum"));
    }
    hard.cones.push(Cone::Zero(sole.map.dimension));
    // One slack per cone is what a level offers; the largest of them is what every cone must be granted.
    let mut soft = ConicRows::new(columns);
    let mut slacks = 0;
    for (i, vertex) in set.vertices.iter().enumerate() {
        for block in &vertex.blocks {
            for row in &block.rows {
                soft.matrix.push((0..3).map(|l| (3 * i + l, -row.coefficients[l])));
                soft.rhs.push(0.0);
                soft.names.push(name(&row.part));
            }
            soft.cones.push(block.cone);
            slacks += if matches!(block.cone, Cone::SecondOrder(_)) { 1 } else { block.rows.len() };
        }
    }
    let mut tie_break = ResidualRows::new(columns);
    for i in 0..columns {
        tie_break.matrix.push([(i, 1.0)]);
        tie_break.rhs.push(0.0);
        tie_break.weight.push(1.0);
        tie_break.names.push(name("size"));
    }
    let level = Level { priority: 1, residuals: ResidualRows::new(columns), soft, soft_weight: vec![1.0; slacks] };
    let hierarchy = Hierarchy {
        columns: (0..columns).map(|i| Column { name: format!("force:{i}"), unit: "N", scale: size }).collect(),
        hard,
        levels: vec![level],
        tie_break,
        auxiliary: Vec::new(),
    };
    let solution = solve::solve(&hierarchy, &solve::Options::default(), Some(cancel))?;
    let largest = solution.levels.first().map_or(0.0, |l| l.soft_slack.iter().copied().fold(0.0, f64::max));
    Ok(largest * size)
}
