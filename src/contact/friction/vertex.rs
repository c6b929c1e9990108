//! The `vertex` set: the wrench is a sum of vertex forces, each in its friction cone, so that SOME
//! pressure distribution gives it:
//! ```text
//! w = sum_i [ I ; [R r_i]x ] f_i,     |f_i,t| <= mu f_i,n.
//! ```
//! A point sole has one vertex, its origin.

use super::{Block, ConeForm, force_cone};
use crate::contact::ContactError;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat3, Vec3, Vec6, shift_wrench};
use nalgebra::SMatrix;

/// 6 x 3, from a force to a wrench.
pub type ForceMap = SMatrix<f64, 6, 3>;

/// One vertex of a sole.
#[derive(Debug, Clone, PartialEq)]
pub struct Vertex {
    /// `vertex 1` and so on, in the polygon's order.
    pub name: String,
    /// `R r_i`: from the sole origin, world axes (m).
    pub offset: Vec3,
    /// The wrench of the vertex force about the sole origin, world axes.
    pub map: ForceMap,
    /// The cone of the vertex force (N, world axes).
    pub blocks: Vec<Block<3>>,
}

/// The set as data.
#[derive(Debug, Clone, PartialEq)]
pub struct VertexSet {
    /// One entry per vertex.
    pub vertices: Vec<Vertex>,
}

/// The vertex set of a sole turned by `rotation` on ground with this unit normal.
///
/// `reference_force` (N): natural size of the sole's force, e.g. the robot's weight; the rows get an equal
/// share of it.
///
/// # Errors
/// `FrictionCoefficient`, `FacetCount`.
pub fn vertex_set(
    shape: &SoleShape,
    rotation: &Mat3,
    normal: &Vec3,
    mu: f64,
    form: ConeForm,
    reference_force: f64,
) -> Result<VertexSet, ContactError> {
    let places: Vec<Vec3> = match shape {
        SoleShape::Point => vec![Vec3::zeros()],
        SoleShape::Polygon(polygon) => {
            polygon.vertices().iter().map(|v| rotation * Vec3::new(v[0], v[1], 0.0)).collect()
        }
    };
    let blocks = force_cone(normal, rotation, mu, form, reference_force / places.len() as f64)?;
    let vertices = places
        .into_iter()
        .enumerate()
        .map(|(i, offset)| Vertex {
            name: format!("vertex {}", i + 1),
            offset,
            map: shift_wrench(&offset).fixed_columns::<3>(0).into_owned(),
            blocks: blocks.clone(),
        })
        .collect();
    Ok(VertexSet { vertices })
}

impl VertexSet {
    /// The wrench of given vertex forces (world axes); missing ones count as zero.
    pub fn wrench(&self, forces: &[Vec3]) -> Vec6 {
        self.vertices.iter().zip(forces).map(|(vertex, force)| vertex.map * force).sum()
    }
}
