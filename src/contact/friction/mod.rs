//! Friction sets on the tick-end wrench, one file each, and the figures read off a given wrench.
//!
//! A set is plain data: blocks of rows with `s = coefficients . x` in the block's cone, x the wrench
//! (or one vertex force) in WORLD axes about the sole origin. All sets are cones: no constant terms.
//! Friction and the normal force refer to the ground normal, the centre of pressure to sole axes.

pub mod vertex;
pub mod wrench_set;

use super::ContactError;
use crate::conic::Cone;
use crate::spatial::{Mat3, Vec3, Wrench};

/// Fewest facets of a pyramid.
pub const MIN_FACETS: usize = 3;
/// Most facets of a pyramid: beyond it the exact cone is the better form.
pub const MAX_FACETS: usize = 64;

/// Which way a pyramid errs.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum PyramidSide {
    /// Inside the cone, its edges on it: no force that the cone forbids. Facets at `mu cos(pi/N)`.
    #[default]
    Inscribed,
    /// Around the cone, its facets touching it: with 4 facets `|f_x| <= mu f_n` and `|f_y| <= mu f_n`.
    Circumscribed,
}

/// The form in which `|f_t| <= mu f_n` is stated.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum ConeForm {
    /// One second-order cone of three rows `(mu f_n, f_t1, f_t2)`.
    #[default]
    Exact,
    /// One row per facet, `mu' f_n - u_j . f_t >= 0`, with u_j at the angles `2 pi j / N` from the sole's x axis
    /// projected onto the ground plane.
    Pyramid {
        /// N, from [`MIN_FACETS`] to [`MAX_FACETS`].
        facets: usize,
        /// Inside or around the cone.
        side: PyramidSide,
    },
}

/// One row over N numbers.
#[derive(Debug, Clone, PartialEq)]
pub struct Row<const N: usize> {
    /// World axes; for a wrench force first.
    pub coefficients: [f64; N],
    /// What the row is, within its set.
    pub part: String,
    /// SI unit of the row's value.
    pub unit: &'static str,
    /// Natural size of the row's value, positive.
    pub scale: f64,
}

/// Rows that lie in one cone together; there are as many as the cone's dimension.
#[derive(Debug, Clone, PartialEq)]
pub struct Block<const N: usize> {
    /// Second-order or nonnegative.
    pub cone: Cone,
    /// In the cone's order.
    pub rows: Vec<Row<N>>,
}

impl<const N: usize> Block<N> {
    /// `s` at x.
    pub fn values(&self, x: &[f64; N]) -> Vec<f64> {
        let dot = |row: &Row<N>| row.coefficients.iter().zip(x).map(|(c, v)| c * v).sum();
        self.rows.iter().map(dot).collect()
    }

    /// How far x is inside: the least row, or `s0 - |s1..|`, in the rows' unit.
    pub fn margin(&self, x: &[f64; N]) -> f64 {
        let s = self.values(x);
        match (self.cone, s.split_first()) {
            (Cone::SecondOrder(_), Some((head, tail))) => {
                head - tail.iter().map(|v| v * v).sum::<f64>().sqrt()
            }
            (Cone::Zero(_), _) => -s.iter().fold(0.0, |worst: f64, v| worst.max(v.abs())),
            _ => s.into_iter().fold(f64::INFINITY, f64::min),
        }
    }
}

/// Axes of the ground plane: the sole's x axis projected onto it, and the normal times that. (A sole on
/// edge, its x axis along the normal, lends its y axis.)
pub fn ground_axes(normal: &Vec3, rotation: &Mat3) -> (Vec3, Vec3) {
    let project = |axis: Vec3| axis - normal * normal.dot(&axis);
    let x = project(rotation.column(0).into());
    let first = if x.norm() > 1e-6 {
        x.normalize()
    } else {
        project(rotation.column(1).into()).normalize()
    };
    (first, normal.cross(&first))
}

/// The force cone `|f_t| <= mu f_n` as blocks over a force in world axes. With mu = 0 the cone alone would not
/// say on which side the force lies, so a row `f_n >= 0` is added.
///
/// `reference_force` (N) is the natural size of the rows.
pub(super) fn force_cone(
    normal: &Vec3,
    rotation: &Mat3,
    mu: f64,
    form: ConeForm,
    reference_force: f64,
) -> Result<Vec<Block<3>>, ContactError> {
    accept_coefficient("the friction coefficient", mu)?;
    let (first, second) = ground_axes(normal, rotation);
    let row = |v: Vec3, part: String| Row {
        coefficients: [v.x, v.y, v.z],
        part,
        unit: "N",
        scale: reference_force,
    };
    let mut blocks = Vec::new();
    match form {
        ConeForm::Exact => blocks.push(Block {
            cone: Cone::SecondOrder(3),
            rows: vec![
                row(normal * mu, "friction".into()),
                row(first, "tangential 1".into()),
                row(second, "tangential 2".into()),
            ],
        }),
        ConeForm::Pyramid { facets, side } => {
            if !(MIN_FACETS..=MAX_FACETS).contains(&facets) {
                return Err(ContactError::FacetCount { facets, least: MIN_FACETS, most: MAX_FACETS });
            }
            let height = mu * match side {
                PyramidSide::Inscribed => (std::f64::consts::PI / facets as f64).cos(),
                PyramidSide::Circumscribed => 1.0,
            };
            let facet = |j: usize| {
                let (sine, cosine) = facet_direction(j, facets);
                row(normal * height - first * cosine - second * sine, format!("facet {}", j + 1))
            };
            blocks.push(Block {
                cone: Cone::Nonnegative(facets),
                rows: (0..facets).map(facet).collect(),
            });
        }
    }
    if mu == 0.0 {
        blocks.push(Block {
            cone: Cone::Nonnegative(1),
            rows: vec![row(*normal, "pressing".into())],
        });
    }
    Ok(blocks)
}

/// Sine and cosine of `2 pi j / N`, exact at quarter turns so that four facets have no cross terms.
fn facet_direction(j: usize, facets: usize) -> (f64, f64) {
    if (4 * j).is_multiple_of(facets) {
        match 4 * j / facets {
            0 => (0.0, 1.0),
            1 => (1.0, 0.0),
            2 => (0.0, -1.0),
            _ => (-1.0, 0.0),
        }
    } else {
        (std::f64::consts::TAU * j as f64 / facets as f64).sin_cos()
    }
}

pub(super) fn accept_coefficient(quantity: &'static str, value: f64) -> Result<(), ContactError> {
    if value >= 0.0 && value.is_finite() {
        Ok(())
    } else {
        Err(ContactError::FrictionCoefficient { quantity, value })
    }
}

/// Centre of pressure `(-m_y, m_x) / f_z` (m, sole axes) of a wrench in SOLE axes about the sole
/// origin; nothing where the sole is not pressed (f_z not above rounding beside the force).
pub fn center_of_pressure(wrench_in_sole_axes: &Wrench) -> Option<[f64; 2]> {
    let (force, moment) = (wrench_in_sole_axes.force, wrench_in_sole_axes.moment);
    if force.z.is_nan() || force.z <= 1e-12 * force.norm() {
        return None;
    }
    let point = [-moment.y / force.z, moment.x / force.z];
    point.iter().all(|c| c.is_finite()).then_some(point)
}

/// Share of the friction used, `|f_t| / (mu f_n)`, about the ground normal; nothing where
/// `mu f_n` is not positive.
pub fn friction_use(force: &Vec3, normal: &Vec3, mu: f64) -> Option<f64> {
    let pressing = normal.dot(force);
    let share = (force - normal * pressing).norm() / (mu * pressing);
    (mu * pressing > 0.0 && share.is_finite()).then_some(share)
}
