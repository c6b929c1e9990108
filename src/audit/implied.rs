//! What claimed torques lead to: the physics rows solved with the torques given.
//!
//! `M nu_dot + h = S' tau + sum J' w_bar` and the contact equality are square in accelerations and wrenches. They have one solution
//! unless rigid soles state a constraint twice (their stacked Jacobian loses rank): accelerations are then still unique where the
//! prescribed ones do not contradict each other, while wrenches that balance each other stay open; the shortest stands for them.

use nalgebra::{DMatrix, DVector};

use super::Claim;
use super::report::{Implied, ImpliedSole};
use super::tolerances::{Tolerances, within};
use crate::problem::layout::Layout;
use crate::reference::{self, Trouble, Work};
use crate::spatial::{Vec3, Vec6, Wrench};

/// Singular values below this share of the largest belong to constraints that are stated twice.
const STATED_TWICE: f64 = 1e-11;
/// Sweeps of a singular value decomposition.
const MOST_SWEEPS: usize = 10_000;
/// Largest residual (scaled) of physics rows that have a solution.
const CONTRADICTION: f64 = 1e-8;

/// The motion that torques lead to.
#[derive(Debug, Clone)]
pub struct Consequence {
    /// Every unknown in physical units; vertex forces are left at zero.
    pub x: Vec<f64>,
    /// Tick-end wrench of each contact.
    pub wrenches: Vec<Wrench>,
    /// Average wrench over the tick.
    pub over_tick: Vec<Wrench>,
    /// Combinations of rigid soles' wrenches left open.
    pub open: usize,
    /// With open wrenches: true where the claimed ones stand in `wrenches`.
    pub at_claimed: bool,
}

impl Consequence {
    /// True where the wrench of every sole is known.
    pub fn determined(&self) -> bool {
        self.open == 0 || self.at_claimed
    }
}

/// What `claim`'s torques lead to in the state of `work`.
///
/// # Errors
/// [`Trouble::Latency`] where rigid soles contradict each other; [`Trouble::Scene`].
pub fn follow(work: &Work, claim: &Claim, tolerances: &Tolerances) -> Result<Consequence, Trouble> {
    let open = open_wrenches(work);
    let layout = &work.assembly.layout;
    let mut x = vec![0.0; layout.columns.len()];
    for (column, torque) in layout.torque.iter().zip(&claim.torques) {
        if let Some(column) = column {
            x[*column] = *torque;
        }
    }
    if open == 0 {
        let response = reference::respond(&work.question, &claim.torques)?;
        x[..layout.velocities].copy_from_slice(response.acceleration.as_slice());
        put_wrenches(layout, &response.wrenches, &mut x);
        return Ok(Consequence { x, wrenches: response.wrenches, over_tick: response.over_tick, open, at_claimed: false });
    }
    shortest(work, &mut x)?;
    let found = wrenches_of(layout, &x);
    let claimed: Option<Vec<Wrench>> = claim.wrenches.iter().copied().collect();
    let balancing = claimed.filter(|claimed| balances(work, &found, claimed, tolerances));
    let at_claimed = balancing.is_some();
    let wrenches = balancing.unwrap_or(found);
    put_wrenches(layout, &wrenches, &mut x);
    let acceleration = DVector::from_column_slice(&x[..layout.velocities]);
    let over_tick = work.scene.over_tick(&acceleration, &wrenches);
    Ok(Consequence { x, wrenches, over_tick, open, at_claimed })
}

/// The same as the report has it.
pub fn reported(work: &Work, consequence: &Consequence) -> Implied {
    let question = &work.question;
    let offset = question.model.joint_offset();
    let mut acceleration = consequence.x[..work.assembly.layout.velocities].to_vec();
    question.velocity_axes.map(&question.model, &question.state).acceleration_from_world(&mut acceleration);
    let base = (offset == 6)
        .then(|| [Vec3::from_column_slice(&acceleration[..3]), Vec3::from_column_slice(&acceleration[3..6])]);
    let soles = question.contacts.iter().zip(&work.scene.soles).zip(consequence.wrenches.iter().zip(&consequence.over_tick));
    Implied {
        joint_accelerations: acceleration[offset..].to_vec(),
        base_acceleration: base,
        soles: soles
            .map(|((contact, sole), (wrench, over_tick))| ImpliedSole {
                name: sole.name.clone(),
                wrench: *wrench,
                over_tick: *over_tick,
                normal_force: contact.ground.normal.dot(&wrench.force),
            })
            .collect(),
        open_wrenches: consequence.open,
        at_claimed_wrenches: consequence.at_claimed,
    }
}

/// Rows of the rigid soles' Jacobian beyond its rank.
fn open_wrenches(work: &Work) -> usize {
    let layout = &work.assembly.layout;
    let rigid: Vec<_> = work.scene.soles.iter().zip(&layout.contacts).filter(|(s, _)| s.map.rigid).collect();
    let rows: usize = rigid.iter().map(|(s, _)| s.map.dimension).sum();
    if rows == 0 {
        return 0;
    }
    let mut stacked = DMatrix::zeros(rows, layout.velocities);
    let mut at = 0;
    for (sole, columns) in rigid {
        for k in 0..columns.dimension {
            let size = if k < 3 { 1.0 } else { columns.radius };
            for j in 0..layout.velocities {
                stacked[(at, j)] = size * sole.jacobian[(k, j)] * layout.columns[j].scale;
            }
            at += 1;
        }
    }
    let values = stacked.singular_values();
    let cut = STATED_TWICE * values.max();
    rows - values.iter().filter(|v| **v > cut).count()
}

/// Accelerations and wrenches of least scaled size that satisfy dynamics and contact rows, written into `x`.
fn shortest(work: &Work, x: &mut [f64]) -> Result<(), Trouble> {
    let (layout, hard) = (&work.assembly.layout, &work.assembly.hierarchy.hard);
    let unknown: Vec<usize> = (0..layout.velocities)
        .chain(layout.contacts.iter().flat_map(|c| c.wrench..c.wrench + c.dimension))
        .collect();
    let rows: Vec<usize> = (0..hard.rhs.len())
        .filter(|&i| hard.names[i].physics && !hard.names[i].group.starts_with("vertices:"))
        .collect();
    let mut matrix = DMatrix::zeros(rows.len(), unknown.len());
    let mut right = DVector::zeros(rows.len());
    for (r, &i) in rows.iter().enumerate() {
        right[r] = hard.rhs[i];
        for (j, value) in hard.matrix.row(i) {
            match unknown.iter().position(|&u| u == j) {
                Some(place) => matrix[(r, place)] += value,
                None => right[r] -= value * x[j] / layout.columns[j].scale,
            }
        }
    }
    let parts = matrix.clone().try_svd(true, true, f64::EPSILON, MOST_SWEEPS).ok_or(Trouble::Latency)?;
    let cut = STATED_TWICE * parts.singular_values.max();
    let solution = parts.solve(&right, cut).map_err(|_| Trouble::Latency)?;
    let left = (&matrix * &solution - &right).amax();
    if !within(left, CONTRADICTION * right.amax().max(1.0)) {
        return Err(Trouble::Latency);
    }
    for (&j, value) in unknown.iter().zip(solution.iter()) {
        x[j] = value * layout.columns[j].scale;
    }
    Ok(())
}

/// True where the claimed wrenches differ from those found by wrenches that balance each other.
fn balances(work: &Work, found: &[Wrench], claimed: &[Wrench], tolerances: &Tolerances) -> bool {
    let layout = &work.assembly.layout;
    let mut force = DVector::<f64>::zeros(layout.velocities);
    for ((sole, columns), (a, b)) in work.scene.soles.iter().zip(&layout.contacts).zip(found.iter().zip(claimed)) {
        let off = b.to_vec6() - a.to_vec6();
        for k in 0..columns.dimension {
            for j in 0..layout.velocities {
                force[j] += sole.jacobian[(k, j)] * off[k];
            }
        }
        let soft = !sole.map.rigid;
        if soft && (0..columns.dimension).any(|k| off[k].abs() > tolerances.of_claim(&layout.columns[columns.wrench + k])) {
            return false;
        }
    }
    force.iter().zip(&layout.dynamics_scale).all(|(f, scale)| f.abs() <= tolerances.relative * scale)
}

fn put_wrenches(layout: &Layout, wrenches: &[Wrench], x: &mut [f64]) {
    for (columns, wrench) in layout.contacts.iter().zip(wrenches) {
        let parts = wrench.to_vec6();
        x[columns.wrench..columns.wrench + columns.dimension].copy_from_slice(&parts.as_slice()[..columns.dimension]);
    }
}

fn wrenches_of(layout: &Layout, x: &[f64]) -> Vec<Wrench> {
    let part = |c: &crate::problem::layout::ContactColumns, k: usize| if k < c.dimension { x[c.wrench + k] } else { 0.0 };
    layout.contacts.iter().map(|c| Wrench::from_vec6(&Vec6::from_fn(|k, _| part(c, k)))).collect()
}
