//! What is said beside an answer: ranges, derivatives, spread.

#[path = "common/biped.rs"]
mod biped;
mod solve_support;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use solve_support::{conic, hierarchy, level, residuals};
use underfoot::conic::Cone;
use underfoot::contact::TickRule;
use underfoot::explain::sensitivity::{Derivative, Sensitivity};
use underfoot::explain::uniqueness::ranges;
use underfoot::explain::{Parameter, ParameterKind, varied};
use underfoot::problem::question::*;
use underfoot::reference::{self, answer::*};
use underfoot::solve::{self, Options};
use underfoot::spatial::{Vec3, Wrench};

fn answer(question: &Question) -> Answer {
    reference::solve(question, &Arc::new(AtomicBool::new(false))).unwrap()
}

fn solved(question: &Question) -> Answer {
    let answer = answer(question);
    assert_eq!(answer.status, Status::Solved, "{:#?}", answer.certificate);
    answer
}

/// Derived: x + y = 1 wanted, 0 <= x <= .3 and z >= -1 held: x in [0, .3], y in [.7, 1], z from -1 without bound; w = 2
/// wanted and free of all others is determined.
#[test]
fn ranges_of_a_small_set() {
    let rows = conic(4, &[Cone::Nonnegative(3)], &[(&[1., 0., 0., 0.], 0.3), (&[-1., 0., 0., 0.], 0.), (&[0., 0., -1., 0.], 1.)]);
    let task = residuals(4, &[(1., &[1., 1., 0., 0.], 1.), (1., &[0., 0., 0., 1.], 2.)]);
    let mut h = hierarchy(4, rows, vec![level(1, task)]);
    for (column, name) in h.columns.iter_mut().zip(["x", "y", "z", "w"]) {
        column.name = name.into();
        column.scale = 10.0;
    }
    let solution = solve::solve(&h, &Options::default(), None).unwrap();
    let found = ranges(&h, &solution, None).unwrap();
    assert_eq!((found.directions, found.ranges.len(), found.complete), (2, 3, true));
    let expected = [("x", Some(0.), Some(3.)), ("y", Some(7.), Some(10.)), ("z", Some(-10.), None)];
    for (range, (name, least, largest)) in found.ranges.iter().zip(expected) {
        assert_eq!(range.name, name);
        let close = |a: Option<f64>, b: Option<f64>| match (a, b) {
            (Some(a), Some(b)) => (a - b).abs() < 1e-7,
            (a, b) => a == b,
        };
        assert!(close(range.least, least) && close(range.largest, largest) && range.exact, "{range:?}");
    }
}

/// Derived: a disc of radius 1 about (0, 0) in a plane, first coordinate wanted at .6 and left at that: the second ranges
/// over +-.8.
#[test]
fn ranges_end_on_cones() {
    let rows = conic(2, &[Cone::SecondOrder(3)], &[(&[0., 0.], 1.), (&[-1., 0.], 0.), (&[0., -1.], 0.)]);
    let h = hierarchy(2, rows, vec![level(1, residuals(2, &[(1., &[1., 0.], 0.6)]))]);
    let solution = solve::solve(&h, &Options::default(), None).unwrap();
    let found = ranges(&h, &solution, None).unwrap();
    assert_eq!(found.ranges.len(), 1);
    let range = &found.ranges[0];
    assert!((range.least.unwrap() + 0.8).abs() < 1e-8 && (range.largest.unwrap() - 0.8).abs() < 1e-8, "{range:?}");
}

#[test]
fn a_question_with_a_posture_task_is_unique_and_one_without_is_not() {
    let mut question = biped::standing(2e6);
    question.include.uniqueness = true;
    let full = solved(&question).uniqueness.unwrap();
    assert_eq!((full.directions, full.ranges.len()), (0, 0));
    question.tasks.retain(|t| t.name != "posture" && t.name != "load 1");
    let loose = solved(&question);
    let found = loose.uniqueness.as_ref().unwrap();
    assert!(found.directions > 0 && !found.ranges.is_empty());
    for range in &found.ranges {
        let slack = 1e-6 * (1.0 + range.value.abs());
        assert!(range.least.is_none_or(|l| l <= range.value + slack), "{range:?}");
        assert!(range.largest.is_none_or(|l| l >= range.value - slack), "{range:?}");
    }
    println!("{} solves, {} ranges, inexact {}", found.solves, found.ranges.len(), found.ranges.iter().filter(|r| !r.exact).count());
    // The ends are reached: a lower priority that wants a torque far away brings it just there.
    let mut tried = 0;
    for range in found.ranges.iter().filter(|r| r.name.starts_with("torque:")).take(3) {
        let joint = question.model.joint(&range.name["torque:".len()..]).unwrap();
        for (far, end) in [(-1e3, range.least), (1e3, range.largest)] {
            let mut pulled = question.clone();
            pulled.include.uniqueness = false;
            let mut task = pulled.tasks[0].clone();
            task.name = "far".into();
            task.importance = Importance::Priority(9);
            task.kind = TaskKind::Effort(vec![(joint, far)]);
            pulled.tasks.push(task);
            let torque = answer(&pulled).motion.unwrap().torques[joint];
            assert!((torque - end.expect("torques are limited")).abs() < 1e-5, "{range:?} {torque}");
            tried += 1;
        }
    }
    assert!(tried > 0);
}

// ---- derivatives ----

type Parts = (Vec<f64>, Vec<f64>, Vec<f64>);

/// Whole solves a little to each side; none where one of them is not certified (nothing to compare with).
fn by_differences(question: &Question, parameter: Parameter, h: f64) -> Option<Parts> {
    let mut plain = question.clone();
    plain.include = Include::default();
    let at = |factor: f64| -> Option<Parts> {
        let answer = answer(&varied(&plain, parameter, factor));
        if answer.status != Status::Solved {
            return None;
        }
        let wrenches: Vec<f64> = answer.soles.iter().flat_map(|s| s.wrench.unwrap().to_vec6().as_slice().to_vec()).collect();
        let margins: Vec<f64> = answer.margins.iter().map(|m| m.margin).collect();
        Some((answer.motion?.torques, wrenches, margins))
    };
    let (plus, minus) = (at(1.0 + h)?, at(1.0 - h)?);
    let half = |a: &[f64], b: &[f64]| a.iter().zip(b).map(|(a, b)| (a - b) / (2.0 * h)).collect::<Vec<f64>>();
    Some((half(&plus.0, &minus.0), half(&plus.1, &minus.1), half(&plus.2, &minus.2)))
}

fn worst(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len());
    a.iter().zip(b).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max)
}

fn size(a: &[f64]) -> f64 {
    a.iter().fold(0.0, |m, v| m.max(v.abs()))
}

/// Compares every derivative with central differences of whole solves; returns the largest derivative of a torque seen.
fn assert_derivatives(what: &str, question: &Question) -> f64 {
    let mut question = question.clone();
    question.include.sensitivity = true;
    let answer = solved(&question);
    let found: Sensitivity = *answer.sensitivity.clone().unwrap();
    assert_eq!(found.why_not, None, "{what}");
    assert!(found.near.is_empty(), "{what}: {:?}", found.near);
    let (mut largest, mut compared) = (0.0f64, 0);
    let over_all = |part: &dyn Fn(&Derivative) -> f64| found.derivatives.iter().map(part).fold(0.0, f64::max);
    let largest_of = [
        over_all(&|d| size(&d.torques)),
        over_all(&|d| d.wrenches.iter().map(|w| size(w)).fold(0.0, f64::max)),
        over_all(&|d| size(&d.margins)),
    ];
    for derivative in &found.derivatives {
        let Derivative { parameter, torques, wrenches, margins, .. } = derivative;
        let Some((t, w, m)) = [1e-4, 0.9e-4, 1.1e-4].iter().find_map(|&h| by_differences(&question, *parameter, h)) else {
            println!("{what}: nothing to compare {parameter:?} with");
            continue;
        };
        compared += 1;
        let wrenches: Vec<f64> = wrenches.iter().flatten().copied().collect();
        // Relative to the largest derivative of its kind by any parameter; beside it differences of answers, whose own 1e-9 N is
        // divided by the step.
        // Margins of the vertex set are margins of vertex forces, which the tie-break alone decides and which whole solves give
        // to about 1e-7 N (measured): over the step, 2e-3.
        let vertex = |i: usize| answer.margins[i].part.starts_with("vertex");
        let pick = |v: &[f64], wanted: bool| -> Vec<f64> {
            v.iter().enumerate().filter(|(i, _)| vertex(*i) == wanted).map(|(_, v)| *v).collect()
        };
        let cases = [
            ("torque", 0, torques.clone(), t, 2e-5),
            ("wrench", 1, wrenches, w, 2e-5),
            ("margin", 2, pick(margins, false), pick(&m, false), 2e-5),
            ("vertex margin", 2, pick(margins, true), pick(&m, true), 2e-3),
        ];
        for (name, kind, own, theirs, noise) in &cases {
            let allowed = 1e-5 * largest_of[*kind] + noise;
            let off: Vec<_> = own.iter().zip(theirs).enumerate().filter(|(_, (a, b))| (*a - *b).abs() > allowed).collect();
            assert!(worst(own, theirs) < allowed, "{what} {parameter:?} {name}: {off:?} of {}", size(theirs));
        }
        largest = largest.max(size(torques));
    }
    println!("{what}: {compared} of {} derivatives compared, largest of a torque {largest}", found.derivatives.len());
    assert!(2 * compared >= found.derivatives.len(), "{what}: only {compared} compared");
    largest
}

/// Standing, but sinking and leaning: the ground's reaction matters.
fn moving(stiffness: f64) -> Question {
    let mut question = biped::standing(stiffness);
    question.state.base_twist.linear = Vec3::new(0.03, -0.02, -0.02);
    question.state.base_twist.angular = Vec3::new(0.02, 0.1, -0.03);
    question
}

#[test]
fn derivatives_without_friction_in_play() {
    for rule in [TickRule::BackwardEuler, TickRule::Trapezoid] {
        for stiffness in [3e5, 2e6] {
            let mut question = moving(stiffness);
            question.tick.rule = rule;
            assert!(assert_derivatives("moving", &question) > 1e-3);
        }
    }
}

#[test]
fn derivatives_where_torques_bind() {
    let mut question = moving(2e6);
    let plain = solved(&question);
    let torques = plain.motion.unwrap().torques;
    let (joint, largest) =
        torques.iter().enumerate().take(12).map(|(j, t)| (j, t.abs())).max_by(|a, b| a.1.total_cmp(&b.1)).unwrap();
    let LimitKind::Torque(list) = &mut question.limits[0].kind else { panic!() };
    list.iter_mut().filter(|t| t.0 == joint).for_each(|t| t.1 = 0.9 * largest);
    assert!(assert_derivatives("torque binds", &question) > 1e-3);
    // The same, softly.
    question.limits[0].treatment = Treatment::Soft { priority: 2, weight: 1.0, scale: 10.0 };
    assert!(assert_derivatives("soft torque", &question) > 1e-3);
}

/// Friction that binds under both soles. With `different`, each sole has a coefficient of its own.
fn slipping(set: FrictionSet, facets: Option<usize>, treatment: Treatment, push: f64, different: bool) -> Question {
    let mut question = moving(2e6);
    for (index, contact) in question.contacts.iter_mut().enumerate() {
        let torsion = (set == FrictionSet::Wrench).then_some(0.03);
        let coefficient = 0.05 + if different && index == 1 { 0.01 } else { 0.0 };
        contact.friction = Some(Friction { set, coefficient, torsion, facets, treatment });
        // Different under each sole, so that nothing is symmetric.
        contact.ground.measured = Some(Wrench {
            force: Vec3::new(4.0 + index as f64, -2.0, 195.0 - 6.0 * index as f64),
            moment: Vec3::new(0.5, -1.0, 0.2),
        });
    }
    if let TaskKind::MomentumSecondRate(aim) = &mut question.tasks[0].kind {
        aim.center.x += push;
        aim.center.y += 0.5 * push;
    }
    if different {
        // Momentum and load in one priority: how the load is shared is then decided where friction binds.
        question.tasks.iter_mut().filter(|t| t.name.starts_with("load")).for_each(|t| t.importance = Importance::Priority(1));
    }
    question.include.sensitivity = true;
    question
}

/// Equal coefficients under both soles leave the first priority free to share the load; the least change of one of them
/// makes it put the load where friction is better. Whole solves jump, and the derivative is refused.
#[test]
fn a_jump_has_no_derivative() {
    let question = slipping(FrictionSet::Wrench, Some(4), Treatment::Hard, 0.06, false);
    let found = solved(&question);
    let sensitivity = found.sensitivity.as_ref().unwrap();
    let parameter = Parameter { contact: 0, kind: ParameterKind::Friction };
    assert!(sensitivity.undefined.contains(&parameter), "{:?}", sensitivity.undefined);
    let plain = found.soles[0].normal_force.unwrap();
    let jumps = [1e-3, -1e-3].map(|by| answer(&varied(&question, parameter, 1.0 + by)).soles[0].normal_force.unwrap() - plain);
    // A thousandth of the coefficient moves newtons: as a derivative, thousands.
    assert!(jumps.iter().any(|j| j.abs() > 1.0), "{jumps:?}");
}

#[test]
fn derivatives_where_friction_binds() {
    let sets = [
        (FrictionSet::Wrench, None),
        (FrictionSet::Wrench, Some(4)),
        (FrictionSet::Vertex, None),
        (FrictionSet::Vertex, Some(4)),
    ];
    let treatments = [Treatment::Hard, Treatment::Soft { priority: 1, weight: 1.0, scale: 1.0 }];
    let (mut tried, mut refused) = (Vec::new(), Vec::new());
    for (set, facets) in sets {
        for (hardness, treatment) in treatments.into_iter().enumerate() {
            for push in [0.06, 0.08, 0.1, 0.15] {
                let question = slipping(set, facets, treatment, push, true);
                let found = answer(&question);
                let what = format!("{set:?} {facets:?} {} {push}", ["hard", "soft"][hardness]);
                if !found.binding.iter().any(|b| b.limit.starts_with("friction:")) {
                    continue;
                }
                let sensitivity = found.sensitivity.as_ref().unwrap();
                if found.status == Status::IllPosed {
                    assert!(sensitivity.derivatives.is_empty() && sensitivity.why_not.is_some());
                }
                if found.status != Status::Solved || sensitivity.why_not.is_some() || !sensitivity.near.is_empty() {
                    refused.push(format!("{what}: {:?} {:?} {:?}", found.status, sensitivity.why_not, sensitivity.near));
                    continue;
                }
                assert!(assert_derivatives(&what, &question) > 1e-3);
                let mu = sensitivity.derivatives.iter().filter(|d| d.parameter.kind == ParameterKind::Friction);
                let matters = mu.map(|d| size(&d.torques)).fold(0.0, f64::max) > 1e-3;
                assert!(matters || !sensitivity.undefined.is_empty(), "{what}: mu matters where it binds");
                tried.push(what);
            }
        }
    }
    println!("differentiated {tried:#?}, refused {refused:#?}");
    assert!(tried.len() >= 4, "{tried:?}");
}

/// A torque limit just above the torque that the answer needs: the active set is about to change, and that is said.
#[test]
fn a_change_of_the_active_set_is_announced() {
    let mut question = moving(2e6);
    let torques = solved(&question).motion.unwrap().torques;
    question.include.sensitivity = true;
    let with_bound = |joint: usize, factor: f64| {
        let mut question = question.clone();
        let LimitKind::Torque(list) = &mut question.limits[0].kind else { panic!() };
        list.iter_mut().filter(|t| t.0 == joint).for_each(|t| t.1 = factor * torques[joint].abs());
        (answer(&question), question.model.joints[joint].name.clone())
    };
    let mut tried = 0;
    // Joints of the legs: those of the arms are at their limits already.
    for joint in 0..12 {
        for (factor, expected) in [(1.0 + 2e-5, true), (1.2, false)] {
            let (found, name) = with_bound(joint, factor);
            if found.status != Status::Solved {
                println!("{name} {factor}: {:?}, not tried", found.status);
                continue;
            }
            let found = found.sensitivity.unwrap();
            let announced = found.near.iter().any(|n| n.limit == "torque" && n.part.starts_with(&name) && !n.binds);
            assert_eq!(announced, expected, "{name} {factor}: {:?}", found.near);
            let rate = found.derivatives[0].torques[joint].abs();
            if expected && rate > 1e-2 {
                // Derived: the room is 2e-5 of the torque, and it closes at the derivative's rate.
                let reach = found.derivatives[0].reaches.unwrap();
                let derived = 2e-5 * torques[joint].abs() / rate;
                assert!(reach <= derived * (1.0 + 1e-3), "{name}: {reach} {derived}");
            }
            tried += 1;
        }
    }
    assert!(tried >= 12, "{tried}");
}

// ---- spread ----

#[test]
fn sigma_points_samples_and_derivatives_agree() {
    let mut question = moving(5e5);
    question.include.sensitivity = true;
    let deviation = [0.05, 0.04];
    let correlation = 0.3;
    let cross = correlation * deviation[0] * deviation[1];
    let covariance = [[deviation[0] * deviation[0], cross], [cross, deviation[1] * deviation[1]]];
    for shared in [true, false] {
        question.include.spread = Some(SpreadAim { covariance, shared, samples: 200, seed: 5 });
        let found = solved(&question);
        let spread = found.spread.unwrap();
        let samples = spread.samples.as_ref().unwrap();
        let sigma = &spread.sigma_points;
        assert_eq!((samples.answered, samples.failed, sigma.failed), (200, 0, 0));
        let derivatives = found.sensitivity.unwrap().derivatives;
        let n = samples.answered as f64;
        for joint in 0..sigma.torque_deviation.len() {
            let (a, b) = (sigma.torque_deviation[joint], samples.torque_deviation[joint]);
            // Derived: the relative error of a sample deviation is 1/sqrt(2n); four of them, and 2 % for curvature.
            assert!((a - b).abs() < (4.0 / (2.0 * n).sqrt() + 0.02) * a + 1e-6, "joint {joint}: {a} {b}");
            let apart = (sigma.torque_mean[joint] - samples.torque_mean[joint]).abs();
            assert!(apart < 4.0 * a / n.sqrt() + 0.02 * a + 1e-6, "joint {joint}");
            // To first order the variance is g'Cg.
            let part = |contact: usize, kind| {
                derivatives.iter().find(|d| d.parameter == Parameter { contact, kind }).map_or(0.0, |d| d.torques[joint])
            };
            let soles: Vec<[f64; 2]> =
                (0..2).map(|c| [part(c, ParameterKind::Stiffness), part(c, ParameterKind::Damping)]).collect();
            let form = |g: [f64; 2]| {
                g[0] * g[0] * covariance[0][0] + 2.0 * g[0] * g[1] * covariance[0][1] + g[1] * g[1] * covariance[1][1]
            };
            let variance = if shared {
                form([soles[0][0] + soles[1][0], soles[0][1] + soles[1][1]])
            } else {
                form(soles[0]) + form(soles[1])
            };
            assert!((variance.sqrt() - a).abs() < 0.03 * a + 1e-6, "joint {joint}: {} {a}", variance.sqrt());
        }
        for i in 0..sigma.margin_positive.len() {
            let (a, b) = (sigma.margin_positive[i], samples.margin_positive[i]);
            let allowed = 4.0 * (a * (1.0 - a) / n).sqrt() + 0.03;
            assert!((a - b).abs() < allowed, "{:?}: {a} {b}", found.margins[i]);
        }
        println!("torque spread {:?}", sigma.torque_deviation);
    }
    // The same seed, the same bits.
    let again = solved(&question).spread.unwrap();
    assert_eq!(again, solved(&question).spread.unwrap());
}

