//! The sole as the laws see it: area and moments in three dimensions.

use super::Material;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Vec3};

/// Area (m^2), `int r dA` (m^3) and `int r r' dA` (m^4) in sole axes about the sole origin.
///
/// A point sole is area one with no moments: the material's per-sole figures then act on the force
/// alone, and every rotational term vanishes by itself.
#[derive(Debug, Clone, Copy)]
pub(super) struct SoleMoments {
    pub area: f64,
    pub first: Vec3,
    pub second: Mat3,
}

impl SoleMoments {
    pub fn of(shape: &SoleShape) -> Self {
        match shape {
            SoleShape::Point => {
                SoleMoments { area: 1.0, first: Vec3::zeros(), second: Mat3::zeros() }
            }
            SoleShape::Polygon(polygon) => {
                let m = polygon.moments();
                let [xx, yy, xy] = m.second;
                SoleMoments {
                    area: m.area,
                    first: Vec3::new(m.first[0], m.first[1], 0.0),
                    second: Mat3::new(xx, xy, 0.0, xy, yy, 0.0, 0.0, 0.0, 0.0),
                }
            }
        }
    }

    /// `sqrt(int |r|^2 dA / A)`: the polar radius of gyration about the sole origin (m), by which moments
    /// are scaled; 1 m on a point sole, where no moment occurs.
    pub fn radius(&self) -> f64 {
        let square = self.second.trace() / self.area;
        if square > 0.0 { square.sqrt() } else { 1.0 }
    }
}

/// `x_t (I - n n') + x_n n n'`.
pub(super) fn directional(normal_value: f64, tangential_value: f64, normal: &Vec3) -> Mat3 {
    Mat3::identity() * tangential_value
        + normal * normal.transpose() * (normal_value - tangential_value)
}

/// K and B of a material on ground with this normal.
pub(super) fn material_matrices(material: &Material, normal: &Vec3) -> (Mat3, Mat3) {
    (
        directional(material.normal_stiffness, material.tangential_stiffness, normal),
        directional(material.normal_damping, material.tangential_damping, normal),
    )
}

/// `X[Q] = (Q23 - Q32, Q31 - Q13, Q12 - Q21)`: the sum of `a x b` when `Q` is the sum of `a b'`.
pub(super) fn cross_sum(q: &Mat3) -> Vec3 {
    Vec3::new(
        q[(1, 2)] - q[(2, 1)],
        q[(2, 0)] - q[(0, 2)],
        q[(0, 1)] - q[(1, 0)],
    )
}
