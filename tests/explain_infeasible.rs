//! Infeasible requests, explained: proofs recomputed here at higher precision, relaxations tried, shrunk and shown least.

#[path = "common/biped.rs"]
mod biped;
mod solve_support;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use solve_support::{close, conic, hierarchy};
use underfoot::conic::{Cone, Hierarchy};
use underfoot::explain::farkas;
use underfoot::explain::infeasible::{Explanation, explain, natural_sizes};
use underfoot::explain::relax::{Relaxation, relaxed};
use underfoot::problem::question::*;
use underfoot::problem::scene::Scene;
use underfoot::problem::assemble;
use underfoot::reference::{self, answer};
use underfoot::solve::{self, HierarchySolution, Options};
use underfoot::spatial::{Vec3, Wrench};

fn run(h: &Hierarchy) -> HierarchySolution {
    solve::solve(h, &Options::default(), None).expect("well formed")
}

/// Hard rows alone.
fn feasible(h: &Hierarchy) -> solve::Status {
    run(&Hierarchy { levels: Vec::new(), ..h.clone() }).status
}

fn explained(h: &Hierarchy) -> Explanation {
    let solution = run(h);
    assert_eq!(solution.status, solve::Status::Infeasible);
    explain(h, &natural_sizes(h), &solution, None).expect("explained")
}

/// Rows named by the given groups; `physics` where a name starts with `physics`.
fn named(mut h: Hierarchy, groups: &[&str]) -> Hierarchy {
    for (name, group) in h.hard.names.iter_mut().zip(groups) {
        name.group = group.to_string();
        name.physics = group.starts_with("physics");
        name.scale = 1.0;
        name.unit = "N";
    }
    for column in &mut h.columns {
        column.unit = "N";
        column.scale = 1.0;
    }
    h
}

// ---- double-double, written for this test alone ----

#[derive(Clone, Copy)]
struct Double(f64, f64);

fn two_sum(a: f64, b: f64) -> Double {
    let s = a + b;
    let v = s - a;
    Double(s, (a - (s - v)) + (b - v))
}

fn two_product(a: f64, b: f64) -> Double {
    // Dekker's splitting, no fused operation.
    let split = |x: f64| {
        let c = 134217729.0 * x;
        let high = c - (c - x);
        (high, x - high)
    };
    let p = a * b;
    let ((ah, al), (bh, bl)) = (split(a), split(b));
    Double(p, ((ah * bh - p) + ah * bl + al * bh) + al * bl)
}

impl Double {
    fn plus(self, other: Double) -> Double {
        let s = two_sum(self.0, other.0);
        two_sum(s.0, s.1 + self.1 + other.1)
    }
}

/// (b'z, A'z) in double-double, z checked to lie in the dual cone.
fn recomputed(h: &Hierarchy, z: &[f64]) -> (f64, Vec<f64>) {
    let mut at = 0;
    for cone in &h.hard.cones {
        let part = &z[at..at + cone.dimension()];
        match cone {
            Cone::Zero(_) => {}
            Cone::Nonnegative(_) => assert!(part.iter().all(|v| *v >= 0.0)),
            Cone::SecondOrder(_) => {
                let tail = part[1..].iter().map(|v| v * v).sum::<f64>().sqrt();
                assert!(part[0] >= tail - 1e-15 * part[0].abs(), "{part:?}");
            }
        }
        at += cone.dimension();
    }
    let mut value = Double(0.0, 0.0);
    let mut gradient = vec![Double(0.0, 0.0); h.columns.len()];
    for row in 0..h.hard.rhs.len() {
        value = value.plus(two_product(h.hard.rhs[row], z[row]));
        for (j, v) in h.hard.matrix.row(row) {
            gradient[j] = gradient[j].plus(two_product(v, z[row]));
        }
    }
    (value.0, gradient.iter().map(|g| g.0).collect())
}

/// `sum |A'z|_j X_j` with the stated bounds.
fn spill(h: &Hierarchy, gradient: &[f64]) -> f64 {
    gradient.iter().zip(&h.columns).map(|(g, c)| g.abs() * farkas::bound(c.unit) / c.scale).sum()
}

fn assert_proof(h: &Hierarchy, explanation: &Explanation) {
    let proof = explanation.proof.as_ref().expect("a proof");
    assert!(proof.holds, "{} {}", proof.value, proof.spill);
    let (value, gradient) = recomputed(h, &proof.projected);
    assert!(value + spill(h, &gradient) < 0.0);
    assert!((value - proof.value).abs() <= 1e-14 * value.abs());
}

/// Weak duality in double-double (stated in the library): no relaxation has a smaller sum than this.
fn lower_bound(h: &Hierarchy, relaxation: &Relaxation, relaxable: impl Fn(&str) -> bool) -> f64 {
    let z = &relaxation.multipliers;
    let (value, gradient) = recomputed(h, z);
    let excess = -value - spill(h, &gradient);
    let mut size = 0.0;
    let mut at = 0;
    for cone in &h.hard.cones {
        let heads: Vec<usize> = match cone {
            Cone::SecondOrder(_) => vec![at],
            other => (at..at + other.dimension()).collect(),
        };
        for i in heads {
            if !h.hard.names[i].physics && relaxable(&h.hard.names[i].group) {
                size += z[i] * z[i];
            }
        }
        at += cone.dimension();
    }
    if excess > 0.0 && size > 0.0 { excess * excess / size } else { 0.0 }
}

// ---- published and derived small cases ----

/// Derived: x + y <= 1, x >= 1, y >= 1 lack 1 together; spread evenly (1/3, 1/3, 1/3) is least, sum 1/3. Each alone
/// would need 1. Proof proportional to (1, 1, 1).
#[test]
fn three_half_planes() {
    let rows = conic(2, &[Cone::Nonnegative(3)], &[(&[1., 1.], 1.), (&[-1., 0.], -1.), (&[0., -1.], -1.)]);
    let h = named(hierarchy(2, rows, vec![]), &["sum", "x", "y"]);
    let explanation = explained(&h);
    assert_proof(&h, &explanation);
    let proof = explanation.proof.as_ref().unwrap();
    close(&proof.projected, &[1., 1., 1.], 1e-7);
    let relaxation = explanation.relaxation.as_ref().unwrap();
    close(&relaxation.deltas, &[1. / 3.; 3], 1e-10);
    assert!((relaxation.sum - 1. / 3.).abs() < 1e-10);
    assert!((relaxation.proved - relaxation.sum).abs() < 1e-8, "{relaxation:?}");
    assert!(relaxation.groups.iter().all(|g| (g.share - 1. / 3.).abs() < 1e-10));
    for alone in &explanation.alone {
        assert!((alone.needs.as_ref().unwrap().rows[0].amount - 1.0).abs() < 1e-9);
    }
    assert_eq!(explanation.irreducible.groups, ["sum", "x", "y"]);
}

/// Contact (derived): f_t = (30, 40) prescribed, fn <= 80, mu = .5. s in SOC(.5 fn, fx, fy) lacks 10 along its axis, or the
/// cap lacks 20. With f_t physics: minimise c^2 + d^2 with .5 (80 + c) + d = 50: c = 4, d = 8.
#[test]
fn a_cone_and_a_cap() {
    let rows: [(&[f64], f64); 6] = [
        (&[1., 0., 0.], 30.),
        (&[0., 1., 0.], 40.),
        (&[0., 0., 1.], 80.),
        (&[0., 0., -0.5], 0.),
        (&[-1., 0., 0.], 0.),
        (&[0., -1., 0.], 0.),
    ];
    let cones = [Cone::Zero(2), Cone::Nonnegative(1), Cone::SecondOrder(3)];
    let groups = ["physics", "physics", "cap", "friction", "friction", "friction"];
    let h = named(hierarchy(3, conic(3, &cones, &rows), vec![]), &groups);
    let explanation = explained(&h);
    assert_proof(&h, &explanation);
    close(&explanation.proof.as_ref().unwrap().projected, &[-0.6, -0.8, 0.5, 1., -0.6, -0.8], 1e-6);
    let relaxation = explanation.relaxation.as_ref().unwrap();
    close(&[relaxation.deltas[2], relaxation.deltas[3]], &[4., 8.], 1e-7);
    assert!((relaxation.proved / relaxation.sum - 1.0).abs() < 1e-7, "{relaxation:?}");
    let alone: Vec<f64> = explanation.alone.iter().map(|a| a.needs.as_ref().unwrap().rows[0].amount).collect();
    close(&alone, &[20., 10.], 1e-7);
    // Must-hold instead of physics: the tangential force may give way too, along itself. By Lagrange: with m the
    // multiplier of the gap, cap m/2, cone m, tangential m: m (1/4 + 1 + 1) = 10.
    let groups = ["pull", "pull", "cap", "friction", "friction", "friction"];
    let h = named(h, &groups);
    let explanation = explained(&h);
    let m = 10.0 / 2.25;
    let relaxation = explanation.relaxation.as_ref().unwrap();
    close(&relaxation.deltas[..4], &[-0.6 * m, -0.8 * m, 0.5 * m, m], 1e-7);
    let share = |group: &str| relaxation.groups.iter().find(|g| g.group == group).unwrap().share;
    close(&[share("pull"), share("cap"), share("friction")], &[1. / 2.25, 0.25 / 2.25, 1. / 2.25], 1e-9);
}

/// Physics that contradicts itself blames nobody; a limit that has no part in it is not in the set.
#[test]
fn physics_is_never_blamed() {
    let rows = conic(2, &[Cone::Zero(2), Cone::Nonnegative(1)], &[(&[1., 0.], 1.), (&[1., 0.], 2.), (&[0., 1.], 1.)]);
    let h = named(hierarchy(2, rows, vec![]), &["physics a", "physics b", "y"]);
    let explanation = explained(&h);
    assert!(explanation.relaxation.is_none() && explanation.alone.is_empty() && explanation.irreducible.groups.is_empty());

    let rows = conic(2, &[Cone::Zero(1), Cone::Nonnegative(3)], &[(&[1., 0.], 1.), (&[1., 0.], 0.), (&[0., 1.], 1.), (&[1., 0.], -1.)]);
    let h = named(hierarchy(2, rows, vec![]), &["physics", "x", "y", "x too"]);
    let explanation = explained(&h);
    let relaxation = explanation.relaxation.as_ref().unwrap();
    close(&relaxation.deltas, &[0., 1., 0., 2.], 1e-9);
    assert!(explanation.alone.iter().all(|a| a.needs.is_none()), "two limits are broken: none alone helps");
    assert_eq!(explanation.irreducible.groups.len(), 1, "either one contradicts the physics by itself");
}

/// Derived: shares depend on the natural sizes alone. Every row (with its scale) is divided by a number of its own.
#[test]
fn shares_do_not_depend_on_how_rows_are_divided() {
    let mut random = Random(7);
    for question in requests(3, 11) {
        let h = assembled(&question);
        let sizes = natural_sizes(&h);
        let plain = explained(&h).relaxation.unwrap();
        let mut divided = h.clone();
        let mut at = 0;
        for cone in &h.hard.cones {
            let block = if matches!(cone, Cone::SecondOrder(_)) { cone.dimension() } else { 1 };
            for first in (at..at + cone.dimension()).step_by(block) {
                let by = 10f64.powf(random.between(-1.0, 1.0));
                for row in first..first + block {
                    let range = h.hard.matrix.start[row]..h.hard.matrix.start[row + 1];
                    divided.hard.matrix.value[range].iter_mut().for_each(|v| *v /= by);
                    divided.hard.rhs[row] /= by;
                    divided.hard.names[row].scale *= by;
                }
            }
            at += cone.dimension();
        }
        let solution = run(&divided);
        let other = explain(&divided, &sizes, &solution, None).unwrap().relaxation.unwrap();
        assert!((plain.sum - other.sum).abs() < 1e-7 * plain.sum, "{} {}", plain.sum, other.sum);
        for group in &plain.groups {
            let share = other.groups.iter().find(|g| g.group == group.group).map_or(0.0, |g| g.share);
            assert!((share - group.share).abs() < 1e-6, "{}: {} {share}", group.group, group.share);
        }
        // Other sizes, on the other hand, are another question: a limit twice as large gives way more.
        let wider: Vec<f64> = h.hard.names.iter().zip(&sizes).map(|(n, s)| if n.group == plain.groups[0].group { 2.0 * s } else { *s }).collect();
        let third = explain(&h, &wider, &run(&h), None).unwrap().relaxation.unwrap();
        assert!(third.sum < plain.sum);
    }
}

// ---- random requests on the demonstration biped ----

struct Random(u64);

impl Random {
    fn next(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 11) as f64 / (1u64 << 53) as f64
    }
    fn between(&mut self, a: f64, b: f64) -> f64 {
        a + (b - a) * self.next()
    }
    fn one_in(&mut self, n: u32) -> bool {
        self.next() * f64::from(n) < 1.0
    }
}

fn assembled(question: &Question) -> Hierarchy {
    let scene = Scene::new(question).unwrap();
    assemble(question, &scene, &vec![0.0; question.contacts.len()]).hierarchy
}

/// A standing question made hard in random ways; some come out infeasible.
fn hardened(random: &mut Random) -> Question {
    let mut question = biped::standing(10f64.powf(random.between(5.5, 7.0)));
    if let LimitKind::Torque(list) = &mut question.limits[0].kind {
        let shrink = random.between(0.02, 1.0);
        list.iter_mut().for_each(|t| t.1 *= shrink);
    }
    for contact in &mut question.contacts {
        let mu = random.between(0.1, 0.8);
        let set = if random.one_in(2) { FrictionSet::Vertex } else { FrictionSet::Wrench };
        let torsion = (set == FrictionSet::Wrench).then_some(0.03);
        let facets = random.one_in(3).then_some(4);
        contact.friction = Some(Friction { set, coefficient: mu, torsion, facets, treatment: Treatment::Hard });
        if random.one_in(3) {
            let least = random.between(100.0, 900.0);
            contact.normal_force = Some(NormalForce { least: Some(least), largest: None, treatment: Treatment::Hard });
        } else if random.one_in(2) {
            let largest = random.between(20.0, 200.0);
            contact.normal_force = Some(NormalForce { least: None, largest: Some(largest), treatment: Treatment::Hard });
        }
        if random.one_in(2) {
            let rate = WrenchRate { force: Some(random.between(500.0, 2e4)), moment: Some(500.0), treatment: Treatment::Hard };
            contact.wrench_rate = Some(rate);
        }
        if random.one_in(3) {
            let f = Vec3::new(random.between(-150.0, 150.0), random.between(-100.0, 100.0), random.between(50.0, 300.0));
            contact.ground.measured = Some(Wrench { force: f, moment: Vec3::new(0.0, random.between(-10.0, 10.0), 0.0) });
        }
    }
    if random.one_in(3) {
        let mut push = question.tasks[0].clone();
        push.name = "push".into();
        push.importance = Importance::MustHold;
        push.kind = TaskKind::BaseAcceleration {
            linear: Vec3::new(random.between(-15.0, 15.0), random.between(-8.0, 8.0), random.between(-5.0, 15.0)),
            angular: Vec3::zeros(),
        };
        push.axes = [true, true, true, random.one_in(2), random.one_in(2), false];
        question.tasks.push(push);
    }
    question
}

/// The first `count` infeasible ones.
fn requests(count: usize, seed: u64) -> Vec<Question> {
    let mut random = Random(seed.wrapping_mul(0x9E3779B97F4A7C15));
    let mut out = Vec::new();
    for _ in 0..20 * count {
        let question = hardened(&mut random);
        if run(&assembled(&question)).status == solve::Status::Infeasible {
            out.push(question);
            if out.len() == count {
                return out;
            }
        }
    }
    panic!("only {} infeasible requests", out.len());
}

#[test]
fn a_hundred_random_infeasible_requests() {
    let mut faults = Vec::new();
    let (mut alone_helps, mut beyond, mut largest_gap) = (0, 0, 0.0f64);
    for (i, question) in requests(100, 1).iter().enumerate() {
        let h = assembled(question);
        let explanation = explained(&h);
        assert_proof(&h, &explanation);
        let relaxation = explanation.relaxation.as_ref().expect("physics is consistent");
        let shares: f64 = relaxation.groups.iter().map(|g| g.share).sum();
        assert!((shares - 1.0).abs() < 1e-12 && relaxation.rows.iter().all(|r| r.share >= 0.0));
        // Feasible at the relaxation, infeasible just short of it.
        let at = feasible(&relaxed(&h, &relaxation.deltas, 1.0, 1e-6));
        if !matches!(at, solve::Status::Solved | solve::Status::IllPosed) {
            faults.push(format!("{i}: {at:?} at the relaxation"));
        }
        let short = feasible(&relaxed(&h, &relaxation.deltas, 1.0 - 1e-4, 0.0));
        if matches!(short, solve::Status::Solved | solve::Status::IllPosed) {
            faults.push(format!("{i}: {short:?} short of the relaxation"));
        }
        // Least, by weak duality recomputed here: the dual value meets the sum to 1e-6, and what the bounds on the unknowns cost
        // (all of them at once at 1e6 N or N m) is at most a thousandth.
        let bound = lower_bound(&h, relaxation, |_| true);
        let (value, gradient) = recomputed(&h, &relaxation.multipliers);
        let spill = spill(&h, &gradient);
        largest_gap = largest_gap.max(1.0 - bound / relaxation.sum);
        beyond += usize::from(bound < (1.0 - 1e-4) * relaxation.sum);
        if (bound * (value / (value + spill)).powi(2) / relaxation.sum - 1.0).abs() > 1e-6 || bound < (1.0 - 1e-3) * relaxation.sum {
            faults.push(format!("{i}: sum {} but only {bound} is proved, from {value} and {spill}", relaxation.sum));
        }
        for alone in &explanation.alone {
            let Some(needs) = &alone.needs else { continue };
            alone_helps += 1;
            assert!(needs.sum >= (1.0 - 1e-6) * relaxation.sum, "one group cannot need less than all together");
            assert!(needs.rows.iter().all(|r| r.group == alone.group));
        }
        assert!(!explanation.irreducible.groups.is_empty() && explanation.irreducible.complete);
        irreducible(&h, &explanation.irreducible.groups, i, &mut faults);
    }
    println!("alone helps {alone_helps} times; largest gap of the proof {largest_gap:e}, {beyond} beyond 1e-4");
    assert!(alone_helps > 0);
    assert!(faults.is_empty(), "{} faults: {faults:#?}", faults.len());
}

/// The set is infeasible with the physics; without any one of its groups it is not.
fn irreducible(h: &Hierarchy, set: &[String], index: usize, faults: &mut Vec<String>) {
    let keep = |kept: &dyn Fn(&String) -> bool| {
        let mut out = h.clone();
        // A dropped limit is one that is never reached.
        let mut at = 0;
        for cone in &h.hard.cones {
            for row in at..at + cone.dimension() {
                let name = &h.hard.names[row];
                if !name.physics && !kept(&name.group) {
                    match cone {
                        Cone::Zero(_) => {
                            let range = h.hard.matrix.start[row]..h.hard.matrix.start[row + 1];
                            out.hard.matrix.value[range].fill(0.0);
                            out.hard.rhs[row] = 0.0;
                        }
                        Cone::Nonnegative(_) => out.hard.rhs[row] = 1e4,
                        Cone::SecondOrder(_) => out.hard.rhs[row] = if row == at { 1e4 } else { 0.0 },
                    }
                }
            }
            at += cone.dimension();
        }
        feasible(&out)
    };
    if keep(&|g| set.contains(g)) != solve::Status::Infeasible {
        faults.push(format!("{index}: the irreducible set {set:?} is not infeasible"));
    }
    for left_out in set {
        if keep(&|g| set.contains(g) && g != left_out) == solve::Status::Infeasible {
            faults.push(format!("{index}: the set {set:?} does not need {left_out}"));
        }
    }
}

// ---- the whole path ----

fn answer(question: &Question) -> answer::Answer {
    reference::solve(question, &Arc::new(AtomicBool::new(false))).unwrap()
}

#[test]
fn the_answer_at_the_relaxation_is_given_in_full() {
    let mut question = biped::standing(2e6);
    question.include.explain = true;
    for contact in &mut question.contacts {
        contact.normal_force = Some(NormalForce { least: Some(300.0), largest: None, treatment: Treatment::Hard });
        contact.wrench_rate = Some(WrenchRate { force: Some(2000.0), moment: None, treatment: Treatment::Hard });
    }
    let found = answer(&question);
    assert_eq!(found.status, answer::Status::Infeasible);
    let explained = found.explained.expect("asked for");
    let relaxation = explained.explanation.relaxation.as_ref().unwrap();
    let relaxed = explained.relaxed.expect("an answer");
    assert_eq!(relaxed.status, answer::Status::Solved);
    // Derived: present force W/2 = 191 N and a rate of 2000 N/s leave at most 10 N more, so force and rate give way,
    // by equal amounts (equal sizes): the gap is 300 - (W/2 + 10).
    let weight = question.model.mass() * biped::GRAVITY;
    let gap = 300.0 - (weight / 2.0 + 10.0);
    for row in &relaxation.rows {
        assert!((row.amount - gap / 2.0).abs() < 1e-6 * gap, "{row:?}, gap {gap}");
    }
    assert_eq!(relaxation.rows.len(), 4);
    for sole in &relaxed.soles {
        let normal = sole.normal_force.unwrap();
        assert!((normal - (300.0 - gap / 2.0)).abs() < 2.0 * relaxed.slack * weight, "{normal}");
    }
    let worst = relaxed.margins.iter().map(|m| m.margin).fold(0.0, f64::min);
    assert!((worst + gap / 2.0).abs() < 2.0 * relaxed.slack * weight);
}

#[test]
fn a_tick_that_is_too_short_is_not_a_broken_request() {
    // The present wrench lies outside its cone, and soft ground cannot bring it back within one tick: without the law of
    // the tick the request is consistent.
    let mut question = biped::standing(5e4);
    question.contacts[0].ground.measured =
        Some(Wrench { force: Vec3::new(0.0, 0.0, -200.0), moment: Vec3::zeros() });
    question.limits[0].kind = LimitKind::Torque(match &question.limits[0].kind {
        LimitKind::Torque(list) => list.iter().map(|&(j, t)| (j, t.min(60.0))).collect(),
        _ => unreachable!("the demo limits torques"),
    });
    let found = answer(&question);
    assert_eq!(found.status, answer::Status::NotReachable, "{:?}", found.blocking);
    assert!(found.motion.is_none());
    // A broken request stays broken however long the tick: more than the weight on each sole, less than it on both together.
    let mut broken = biped::standing(2e6);
    broken.contacts[0].normal_force = Some(NormalForce { least: Some(300.0), largest: Some(200.0), treatment: Treatment::Hard });
    assert_eq!(answer(&broken).status, answer::Status::Infeasible);
}
