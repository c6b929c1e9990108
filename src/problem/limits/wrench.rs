//! Limits on the wrench at the tick's end: friction sets, normal force, rate of change.
//!
//! The sets themselves are stated in `contact::friction`; here they become rows on the wrench or on the vertex
//! forces. Rate: `|w_plus - now| <= T rate`, component by component in world axes. A present wrench outside its set
//! matters only under `decay`.

use super::super::layout::{ContactColumns, Layout};
use super::super::question::{Contact, Friction, FrictionSet, Question, Treatment};
use super::super::rows::PhysicalRow;
use super::super::scene::{Scene, SoleScene};
use super::{LimitBlock, at_most, between};
use crate::conic::Cone;
use crate::contact::friction::vertex::vertex_set;
use crate::contact::friction::wrench_set::{WrenchSetTerms, wrench_set};
use crate::contact::friction::{Block, ConeForm, PyramidSide};
use crate::spatial::Wrench;

const PARTS: [&str; 6] = ["fx", "fy", "fz", "mx", "my", "mz"];

/// The form of the cones a request asks for: exact, or inscribed pyramids.
pub fn cone_form(friction: &Friction) -> ConeForm {
    match friction.facets {
        None => ConeForm::Exact,
        Some(facets) => ConeForm::Pyramid { facets, side: PyramidSide::Inscribed },
    }
}

/// Name of the friction limit of a sole.
pub fn friction_group(sole: &str) -> String {
    format!("friction:{sole}")
}

/// Friction under contact `index`; `excess` is how far the present wrench lies outside a vertex set (N).
pub fn friction(index: usize, question: &Question, scene: &Scene, layout: &Layout, excess: f64, out: &mut Vec<LimitBlock>) {
    let contact = &question.contacts[index];
    let Some(friction) = contact.friction else { return };
    let sole = &scene.soles[index];
    let columns = &layout.contacts[index];
    let group = friction_group(&sole.name);
    match columns.vertices.filter(|_| friction.set == FrictionSet::Vertex) {
        Some(start) => vertex_blocks(question, contact, &friction, sole, layout, start, excess, &group, out),
        None => wrench_blocks(question, contact, &friction, sole, columns, layout, &group, out),
    }
}

fn vertex_blocks(
    question: &Question,
    contact: &Contact,
    friction: &Friction,
    sole: &SoleScene,
    layout: &Layout,
    start: usize,
    excess: f64,
    group: &str,
    out: &mut Vec<LimitBlock>,
) {
    let shape = &question.model.soles[contact.sole].shape;
    let rotation = &sole.motion.pose.rotation;
    let set = vertex_set(shape, rotation, &contact.ground.normal, friction.coefficient, cone_form(friction), layout.weight);
    // The gate has checked coefficient and facets; a set that cannot be made has no rows.
    let Ok(set) = set else { return };
    for (i, vertex) in set.vertices.iter().enumerate() {
        for block in &vertex.blocks {
            let first = start + 3 * i;
            for mut limit in split(block, first, group, friction.treatment, &format!("{} ", vertex.name)) {
                limit.violation_now = excess;
                out.push(limit);
            }
        }
    }
}

fn wrench_blocks(
    question: &Question,
    contact: &Contact,
    friction: &Friction,
    sole: &SoleScene,
    columns: &ContactColumns,
    layout: &Layout,
    group: &str,
    out: &mut Vec<LimitBlock>,
) {
    let shape = &question.model.soles[contact.sole].shape;
    let terms = WrenchSetTerms {
        mu: friction.coefficient,
        mu_z: if friction.set == FrictionSet::Wrench { friction.torsion } else { None },
        form: cone_form(friction),
    };
    let rotation = &sole.motion.pose.rotation;
    let Ok(set) = wrench_set(shape, rotation, &contact.ground.normal, &terms, layout.weight) else { return };
    for block in &set.blocks {
        for mut limit in split(block, columns.wrench, group, friction.treatment, "") {
            limit.violation_now = violation(&limit, columns.wrench, &sole.map.now);
            out.push(limit);
        }
    }
}

/// `s = coefficients . x in cone` as limit blocks: row by row, or one second-order block.
fn split<const N: usize>(block: &Block<N>, first: usize, group: &str, treatment: Treatment, prefix: &str) -> Vec<LimitBlock> {
    let rows: Vec<PhysicalRow> = block
        .rows
        .iter()
        .map(|row| PhysicalRow {
            // Zeros are left out: under a point sole the rows over a moment have no columns to stand on.
            entries: (first..).zip(row.coefficients).filter(|(_, c)| *c != 0.0).map(|(column, c)| (column, -c)).collect(),
            rhs: 0.0,
            part: format!("{prefix}{}", row.part),
            unit: row.unit,
        })
        .collect();
    let scale = block.rows.first().map_or(1.0, |r| r.scale);
    let make = |cone, rows| LimitBlock { group: group.into(), cone, rows, scale, treatment, violation_now: 0.0 };
    match block.cone {
        Cone::SecondOrder(_) => vec![make(block.cone, rows)],
        _ => rows.into_iter().map(|row| make(Cone::Nonnegative(1), vec![row])).collect(),
    }
}

/// How far outside its cone a block over the wrench columns is at the present wrench (physical unit).
fn violation(block: &LimitBlock, first: usize, now: &Wrench) -> f64 {
    let w = now.to_vec6();
    let slack: Vec<f64> = block
        .rows
        .iter()
        .map(|row| row.rhs - row.entries.iter().map(|&(c, v)| v * w[c - first]).sum::<f64>())
        .collect();
    let tail = slack.iter().skip(1).map(|s| s * s).sum::<f64>().sqrt();
    (tail - slack[0]).max(0.0)
}

/// Range of the normal force, along the ground normal.
pub fn normal_force(index: usize, question: &Question, scene: &Scene, layout: &Layout, out: &mut Vec<LimitBlock>) {
    let contact = &question.contacts[index];
    let Some(range) = contact.normal_force else { return };
    let sole = &scene.soles[index];
    let group = format!("normal_force:{}", sole.name);
    let first = layout.contacts[index].wrench;
    let along: Vec<_> = (0..3).map(|k| (first + k, contact.ground.normal[k])).collect();
    let against = along.iter().map(|&(c, v)| (c, -v)).collect();
    let mut push = |part: &str, entries, bound: f64| {
        let mut block = at_most(&group, part.into(), "N", entries, bound, layout.weight, range.treatment);
        block.violation_now = violation(&block, first, &sole.map.now);
        out.push(block);
    };
    if let Some(largest) = range.largest {
        push("upper", along, largest);
    }
    if let Some(least) = range.least {
        push("lower", against, -least);
    }
}

/// Rate of change of the wrench; only where the present wrench is known.
pub fn rate(index: usize, question: &Question, scene: &Scene, layout: &Layout, out: &mut Vec<LimitBlock>) {
    let Some(rate) = question.contacts[index].wrench_rate else { return };
    let sole = &scene.soles[index];
    if !sole.map.now_known {
        return;
    }
    let columns = &layout.contacts[index];
    let now = sole.map.now.to_vec6();
    let group = format!("wrench_rate:{}", sole.name);
    for k in 0..columns.dimension {
        let Some(bound) = (if k < 3 { rate.force } else { rate.moment }) else { continue };
        let step = bound * question.tick.length;
        let (unit, scale) = if k < 3 { ("N", layout.weight) } else { ("N m", layout.weight * columns.radius) };
        let entries = vec![(columns.wrench + k, 1.0)];
        out.extend(between(&group, PARTS[k], unit, &entries, (now[k] - step, now[k] + step), scale, rate.treatment));
    }
}
