//! The bonded law as a linear regression: `wrench = sum of columns times parameters`.
//!
//! In sole axes (R' applied to everything), with d = R'(o0 - o), E = R'R0 - I, v and w the sole's velocities, n the normal,
//! A, S1, S2 the sole's area and moments, and a projector N = n n' or T = I - n n' (their sum for isotropic ground):
//! ```text
//! stiffness column   f = N (A d + E S1),           m = S1 x (N d) + X[S2 (N E)']
//! damping column     f = -N (A v + w x S1),        m = -S1 x (N v) - X[S2 (N [w]x)'],   X[Q] = (Q23 - Q32, Q31 - Q13, Q12 - Q21)
//! ```
//! An unknown rest pose adds to d and E: height `d += n z0`, offset `d += t x0`, tilt to first order `E += [theta]x R'R0`,
//! each multiplied by a stiffness. A tilt on ground that is not isotropic acts on the normal traction alone; what it
//! does to the tangential one is of second order in the tilt of the sole.

use super::parameters::Parameter;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Mat6, Pose, Twist, Vec3, Vec6, rotation_with_z, skew, stack};

/// A sole's area and moments in its own axes; a point sole has area one and no moments.
#[derive(Debug, Clone, Copy)]
pub struct Sole {
    /// Area (m^2).
    pub area: f64,
    /// `int r dA` (m^3).
    pub first: Vec3,
    /// `int r r' dA` (m^4).
    pub second: Mat3,
    /// A point sole carries no moment.
    pub point: bool,
}

impl Sole {
    /// Of a shape.
    pub fn of(shape: &SoleShape) -> Self {
        match shape {
            SoleShape::Point => Sole { area: 1.0, first: Vec3::zeros(), second: Mat3::zeros(), point: true },
            SoleShape::Polygon(polygon) => {
                let m = polygon.moments();
                let [xx, yy, xy] = m.second;
                Sole {
                    area: m.area,
                    first: Vec3::new(m.first[0], m.first[1], 0.0),
                    second: Mat3::new(xx, xy, 0.0, xy, yy, 0.0, 0.0, 0.0, 0.0),
                    point: false,
                }
            }
        }
    }

    /// Polar radius of gyration (m), 1 m on a point sole: moments count as forces at this distance.
    pub fn radius(&self) -> f64 {
        if self.point { 1.0 } else { (self.second.trace() / self.area).sqrt() }
    }

    /// Rows that a sample has: 6, or 3 on a point sole.
    pub fn rows(&self) -> usize {
        if self.point { 3 } else { 6 }
    }

    /// The wrench of a unit bed in the directions of `projector`, displaced by `d` and turned by `e`.
    fn bed(&self, projector: &Mat3, d: &Vec3, e: &Mat3) -> Vec6 {
        let force = projector * (d * self.area + e * self.first);
        if self.point {
            return stack(&force, &Vec3::zeros());
        }
        let q = self.second * (projector * e).transpose();
        let turned = Vec3::new(q[(1, 2)] - q[(2, 1)], q[(2, 0)] - q[(0, 2)], q[(0, 1)] - q[(1, 0)]);
        stack(&force, &(self.first.cross(&(projector * d)) + turned))
    }
}

/// What a sample says about the sole, in the world.
#[derive(Debug, Clone, Copy)]
pub struct Motion {
    /// Sole frame.
    pub pose: Pose,
    /// Its velocity, at the sole-frame origin, world axes.
    pub twist: Twist,
}

/// The columns of `parameters` at this motion, sole axes: `columns[k]` is the wrench of a unit of parameter k.
///
/// `rest` is the anchor (the rest pose but for what is unknown of it), `normal` the unit ground normal, both in the
/// world; `sensor` carries a wrench from sensor axes and origin to the sole's.
pub fn columns(
    sole: &Sole,
    parameters: &[Parameter],
    normal: &Vec3,
    rest: &Pose,
    sensor: &Mat6,
    motion: &Motion,
    columns: &mut [Vec6],
) {
    let back = motion.pose.rotation.transpose();
    let n = back * normal;
    let along = n * n.transpose();
    let across = Mat3::identity() - along;
    let both = Mat3::identity();
    let d = back * (rest.translation - motion.pose.translation);
    let turned = back * rest.rotation;
    let e = turned - both;
    let v = back * motion.twist.linear;
    let w = skew(&(back * motion.twist.angular));
    let isotropic = parameters.first() == Some(&Parameter::Stiffness);
    let plane = |axis: usize| back * rotation_with_z(normal).column(axis);
    for (column, parameter) in columns.iter_mut().zip(parameters) {
        *column = match parameter {
            Parameter::Stiffness => sole.bed(&both, &d, &e),
            Parameter::NormalStiffness => sole.bed(&along, &d, &e),
            Parameter::TangentialStiffness => sole.bed(&across, &d, &e),
            Parameter::Damping => -sole.bed(&both, &v, &w),
            Parameter::NormalDamping => -sole.bed(&along, &v, &w),
            Parameter::TangentialDamping => -sole.bed(&across, &v, &w),
            Parameter::Height => sole.bed(&along, &n, &Mat3::zeros()),
            Parameter::Offset(axis) => sole.bed(&across, &plane(*axis), &Mat3::zeros()),
            Parameter::Tilt(axis) => {
                let projector = if isotropic { both } else { along };
                sole.bed(&projector, &Vec3::zeros(), &(skew(&plane(*axis)) * turned))
            }
            Parameter::ForceBias(axis) => sensor.column(*axis).into_owned(),
            Parameter::MomentBias(axis) => sensor.column(3 + axis).into_owned(),
        };
    }
}
