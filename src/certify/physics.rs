//! The checks of the claimed motion and wrenches: balance, ground law, vertex forces.

use super::friction::spread;
use super::ground::Bed;
use super::situation::{Situation, unknown_wrench};
use super::worst::Worst;
use super::{Check, Claim};
use crate::contact::Law;
use crate::problem::question::Contact;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat6, Twist, Vec3, Vec6, Wrench, skew};

/// Bound on balance, ground law, vertex sums and limits.
pub const PHYSICS_BOUND: f64 = 1e-9;

/// Wrenches of the claim; what is not claimed becomes not a number.
pub fn claimed_wrenches(claim: &Claim) -> Vec<Wrench> {
    claim.wrenches.iter().map(|w| w.unwrap_or_else(unknown_wrench)).collect()
}

/// Balance of every body under the claimed motion, see `newton_euler`.
pub fn dynamics(situation: &Situation, claim: &Claim) -> Check {
    let ends = claimed_wrenches(claim);
    let rows = if situation.is_held() {
        situation.held_balance(claim.acceleration, claim.torques, &ends, &situation.play(claim.torques))
    } else {
        situation.balance(claim.acceleration, claim.torques, &ends)
    };
    let mut worst = Worst::default();
    for (i, row) in rows.iter().enumerate() {
        worst.record(row.abs() / situation.weight, || situation.velocity_name(i));
    }
    worst.check("dynamics", "of the robot's weight (moments: of weight times 1 m)", PHYSICS_BOUND)
}

/// The claimed wrench against the law, sole by sole. On soft ground the mismatch
/// `e = w+ - w_drift + G a` counts as the acceleration `(Z + G)^-1 e` that would explain it,
/// `Z = m diag(1, 1, 1, r^2, r^2, r^2)`: where G is small that is `e` over the robot's mass, where the ground is
/// stiff the error in the sole's acceleration. On rigid ground it is the distance from the prescribed
/// acceleration. Angular parts times r (rigid point foot: linear part alone). Under the rule `held` the wrench is held against the one
/// that the claimed torques lead to, over the robot's mass.
pub fn contact(situation: &Situation, claim: &Claim) -> Check {
    let motions = situation.motions(claim.acceleration);
    let mut worst = Worst::default();
    let played = situation.is_held().then(|| situation.play(claim.torques));
    for (i, contact) in situation.question.contacts.iter().enumerate() {
        let motion = situation.sole(contact, &motions);
        let claimed = claim.wrenches[i].unwrap_or_else(unknown_wrench);
        let held = played.as_ref().and_then(|played| played.ends[i]);
        let error = match (&situation.beds[i], situation.prescribed(contact, &motion)) {
            (Some(bed), _) if played.is_some() => held_error(situation, bed, &claimed, &held.unwrap_or_else(unknown_wrench)),
            (Some(bed), _) => soft_error(situation, bed, &claimed, &motion.acceleration),
            (None, Some(wanted)) => rigid_error(situation, contact, &claimed, &motion.acceleration, &wanted),
            (None, None) => Vec6::repeat(f64::NAN),
        };
        for (part, value) in PARTS.iter().zip(error.iter()) {
            worst.record(value.abs() / situation.gravity, || format!("{} {part}", situation.name(contact)));
        }
    }
    worst.check("contact", "of the robot's weight (stiff or rigid soles: of gravity; moments: over the sole's radius)", PHYSICS_BOUND)
}

const PARTS: [&str; 6] = ["fx", "fy", "fz", "mx", "my", "mz"];

fn held_error(situation: &Situation, bed: &Bed, claimed: &Wrench, played: &Wrench) -> Vec6 {
    let off = (claimed.to_vec6() - played.to_vec6()) / situation.question.model.mass();
    let radius = bed.radius();
    Vec6::from_fn(|i, _| if i < 3 { off[i] } else { off[i] / radius })
}

fn soft_error(situation: &Situation, bed: &Bed, claimed: &Wrench, acceleration: &Twist) -> Vec6 {
    let tick = situation.tick();
    let radius = bed.radius();
    let level = |w: &Wrench| {
        let v = w.to_vec6();
        Vec6::from_fn(|i, _| if i < 3 { v[i] } else { v[i] / radius })
    };
    let mut system = Mat6::identity() * situation.question.model.mass();
    for i in 0..6 {
        let size = if i < 3 { 1.0 } else { 1.0 / radius };
        let unit = Twist::from_vec6(&Vec6::ith(i, size));
        let column = system.column(i) - level(&bed.along(tick, &unit));
        system.set_column(i, &column);
    }
    let mismatch = level(claimed) - level(&bed.end(tick, acceleration));
    system.full_piv_lu().solve(&mismatch).unwrap_or(Vec6::repeat(f64::NAN))
}

fn rigid_error(situation: &Situation, contact: &Contact, claimed: &Wrench, is: &Twist, wanted: &Twist) -> Vec6 {
    let off = is.to_vec6() - wanted.to_vec6();
    let sole = situation.shape(contact);
    match sole {
        // A point foot turns freely and carries no moment.
        SoleShape::Point => {
            let moment = claimed.moment / situation.question.model.mass();
            Vec6::from_fn(|i, _| if i < 3 { off[i] + 0.0 * claimed.force[i] } else { moment[i - 3] })
        }
        SoleShape::Polygon(_) => {
            let nodes = super::ground::nodes(sole);
            let area: f64 = nodes.iter().map(|n| n.weight).sum();
            let polar: f64 = nodes.iter().map(|n| n.weight * n.point.norm_squared()).sum();
            let radius = (polar / area).sqrt();
            // Nothing but the balance decides the wrench, yet one that is no number must not pass.
            let known = claimed.to_vec6() * 0.0;
            Vec6::from_fn(|i, _| known[i] + if i < 3 { off[i] } else { off[i] * radius })
        }
    }
}

/// Where the vertices of a sole are, from its origin, world axes (m). A point foot has one, its origin.
pub fn vertex_arms(situation: &Situation, contact: &Contact) -> Vec<Vec3> {
    let still = vec![0.0; situation.question.model.velocities()];
    let rotation = situation.sole(contact, &situation.motions(&still)).pose.rotation;
    match situation.shape(contact) {
        SoleShape::Point => vec![Vec3::zeros()],
        SoleShape::Polygon(polygon) => {
            polygon.vertices().iter().map(|v| rotation * Vec3::new(v[0], v[1], 0.0)).collect()
        }
    }
}

/// The wrench of forces at the vertices, about the sole origin.
pub fn gathered(arms: &[Vec3], forces: &[Vec3]) -> Wrench {
    let mut total = Wrench::zero();
    for (arm, force) in arms.iter().zip(forces) {
        total.force += force;
        total.moment += skew(arm) * force;
    }
    total
}

/// Vertex forces add up to the claimed wrench, wherever a friction set rests on them.
pub fn vertex_sum(situation: &Situation, claim: &Claim) -> Option<Check> {
    let mut worst = Worst::default();
    let mut used = false;
    for (i, contact) in situation.question.contacts.iter().enumerate() {
        if !spread(situation, contact) {
            continue;
        }
        used = true;
        let arms = vertex_arms(situation, contact);
        let forces = &claim.vertex_forces[i];
        let claimed = claim.wrenches[i].unwrap_or_else(unknown_wrench).to_vec6();
        let off = if forces.len() == arms.len() {
            gathered(&arms, forces).to_vec6() - claimed
        } else {
            Vec6::repeat(f64::NAN)
        };
        for (part, value) in PARTS.iter().zip(off.iter()) {
            worst.record(value.abs() / situation.weight, || format!("{} {part}", situation.name(contact)));
        }
    }
    used.then(|| worst.check("vertex-sum", "of the robot's weight (moments: of weight times 1 m)", PHYSICS_BOUND))
}

/// Per contact on soft ground: how far the law itself, at the state the claim leads to, is from the claimed wrench:
/// `[force (N), moment (N m)]`. What linearising the law over the tick costs; no part of the certificate's verdict.
pub fn linearisation(situation: &Situation, claim: &Claim) -> Vec<Option<[f64; 2]>> {
    let motions = situation.motions(claim.acceleration);
    let played = situation.is_held().then(|| situation.play(claim.torques));
    let contacts = situation.question.contacts.iter().enumerate();
    contacts
        .map(|(i, contact)| {
            if matches!(contact.ground.law, Law::Rigid { .. }) {
                return None;
            }
            let claimed = (*claim.wrenches.get(i)?)?;
            let bed = situation.beds[i].as_ref()?;
            let acceleration = situation.sole(contact, &motions).acceleration;
            let exact = match &played {
                None => bed.end_exact(situation.tick(), &acceleration),
                Some(played) => {
                    let time = situation.question.tick.length;
                    let kick = Twist { linear: acceleration.linear * time, angular: acceleration.angular * time };
                    bed.end_away(time, &played.shifts[i], &kick)
                }
            };
            Some([(exact.force - claimed.force).norm(), (exact.moment - claimed.moment).norm()])
        })
        .collect()
}
