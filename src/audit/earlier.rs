//! The question one tick ago: the state and, where they are measured, the wrenches from which the claimed torques, held over a tick, lead to
//! the present ones.
//!
//! Unknown are the accelerations a over that tick and the wrenches w measured at its start. With `v = v_now - T a` and
//! `q = q_now - T v_now + T^2/2 a` they have to satisfy `a = a(q, v, w)` and, with wrenches told by the tick rule, `w+(q, v, w) = w_now`:
//! Newton's method, the slope by differences. Repetition alone diverges on stiff ground.

use nalgebra::{DMatrix, DVector};

use crate::contact::{Law, Rest, tick};
use crate::dynamics;
use crate::model::State;
use crate::problem::question::Question;
use crate::problem::scene::Scene;
use crate::reference;
use crate::spatial::{Vec6, Wrench};

/// Steps of Newton's method.
const STEPS: usize = 8;
/// The slope is found anew before these steps.
const SLOPES: [usize; 3] = [0, 1, 3];
/// Differences for the slope: accelerations (m/s^2, rad/s^2) and wrenches (N, N m).
const DIFFERENCE: [f64; 2] = [1e-2, 1e-1];
/// Steps end when no acceleration (m/s^2, rad/s^2) and no wrench (N, N m) misses by more.
const SETTLED: f64 = 1e-9;

/// How the wrenches measured one tick ago are told.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Earlier {
    /// From the present ones, by the change that the ground's law sees between the two states.
    ByLaw,
    /// So that the tick rule predicts the present ones from them.
    ByRule,
}

struct Search<'a> {
    now: &'a Question,
    /// Ground as it was; state and measured wrenches are put in.
    ground: Question,
    torques: &'a [f64],
    earlier: Earlier,
    /// Soft soles with a measured wrench.
    measured: Vec<usize>,
    /// What the laws alone say of the present.
    present: Vec<Wrench>,
}

/// The question one tick before `now` (whose latency has been dealt with); none where no such state is found.
pub(super) fn one_tick_ago(now: &Question, torques: &[f64], earlier: Earlier) -> Option<Question> {
    let mut ground = now.clone();
    reference::fix_rest_poses(&mut ground).ok()?;
    let present = by_law(ground.clone())?;
    for contact in &mut ground.contacts {
        // Ground that moves was elsewhere.
        if let Rest::Pose(pose) = contact.ground.rest {
            let (rest, normal) = tick::advance_ground(&contact.ground.normal, &pose, &contact.ground.rest_twist, -now.tick.length);
            contact.ground.rest = Rest::Pose(rest);
            contact.ground.normal = normal;
        }
    }
    let soft = |i: &usize| matches!(now.contacts[*i].ground.law, Law::Bonded(_)) && now.contacts[*i].ground.measured.is_some();
    let measured: Vec<usize> = (0..now.contacts.len()).filter(soft).collect();
    if earlier == Earlier::ByRule {
        // A rest pose that only a measured wrench tells followed from the wrench of then.
        for &i in measured.iter().filter(|&&i| now.contacts[i].ground.rest == Rest::Measured) {
            ground.contacts[i].ground.rest = Rest::Measured;
        }
    }
    Search { now, ground, torques, earlier, measured, present }.run()
}

impl Search<'_> {
    fn run(&self) -> Option<Question> {
        let mut z = self.start()?;
        let mut slope = None;
        for step in 0..STEPS {
            let misses = self.misses(&z)?;
            if misses.amax() < SETTLED {
                break;
            }
            if SLOPES.contains(&step) || slope.is_none() {
                slope = Some(self.slope(&z, &misses)?.lu());
            }
            z -= slope.as_ref()?.solve(&misses)?;
            if !z.iter().all(|v| v.is_finite()) {
                return None;
            }
        }
        self.at(&z)
    }

    /// Accelerations at the present state, wrenches of the present.
    fn start(&self) -> Option<DVector<f64>> {
        let response = reference::respond(self.now, self.torques).ok()?;
        let wrenches = self.unknown_wrenches().flat_map(|i| parts(&self.now.contacts[i].ground.measured.unwrap_or(Wrench::zero())));
        Some(DVector::from_iterator(
            response.acceleration.len() + 6 * self.unknown_wrenches().count(),
            response.acceleration.iter().copied().chain(wrenches),
        ))
    }

    fn unknown_wrenches(&self) -> impl Iterator<Item = usize> {
        self.measured.iter().copied().filter(|_| self.earlier == Earlier::ByRule)
    }

    /// The question with accelerations and wrenches `z`.
    fn at(&self, z: &DVector<f64>) -> Option<Question> {
        let mut out = self.ground.clone();
        out.latency = None;
        let nv = out.model.velocities();
        // The motion run backwards, from -v_now under the same a, ends at q with -v.
        let mut reversed = self.now.state.clone();
        turn_round(&mut reversed);
        out.state = dynamics::integrate(&out.model, &reversed, &z.as_slice()[..nv], self.now.tick.length);
        turn_round(&mut out.state);
        match self.earlier {
            Earlier::ByRule => {
                for (place, &i) in self.measured.iter().enumerate() {
                    let wrench = Vec6::from_column_slice(&z.as_slice()[nv + 6 * place..nv + 6 * place + 6]);
                    out.contacts[i].ground.measured = Some(Wrench::from_vec6(&wrench));
                }
            }
            Earlier::ByLaw if !self.measured.is_empty() => {
                let then = by_law(out.clone())?;
                for &i in &self.measured {
                    let change = then[i].to_vec6() - self.present[i].to_vec6();
                    let now = self.now.contacts[i].ground.measured.unwrap_or(Wrench::zero());
                    out.contacts[i].ground.measured = Some(Wrench::from_vec6(&(now.to_vec6() + change)));
                }
            }
            Earlier::ByLaw => {}
        }
        Some(out)
    }

    /// What is left of the two conditions.
    fn misses(&self, z: &DVector<f64>) -> Option<DVector<f64>> {
        let response = reference::respond(&self.at(z)?, self.torques).ok()?;
        let nv = response.acceleration.len();
        let mut out = DVector::zeros(z.len());
        for i in 0..nv {
            out[i] = response.acceleration[i] - z[i];
        }
        for (place, i) in self.unknown_wrenches().enumerate() {
            let now = self.now.contacts[i].ground.measured.unwrap_or(Wrench::zero());
            let off = response.wrenches[i].to_vec6() - now.to_vec6();
            out.rows_mut(nv + 6 * place, 6).copy_from(&off);
        }
        // Moments under a point sole are neither measured nor predicted.
        Some(out)
    }

    fn slope(&self, z: &DVector<f64>, here: &DVector<f64>) -> Option<DMatrix<f64>> {
        let nv = self.now.model.velocities();
        let mut out = DMatrix::zeros(z.len(), z.len());
        for j in 0..z.len() {
            let difference = DIFFERENCE[usize::from(j >= nv)];
            let mut moved = z.clone();
            moved[j] += difference;
            out.set_column(j, &((self.misses(&moved)? - here) / difference));
            // A component that nothing depends on (a moment under a point sole) stays where it is.
            if out.column(j).amax() == 0.0 {
                out[(j, j)] = 1.0;
            }
        }
        Some(out)
    }
}

fn parts(wrench: &Wrench) -> [f64; 6] {
    let v = wrench.to_vec6();
    std::array::from_fn(|k| v[k])
}

/// What the laws alone say the soles carry at present; nothing on rigid ground.
fn by_law(mut question: Question) -> Option<Vec<Wrench>> {
    for contact in &mut question.contacts {
        if matches!(contact.ground.law, Law::Bonded(_)) {
            contact.ground.measured = None;
        }
    }
    let scene = Scene::new(&question).ok()?;
    Some(scene.soles.iter().map(|sole| sole.map.now).collect())
}

fn turn_round(state: &mut State) {
    state.velocity.iter_mut().for_each(|v| *v = -*v);
    state.base_twist.linear = -state.base_twist.linear;
    state.base_twist.angular = -state.base_twist.angular;
}
