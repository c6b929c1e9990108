//! The whole path on the demonstration biped: limits that the answer must meet, and statuses it must say.

#[path = "common/biped.rs"]
mod biped;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use underfoot::contact::{Law, Rest, TickRule};
use underfoot::problem::question::*;
use underfoot::problem::scene::Scene;
use underfoot::reference::{self, answer::*};
use underfoot::spatial::{Vec3, Wrench};

fn solve(question: &Question) -> Answer {
    reference::solve(question, &Arc::new(AtomicBool::new(false))).unwrap()
}

fn solved(question: &Question) -> Answer {
    let answer = solve(question);
    assert_eq!(
        answer.status,
        Status::Solved,
        "{:#?}\n{:?}\n{:?}",
        answer.certificate,
        answer.blocking,
        answer.levels
    );
    answer
}

fn torques(answer: &Answer) -> Vec<f64> {
    answer.motion.as_ref().unwrap().torques.clone()
}

fn largest_difference(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max)
}

/// First-rate momentum, as on rigid ground.
fn at_first_rate(mut question: Question) -> Question {
    for task in &mut question.tasks {
        if let TaskKind::MomentumSecondRate(aim) = &task.kind {
            let mut aim = aim.clone();
            aim.momentum_gain = [16.0, 20.0];
            aim.position_gain = 64.0;
            task.kind = TaskKind::MomentumRate(aim);
        }
    }
    question
}

fn rigid(mut question: Question, stop: bool) -> Question {
    for contact in &mut question.contacts {
        contact.ground.law = Law::Rigid { stop };
        contact.ground.rest = Rest::Measured;
    }
    by_value(question)
}

/// Wrench tasks that ask for the value itself. Without them stiff ground leaves the inner forces to the posture task, which
/// gains ever less from ever larger ones: there is no limit to meet.
fn by_value(mut question: Question) -> Question {
    for task in &mut question.tasks {
        if let TaskKind::Wrench { approach, .. } = &mut task.kind {
            *approach = None;
        }
    }
    question
}

#[test]
fn standing_on_soft_ground_is_solved_under_every_rule_and_stiffness() {
    for stiffness in [3e5, 2e6, 1e7] {
        for rule in [TickRule::BackwardEuler, TickRule::Trapezoid] {
            let mut question = biped::standing(stiffness);
            question.tick.rule = rule;
            solved(&question);
        }
    }
}

#[test]
fn momentum_is_followed_and_total_force_is_what_newton_asks() {
    // Derived: at priority 1 with room left, L_ddot is reached exactly, so the total force at the tick's end is
    // m g + T m (512 (c_ref - c)) from rest with the weight carried.
    let question = biped::standing(2e6);
    let answer = solved(&question);
    let task = &answer.tasks[0];
    assert!(task.residual.iter().all(|r| r.abs() < 1e-6), "{:?}", task.residual);
    let force: Vec3 = answer.soles.iter().map(|s| s.wrench.unwrap().force).sum();
    let mass = question.model.mass();
    let wanted = Vec3::new(0.005 * mass * 512.0 * 0.01, 0.0, mass * biped::GRAVITY - 0.005 * mass * 512.0 * 0.005);
    assert!((force - wanted).norm() < 1e-7 * mass * biped::GRAVITY, "{force:?} {wanted:?}");
}

#[test]
fn stiffness_without_bound_meets_rigid_ground() {
    let rigid_answer = solved(&rigid(at_first_rate(biped::standing(2e6)), false));
    let difference = |stiffness: f64| {
        let answer = solved(&by_value(at_first_rate(biped::standing(stiffness))));
        largest_difference(&torques(&answer), &torques(&rigid_answer))
    };
    // Derived: the sole's acceleration is `(drift - w) / G` with G proportional to k, so the gap closes like 1/k.
    let gaps = [1e9, 1e11, 1e13].map(difference);
    for pair in gaps.windows(2) {
        assert!((90.0..110.0).contains(&(pair[0] / pair[1])), "{gaps:?}");
    }
    assert!(gaps[2] < 1e-4, "{gaps:?}");
}

#[test]
fn stop_is_the_limit_of_stiff_ground_in_motion() {
    // Standing still but for a base that moves: without friction and load limits, so that any jump of force is allowed.
    let moving = |mut question: Question| {
        question.state.base_twist.linear = Vec3::new(0.02, -0.01, -0.03);
        question.state.base_twist.angular = Vec3::new(0.02, 0.05, -0.03);
        question.limits.clear();
        for contact in &mut question.contacts {
            contact.friction = None;
            contact.normal_force = None;
        }
        question
    };
    let rigid_answer = solved(&rigid(at_first_rate(moving(biped::standing(2e6))), true));
    for stiffness in [1e10, 1e12] {
        let mut question = by_value(at_first_rate(moving(biped::standing(stiffness))));
        // b/k goes to zero with the sole's memory: only then does the end of the tick find it at rest at its rest pose.
        for contact in &mut question.contacts {
            if let Law::Bonded(m) = &mut contact.ground.law {
                m.normal_damping = 1e-3 * m.normal_stiffness.sqrt();
                m.tangential_damping = m.normal_damping;
            }
        }
        let answer = solved(&question);
        for (a, b) in answer.soles.iter().zip(&rigid_answer.soles) {
            let (a, b) = (a.acceleration.unwrap(), b.acceleration.unwrap());
            assert!((a[0] - b[0]).norm() < 1e9 / stiffness, "{stiffness:e} {a:?} {b:?}");
            assert!((a[1] - b[1]).norm() < 1e10 / stiffness, "{stiffness:e} {a:?} {b:?}");
        }
    }
}

#[test]
fn a_measured_wrench_equal_to_the_modelled_one_changes_nothing() {
    let question = biped::standing(2e6);
    let plain = solved(&question);
    let mut measured = question.clone();
    for (contact, sole) in measured.contacts.iter_mut().zip(&plain.soles) {
        contact.ground.measured = sole.present;
    }
    let answer = solved(&measured);
    assert!(largest_difference(&torques(&plain), &torques(&answer)) < 1e-8);
}

#[test]
fn a_load_nobody_can_carry_is_infeasible_and_blames_limits() {
    let mut question = biped::standing(2e6);
    for contact in &mut question.contacts {
        contact.normal_force = Some(NormalForce { least: Some(5000.0), largest: None, treatment: Treatment::Hard });
        contact.wrench_rate =
            Some(WrenchRate { force: Some(100.0), moment: None, treatment: Treatment::Hard });
    }
    let answer = solve(&question);
    assert_eq!(answer.status, Status::Infeasible);
    assert!(answer.motion.is_none());
    assert!(!answer.blocking.is_empty());
    for blocking in &answer.blocking {
        let named = blocking.group.starts_with("normal_force:") || blocking.group.starts_with("wrench_rate:");
        assert!(named, "{:?}", answer.blocking);
    }
    // The same limits, soft: an answer that says by how much each is exceeded.
    for contact in &mut question.contacts {
        let soft = Treatment::Soft { priority: 1, weight: 1.0, scale: 1.0 };
        contact.normal_force = contact.normal_force.map(|n| NormalForce { treatment: soft, ..n });
    }
    let answer = solved(&question);
    let worst = answer.margins.iter().filter(|m| m.limit.starts_with("normal_force:")).map(|m| m.margin).fold(0.0, f64::min);
    assert!(worst < -4000.0, "{:?}", answer.margins);
}

#[test]
fn friction_decays_from_outside_its_set() {
    // A present wrench far outside its cone: hard friction cannot be reached by the decay rate alone; with `decay`
    // the violation at the tick's end is at most (1 - rate T) of the present one.
    for set in [FrictionSet::Vertex, FrictionSet::Wrench] {
        let mut question = biped::standing(2e6);
        let present = Wrench { force: Vec3::new(220.0, 0.0, 190.0), moment: Vec3::zeros() };
        question.contacts[0].ground.measured = Some(present);
        question.contacts[0].friction = Some(Friction {
            set,
            coefficient: 0.6,
            torsion: Some(0.05),
            facets: None,
            treatment: Treatment::Decay { rate: 40.0 },
        });
        let answer = solved(&question);
        let force = answer.soles[0].wrench.unwrap().force;
        let now = 220.0 - 0.6 * 190.0;
        let then = force.xy().norm() - 0.6 * force.z;
        assert!(then <= 0.8 * now + 1e-6, "{set:?}: {then} after {now}");
    }
}

#[test]
fn latency_predicts_the_state_first() {
    // Under the torques of the answer itself, a latency of one tick ends near the state those torques lead to: with zero
    // delay torques that hold the posture, the answer stays near the one without latency.
    let question = biped::standing(2e6);
    let plain = solved(&question);
    let mut late = question.clone();
    late.latency = Some(Latency { delay: 1e-6, torques: torques(&plain) });
    let answer = solved(&late);
    let difference = largest_difference(&torques(&plain), &torques(&answer));
    assert!(difference > 0.0 && difference < 0.05, "{difference:e}");
    let longer = Question { latency: Some(Latency { delay: 0.004, torques: torques(&plain) }), ..question };
    assert!(largest_difference(&torques(&solve(&longer)), &torques(&plain)) > difference);
}

#[test]
fn pyramids_lie_inside_cones() {
    let cost = |facets: Option<usize>| {
        let mut question = biped::standing(2e6);
        question.tasks = vec![Task {
            name: "slide".into(),
            importance: Importance::Priority(1),
            weight: 1.0,
            scale: 1.0,
            scale_angular: 1.0,
            axes: [true, true, true, false, false, false],
            kind: TaskKind::Wrench {
                contact: 0,
                value: Wrench { force: Vec3::new(300.0, 170.0, 190.0), moment: Vec3::zeros() },
                approach: None,
            },
        }];
        for contact in &mut question.contacts {
            contact.friction = contact.friction.map(|f| Friction { facets, ..f });
        }
        solved(&question).levels[0].cost
    };
    let (coarse, fine, exact) = (cost(Some(4)), cost(Some(32)), cost(None));
    assert!(coarse > fine && fine > exact && (fine - exact) < 0.02 * exact, "{coarse} {fine} {exact}");
}

#[test]
fn same_question_same_bits() {
    let question = biped::standing(2e6);
    let bits = |a: &Answer| torques(a).iter().map(|t| t.to_bits()).collect::<Vec<_>>();
    let first = bits(&solve(&question));
    for _ in 0..20 {
        assert_eq!(first, bits(&solve(&question)));
    }
    let threads: Vec<_> = (0..4)
        .map(|_| {
            let question = question.clone();
            std::thread::spawn(move || bits(&solve(&question)))
        })
        .collect();
    for thread in threads {
        assert_eq!(first, thread.join().unwrap());
    }
}

#[test]
fn a_cancelled_solve_says_so() {
    let answer = reference::solve(&biped::standing(2e6), &Arc::new(AtomicBool::new(true))).unwrap();
    assert_eq!(answer.status, Status::Cancelled);
    assert!(answer.motion.is_none() && answer.certificate.is_none());
}

#[test]
fn the_scene_scales_what_it_assembles() {
    // The point of our own scaling: coefficients of the physics rows lie near one whatever the stiffness.
    for stiffness in [1e4, 2e6, 1e10] {
        let question = biped::standing(stiffness);
        let scene = Scene::new(&question).unwrap();
        let assembly = underfoot::problem::assemble(&question, &scene, &[]);
        let rows = &assembly.hierarchy.hard;
        for i in 0..rows.matrix.rows() {
            let largest = rows.matrix.row(i).map(|(_, v)| v.abs()).fold(0.0, f64::max);
            assert!((1e-3..1e3).contains(&largest), "{stiffness:e}: {:?} {largest:e}", rows.names[i]);
        }
    }
}
