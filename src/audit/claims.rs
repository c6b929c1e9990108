//! Mistakes in what a controller claims to follow from its torques: signs, axes, instants. Tried where a claimed wrench or base
//! acceleration is broken; the torques have no part in them.
//!
//! | code | what is mistaken |
//! |---|---|
//! | `wrench_sign` | the wrench of the robot on the ground |
//! | `wrench_axes` | sole axes for world axes |
//! | `wrench_instant` | the average over the tick, or the present wrench, for the one at its end |
//! | `wrench_order` | moment and force exchanged |
//! | `acceleration_axes` | base axes for world axes, or the other way round |
//! | `acceleration_kind` | the spatial acceleration `a - omega x v` for the classical one; the accelerometer's `a - g` |

use super::Claim;
use super::implied::Consequence;
use super::report::Hypothesis;
use super::tolerances::Tolerances;
use crate::reference::Work;
use crate::spatial::{Mat3, Vec3, Wrench};

/// Every such mistake where something claimed is broken.
pub(super) fn tried(work: &Work, claim: &Claim, at: &Consequence, tolerances: &Tolerances) -> Vec<Hypothesis> {
    let mut out = Vec::new();
    wrenches(work, claim, at, tolerances, &mut out);
    accelerations(work, claim, at, tolerances, &mut out);
    out
}

fn hypothesis(mistake: &'static str, text: &str, in_tolerances: f64) -> Hypothesis {
    Hypothesis {
        mistake,
        subject: String::new(),
        text: text.into(),
        distance_left: None,
        in_tolerances: Some(in_tolerances),
        consistent: in_tolerances <= 1.0,
    }
}

/// The largest difference in tolerances; what is no number is never small.
fn worst(differences: impl Iterator<Item = (f64, f64)>) -> f64 {
    differences.fold(0.0, |most, (off, tolerance)| {
        let ratio = off.abs() / tolerance;
        if ratio.is_nan() { f64::INFINITY } else { most.max(ratio) }
    })
}

fn wrenches(work: &Work, claim: &Claim, at: &Consequence, tolerances: &Tolerances, out: &mut Vec<Hypothesis>) {
    let layout = &work.assembly.layout;
    // As claimed, and what it ought to be: how far apart, over all soles that are claimed.
    let distance = |read: &dyn Fn(usize, Wrench) -> Wrench, truth: &dyn Fn(usize) -> Wrench| {
        let claimed = claim.wrenches.iter().enumerate().filter_map(|(i, w)| w.map(|w| (i, w)));
        worst(claimed.flat_map(|(i, wrench)| {
            let columns = &layout.contacts[i];
            let off = read(i, wrench).to_vec6() - truth(i).to_vec6();
            let tolerance = move |k: usize| tolerances.of_claim(&layout.columns[columns.wrench + k]);
            (0..columns.dimension).map(move |k| (off[k], tolerance(k))).collect::<Vec<_>>()
        }))
    };
    let end = |i: usize| at.wrenches[i];
    if distance(&|_, w| w, &end) <= 1.0 {
        return;
    }
    let turned = |i: usize, w: Wrench| w.rotated(&work.scene.soles[i].motion.pose.rotation);
    let negated = |_: usize, w: Wrench| Wrench { force: -w.force, moment: -w.moment };
    let exchanged = |_: usize, w: Wrench| Wrench { force: w.moment, moment: w.force };
    out.push(hypothesis("wrench_sign", "claimed wrenches of the robot on the ground", distance(&negated, &end)));
    out.push(hypothesis("wrench_axes", "claimed wrenches in sole axes", distance(&turned, &end)));
    let text = "claimed wrenches averaged over the tick instead of at its end";
    out.push(hypothesis("wrench_instant", text, distance(&|_, w| w, &|i| at.over_tick[i])));
    let text = "claimed wrenches of the present instead of the tick's end";
    out.push(hypothesis("wrench_instant", text, distance(&|_, w| w, &|i| work.scene.soles[i].map.now)));
    out.push(hypothesis("wrench_order", "claimed wrenches with moment and force exchanged", distance(&exchanged, &end)));
}

fn accelerations(work: &Work, claim: &Claim, at: &Consequence, tolerances: &Tolerances, out: &mut Vec<Hypothesis>) {
    let question = &work.question;
    let layout = &work.assembly.layout;
    let Some(claimed) = claim.base_acceleration.filter(|_| question.model.joint_offset() == 6) else { return };
    let mut implied = at.x[..layout.velocities].to_vec();
    let axes = question.velocity_axes.map(&question.model, &question.state);
    axes.acceleration_from_world(&mut implied);
    let implied = [Vec3::from_column_slice(&implied[..3]), Vec3::from_column_slice(&implied[3..6])];
    let distance = |truth: [Vec3; 2]| {
        let parts = (0..6).map(|k| (claimed[k / 3][k % 3] - truth[k / 3][k % 3], tolerances.of_claim(&layout.columns[k])));
        worst(parts)
    };
    if distance(implied) <= 1.0 {
        return;
    }
    let rotation = question.state.base_pose.rotation;
    let misread = |given: crate::dynamics::Axes, v: Vec3| -> Vec3 {
        let turn: Mat3 = if given == crate::dynamics::Axes::World { rotation.transpose() } else { rotation };
        turn * v
    };
    let own = question.velocity_axes;
    let other = [misread(own.linear, implied[0]), misread(own.angular, implied[1])];
    out.push(hypothesis("acceleration_axes", "the claimed base acceleration in the other axes", distance(other)));
    // Both in world axes, then as the request writes them.
    let given = |v: Vec3| if own.linear == crate::dynamics::Axes::World { v } else { rotation.tr_mul(&v) };
    let world = Vec3::from_column_slice(&at.x[..3]);
    let twist = &question.state.base_twist;
    let spatial = given(world - twist.angular.cross(&twist.linear));
    out.push(hypothesis("acceleration_kind", "the claimed base acceleration spatial instead of classical", distance([spatial, implied[1]])));
    let felt = given(world - question.gravity);
    out.push(hypothesis("acceleration_kind", "the claimed base acceleration as an accelerometer feels it", distance([felt, implied[1]])));
}
