//! The rule `held` for the certificate: the frozen motion under given torques, carried through the tick once more.
//!
//! The unknowns of the problem (averages) do not occur here. From the torques alone, with time s in ticks and the speed gained in units of one
//! tick's acceleration, `nu - nu0 = T alpha`, `x = T^2 xi` (x the soft soles' way from their drift):
//! ```text
//! alpha' = N (f + J' w) + nu_dot_r - T N F alpha,     w = w0 + s Delta - T^2 S xi - T D (J alpha + s c),
//! xi' = J alpha + s c,     eta' = xi,     theta' = alpha,     c = J_dot nu,
//! ```
//! f the torques, loads and bias, F viscous joint friction, N the inverse of M under the constraint of rigid soles and nu_dot_r what they
//! prescribe. M and J come from the balance and the kinematics under unit accelerations, S and D from the quadrature's derivatives.
//! The system is linear with inputs that are constant or grow with time, so one matrix exponential (Pade's, of the whole augmented system)
//! ends the tick: average acceleration alpha(1), wrenches at the end from xi(1), averages from eta(1) and theta(1).

use nalgebra::{DMatrix, DVector};

use super::situation::{Situation, unknown_wrench};
use crate::contact::Law;
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Twist, Vec6, Wrench};

/// Largest norm of the augmented system: a bed that rings faster has no certificate.
const LARGEST_NORM: f64 = 1e12;
/// Singular values below this share of the largest are constraints that rigid soles state twice.
const STATED_TWICE: f64 = 1e-12;
/// Sweeps of a singular value decomposition.
const MAX_SWEEPS: usize = 10_000;

/// A soft sole: its contact, its first row, its number of rows.
type Place = (usize, usize, usize);

/// The frozen motion of one question.
pub struct Held {
    time: f64,
    soft: Vec<Place>,
    contacts: usize,
    /// N.
    answer: DMatrix<f64>,
    /// Generalised force without torques and ground.
    force: DVector<f64>,
    /// What rigid soles prescribe.
    prescribed: DVector<f64>,
    jacobian: DMatrix<f64>,
    bias: DVector<f64>,
    stiffness: DMatrix<f64>,
    damping: DMatrix<f64>,
    now: DVector<f64>,
    drift: DVector<f64>,
    /// Viscous friction per generalised velocity.
    friction: DVector<f64>,
}

/// What the tick does under one generalised force.
#[derive(Debug, Clone)]
pub struct Played {
    /// Average acceleration.
    pub acceleration: Vec<f64>,
    /// Per contact, on soft ground: wrench at the end.
    pub ends: Vec<Option<Wrench>>,
    /// Per contact, on soft ground: average wrench.
    pub means: Vec<Option<Wrench>>,
    /// Per contact: way from the drift at the end (m, rad).
    pub shifts: Vec<Twist>,
    /// By how much the average joint friction exceeds the present one, per generalised velocity.
    pub friction: Vec<f64>,
}

impl Held {
    /// None where the rule is another one, or where something has no inverse or no rest pose.
    pub fn new(situation: &Situation) -> Option<Held> {
        let question = situation.question;
        let model = &*question.model;
        let nv = model.velocities();
        let still = vec![0.0; nv];
        let none = vec![Wrench::zero(); question.contacts.len()];
        let no_torques = vec![0.0; model.joints.len()];
        let bare = DVector::from_vec(situation.balance_under(&still, &no_torques, &none));
        let mut mass = DMatrix::zeros(nv, nv);
        let mut motions = vec![situation.motions(&still)];
        for j in 0..nv {
            let mut unit = still.clone();
            unit[j] = 1.0;
            let moved = DVector::from_vec(situation.balance_under(&unit, &no_torques, &none));
            mass.set_column(j, &(moved - &bare));
            motions.push(situation.motions(&unit));
        }
        let acceleration = |contact: usize, k: usize| {
            situation.sole(&question.contacts[contact], &motions[k]).acceleration.to_vec6()
        };
        let (mut soft, mut rigid): (Vec<Place>, Vec<Place>) = (Vec::new(), Vec::new());
        for (i, contact) in question.contacts.iter().enumerate() {
            let places = if matches!(contact.ground.law, Law::Rigid { .. }) { &mut rigid } else { &mut soft };
            let size = if matches!(situation.shape(contact), SoleShape::Point) { 3 } else { 6 };
            places.push((i, places.last().map_or(0, |p| p.1 + p.2), size));
        }
        let stack = |places: &[Place]| {
            let rows = places.last().map_or(0, |p| p.1 + p.2);
            let (mut jacobian, mut bias) = (DMatrix::zeros(rows, nv), DVector::zeros(rows));
            for &(i, start, size) in places {
                let start_acceleration = acceleration(i, 0);
                for k in 0..size {
                    bias[start + k] = start_acceleration[k];
                }
                for j in 0..nv {
                    let change = acceleration(i, j + 1) - start_acceleration;
                    (0..size).for_each(|k| jacobian[(start + k, j)] = change[k]);
                }
            }
            (jacobian, bias)
        };
        let (jacobian, bias) = stack(&soft);
        let (bound, bound_bias) = stack(&rigid);
        let mut wanted = -bound_bias;
        for &(i, start, size) in &rigid {
            let contact = &question.contacts[i];
            let aim = situation.prescribed(contact, &situation.sole(contact, &motions[0]))?.to_vec6();
            (0..size).for_each(|k| wanted[start + k] += aim[k]);
        }
        let (answer, prescribed) = constrained(&mass, &bound, &wanted)?;
        let mut friction = DVector::zeros(nv);
        for (j, joint) in model.joints.iter().enumerate() {
            friction[model.joint_offset() + j] = joint.viscous_friction;
        }
        let n = bias.len();
        let mut held = Held {
            time: question.tick.length,
            soft,
            contacts: question.contacts.len(),
            answer,
            force: -bare,
            prescribed,
            jacobian,
            bias,
            stiffness: DMatrix::zeros(n, n),
            damping: DMatrix::zeros(n, n),
            now: DVector::zeros(n),
            drift: DVector::zeros(n),
            friction,
        };
        held.read_beds(situation)?;
        Some(held)
    }

    fn read_beds(&mut self, situation: &Situation) -> Option<()> {
        for &(i, start, size) in &self.soft {
            let bed = situation.beds[i].as_ref()?;
            let (now, drift) = (bed.now().to_vec6(), bed.drift(self.time).to_vec6());
            for k in 0..size {
                self.now[start + k] = now[k];
                self.drift[start + k] = drift[k];
            }
            for l in 0..size {
                let unit = Twist::from_vec6(&Vec6::ith(l, 1.0));
                let against = |pair: [&Twist; 2]| bed.change_at_drift(self.time, pair[0], pair[1]).to_vec6();
                let (s, d) = (against([&unit, &Twist::zero()]), against([&Twist::zero(), &unit]));
                for k in 0..size {
                    self.stiffness[(start + k, start + l)] = -s[k];
                    self.damping[(start + k, start + l)] = -d[k];
                }
            }
        }
        Some(())
    }

    /// The tick under each of the given generalised forces (nv; torques, and whatever else acts besides the question's own loads).
    pub fn play(&self, forces: &[DVector<f64>]) -> Option<Vec<Played>> {
        let (nv, n, t) = (self.force.len(), self.bias.len(), self.time);
        let damped: Vec<usize> = (0..nv).filter(|&j| self.friction[j] != 0.0).collect();
        let (xi, eta, theta) = (nv, nv + n, nv + 2 * n);
        let clock = theta + damped.len();
        let mut system = DMatrix::zeros(clock + 1 + forces.len(), clock + 1 + forces.len());
        let back = &self.answer * self.jacobian.transpose();
        let slowed = -(&back * &self.damping * &self.jacobian + &self.answer * DMatrix::from_diagonal(&self.friction)) * t;
        system.view_mut((0, 0), (nv, nv)).copy_from(&slowed);
        system.view_mut((0, xi), (nv, n)).copy_from(&(-&back * &self.stiffness * (t * t)));
        let growing = &back * (&self.drift - &self.now - &self.damping * &self.bias * t);
        system.view_mut((0, clock), (nv, 1)).copy_from(&growing);
        system.view_mut((xi, 0), (n, nv)).copy_from(&self.jacobian);
        system.view_mut((xi, clock), (n, 1)).copy_from(&self.bias);
        system.view_mut((eta, xi), (n, n)).fill_with_identity();
        for (k, &j) in damped.iter().enumerate() {
            system[(theta + k, j)] = 1.0;
        }
        for (k, force) in forces.iter().enumerate() {
            let start = &self.answer * (&self.force + force) + &back * &self.now + &self.prescribed;
            system.view_mut((0, clock + 1 + k), (nv, 1)).copy_from(&start);
            system[(clock, clock + 1 + k)] = 1.0;
        }
        let sound = system.iter().all(|v| v.is_finite()) && system.lp_norm(1) < LARGEST_NORM;
        if !sound {
            return None;
        }
        let end = system.exp();
        let read = |k: usize| {
            let state = end.column(clock + 1 + k);
            let alpha = state.rows(0, nv).into_owned();
            let (xi, eta) = (state.rows(xi, n).into_owned(), state.rows(eta, n).into_owned());
            let gained = &self.jacobian * &alpha + &self.bias;
            let ends = &self.drift - &self.stiffness * &xi * (t * t) - &self.damping * gained * t;
            let means = (&self.now + &self.drift) * 0.5 - &self.stiffness * eta * (t * t) - &self.damping * &xi * t;
            let mut friction = vec![0.0; nv];
            for (l, &j) in damped.iter().enumerate() {
                friction[j] = self.friction[j] * t * state[theta + l];
            }
            let shifts = self.split(&(xi * (t * t))).into_iter().map(|x| x.map_or(Twist::zero(), |x| Twist::from_vec6(&x)));
            let wrenches = |v: &DVector<f64>| self.split(v).into_iter().map(|w| w.map(|w| Wrench::from_vec6(&w))).collect();
            Played {
                acceleration: alpha.iter().copied().collect(),
                ends: wrenches(&ends),
                means: wrenches(&means),
                shifts: shifts.collect(),
                friction,
            }
        };
        Some((0..forces.len()).map(read).collect())
    }

    /// One entry per contact, none on rigid ground.
    fn split(&self, stacked: &DVector<f64>) -> Vec<Option<Vec6>> {
        let mut out = vec![None; self.contacts];
        for &(i, start, size) in &self.soft {
            out[i] = Some(Vec6::from_fn(|k, _| if k < size { stacked[start + k] } else { 0.0 }));
        }
        out
    }
}

/// The inverse of M where `bound nu_dot = wanted` holds, and the acceleration that this prescribes.
fn constrained(mass: &DMatrix<f64>, bound: &DMatrix<f64>, wanted: &DVector<f64>) -> Option<(DMatrix<f64>, DVector<f64>)> {
    let nv = mass.nrows();
    let inverse = mass.clone().lu().try_inverse()?;
    if bound.is_empty() {
        return Some((inverse, DVector::zeros(nv)));
    }
    let reach = &inverse * bound.transpose();
    let yielding = bound * &reach;
    if !yielding.iter().all(|v| v.is_finite()) {
        return None;
    }
    let parts = yielding.try_svd(true, true, f64::EPSILON, MAX_SWEEPS)?;
    let cut = STATED_TWICE * parts.singular_values.max();
    let held = parts.solve(&reach.transpose(), cut).ok()?;
    let carried = parts.solve(wanted, cut).ok()?;
    Some((inverse - &reach * held, reach * carried))
}

impl Situation<'_> {
    /// What the claimed torques do over the tick, under the rule `held`; not a number where it cannot be found.
    pub fn play(&self, torques: &[f64]) -> Played {
        let offset = self.question.model.joint_offset();
        let force = DVector::from_fn(self.question.model.velocities(), |i, _| if i < offset { 0.0 } else { torques[i - offset] });
        let played = self.held.as_ref().and_then(|held| held.play(&[force])).and_then(|mut all| all.pop());
        played.unwrap_or_else(|| self.unplayed())
    }

    /// A tick that no check accepts.
    fn unplayed(&self) -> Played {
        let (nv, contacts) = (self.question.model.velocities(), self.question.contacts.len());
        Played {
            acceleration: vec![f64::NAN; nv],
            ends: vec![Some(unknown_wrench()); contacts],
            means: vec![Some(unknown_wrench()); contacts],
            shifts: vec![Twist::zero(); contacts],
            friction: vec![f64::NAN; nv],
        }
    }

    /// The balance under the rule `held`: average wrenches of soft soles and average friction as played, `ends` on rigid soles.
    pub fn held_balance(&self, acceleration: &[f64], torques: &[f64], ends: &[Wrench], played: &Played) -> Vec<f64> {
        let acting: Vec<Wrench> = played.means.iter().zip(ends).map(|(mean, end)| mean.unwrap_or(*end)).collect();
        let mut rows = self.balance_under(acceleration, torques, &acting);
        rows.iter_mut().zip(&played.friction).for_each(|(row, friction)| *row += friction);
        rows
    }
}
