//! Whether mass properties are those of a possible body.
//!
//! A body of mass m > 0 needs a rotational inertia about its centre of mass that is positive
//! definite, and principal moments a <= b <= c that obey the triangle inequality a + b >= c:
//! a + b - c = 2 int z^2 dm along the axis of c, which cannot be negative.

use super::description::{InertialPart, LinkPart};
use super::error::{Fault, ModelError};
use super::xml::MAX_MAGNITUDE;
use crate::spatial::{Inertia, Mat3, Vec3};

/// What rounding to six significant digits may take from a + b - c, relative to c: three numbers,
/// each off by at most half a unit in the sixth digit, 5e-6 of itself at worst.
const TRIANGLE_TOLERANCE: f64 = 1e-5;

/// Below this share of the largest principal moment the smallest one counts as zero.
const DEFINITE_TOLERANCE: f64 = 1e-12;

/// Relative difference across the diagonal that rounding may leave.
const SYMMETRY_TOLERANCE: f64 = 1e-9;

/// Most sweeps of the eigenvalue iteration; three or four suffice at this size.
const SWEEPS: usize = 32;

/// Inertia of a link in its own axes, checked.
pub(super) fn link_inertia(link: &LinkPart) -> Result<Inertia, ModelError> {
    let Some(inertial) = &link.inertial else { return Ok(Inertia::zero()) };
    let inertia = as_matrix(inertial);
    check(inertial.mass, &inertia)
        .map_err(|reason| link.error_at(inertial.place, Fault::Inertia(reason)))?;
    let own = Inertia { mass: inertial.mass, center: Vec3::zeros(), about_center: inertia };
    Ok(own.placed(&inertial.origin.pose()))
}

fn as_matrix(inertial: &InertialPart) -> Mat3 {
    let [xx, xy, xz, yy, yz, zz] = inertial.moments;
    Mat3::new(xx, xy, xz, xy, yy, yz, xz, yz, zz)
}

/// Says why these cannot be the mass (kg) and inertia (kg m^2, about the centre) of a body.
pub(super) fn check(mass: f64, inertia: &Mat3) -> Result<(), String> {
    if !inertia.iter().all(|entry| entry.abs() <= MAX_MAGNITUDE) {
        return Err("expected finite moments of at most 1e9 kg m^2".to_string());
    }
    let skewness = (inertia - inertia.transpose()).amax();
    if skewness > SYMMETRY_TOLERANCE * inertia.amax() {
        return Err(format!("expected a symmetric inertia, got a difference of {skewness:e}"));
    }
    let zero = inertia.iter().all(|entry| *entry == 0.0);
    if mass == 0.0 {
        return if zero {
            Ok(())
        } else {
            Err("the mass is 0, so expected an inertia of 0 as well".to_string())
        };
    }
    if zero {
        return Err(format!(
            "the mass is {mass} kg, so expected a positive definite inertia, got 0"
        ));
    }
    let [a, b, c] = principal_moments(inertia);
    let shown = format!("principal moments {a:.6e}, {b:.6e}, {c:.6e} kg m^2");
    if a <= DEFINITE_TOLERANCE * c {
        return Err(format!("expected it positive definite, got {shown}"));
    }
    if a + b < c * (1.0 - TRIANGLE_TOLERANCE) {
        return Err(format!(
            "expected no principal moment larger than the sum of the other two, got {shown}"
        ));
    }
    Ok(())
}

/// Eigenvalues of a symmetric, finite matrix, ascending, by Jacobi rotations.
fn principal_moments(inertia: &Mat3) -> [f64; 3] {
    let scale = inertia.amax();
    if scale == 0.0 {
        return [0.0; 3];
    }
    let mut m = inertia / scale;
    for _ in 0..SWEEPS {
        for (p, q) in [(0, 1), (0, 2), (1, 2)] {
            if m[(p, q)] == 0.0 {
                continue;
            }
            let theta = 0.5 * (2.0 * m[(p, q)]).atan2(m[(q, q)] - m[(p, p)]);
            let (s, c) = theta.sin_cos();
            let mut turn = Mat3::identity();
            turn[(p, p)] = c;
            turn[(q, q)] = c;
            turn[(p, q)] = s;
            turn[(q, p)] = -s;
            m = turn.transpose() * m * turn;
            m[(p, q)] = 0.0;
            m[(q, p)] = 0.0;
        }
    }
    let mut values = [m[(0, 0)] * scale, m[(1, 1)] * scale, m[(2, 2)] * scale];
    values.sort_by(f64::total_cmp);
    values
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spatial::rotation_from_rpy;

    // Derived: a diagonal matrix turned by a rotation keeps its eigenvalues.
    #[test]
    fn principal_moments_survive_a_rotation() {
        for (roll, pitch, yaw) in [(0.3, -1.1, 2.0), (0.0, 0.0, 0.7), (1.5, 1.5, 1.5)] {
            let r = rotation_from_rpy(roll, pitch, yaw);
            let turned = r * Mat3::from_diagonal(&Vec3::new(0.2, 0.03, 0.19)) * r.transpose();
            let found = principal_moments(&turned);
            for (got, want) in found.iter().zip([0.03, 0.19, 0.2]) {
                assert!((got - want).abs() < 1e-15, "{found:?}");
            }
        }
    }
}
