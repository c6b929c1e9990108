//! The bonded law by numerical integration, for certificates: it shares no formula and no polygon
//! moment with the closed form.
//!
//! The polygon is cut into a fan of triangles. On each, the unit square (u, v) is folded onto the triangle by
//! `r = a + u ((b - a) + v (c - b))` with area element `2 |triangle| u`, and a three-point Gauss-Legendre
//! rule is used in u and in v. That is exact up to total degree 4; lever arm times traction has degree 2.

use super::{Material, SoleMotion};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Pose, Twist, Vec3, Vec6, Wrench, head, tail};

/// Nodes on the unit interval are `1/2 - h, 1/2, 1/2 + h` with `h = sqrt(3/5)/2`, weights 5/18, 8/18, 5/18.
const WEIGHTS: [f64; 3] = [5.0 / 18.0, 8.0 / 18.0, 5.0 / 18.0];

/// As [`super::law::bonded_wrench`], with the same arguments.
pub fn bonded_wrench_by_quadrature(
    shape: &SoleShape,
    material: &Material,
    normal: &Vec3,
    rest_pose: &Pose,
    rest_twist: &Twist,
    motion: &SoleMotion,
) -> Wrench {
    over_the_sole(shape, &mut |point, weight, total| {
        let arm = motion.pose.rotation * point;
        let traction = traction_at(point, material, normal, rest_pose, rest_twist, motion) * weight;
        total.force += traction;
        total.moment += arm.cross(&traction);
    })
}

/// Derivative of the wrench when the sole pose moves along `pose_change` (translation of the origin,
/// left rotation vector) and its twist along `twist_change` (linear, angular): the integral of the
/// integrand's exact derivative.
/// ```text
/// dp = u + phi x y,   dp_dot = du + dw x y + w x (phi x y),   y = R r
/// drho = -K dp - B dp_dot,   dm = int (phi x y) x rho + y x drho
/// ```
pub fn directional_derivative(
    shape: &SoleShape,
    material: &Material,
    normal: &Vec3,
    rest_pose: &Pose,
    rest_twist: &Twist,
    motion: &SoleMotion,
    pose_change: &Vec6,
    twist_change: &Vec6,
) -> Wrench {
    let (moving, turning) = (head(pose_change), tail(pose_change));
    let (faster, spinning) = (head(twist_change), tail(twist_change));
    over_the_sole(shape, &mut |point, weight, total| {
        let arm = motion.pose.rotation * point;
        let arm_change = turning.cross(&arm);
        let velocity_change =
            faster + spinning.cross(&arm) + motion.twist.angular.cross(&arm_change);
        let traction = traction_at(point, material, normal, rest_pose, rest_twist, motion);
        let change = -resist(
            material.normal_stiffness,
            material.tangential_stiffness,
            normal,
            &(moving + arm_change),
        ) - resist(
            material.normal_damping,
            material.tangential_damping,
            normal,
            &velocity_change,
        );
        total.force += change * weight;
        total.moment += (arm_change.cross(&traction) + arm.cross(&change)) * weight;
    })
}

/// `rho = K (p0 - p) - B (p_dot - p0_dot)` at the sole point `point` (sole axes).
fn traction_at(
    point: &Vec3,
    material: &Material,
    normal: &Vec3,
    rest_pose: &Pose,
    rest_twist: &Twist,
    motion: &SoleMotion,
) -> Vec3 {
    let (arm, rest_arm) = (motion.pose.rotation * point, rest_pose.rotation * point);
    // Origins and arms apart: two world positions that agree to many digits are never subtracted as sums.
    let stretch = (rest_pose.translation - motion.pose.translation) + (rest_arm - arm);
    let slip = (motion.twist.linear - rest_twist.linear)
        + motion.twist.angular.cross(&arm)
        - rest_twist.angular.cross(&rest_arm);
    resist(material.normal_stiffness, material.tangential_stiffness, normal, &stretch)
        - resist(material.normal_damping, material.tangential_damping, normal, &slip)
}

/// A vector weighed along and across the normal.
fn resist(along: f64, across: f64, normal: &Vec3, vector: &Vec3) -> Vec3 {
    let lift = normal * normal.dot(vector);
    lift * along + (vector - lift) * across
}

/// Sums an integrand over the sole: called with the point (sole axes), its weight (m^2; 1 for a
/// point sole, whose moments are zero because its arm is) and the running total.
fn over_the_sole(
    shape: &SoleShape,
    integrand: &mut dyn FnMut(&Vec3, f64, &mut Wrench),
) -> Wrench {
    let mut total = Wrench::zero();
    let polygon = match shape {
        SoleShape::Point => {
            integrand(&Vec3::zeros(), 1.0, &mut total);
            return total;
        }
        SoleShape::Polygon(polygon) => polygon,
    };
    let half = 0.6_f64.sqrt() / 2.0;
    let nodes = [0.5 - half, 0.5, 0.5 + half];
    let Some((first, others)) = polygon.vertices().split_first() else {
        return total;
    };
    let a = Vec3::new(first[0], first[1], 0.0);
    for pair in others.windows(2) {
        let [near, far] = pair else { continue };
        let (ab, ac) = (
            Vec3::new(near[0], near[1], 0.0) - a,
            Vec3::new(far[0], far[1], 0.0) - a,
        );
        let doubled_area = ab.x * ac.y - ab.y * ac.x;
        for (u, u_weight) in nodes.iter().zip(WEIGHTS) {
            for (v, v_weight) in nodes.iter().zip(WEIGHTS) {
                let point = a + (ab + (ac - ab) * *v) * *u;
                integrand(&point, doubled_area * u * u_weight * v_weight, &mut total);
            }
        }
    }
    total
}
