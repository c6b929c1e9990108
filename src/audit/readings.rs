//! Limits at what the torques lead to, and claimed numbers beside implied ones.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::implied::Consequence;
use super::report::{Discrepancy, LimitReading, Strictness};
use super::tolerances::{Tolerances, within};
use super::{Claim, vertex};
use crate::problem::limits::LimitBlock;
use crate::problem::question::Treatment;
use crate::reference::{Trouble, Work};

/// Room left in a block at `x` (physical): the slack of a row, `s0 - |s1..|` of a cone.
pub fn room(block: &LimitBlock, x: &[f64]) -> f64 {
    let slack: Vec<f64> =
        block.rows.iter().map(|row| row.rhs - row.entries.iter().map(|&(c, v)| v * x[c]).sum::<f64>()).collect();
    slack[0] - slack.iter().skip(1).map(|s| s * s).sum::<f64>().sqrt()
}

/// True where a block's rows stand on vertex forces, which torques do not imply.
pub fn on_vertices(work: &Work, block: &LimitBlock) -> bool {
    (0..work.scene.soles.len())
        .any(|i| vertex::spreads(work, i) && block.group == crate::problem::limits::friction_group(&work.scene.soles[i].name))
}

/// True where a block's rows stand on the wrench of a sole.
fn on_wrenches(work: &Work, block: &LimitBlock) -> bool {
    let layout = &work.assembly.layout;
    let first = layout.contacts.first().map_or(usize::MAX, |c| c.wrench);
    block.rows.iter().flat_map(|row| &row.entries).any(|&(column, _)| column >= first)
}

/// Every limit; friction sets over vertex forces as one entry per sole.
pub fn limits(work: &Work, at: &Consequence, tolerances: &Tolerances, cancel: &Arc<AtomicBool>) -> Result<Vec<LimitReading>, Trouble> {
    let mut out = Vec::new();
    for block in work.assembly.limits.iter().filter(|block| !on_vertices(work, block)) {
        let determined = at.determined() || !on_wrenches(work, block);
        out.push(reading(work, block, block.rows[0].part.clone(), room(block, &at.x), determined, tolerances));
    }
    for index in (0..work.scene.soles.len()).filter(|&i| vertex::spreads(work, i)) {
        let Some(block) = vertex::blocks(work, index).next() else { continue };
        let margin = vertex::margin(work, index, &at.wrenches[index], cancel)?;
        out.push(reading(work, block, "best vertex forces".into(), margin, at.determined(), tolerances));
    }
    Ok(out)
}

fn reading(work: &Work, block: &LimitBlock, part: String, margin: f64, determined: bool, tolerances: &Tolerances) -> LimitReading {
    let (strictness, allowed) = match block.treatment {
        Treatment::Hard => (Strictness::Hard, 0.0),
        Treatment::Soft { .. } => (Strictness::Soft, 0.0),
        Treatment::Decay { rate } => (Strictness::Decay, (1.0 - rate * work.question.tick.length) * block.violation_now),
    };
    let tolerance = tolerances.of_limit(block.scale);
    // Written so that what is no number counts as broken.
    let inside = -margin <= allowed + tolerance;
    let broken = determined && strictness != Strictness::Soft && !inside;
    LimitReading { limit: block.group.clone(), part, unit: block.rows[0].unit, margin, allowed, tolerance, strictness, determined, broken }
}

/// Claimed accelerations and wrenches beside what the torques imply.
pub fn claimed(work: &Work, claim: &Claim, at: &Consequence, tolerances: &Tolerances) -> Vec<Discrepancy> {
    let question = &work.question;
    let layout = &work.assembly.layout;
    let offset = question.model.joint_offset();
    let mut acceleration = at.x[..layout.velocities].to_vec();
    question.velocity_axes.map(&question.model, &question.state).acceleration_from_world(&mut acceleration);
    let mut out = Vec::new();
    let mut push = |column: usize, claimed: f64, implied: f64| {
        let column = &layout.columns[column];
        let tolerance = tolerances.of_claim(column);
        let broken = !within(claimed - implied, tolerance);
        out.push(Discrepancy { name: column.name.clone(), unit: column.unit, claimed, implied, tolerance, broken });
    };
    if let Some(base) = claim.base_acceleration.filter(|_| offset == 6) {
        for k in 0..6 {
            push(k, base[k / 3][k % 3], acceleration[k]);
        }
    }
    for (j, value) in claim.joint_accelerations.iter().enumerate() {
        if let Some(value) = value {
            push(offset + j, *value, acceleration[offset + j]);
        }
    }
    for (index, wrench) in claim.wrenches.iter().enumerate() {
        let Some(wrench) = wrench else { continue };
        let columns = &layout.contacts[index];
        let (claimed, implied) = (wrench.to_vec6(), at.wrenches[index].to_vec6());
        for k in 0..columns.dimension {
            push(columns.wrench + k, claimed[k], implied[k]);
        }
    }
    out
}
