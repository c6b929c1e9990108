//! The `wrench` set, an approximation that needs no vertex forces:
//! - `|f_t| <= mu f_n` about the ground normal n;
//! - the centre of pressure inside the polygon, sole axes. With the inward unit normal e of an edge through
//!   q and p = (-m_y, m_x)/f_z, the condition e . (p - q) >= 0 times f_z reads
//!   `-e_x m_y + e_y m_x - (e . q) f_z >= 0`; all edges together imply f_z >= 0;
//! - `|m_n| <= mu_z f_n`, m_n = n . (m - R c x f) the moment about the ground normal through the polygon's
//!   centroid c, mu_z in metres.
//!
//! A point sole has the force cone alone.

use super::{Block, ConeForm, Row, accept_coefficient, center_of_pressure, force_cone};
use crate::conic::Cone;
use crate::contact::ContactError;
use crate::contact::moments::SoleMoments;
use crate::spatial::polygon::{Polygon, SoleShape};
use crate::spatial::{Mat3, Vec3, Wrench};

/// What the set asks for.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct WrenchSetTerms {
    /// Friction coefficient.
    pub mu: f64,
    /// Yaw friction radius (m); nothing leaves the yaw moment free. Unused on a point sole.
    pub mu_z: Option<f64>,
    /// How the force cone is stated.
    pub form: ConeForm,
}

/// The set as data: blocks over the wrench (world axes, about the sole origin).
#[derive(Debug, Clone, PartialEq)]
pub struct WrenchSet {
    /// `friction` blocks first, then `center of pressure` (one row per edge), then `yaw friction`.
    pub blocks: Vec<Block<6>>,
}

/// How far a wrench is inside the set, in physical units; negative outside.
#[derive(Debug, Clone, PartialEq)]
pub struct WrenchMargins {
    /// `mu f_n - |f_t|` (N), of the exact cone.
    pub friction: f64,
    /// Distance of the centre of pressure from each edge, inward (m), edge i from vertex i to the next; nothing
    /// on a point sole or where the sole is not pressed.
    pub edges: Option<Vec<f64>>,
    /// `mu_z f_n - |m_n|` (N m), if asked for.
    pub yaw: Option<f64>,
}

/// The wrench set of a sole turned by `rotation` on ground with this unit normal. `reference_force` (N) is the
/// natural size of the sole's force; moments get it times the sole's radius of gyration.
///
/// # Errors
/// `FrictionCoefficient`, `FacetCount`.
pub fn wrench_set(
    shape: &SoleShape,
    rotation: &Mat3,
    normal: &Vec3,
    terms: &WrenchSetTerms,
    reference_force: f64,
) -> Result<WrenchSet, ContactError> {
    let cone = force_cone(normal, rotation, terms.mu, terms.form, reference_force)?;
    let mut blocks: Vec<Block<6>> = cone.into_iter().map(over_wrench).collect();
    let SoleShape::Polygon(polygon) = shape else {
        return Ok(WrenchSet { blocks });
    };
    let scale = reference_force * SoleMoments::of(shape).radius();
    let rows: Vec<Row<6>> = edges(polygon)
        .enumerate()
        .map(|(i, (inward, level))| {
            let (x, y, z) = (rotation.column(0), rotation.column(1), rotation.column(2));
            row(&(z * -level), &(x * inward[1] - y * inward[0]), format!("edge {}", i + 1), scale)
        })
        .collect();
    blocks.push(Block { cone: Cone::Nonnegative(rows.len()), rows });
    if let Some(mu_z) = terms.mu_z {
        accept_coefficient("the yaw friction radius", mu_z)?;
        let lever = normal.cross(&(rotation * centroid(polygon)));
        blocks.push(Block {
            cone: Cone::Nonnegative(2),
            rows: vec![
                row(&(normal * mu_z + lever), &-normal, "yaw upper".into(), scale),
                row(&(normal * mu_z - lever), normal, "yaw lower".into(), scale),
            ],
        });
    }
    Ok(WrenchSet { blocks })
}

/// Margins of a wrench (world axes, about the sole origin) in the wrench set.
pub fn margins(
    shape: &SoleShape,
    rotation: &Mat3,
    normal: &Vec3,
    terms: &WrenchSetTerms,
    wrench: &Wrench,
) -> WrenchMargins {
    let pressing = normal.dot(&wrench.force);
    let friction = terms.mu * pressing - (wrench.force - normal * pressing).norm();
    let SoleShape::Polygon(polygon) = shape else {
        return WrenchMargins { friction, edges: None, yaw: None };
    };
    let center = center_of_pressure(&wrench.rotated(&rotation.transpose()));
    let distances = center.map(|p| {
        edges(polygon).map(|(e, level)| e[0] * p[0] + e[1] * p[1] - level).collect()
    });
    let about_centroid = wrench.moment - (rotation * centroid(polygon)).cross(&wrench.force);
    let yaw = terms.mu_z.map(|mu_z| mu_z * pressing - normal.dot(&about_centroid).abs());
    WrenchMargins { friction, edges: distances, yaw }
}

/// Inward unit normal e and level e . q of every edge.
fn edges(polygon: &Polygon) -> impl Iterator<Item = ([f64; 2], f64)> + '_ {
    let vertices = polygon.vertices();
    let following = vertices.iter().cycle().skip(1);
    vertices.iter().zip(following).map(|(a, b)| {
        let (dx, dy) = (b[0] - a[0], b[1] - a[1]);
        let length = dx.hypot(dy);
        let inward = [-dy / length, dx / length];
        (inward, inward[0] * a[0] + inward[1] * a[1])
    })
}

fn centroid(polygon: &Polygon) -> Vec3 {
    let m = polygon.moments();
    Vec3::new(m.first[0] / m.area, m.first[1] / m.area, 0.0)
}

fn row(force: &Vec3, moment: &Vec3, part: String, scale: f64) -> Row<6> {
    Row {
        coefficients: [force.x, force.y, force.z, moment.x, moment.y, moment.z],
        part,
        unit: "N m",
        scale,
    }
}

/// A block over the force as a block over the wrench.
fn over_wrench(block: Block<3>) -> Block<6> {
    let widen = |r: Row<3>| {
        let [x, y, z] = r.coefficients;
        Row { coefficients: [x, y, z, 0.0, 0.0, 0.0], part: r.part, unit: r.unit, scale: r.scale }
    };
    Block { cone: block.cone, rows: block.rows.into_iter().map(widen).collect() }
}
