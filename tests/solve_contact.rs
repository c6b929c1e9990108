//! Hierarchies of the shape a legged robot gives (invented numbers): accelerations, torques, two sole wrenches, eight vertex
//! forces in friction cones, which are not unique.

mod solve_support;

use solve_support::*;
use std::time::Instant;
use underfoot::conic::{Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName};
use underfoot::solve::{Options, Status, solve};

const JOINTS: usize = 18;
const SPEEDS: usize = JOINTS + 6;
const TORQUE: usize = SPEEDS;
const WRENCH: usize = TORQUE + JOINTS;
const VERTEX: usize = WRENCH + 12;
const COLUMNS: usize = VERTEX + 24;

struct Random(u64);

impl Random {
    fn unit(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        (self.0 >> 11) as f64 / (1u64 << 52) as f64 - 1.0
    }
    fn row(&mut self, from: usize, to: usize) -> Vec<(usize, f64)> {
        (from..to).map(|j| (j, self.unit())).collect()
    }
}

fn add(rows: &mut ConicRows, row: Vec<(usize, f64)>, rhs: f64) {
    rows.matrix.push(row);
    rows.rhs.push(rhs);
    rows.names.push(RowName { group: "limit".into(), part: String::new(), unit: "1", scale: 1.0, physics: false });
}

fn hard(random: &mut Random, load: f64) -> ConicRows {
    let mut out = ConicRows::new(COLUMNS);
    let jacobian: Vec<Vec<f64>> = (0..12).map(|_| (0..SPEEDS).map(|_| 0.5 * random.unit()).collect()).collect();
    let root: Vec<Vec<f64>> = (0..SPEEDS).map(|_| (0..SPEEDS).map(|_| 0.3 * random.unit()).collect()).collect();
    for i in 0..SPEEDS {
        // M nu_dot - S' tau - J' w = -h, M = L L' + I.
        let mut row: Vec<(usize, f64)> = (0..SPEEDS)
            .map(|j| (j, (0..SPEEDS).map(|k| root[i][k] * root[j][k]).sum::<f64>() + f64::from(i == j)))
            .collect();
        if i >= 6 {
            row.push((TORQUE + i - 6, -1.0));
        }
        row.extend((0..12).map(|k| (WRENCH + k, -jacobian[k][i])));
        add(&mut out, row, 0.3 * random.unit());
    }
    for k in 0..12 {
        // Contact: 0.1 w + 0.2 J nu_dot = drift; the normal force carries the load.
        let mut row: Vec<(usize, f64)> = (0..SPEEDS).map(|j| (j, 0.05 * jacobian[k][j])).collect();
        row.push((WRENCH + k, 0.1));
        add(&mut out, row, 0.1 * if k % 6 == 2 { load } else { 0.05 * random.unit() });
    }
    for sole in 0..2 {
        let at = |v: usize, c: usize| VERTEX + 12 * sole + 3 * v + c;
        let corner = |v: usize| (if v < 2 { 0.5 } else { -0.5 }, if v.is_multiple_of(2) { 0.25 } else { -0.25 });
        for c in 0..3 {
            let mut row: Vec<(usize, f64)> = (0..4).map(|v| (at(v, c), 1.0)).collect();
            row.push((WRENCH + 6 * sole + c, -1.0));
            add(&mut out, row, 0.0);
        }
        for c in 0..3 {
            let mut row = Vec::new();
            for v in 0..4 {
                let (x, y) = corner(v);
                match c {
                    0 => row.push((at(v, 2), y)),
                    1 => row.push((at(v, 2), -x)),
                    _ => row.extend([(at(v, 1), x), (at(v, 0), -y)]),
                }
            }
            row.push((WRENCH + 6 * sole + 3 + c, -1.0));
            add(&mut out, row, 0.0);
        }
    }
    let mut planes = 0;
    for j in 0..JOINTS {
        for sign in [1.0, -1.0] {
            add(&mut out, vec![(TORQUE + j, sign)], 1.0);
            add(&mut out, vec![(6 + j, sign)], 1.5);
            planes += 2;
        }
    }
    for sole in 0..2 {
        add(&mut out, vec![(WRENCH + 6 * sole + 2, 1.0)], 3.0);
        planes += 1;
    }
    out.cones = vec![Cone::Zero(SPEEDS + 24), Cone::Nonnegative(planes)];
    for v in 0..8 {
        add(&mut out, vec![(VERTEX + 3 * v + 2, -0.6)], 0.0);
        add(&mut out, vec![(VERTEX + 3 * v, -1.0)], 0.0);
        add(&mut out, vec![(VERTEX + 3 * v + 1, -1.0)], 0.0);
        out.cones.push(Cone::SecondOrder(3));
    }
    out
}

fn task(random: &mut Random, rows: usize, from: usize, to: usize, reach: f64) -> ResidualRows {
    let mut out = ResidualRows::new(COLUMNS);
    for _ in 0..rows {
        out.matrix.push(random.row(from, to));
        out.rhs.push(reach * random.unit());
        out.weight.push(1.0);
        out.names.push(name("task"));
    }
    out
}

fn unit_task(from: usize, to: usize, target: impl Fn(usize) -> f64) -> ResidualRows {
    let mut out = ResidualRows::new(COLUMNS);
    for j in from..to {
        out.matrix.push([(j, 1.0)]);
        out.rhs.push(target(j));
        out.weight.push(1.0);
        out.names.push(name("task"));
    }
    out
}

fn robot(seed: u64, levels: usize, reach: f64) -> Hierarchy {
    let mut random = Random(seed.wrapping_mul(0x9E3779B97F4A7C15) ^ 0x5DEECE66D);
    random.unit();
    let hard = hard(&mut random, 1.5);
    let momentum = task(&mut random, 6, 0, SPEEDS, reach);
    let wrench = unit_task(WRENCH, WRENCH + 12, |j| if (j - WRENCH) % 6 == 2 { 1.4 } else { 0.0 });
    let posture = unit_task(6, SPEEDS, |j| reach * ((j * 7 % 5) as f64 - 2.0) / 2.0);
    let mut all = vec![level(1, momentum), level(2, wrench), level(3, posture)];
    if levels == 1 {
        let mut one = ResidualRows::new(COLUMNS);
        for (from, weight) in all.iter().zip([1.0, 0.1, 0.01]) {
            for i in 0..from.residuals.rhs.len() {
                one.matrix.push(from.residuals.matrix.row(i));
                one.rhs.push(from.residuals.rhs[i]);
                one.weight.push(weight);
                one.names.push(name("task"));
            }
        }
        all = vec![level(1, one)];
    }
    let mut out = hierarchy(COLUMNS, hard, all);
    out.tie_break = unit_task(TORQUE, COLUMNS, |_| 0.0);
    out.auxiliary = (VERTEX..COLUMNS).collect();
    out
}

fn campaign(seeds: std::ops::Range<u64>, levels: usize, reach: f64) -> (usize, usize, usize) {
    let (mut solved, mut unrefined, mut infeasible) = (0, 0, 0);
    for seed in seeds {
        let problem = robot(seed, levels, reach);
        let found = solve(&problem, &Options::default(), None).expect("well formed");
        if found.status == Status::Infeasible {
            infeasible += 1;
            continue;
        }
        assert_eq!(found.status, Status::Solved, "seed {seed}: {:?}", found.levels.iter().map(|l| (l.refined, l.optimality)).collect::<Vec<_>>());
        let worst = breach_of_all(&problem, &found);
        let tie_break = found.tie_break.as_ref().expect("reached");
        let last = breach(&Level { residuals: problem.tie_break.clone(), ..Level::default() }, tie_break, &found.x);
        let refined = found.levels.iter().chain([tie_break]).all(|l| l.refined);
        assert!(worst < 1e-9 && last < 1e-9, "seed {seed}: {worst:e} {last:e} refined {refined}");
        if refined {
            assert!(worst < 1e-12 && last < 1e-12, "seed {seed}: {worst:e} {last:e} refined {refined}");
        }
        unrefined += usize::from(!refined);
        solved += 1;
    }
    (solved, unrefined, infeasible)
}

#[test]
fn three_levels() {
    let (solved, unrefined, infeasible) = campaign(0..30, 3, 0.3);
    println!("{solved} solved, {unrefined} not refined, {infeasible} infeasible");
    assert!(solved >= 20 && unrefined * 20 <= solved);
}

#[test]
fn three_levels_far_targets() {
    let (solved, unrefined, infeasible) = campaign(100..130, 3, 2.0);
    println!("{solved} solved, {unrefined} not refined, {infeasible} infeasible");
    assert!(solved >= 20 && unrefined * 20 <= solved);
}

/// A lifted sole (derived): no normal force means every vertex force of it is at its apex, zero; a hard set without interior,
/// but nothing that moves like a square root.
#[test]
fn a_lifted_sole_has_no_vertex_forces() {
    for seed in 0..10 {
        let mut problem = robot(seed, 3, 0.3);
        problem.hard.rhs[SPEEDS + 6..SPEEDS + 12].fill(0.0);
        add(&mut problem.hard, vec![(WRENCH + 8, 1.0)], 0.0);
        problem.hard.cones.push(Cone::Zero(1));
        let found = solve(&problem, &Options::default(), None).expect("well formed");
        assert_eq!(found.status, Status::Solved, "seed {seed}");
        close(&found.x[VERTEX + 12..], &[0.0; 12], 1e-9);
        close(&found.x[WRENCH + 6..WRENCH + 12], &[0.0; 6], 1e-9);
        let worst = breach_of_all(&problem, &found);
        assert!(worst < 1e-9, "seed {seed}: {worst:e}");
        assert_eq!(found.hard_faces.len(), 4, "seed {seed}: {:?}", found.hard_faces);
    }
}

#[test]
fn one_level_with_weights() {
    let (solved, unrefined, infeasible) = campaign(0..30, 1, 1.0);
    println!("{solved} solved, {unrefined} not refined, {infeasible} infeasible");
    assert!(solved >= 20 && unrefined * 20 <= solved);
}

/// Force tasks on soles whose targets lie outside the friction cones: the best total force lies on the boundary of the summed cone,
/// every vertex force on one of four parallel rays, and how they share it is not unique. `room` widens the limits of torque, speed
/// and load, so that nothing but friction stands in the way.
fn outside_the_cone(seed: u64, soles: usize, levels: usize, room: bool) -> Hierarchy {
    let mut problem = robot(seed, 3, 0.3);
    if room {
        problem.hard.rhs[SPEEDS + 24..SPEEDS + 24 + 4 * JOINTS + 2].fill(1e3);
    }
    let mut random = Random(seed ^ 0xA5A5_1234_9876);
    random.unit();
    let mut force = ResidualRows::new(COLUMNS);
    for sole in 0..soles {
        let normal = 1.2 + 0.4 * random.unit();
        let (excess, angle) = (if room { 1.4 + 0.35 * random.unit() } else { 1.3 + 0.5 * random.unit() }, std::f64::consts::PI * random.unit());
        let tangential = excess * 0.6 * normal + 0.1;
        for (c, target) in [tangential * angle.cos(), tangential * angle.sin(), normal].into_iter().enumerate() {
            force.matrix.push([(WRENCH + 6 * sole + c, 1.0)]);
            force.rhs.push(target);
            force.weight.push(1.0);
            force.names.push(name("task"));
        }
    }
    problem.levels[0].residuals = force;
    problem.levels.remove(1);
    problem.levels.truncate(levels);
    problem
}

/// How many of the seeds have every level and the tie-break refined, how many ended `Inaccurate` or with a level that is not
/// refined, and how many have no answer. Whatever says it is solved must meet its optimality conditions.
fn campaign_outside(seeds: std::ops::Range<u64>, soles: usize, levels: usize, room: bool) -> (usize, usize, usize) {
    let (mut refined, mut rest, mut infeasible) = (0, 0, 0);
    for seed in seeds {
        let problem = outside_the_cone(seed, soles, levels, room);
        let found = solve(&problem, &Options::default(), None).expect("well formed");
        match found.status {
            Status::Infeasible => infeasible += 1,
            Status::Inaccurate => {
                println!("soles {soles} levels {levels} room {room} seed {seed}: inaccurate, {:?}", found.levels.iter().map(|l| (l.refined, l.optimality)).collect::<Vec<_>>());
                rest += 1;
            }
            status => {
                let tie_break = found.tie_break.as_ref().expect("reached");
                let worst = breach_of_all(&problem, &found);
                let last = breach(&Level { residuals: problem.tie_break.clone(), ..Level::default() }, tie_break, &found.x);
                let all = found.levels.iter().chain([tie_break]).all(|l| l.refined);
                let allowed = if all { 1e-12 } else { 1e-9 };
                assert!(worst < allowed && last < allowed, "{status:?} soles {soles} levels {levels} room {room} seed {seed}: {worst:e} {last:e} refined {all}");
                if !all {
                    println!("soles {soles} levels {levels} room {room} seed {seed}: {status:?} not refined, {worst:e} {last:e}");
                }
                refined += usize::from(all);
                rest += usize::from(!all);
            }
        }
    }
    (refined, rest, infeasible)
}

/// One sole, one level, force components only: vertex forces on parallel rays (derived: with equal multipliers the four of
/// them point one way). The level and the tie-break over the face must come out refined.
#[test]
fn a_force_outside_the_cone_is_met_on_parallel_rays() {
    let problem = outside_the_cone(3, 1, 1, true);
    let found = solve(&problem, &Options::default(), None).expect("well formed");
    assert_eq!(found.status, Status::Solved);
    assert!(found.levels[0].refined && found.tie_break.as_ref().is_some_and(|t| t.refined));
    assert!(breach_of_all(&problem, &found) < 1e-12);
    let force = |v: usize| &found.x[VERTEX + 3 * v..VERTEX + 3 * v + 3];
    let total: Vec<f64> = (0..3).map(|c| (0..4).map(|v| force(v)[c]).sum()).collect();
    let slope = total[0].hypot(total[1]) / total[2];
    assert!((slope - 0.6).abs() < 1e-12, "{total:?}");
    for v in 0..4 {
        let f = force(v);
        let share = f[2] / total[2];
        close(f, &[share * total[0], share * total[1], share * total[2]], 1e-11);
    }
}

#[test]
fn forces_outside_the_cone() {
    let (mut refined, mut rest) = (0, 0);
    for (soles, levels, room) in
        [(1, 1, true), (1, 2, true), (2, 1, true), (2, 2, true), (1, 1, false), (1, 2, false), (2, 1, false), (2, 2, false)]
    {
        let (good, other, infeasible) = campaign_outside(0..25, soles, levels, room);
        println!("{soles} soles, {levels} levels, room {room}: {good} refined, {other} not, {infeasible} infeasible");
        refined += good;
        rest += other;
    }
    assert!(refined >= 150 && rest * 50 <= refined, "{refined} refined, {rest} not");
}

/// The long campaign: `cargo test --test solve_contact -- --ignored long`.
#[test]
#[ignore = "a minute"]
fn long() {
    for (levels, reach) in [(3, 0.3), (3, 1.0), (3, 4.0), (1, 0.3), (1, 4.0)] {
        let (solved, unrefined, infeasible) = campaign(1000..1400, levels, reach);
        println!("{levels} levels, reach {reach}: {solved} solved, {unrefined} not refined, {infeasible} infeasible");
        assert!(unrefined * 50 <= solved);
    }
}

/// Not a test of speed: prints what a solve takes here.
#[test]
#[ignore = "prints times"]
fn times() {
    for (levels, warm) in [(1, true), (3, true), (1, false), (3, false)] {
        let problems: Vec<Hierarchy> = (0..20).map(|seed| robot(seed, levels, 1.0)).collect();
        let options = Options { warm, ..Options::default() };
        let begin = Instant::now();
        let (mut engine, mut iterations) = (0, 0);
        for problem in &problems {
            let found = solve(problem, &options, None).expect("well formed");
            for outcome in found.levels.iter().chain(&found.tie_break) {
                engine += usize::from(outcome.iterations > 0);
                iterations += outcome.iterations;
            }
        }
        println!("{levels} levels, warm {warm}: {:?} each, {engine} engine runs, {iterations} iterations in {}", begin.elapsed() / problems.len() as u32, problems.len());
    }
}
