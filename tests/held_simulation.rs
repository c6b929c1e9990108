//! The rule `held` against the nonlinear robot simulated in steps of 10 us under held torques.

#[path = "common/biped.rs"]
mod biped;
#[path = "common/plant.rs"]
mod plant;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use plant::{Outcome, tick_under};
use underfoot::contact::{Law, Rest, TickRule};
use underfoot::problem::question::*;
use underfoot::reference;
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Vec3, Wrench, exp_so3};

const STEP: f64 = 1e-5;
const RULES: [TickRule; 4] = [TickRule::BackwardEuler, TickRule::Trapezoid, TickRule::Explicit, TickRule::Held];
/// Radius of gyration of the demo sole (m): `sqrt((0.2^2 + 0.1^2)/12)`.
const RADIUS: f64 = 0.0645;

/// A seeded generator (xorshift64*).
struct Dice(u64);

impl Dice {
    fn new(seed: u64) -> Self {
        Dice(seed.wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1)
    }

    fn signed(&mut self) -> f64 {
        self.0 ^= self.0 >> 12;
        self.0 ^= self.0 << 25;
        self.0 ^= self.0 >> 27;
        (self.0.wrapping_mul(0x2545_F491_4F6C_DD1D) >> 11) as f64 / (1u64 << 52) as f64 - 1.0
    }

    fn vector(&mut self, size: f64) -> Vec3 {
        Vec3::new(self.signed(), self.signed(), self.signed()) * size
    }
}

/// The torques that the biped at rest stands with.
fn standing_torques(question: &Question) -> Vec<f64> {
    let mut question = question.clone();
    question.tick.rule = TickRule::BackwardEuler;
    let answer = reference::solve(&question, &Arc::new(AtomicBool::new(false))).unwrap();
    answer.motion.unwrap().torques
}

/// Moving, off balance, soles tilted by some milliradians on their beds, torques off by some newton metres.
fn perturbed(stiffness: f64, tick: f64, size: f64, seed: u64) -> (Question, Vec<f64>) {
    let mut dice = Dice::new(seed);
    let mut question = biped::standing(stiffness);
    question.tick.length = tick;
    if std::env::var("NOFRIC").is_ok() { let mut m = (*question.model).clone(); m.joints.iter_mut().for_each(|j| j.viscous_friction = 0.0); question.model = Arc::new(m); }
    let mut torques = standing_torques(&question);
    torques.iter_mut().for_each(|t| *t += 8.0 * size * dice.signed());
    question.state.base_twist.linear = dice.vector(0.03 * size);
    question.state.base_twist.angular = dice.vector(0.1 * size);
    question.state.velocity.iter_mut().for_each(|v| *v = 0.2 * size * dice.signed());
    // Deflections as forces would make them: smaller on stiffer ground.
    let give = 2e6 / stiffness;
    for contact in &mut question.contacts {
        let Rest::Carries(w) = contact.ground.rest else { panic!("the biped's soles carry") };
        let shift = Wrench { force: w.force + dice.vector(40.0 * size), moment: w.moment + dice.vector(3.0 * size) };
        contact.ground.rest = Rest::Carries(shift);
    }
    question.state.base_pose.rotation = exp_so3(&(dice.vector(0.002 * size) * give.min(1.0))) * question.state.base_pose.rotation;
    (question, torques)
}

/// Error of the predicted change of all soft wrenches, relative to the change (moments over the radius).
fn error(question: &Question, wrenches: &[Wrench], truth: &Outcome) -> f64 {
    let (mut off, mut size) = (0.0, 0.0);
    for (i, contact) in question.contacts.iter().enumerate() {
        if matches!(contact.ground.law, Law::Rigid { .. }) {
            continue;
        }
        let point = question.model.soles[contact.sole].shape == SoleShape::Point;
        let square = |a: &Wrench, b: &Wrench| {
            let moment = if point { 0.0 } else { (a.moment - b.moment).norm_squared() / (RADIUS * RADIUS) };
            (a.force - b.force).norm_squared() + moment
        };
        off += square(&wrenches[i], &truth.ends[i]);
        size += square(&truth.starts[i], &truth.ends[i]);
    }
    (off / size).sqrt()
}

/// Errors of the four rules; infinite where a rule refuses.
fn errors(question: &Question, torques: &[f64]) -> [f64; 4] {
    let truth = tick_under(question, torques, STEP);
    RULES.map(|rule| {
        let mut question = question.clone();
        question.tick.rule = rule;
        match reference::respond(&question, torques) {
            Ok(response) => error(&question, &response.wrenches, &truth),
            Err(_) => f64::INFINITY,
        }
    })
}

#[test]
fn errors_on_the_demo_biped() {
    let mut table = String::new();
    for size in [0.1, 0.5] {
    for stiffness in [3e5, 2e6, 1e7] {
        for tick in [1e-3, 2e-3, 5e-3, 1e-2] {
            let mut sums = [0.0; 4];
            for seed in 0..3 {
                let (question, torques) = perturbed(stiffness, tick, size, seed + 1);
                for (sum, e) in sums.iter_mut().zip(errors(&question, &torques)) {
                    *sum += e / 3.0;
                }
            }
            table += &format!("{size} {stiffness:8.0e} {:4} ms  {:?}\n", tick * 1e3, sums.map(|e| (e * 1e4).round() / 100.0));
        }
    }}
    println!("{table}");
}
