//! Accelerations from forces, and motion from accelerations.

use nalgebra::DVector;

use super::DynamicsError;
use super::workspace::Workspace;
use crate::model::{BaseKind, Model, State};
use crate::spatial::{Pose, Twist, Vec3, exp_so3};

/// A pivot below this part of its diagonal entry counts as zero: rounding alone leaves about 1e-15.
const SMALLEST_PIVOT: f64 = 1e-13;
/// Longest prediction (s).
const LONGEST_PREDICTION: f64 = 1.0;
/// Longest step of a prediction (s); with [`LONGEST_PREDICTION`] it bounds the number of steps.
const PREDICTION_STEP: f64 = 1e-3;

/// Accelerations `nu_dot = M^-1 (f - h - friction)` (nv, world axes) under the generalised force `f`
/// (nv: joint torques and every `J' w`). Updates the workspace at `state`.
///
/// # Errors
/// [`DynamicsError::MassMatrixNotPositiveDefinite`] with the pivot that failed.
pub fn forward_dynamics(
    model: &Model,
    ws: &mut Workspace,
    state: &State,
    gravity: &Vec3,
    generalised_force: &DVector<f64>,
) -> Result<DVector<f64>, DynamicsError> {
    let mut out = DVector::zeros(model.velocities());
    forward_dynamics_into(model, ws, state, gravity, generalised_force, &mut out)?;
    Ok(out)
}

/// [`forward_dynamics`] into memory of the caller's; allocates nothing.
///
/// # Errors
/// As there.
pub fn forward_dynamics_into(
    model: &Model,
    ws: &mut Workspace,
    state: &State,
    gravity: &Vec3,
    generalised_force: &DVector<f64>,
    out: &mut DVector<f64>,
) -> Result<(), DynamicsError> {
    ws.update(model, state, gravity);
    ws.factorise(model)?;
    for i in 0..out.len() {
        out[i] = generalised_force[i] - ws.bias[i] - ws.friction[i];
    }
    ws.solve_factored(out);
    Ok(())
}

impl Workspace {
    /// Cholesky factor L of the present mass matrix, `M = L L'`, into memory kept for it.
    ///
    /// # Errors
    /// [`DynamicsError::MassMatrixNotPositiveDefinite`] with the pivot that failed.
    pub fn factorise(&mut self, model: &Model) -> Result<(), DynamicsError> {
        let n = self.velocities();
        // Column by column, each reduced by multiples of those before it: columns lie contiguous
        // in memory, rows do not.
        for j in 0..n {
            let diagonal = self.mass_matrix[(j, j)];
            let (before, rest) = self.factor.as_mut_slice().split_at_mut(j * n);
            let column = &mut rest[j..n];
            column.copy_from_slice(&self.mass_matrix.as_slice()[j * n + j..(j + 1) * n]);
            for earlier in before.chunks_exact(n) {
                subtract_multiple(column, earlier[j], &earlier[j..]);
            }
            let (pivot, needed) = (column[0], SMALLEST_PIVOT * diagonal);
            // Written so that a pivot that is not a number fails too.
            if !(pivot > needed && pivot.is_finite()) {
                let coordinate = coordinate_name(model, j);
                return Err(DynamicsError::MassMatrixNotPositiveDefinite {
                    row: j,
                    coordinate,
                    pivot,
                    needed,
                });
            }
            let root = pivot.sqrt();
            column.iter_mut().for_each(|entry| *entry /= root);
        }
        Ok(())
    }

    /// Replaces `b` (nv) by `M^-1 b`, with the factor of the last [`Workspace::factorise`].
    pub fn solve_factored(&self, b: &mut DVector<f64>) {
        let n = self.velocities();
        let (factor, b) = (self.factor.as_slice(), b.as_mut_slice());
        for j in 0..n {
            let column = &factor[j * n..(j + 1) * n];
            b[j] /= column[j];
            let known = b[j];
            subtract_multiple(&mut b[j + 1..], known, &column[j + 1..]);
        }
        for j in (0..n).rev() {
            let column = &factor[j * n..(j + 1) * n];
            let below = column[j + 1..].iter().zip(&b[j + 1..]);
            let sum: f64 = below.map(|(l, x)| l * x).sum();
            b[j] = (b[j] - sum) / column[j];
        }
    }
}

/// `a -= factor * b`, entry by entry.
fn subtract_multiple(a: &mut [f64], factor: f64, b: &[f64]) {
    a.iter_mut().zip(b).for_each(|(x, y)| *x -= factor * y);
}

fn coordinate_name(model: &Model, row: usize) -> String {
    let offset = model.joint_offset();
    match row.checked_sub(offset).and_then(|j| model.joints.get(j)) {
        Some(joint) => format!("joint {}", joint.name),
        None => "the base".to_string(),
    }
}

/// The state `dt` seconds on under constant `acceleration` (nv, world axes): positions advance by
/// `dt v + dt^2/2 a`, the base's rotation by `exp(dt omega + dt^2/2 alpha)` from the left.
pub fn integrate(model: &Model, state: &State, acceleration: &[f64], dt: f64) -> State {
    let offset = model.joint_offset();
    let half = 0.5 * dt * dt;
    let (base_pose, base_twist) = match model.base {
        BaseKind::Fixed => (state.base_pose, state.base_twist),
        BaseKind::Floating => {
            let linear = Vec3::new(acceleration[0], acceleration[1], acceleration[2]);
            let angular = Vec3::new(acceleration[3], acceleration[4], acceleration[5]);
            let Twist { linear: v, angular: w } = state.base_twist;
            let turned = exp_so3(&(w * dt + angular * half)) * state.base_pose.rotation;
            let moved = state.base_pose.translation + v * dt + linear * half;
            (
                Pose { rotation: turned, translation: moved },
                Twist { linear: v + linear * dt, angular: w + angular * dt },
            )
        }
    };
    let joints = &acceleration[offset..];
    let advance = |(q, (v, a)): (&f64, (&f64, &f64))| q + v * dt + a * half;
    State {
        base_pose,
        base_twist,
        position: state.position.iter().zip(state.velocity.iter().zip(joints)).map(advance).collect(),
        velocity: state.velocity.iter().zip(joints).map(|(v, a)| v + a * dt).collect(),
    }
}

/// The state `duration` seconds on while the generalised force (nv: torques and contact forces) is
/// held, for compensating a controller's latency. Midpoint rule in steps of a millisecond at most.
///
/// # Errors
/// [`DynamicsError::PredictionTime`] for a time outside 0 to 1 s, and the errors of
/// [`forward_dynamics`].
pub fn predict(
    model: &Model,
    ws: &mut Workspace,
    state: &State,
    gravity: &Vec3,
    generalised_force: &DVector<f64>,
    duration: f64,
) -> Result<State, DynamicsError> {
    if !(0.0..=LONGEST_PREDICTION).contains(&duration) {
        return Err(DynamicsError::PredictionTime { duration, longest: LONGEST_PREDICTION });
    }
    let steps = (duration / PREDICTION_STEP).ceil().max(1.0) as usize;
    let dt = duration / steps as f64;
    let mut acceleration = DVector::zeros(model.velocities());
    let mut here = state.clone();
    for _ in 0..steps {
        forward_dynamics_into(model, ws, &here, gravity, generalised_force, &mut acceleration)?;
        let middle = integrate(model, &here, acceleration.as_slice(), 0.5 * dt);
        forward_dynamics_into(model, ws, &middle, gravity, generalised_force, &mut acceleration)?;
        here = integrate(model, &here, acceleration.as_slice(), dt);
    }
    Ok(here)
}
