//! Figures about the ground for the answer.

use super::Material;
use super::law::bonded::{blocks, rotational_bed};
use super::moments::{SoleMoments, material_matrices};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Mat6, Vec3, skew};

/// Stiffness of the unloaded bed at rest, about the sole origin, world axes (N/m, N, N m/m, N m/rad):
/// `S` of the bonded law at zero deflection and velocity, symmetric and positive semidefinite. On level ground its
/// rotational block is `k_n int y^2`, `k_n int x^2`, `k_t int (x^2 + y^2)` about the sole's axes.
pub fn bed_stiffness(shape: &SoleShape, material: &Material, normal: &Vec3, rotation: &Mat3) -> Mat6 {
    let sole = SoleMoments::of(shape);
    let (k, _) = material_matrices(material, normal);
    let arm = skew(&(rotation * sole.first));
    let q = rotation * sole.second * rotation.transpose();
    blocks(&(k * sole.area), &(-k * arm), &(arm * k), &rotational_bed(&q, &k))
}

/// The bed's damping in the same form (N s/m and so on).
pub fn bed_damping(shape: &SoleShape, material: &Material, normal: &Vec3, rotation: &Mat3) -> Mat6 {
    let dampers = Material {
        normal_stiffness: material.normal_damping,
        tangential_stiffness: material.tangential_damping,
        ..*material
    };
    bed_stiffness(shape, &dampers, normal, rotation)
}
