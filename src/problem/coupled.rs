//! The rows that the rule `held` couples: soft soles and joints with viscous friction, over accelerations and wrenches.
//!
//! `contact::held` wants to know how accelerations answer wrenches. With `M = L L'` and `B_r = J_r L^-T` of the rigid soles, whose
//! accelerations are prescribed, the inverse of M under their constraint is `N = L^-T (I - V V') L^-1`, the columns of V an
//! orthonormal basis of the rows of B_r. Directions that B_r has twice (two rigid soles that fight) are found by its singular values
//! and counted once. The mobility is `W = J N J' = C C'`, `C = J L^-T (I - V V')`, with J of the soft soles and a unit row per damped joint.

use nalgebra::{DMatrix, DVector};

use super::question::Question;
use super::scene::{SceneError, SoleScene};
use crate::contact::held::{CoupledMap, Damper, HeldSole, coupled_map};
use crate::dynamics::Workspace;
use crate::model::Model;
use crate::spatial::polygon::SoleShape;

/// Singular values below this share of the largest belong to constraints the rigid soles state twice.
const STATED_TWICE: f64 = 1e-11;
/// Sweeps of the singular value decomposition.
const MOST_SWEEPS: usize = 10_000;

/// The coupled equality over nu_dot (nv) and the tick-end wrenches of the soft soles (n, stacked in contact order):
/// ```text
/// contact_acceleration nu_dot + contact_wrench w_plus = contact_right
/// w_bar = mean_start + mean_acceleration nu_dot + mean_wrench w_plus                (stacked like w_plus)
/// force = force_start + force_acceleration nu_dot + force_wrench w_plus             (nv)
/// M nu_dot + h + friction - S' tau - force - sum over rigid soles J' w = external
/// ```
/// `force` holds `J' w_bar` of the soft soles and what the tick changes of the joints' average friction.
#[derive(Debug, Clone, PartialEq)]
pub struct CoupledRows {
    /// n x nv.
    pub contact_acceleration: DMatrix<f64>,
    /// n x n.
    pub contact_wrench: DMatrix<f64>,
    /// n.
    pub contact_right: DVector<f64>,
    /// n.
    pub mean_start: DVector<f64>,
    /// n x nv.
    pub mean_acceleration: DMatrix<f64>,
    /// n x n.
    pub mean_wrench: DMatrix<f64>,
    /// nv.
    pub force_start: DVector<f64>,
    /// nv x nv.
    pub force_acceleration: DMatrix<f64>,
    /// nv x n.
    pub force_wrench: DMatrix<f64>,
}

impl CoupledRows {
    /// The rows of `question`'s soft soles and damped joints. None where there are neither.
    pub fn new(question: &Question, ws: &Workspace, soles: &[SoleScene]) -> Result<Option<CoupledRows>, SceneError> {
        let model = &*question.model;
        let damped = damped(model);
        let held: Vec<HeldSole> = question
            .contacts
            .iter()
            .zip(soles)
            .filter(|(_, sole)| !sole.map.rigid)
            .map(|(contact, sole)| HeldSole { map: &sole.map, radius: radius(&model.soles[contact.sole].shape) })
            .collect();
        if held.is_empty() && damped.is_empty() {
            return Ok(None);
        }
        let dampers: Vec<Damper> = damped
            .iter()
            .map(|&row| Damper {
                damping: model.joints[row - model.joint_offset()].viscous_friction,
                inertia: ws.mass_matrix[(row, row)],
            })
            .collect();
        let (jacobian, bias) = coordinates(soles, &damped, model.velocities());
        let mobility = mobility(&ws.mass_matrix, soles, &jacobian).ok_or(SceneError::NoMobility)?;
        let map = coupled_map(&held, &dampers, &mobility, question.tick.length, ws.mass).map_err(SceneError::Coupled)?;
        Ok(Some(CoupledRows::over(&map, &jacobian, &bias)))
    }

    /// From rows on the coordinates' accelerations to rows on nu_dot: `a = J nu_dot + J_dot nu`.
    fn over(map: &CoupledMap, jacobian: &DMatrix<f64>, bias: &DVector<f64>) -> CoupledRows {
        let n = map.mean_start.len();
        let mean_acceleration = &map.mean_acceleration * jacobian;
        let mean_start = &map.mean_start + &map.mean_acceleration * bias;
        // The unit rows of damped joints carry their forces to their own row.
        let (sole, damper) = (jacobian.rows(0, n).transpose(), jacobian.rows(n, jacobian.nrows() - n).transpose());
        CoupledRows {
            contact_acceleration: &map.contact_acceleration * jacobian,
            contact_wrench: map.contact_wrench.clone(),
            contact_right: &map.contact_right - &map.contact_acceleration * bias,
            force_acceleration: &sole * &mean_acceleration + &damper * (&map.damper_acceleration * jacobian),
            force_wrench: &sole * &map.mean_wrench + &damper * &map.damper_wrench,
            force_start: &sole * &mean_start + &damper * (&map.damper_start + &map.damper_acceleration * bias),
            mean_acceleration,
            mean_wrench: map.mean_wrench.clone(),
            mean_start,
        }
    }

    /// Average wrenches of the soft soles, stacked.
    pub fn mean(&self, acceleration: &DVector<f64>, ends: &DVector<f64>) -> DVector<f64> {
        &self.mean_start + &self.mean_acceleration * acceleration + &self.mean_wrench * ends
    }
}

/// Rows of the generalised velocity that belong to joints with viscous friction.
fn damped(model: &Model) -> Vec<usize> {
    let offset = model.joint_offset();
    let joints = model.joints.iter().enumerate();
    joints.filter(|(_, joint)| joint.viscous_friction > 0.0).map(|(j, _)| offset + j).collect()
}

/// J and J_dot nu of all coordinates: soft soles, then damped joints.
fn coordinates(soles: &[SoleScene], damped: &[usize], nv: usize) -> (DMatrix<f64>, DVector<f64>) {
    let soft = stacked(soles, false, nv);
    let n = soft.nrows();
    let mut jacobian = DMatrix::zeros(n + damped.len(), nv);
    jacobian.rows_mut(0, n).copy_from(&soft);
    for (i, &row) in damped.iter().enumerate() {
        jacobian[(n + i, row)] = 1.0;
    }
    let mut bias = DVector::zeros(n + damped.len());
    let parts = soles.iter().filter(|s| !s.map.rigid).flat_map(|s| (0..s.map.dimension).map(|k| s.bias_acceleration[k]));
    for (entry, part) in bias.iter_mut().zip(parts) {
        *entry = part;
    }
    (jacobian, bias)
}

/// W of the coordinates with this Jacobian, rigid soles holding. None where the mass matrix has no Cholesky factor.
fn mobility(mass_matrix: &DMatrix<f64>, soles: &[SoleScene], jacobian: &DMatrix<f64>) -> Option<DMatrix<f64>> {
    let lower = mass_matrix.clone().cholesky()?.l();
    let free = lower.solve_lower_triangular(&jacobian.transpose())?;
    let rigid = stacked(soles, true, jacobian.ncols()).transpose();
    if rigid.is_empty() {
        return Some(free.transpose() * free);
    }
    let parts = lower.solve_lower_triangular(&rigid)?.try_svd(true, false, f64::EPSILON, MOST_SWEEPS)?;
    let mut basis = parts.u?;
    let cut = STATED_TWICE * parts.singular_values.max();
    for (mut column, value) in basis.column_iter_mut().zip(parts.singular_values.iter()) {
        if *value <= cut {
            column.fill(0.0);
        }
    }
    let free = &free - &basis * (basis.transpose() * &free);
    Some(free.transpose() * free)
}

/// The Jacobians of the soft or of the rigid soles, one under the other.
fn stacked(soles: &[SoleScene], rigid: bool, nv: usize) -> DMatrix<f64> {
    let chosen: Vec<&SoleScene> = soles.iter().filter(|s| s.map.rigid == rigid).collect();
    let mut out = DMatrix::zeros(chosen.iter().map(|s| s.map.dimension).sum(), nv);
    let mut at = 0;
    for sole in chosen {
        out.rows_mut(at, sole.map.dimension).copy_from(&sole.jacobian.rows(0, sole.map.dimension));
        at += sole.map.dimension;
    }
    out
}

/// Polar radius of gyration of a sole about its origin (m); 1 under a point.
fn radius(shape: &SoleShape) -> f64 {
    match shape {
        SoleShape::Point => 1.0,
        SoleShape::Polygon(polygon) => {
            let m = polygon.moments();
            ((m.second[0] + m.second[1]) / m.area).sqrt()
        }
    }
}
