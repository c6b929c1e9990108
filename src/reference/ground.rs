//! Ground and tick in figures: how fast the bed rings, and whether it can hold the robot up at all.

use nalgebra::{Matrix2, Matrix3, SymmetricEigen};

use super::answer::{GroundReport, Rocking, SoleGround};
use crate::contact::{Law, Patch, Rest, rest};
use crate::problem::question::{Contact, Question};
use crate::problem::scene::{Scene, SoleScene};
use crate::spatial::{Mat6, Vec3, shift_wrench};

/// The report on `question`'s ground.
pub fn report(question: &Question, scene: &Scene) -> GroundReport {
    let omega_max = omega_max(scene);
    GroundReport {
        omega_max,
        omega_max_tick: omega_max * question.tick.length,
        soles: question.contacts.iter().zip(&scene.soles).map(|(c, s)| sole_ground(question, c, s)).collect(),
        rocking: rocking(question, scene),
    }
}

/// Largest eigenfrequency, `omega^2 = lambda_max(M^-1 J' S J)`, by the symmetric form `L^-1 J' S J L^-T`, `M = L L'`.
fn omega_max(scene: &Scene) -> f64 {
    let nv = scene.dynamics.velocities();
    let mut bed = nalgebra::DMatrix::<f64>::zeros(nv, nv);
    for sole in scene.soles.iter().filter(|s| !s.map.rigid) {
        bed += sole.jacobian.transpose() * sole.map.stiffness * &sole.jacobian;
    }
    let Some(factor) = scene.dynamics.mass_matrix.clone().cholesky() else { return f64::NAN };
    let lower = factor.l();
    let Some(half) = lower.solve_lower_triangular(&bed) else { return f64::NAN };
    let Some(full) = lower.solve_lower_triangular(&half.transpose()) else { return f64::NAN };
    let symmetric = (&full + full.transpose()) * 0.5;
    symmetric.symmetric_eigenvalues().max().max(0.0).sqrt()
}

fn sole_ground(question: &Question, contact: &Contact, sole: &SoleScene) -> SoleGround {
    let ratio = |a: f64, b: f64| (b > 0.0).then(|| a / b);
    let (damping_time, stiffness_over_damping) = match contact.ground.law {
        Law::Rigid { .. } => (None, None),
        Law::Bonded(m) => (
            ratio(m.normal_damping, m.normal_stiffness),
            ratio(question.tick.length * m.normal_stiffness, m.normal_damping),
        ),
    };
    SoleGround {
        name: sole.name.clone(),
        damping_time,
        tick_stiffness_over_damping: stiffness_over_damping,
        sink: sink(question, contact, sole),
    }
}

/// How far the sole's centre lies below its rest pose, along the ground normal (m).
fn sink(question: &Question, contact: &Contact, sole: &SoleScene) -> Option<f64> {
    let unknown = matches!(contact.ground.law, Law::Rigid { .. }) || matches!(contact.ground.rest, Rest::Measured);
    if unknown {
        return None;
    }
    let shape = &question.model.soles[contact.sole].shape;
    let pose = rest::resolve(&Patch { shape, ground: &contact.ground }, &sole.motion).ok()?;
    let center = match shape {
        crate::spatial::polygon::SoleShape::Point => Vec3::zeros(),
        crate::spatial::polygon::SoleShape::Polygon(p) => {
            let m = p.moments();
            Vec3::new(m.first[0] / m.area, m.first[1] / m.area, 0.0)
        }
    };
    Some(contact.ground.normal.dot(&(pose.point(&center) - sole.motion.pose.point(&center))))
}

/// Least rocking stiffness of all soft soles together about horizontal axes through the mean sole origin, sinking and
/// sliding set free (condensed out), beside `m g h`.
fn rocking(question: &Question, scene: &Scene) -> Option<Rocking> {
    if scene.soles.is_empty() || scene.soles.iter().any(|s| s.map.rigid) {
        return None;
    }
    let gravity = question.gravity.norm();
    let up = if gravity > 0.0 { -question.gravity / gravity } else { Vec3::z() };
    let center: Vec3 =
        scene.soles.iter().map(|s| s.motion.pose.translation).sum::<Vec3>() / scene.soles.len() as f64;
    let mut bed = Mat6::zeros();
    for sole in &scene.soles {
        let carry = shift_wrench(&(sole.motion.pose.translation - center));
        bed += carry * sole.map.stiffness * carry.transpose();
    }
    let sliding: Matrix3<f64> = bed.fixed_view::<3, 3>(0, 0).into();
    let coupling: Matrix3<f64> = bed.fixed_view::<3, 3>(3, 0).into();
    let turning: Matrix3<f64> = bed.fixed_view::<3, 3>(3, 3).into();
    let free = sliding.pseudo_inverse(1e-9 * sliding.norm()).ok()?;
    let condensed = turning - coupling * free * coupling.transpose();
    let axes = crate::spatial::rotation_with_z(&up);
    let local = axes.transpose() * condensed * axes;
    let block = Matrix2::new(local[(0, 0)], local[(0, 1)], local[(1, 0)], local[(1, 1)]);
    let least = SymmetricEigen::new((block + block.transpose()) * 0.5).eigenvalues.min();
    let height = up.dot(&(scene.dynamics.center_of_mass - center));
    Some(Rocking { bed: least, weight: scene.dynamics.mass * gravity * height })
}
