//! Common mistakes, each made on purpose: the question as a controller would put it that makes the mistake.
//!
//! | code | what is mistaken |
//! |---|---|
//! | `gravity` | its sign; 2 % more or less; 9.81 for the request's; left out |
//! | `friction_coefficient` | another of 0.3, 0.4, ... 1.0 under every sole |
//! | `limit_ignored` | each limit that binds or is broken, one at a time, and all of them |
//! | `priorities` | inverted; two neighbours exchanged; strict order given up for weights |
//! | `stiffness`, `damping` | 20 % more or less, alone and together, under every sole |
//! | `delay` | the state is one tick old; the request's latency is not predicted over |
//! | `velocity_axes` | linear, angular or both parts of the base velocity read in world axes for base axes or the other way round |
//! | `quaternion` | `[w, x, y, z]` for `[x, y, z, w]`; the conjugate |
//! | `rotor_inertia`, `joint_friction`, `external` | left out |
//! | `rigid_ground` | soft soles taken for rigid: momentum at its second rate or at its first, wrenches approached or asked for |
//! | `tick_rule` | another one |
//!
//! Mistakes in the torques themselves (a sign, two joints exchanged) need no solve; they are in `causes`.

use std::sync::Arc;

use super::earlier::{Earlier, one_tick_ago};
use crate::contact::{Law, TickRule};
use crate::dynamics::Axes;
use crate::explain::{Parameter, ParameterKind, varied};
use crate::problem::question::{Importance, Question, Task, TaskKind, Treatment};
use crate::reference::Work;
use crate::spatial::{Mat3, quaternion_of, rotation_from_quaternion};

/// Friction coefficients tried.
const COEFFICIENTS: [f64; 8] = [0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0];
/// Factors on stiffness and damping.
const GROUND_FACTORS: [f64; 2] = [1.2, 0.8];
/// Most mistaken questions of one audit.
pub const MOST_QUESTIONS: usize = 100;

/// A mistaken question.
#[derive(Debug, Clone)]
pub struct Mistaken {
    /// Code, see the table above.
    pub code: &'static str,
    /// What it concerns; empty where all of the question.
    pub subject: String,
    /// In words.
    pub text: String,
    /// The question with the mistake made.
    pub question: Question,
    /// False where the controller's own targets have no place in the mistaken question.
    pub keeps_targets: bool,
}

/// Every mistaken question that differs from `question`. `work` is its own solve, `suspects` names limits that bind or are broken,
/// `torques` are the claimed ones.
pub fn all(question: &Question, work: &Work, suspects: &[String], torques: &[f64]) -> Vec<Mistaken> {
    let mut out = List { question, entries: Vec::new() };
    gravity(&mut out);
    friction(&mut out);
    limits(&mut out, suspects);
    priorities(&mut out);
    ground(&mut out);
    delay(&mut out, work, torques);
    velocity_axes(&mut out);
    quaternion(&mut out);
    left_out(&mut out);
    rigid(&mut out, work);
    tick_rules(&mut out);
    out.entries.truncate(MOST_QUESTIONS);
    out.entries
}

struct List<'a> {
    question: &'a Question,
    entries: Vec<Mistaken>,
}

impl List<'_> {
    fn add(&mut self, code: &'static str, subject: &str, text: impl Into<String>, change: impl FnOnce(&mut Question)) {
        let mut question = self.question.clone();
        change(&mut question);
        self.push(code, subject, text, question, true);
    }

    fn push(&mut self, code: &'static str, subject: &str, text: impl Into<String>, question: Question, keeps_targets: bool) {
        self.entries.push(Mistaken { code, subject: subject.into(), text: text.into(), question, keeps_targets });
    }
}

fn gravity(out: &mut List) {
    let size = out.question.gravity.norm();
    if size == 0.0 {
        return;
    }
    out.add("gravity", "", "the sign of gravity flipped", |q| q.gravity = -q.gravity);
    out.add("gravity", "", "gravity 2 % too large", |q| q.gravity *= 1.02);
    out.add("gravity", "", "gravity 2 % too small", |q| q.gravity *= 0.98);
    out.add("gravity", "", "gravity left out", |q| q.gravity *= 0.0);
    if size != 9.81 && (size - 9.81).abs() < 0.1 {
        out.add("gravity", "", format!("gravity of 9.81 m/s^2 for {size}"), |q| q.gravity *= 9.81 / size);
    }
}

fn friction(out: &mut List) {
    for coefficient in COEFFICIENTS {
        let differs = |q: &Question| q.contacts.iter().any(|c| c.friction.is_some_and(|f| f.coefficient != coefficient));
        if differs(out.question) {
            out.add("friction_coefficient", "", format!("a friction coefficient of {coefficient}"), |q| {
                q.contacts.iter_mut().filter_map(|c| c.friction.as_mut()).for_each(|f| f.coefficient = coefficient);
            });
        }
    }
}

/// Takes the limit of this name away.
fn without(question: &mut Question, name: &str) {
    question.limits.retain(|limit| limit.name != name);
    let soles = question.model.clone();
    for contact in &mut question.contacts {
        let sole = &soles.soles[contact.sole].name;
        if name == crate::problem::limits::friction_group(sole) {
            contact.friction = None;
        } else if name == format!("normal_force:{sole}") {
            contact.normal_force = None;
        } else if name == format!("wrench_rate:{sole}") {
            contact.wrench_rate = None;
        }
    }
}

fn limits(out: &mut List, suspects: &[String]) {
    for name in suspects {
        out.add("limit_ignored", name, format!("the limit {name} ignored"), |q| without(q, name));
    }
    if suspects.len() > 1 {
        out.add("limit_ignored", "", "all limits ignored", |q| {
            q.limits.clear();
            for contact in &mut q.contacts {
                (contact.friction, contact.normal_force, contact.wrench_rate) = (None, None, None);
            }
        });
    }
}

/// Every priority of the question, `to` applied.
fn reordered(question: &mut Question, to: impl Fn(u32) -> u32) {
    let treatment = |treatment: &mut Treatment| {
        if let Treatment::Soft { priority, .. } = treatment {
            *priority = to(*priority);
        }
    };
    for task in &mut question.tasks {
        if let Importance::Priority(priority) = &mut task.importance {
            *priority = to(*priority);
        }
    }
    question.limits.iter_mut().for_each(|limit| treatment(&mut limit.treatment));
    for contact in &mut question.contacts {
        contact.friction.iter_mut().for_each(|f| treatment(&mut f.treatment));
        contact.normal_force.iter_mut().for_each(|f| treatment(&mut f.treatment));
        contact.wrench_rate.iter_mut().for_each(|f| treatment(&mut f.treatment));
    }
}

fn priorities(out: &mut List) {
    let of = |task: &Task| match task.importance {
        Importance::Priority(priority) => Some(priority),
        Importance::MustHold => None,
    };
    let mut order: Vec<u32> = out.question.tasks.iter().filter_map(of).collect();
    order.sort_unstable();
    order.dedup();
    let (Some(&first), Some(&last)) = (order.first(), order.last()) else { return };
    if first == last {
        return;
    }
    out.add("priorities", "", "the order of priorities inverted", |q| reordered(q, |p| (first + last).saturating_sub(p)));
    if order.len() > 2 {
        for pair in order.windows(2) {
            let (a, b) = (pair[0], pair[1]);
            out.add("priorities", &format!("{a} and {b}"), format!("priorities {a} and {b} exchanged"), |q| {
                reordered(q, |p| if p == a { b } else if p == b { a } else { p });
            });
        }
    }
    out.add("priorities", "", "all priorities weighed against each other instead of strictly in order", |q| reordered(q, |_| first));
}

fn ground(out: &mut List) {
    let soft = |q: &Question| q.contacts.iter().any(|c| matches!(c.ground.law, Law::Bonded(_)));
    if !soft(out.question) {
        return;
    }
    let kinds: [(&'static str, &str, &[ParameterKind]); 3] = [
        ("stiffness", "stiffness", &[ParameterKind::Stiffness]),
        ("damping", "damping", &[ParameterKind::Damping]),
        ("stiffness", "stiffness and damping", &[ParameterKind::Stiffness, ParameterKind::Damping]),
    ];
    for (code, what, parameters) in kinds {
        for factor in GROUND_FACTORS {
            let text = format!("{what} of the ground {:.0} % too {}", 100.0 * (factor - 1.0f64).abs(), if factor > 1.0 { "large" } else { "small" });
            out.add(code, "", text, |q| {
                for contact in 0..q.contacts.len() {
                    for &kind in parameters {
                        *q = varied(q, Parameter { contact, kind }, factor);
                    }
                }
            });
        }
    }
}

fn delay(out: &mut List, work: &Work, torques: &[f64]) {
    if let Some(before) = one_tick_ago(&work.question, torques, Earlier::ByLaw) {
        out.push("delay", "", "the state one tick old", before, true);
    }
    if work.question.contacts.iter().any(|c| c.ground.measured.is_some())
        && let Some(before) = one_tick_ago(&work.question, torques, Earlier::ByRule)
    {
        out.push("delay", "measured wrenches", "the state one tick old, its wrenches those that the tick rule carries to the present ones", before, true);
    }
    if out.question.latency.is_some() {
        out.add("delay", "", "the latency not predicted over", |q| q.latency = None);
    }
}

fn velocity_axes(out: &mut List) {
    if out.question.model.joint_offset() == 0 {
        return;
    }
    let axes = out.question.velocity_axes;
    let misread = |given: Axes, r: &Mat3| if given == Axes::World { *r } else { r.transpose() };
    let word = |given: Axes| if given == Axes::World { "base axes" } else { "world axes" };
    let mut add = |linear: bool, angular: bool, part: &str, read: &str| {
        out.add("velocity_axes", part, format!("the {part} velocity of the base read in {read}"), |q| {
            let r = q.state.base_pose.rotation;
            if linear {
                q.state.base_twist.linear = misread(axes.linear, &r) * q.state.base_twist.linear;
            }
            if angular {
                q.state.base_twist.angular = misread(axes.angular, &r) * q.state.base_twist.angular;
            }
        });
    };
    add(true, false, "linear", word(axes.linear));
    add(false, true, "angular", word(axes.angular));
    add(true, true, "linear and angular", "the other axes");
}

fn quaternion(out: &mut List) {
    let turned = |q: &mut Question, wrong: Mat3| {
        // Numbers given in base axes stay the numbers they are.
        let given = q.velocity_axes.twist_from_world(&q.state.base_pose.rotation, &q.state.base_twist);
        q.state.base_pose.rotation = wrong;
        q.state.base_twist = q.velocity_axes.twist_to_world(&wrong, &given);
    };
    out.add("quaternion", "", "the base quaternion read as [w, x, y, z]", |q| {
        let [x, y, z, w] = quaternion_of(&q.state.base_pose.rotation);
        turned(q, rotation_from_quaternion(&[y, z, w, x]));
    });
    out.add("quaternion", "", "the base quaternion's conjugate (world in base axes)", |q| {
        turned(q, q.state.base_pose.rotation.transpose());
    });
}

fn left_out(out: &mut List) {
    if out.question.model.joints.iter().any(|joint| joint.rotor_inertia > 0.0) {
        out.add("rotor_inertia", "", "rotor inertia left out", |q| {
            Arc::make_mut(&mut q.model).joints.iter_mut().for_each(|joint| joint.rotor_inertia = 0.0);
        });
    }
    if out.question.model.joints.iter().any(|joint| joint.viscous_friction > 0.0 || joint.coulomb_friction > 0.0) {
        out.add("joint_friction", "", "joint friction left out", |q| {
            for joint in &mut Arc::make_mut(&mut q.model).joints {
                (joint.viscous_friction, joint.coulomb_friction) = (0.0, 0.0);
            }
        });
    }
    if !out.question.external.is_empty() {
        out.add("external", "", "external wrenches left out", |q| q.external.clear());
    }
}

/// A second-rate momentum law whose fastest derivative is neglected: gains and scales over the gain on the rate.
fn first_rate(task: &mut Task) {
    let TaskKind::MomentumSecondRate(aim) = &task.kind else { return };
    let mut aim = aim.clone();
    let over = |value: f64, gain: f64| if gain > 0.0 { value / gain } else { 0.0 };
    let [linear, angular] = aim.rate_gain;
    aim.position_gain = over(aim.position_gain, linear);
    aim.momentum_gain = [over(aim.momentum_gain[0], linear), over(aim.momentum_gain[1], angular)];
    if linear > 0.0 {
        task.scale /= linear;
    }
    if angular > 0.0 {
        task.scale_angular /= angular;
    }
    task.kind = TaskKind::MomentumRate(aim);
}

fn rigid(out: &mut List, work: &Work) {
    if !work.scene.soles.iter().any(|sole| !sole.map.rigid) {
        return;
    }
    let mut hard = out.question.clone();
    for (contact, sole) in hard.contacts.iter_mut().zip(&work.scene.soles) {
        if matches!(contact.ground.law, Law::Bonded(_)) {
            contact.ground.law = Law::Rigid { stop: false };
            contact.ground.measured = Some(sole.map.now);
        }
    }
    let second = |task: &Task| matches!(task.kind, TaskKind::MomentumSecondRate(_));
    out.push("rigid_ground", "", "the ground taken for rigid", hard.clone(), true);
    if !hard.tasks.iter().any(second) {
        return;
    }
    hard.tasks.iter_mut().for_each(first_rate);
    out.push("rigid_ground", "momentum", "the ground taken for rigid and momentum ruled at its first rate", hard.clone(), false);
    let approached = |task: &Task| matches!(task.kind, TaskKind::Wrench { approach: Some(_), .. });
    if hard.tasks.iter().any(approached) {
        for task in &mut hard.tasks {
            if let TaskKind::Wrench { approach, .. } = &mut task.kind {
                *approach = None;
            }
        }
        let text = "the ground taken for rigid, momentum ruled at its first rate and wrenches asked for at once";
        out.push("rigid_ground", "momentum and wrenches", text, hard, false);
    }
}

fn tick_rules(out: &mut List) {
    let rules = [
        (TickRule::BackwardEuler, "backward_euler"),
        (TickRule::Trapezoid, "trapezoid"),
        (TickRule::Explicit, "explicit"),
        (TickRule::Held, "held"),
    ];
    for (rule, word) in rules {
        if rule != out.question.tick.rule {
            out.add("tick_rule", word, format!("the tick rule {word}"), |q| q.tick.rule = rule);
        }
    }
}
