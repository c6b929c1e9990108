//! Properties over seeded random hierarchies, and degenerate inputs.
//!
//! Optimality conditions are recomputed by plain code; lexicographic optimality is compared with slow methods that share
//! nothing with the solver: the limit of big weights, and enumeration of active sets (both derived).

mod solve_support;

use solve_support::*;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;
use underfoot::conic::{Cone, ConicRows, Hierarchy, ResidualRows};
use underfoot::solve::{FaceKind, HierarchySolution, Options, SolveError, Status, solve};

/// A 64-bit shift-register generator: the same numbers on every machine.
struct Random(u64);

impl Random {
    fn new(seed: u64) -> Self {
        Random(seed.wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1)
    }
    fn bits(&mut self) -> u64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        self.0
    }
    /// Between -1 and 1.
    fn unit(&mut self) -> f64 {
        (self.bits() >> 11) as f64 / (1u64 << 52) as f64 - 1.0
    }
    fn below(&mut self, n: usize) -> usize {
        (self.bits() >> 33) as usize % n
    }
    fn row(&mut self, n: usize, filled: f64) -> Vec<(usize, f64)> {
        (0..n).filter_map(|j| { let v = self.unit(); ((self.unit() + 1.0) / 2.0 < filled).then_some((j, v)) }).collect()
    }
}

fn task(random: &mut Random, n: usize, rows: usize, filled: f64, reach: f64) -> ResidualRows {
    let mut out = ResidualRows::new(n);
    for _ in 0..rows {
        out.matrix.push(random.row(n, filled));
        out.rhs.push(reach * random.unit());
        out.weight.push(0.1 + random.unit().abs());
        out.names.push(name("task"));
    }
    out
}

/// Hard rows that a known point satisfies, some of them with equality.
fn limits(random: &mut Random, n: usize, equalities: usize, planes: usize, cones: usize, tight: f64) -> ConicRows {
    let inner: Vec<f64> = (0..n).map(|_| random.unit()).collect();
    let mut out = ConicRows::new(n);
    let push = |out: &mut ConicRows, random: &mut Random, slack: f64| {
        let row = random.row(n, 0.7);
        let value: f64 = row.iter().map(|&(j, v)| v * inner[j]).sum();
        out.matrix.push(row);
        out.rhs.push(value + slack);
        out.names.push(name("limit"));
    };
    for _ in 0..equalities {
        push(&mut out, random, 0.0);
    }
    for _ in 0..planes {
        let slack = if random.unit() < tight { 0.0 } else { random.unit().abs() };
        push(&mut out, random, slack);
    }
    for _ in 0..cones {
        let (a, b) = (0.3 * random.unit(), 0.3 * random.unit());
        push(&mut out, random, 0.2 + (a * a + b * b).sqrt());
        push(&mut out, random, a);
        push(&mut out, random, b);
    }
    out.cones = vec![Cone::Zero(equalities), Cone::Nonnegative(planes)];
    out.cones.extend(vec![Cone::SecondOrder(3); cones]);
    out
}

fn random_hierarchy(seed: u64) -> Hierarchy {
    shaped_hierarchy(seed, -1.0)
}

/// `tight` from -1 (no half-plane through the known inner point) to 1 (all of them: a vertex of many).
fn shaped_hierarchy(seed: u64, tight: f64) -> Hierarchy {
    let mut random = Random::new(seed);
    let n = 3 + random.below(8);
    let (equalities, planes, cones) = (random.below(3), random.below(9), random.below(3));
    let hard = limits(&mut random, n, equalities, planes, cones, tight);
    let mut levels = Vec::new();
    for priority in 1..=1 + random.below(3) as u32 {
        let rows = random.below(4);
        let mut one = level(priority, task(&mut random, n, rows, 0.6, 2.0));
        let (planes, cones) = (random.below(3), random.below(2));
        one.soft = limits(&mut random, n, 0, planes, cones, -1.0);
        one.soft.cones = vec![Cone::Nonnegative(planes)];
        one.soft.cones.extend(vec![Cone::SecondOrder(3); cones]);
        one.soft_weight = (0..planes + cones).map(|_| 0.5 + random.unit().abs()).collect();
        levels.push(one);
    }
    hierarchy(n, hard, levels)
}

fn answer(hierarchy: &Hierarchy) -> HierarchySolution {
    solve(hierarchy, &Options::default(), None).expect("well formed")
}

#[test]
fn optimality_conditions_hold_at_the_final_point() {
    let mut unrefined = Vec::new();
    let mut bad = Vec::new();
    for seed in 0..400 {
        let problem = random_hierarchy(seed);
        let found = answer(&problem);
        if found.status != Status::Solved {
            bad.push((seed, found.status, f64::NAN));
            continue;
        }
        let breach = breach_of_all(&problem, &found);
        if breach > 1e-9 {
            bad.push((seed, found.status, breach));
        }
        if found.levels.iter().chain(&found.tie_break).any(|l| !l.refined) {
            unrefined.push(seed);
        }
    }
    assert!(bad.is_empty(), "{} of 400: {bad:?}; unrefined {unrefined:?}", bad.len());
    assert!(unrefined.len() <= 4, "{unrefined:?}");
}

#[test]
fn the_warm_path_and_the_engine_agree() {
    for seed in 0..200 {
        let problem = random_hierarchy(seed);
        let warm = answer(&problem);
        let cold = solve(&problem, &Options { warm: false, ..Options::default() }, None).expect("well formed");
        assert_eq!(warm.status, cold.status, "seed {seed}");
        assert_eq!(warm.free.dimension, cold.free.dimension, "seed {seed}");
        for (a, b) in warm.x.iter().zip(&cold.x) {
            assert!((a - b).abs() < 1e-8, "seed {seed}: {:?} {:?}", warm.x, cold.x);
        }
    }
}

#[test]
fn the_same_input_gives_the_same_bits_whatever_was_solved_before() {
    let first: Vec<_> = (0..20).map(|seed| answer(&random_hierarchy(seed))).collect();
    for seed in (0..20).rev() {
        assert_eq!(format!("{:?}", answer(&random_hierarchy(seed))), format!("{:?}", first[seed as usize]));
    }
}

/// One level with weights W^2, W, 1 on the costs tends to the lexicographic answer as 1/W: ten times the weight must leave
/// less than 0.3 of the error. (Wider ranges of weight within one level leave the engine's accuracy; that is what levels are for.)
#[test]
fn big_weights_tend_to_the_lexicographic_answer() {
    let mut compared = 0;
    for seed in 0..120 {
        let problem = random_hierarchy(seed);
        let exact = answer(&problem);
        if exact.status != Status::Solved || exact.free.dimension > 0 || problem.levels.len() < 2 {
            continue;
        }
        let at = |big: f64| {
            let mut one = level(1, ResidualRows::new(problem.columns.len()));
            for (k, from) in problem.levels.iter().enumerate() {
                let factor = big.powi(problem.levels.len() as i32 - 1 - k as i32);
                for i in 0..from.residuals.rhs.len() {
                    one.residuals.matrix.push(from.residuals.matrix.row(i));
                    one.residuals.rhs.push(from.residuals.rhs[i]);
                    one.residuals.weight.push(factor * from.residuals.weight[i]);
                    one.residuals.names.push(name("task"));
                }
                for i in 0..from.soft.rhs.len() {
                    one.soft.matrix.push(from.soft.matrix.row(i));
                    one.soft.rhs.push(from.soft.rhs[i]);
                    one.soft.names.push(name("limit"));
                }
                one.soft.cones.extend(from.soft.cones.iter().copied());
                one.soft_weight.extend(from.soft_weight.iter().map(|w| factor * w));
            }
            let joined = Hierarchy { levels: vec![one], ..problem.clone() };
            answer(&joined)
        };
        let (a, b) = if problem.levels.len() == 2 { (at(1e4), at(1e5)) } else { (at(1e3), at(1e4)) };
        if a.status != Status::Solved || b.status != Status::Solved {
            continue;
        }
        let error = |x: &HierarchySolution| {
            x.x.iter().zip(&exact.x).map(|(p, q)| (p - q).abs()).fold(0.0, f64::max)
        };
        assert!(error(&b) < 0.3 * error(&a) + 1e-6, "seed {seed}: {} then {}", error(&a), error(&b));
        compared += 1;
    }
    assert!(compared >= 20, "only {compared} compared");
}

/// Dense enumeration of active sets on tiny two-level problems with half-planes only: the least first cost over all
/// subsets held as equations, and then, with the first residual held as well, the least second cost.
#[test]
fn enumeration_of_active_sets_agrees() {
    for seed in 0..60 {
        let mut random = Random::new(1000 + seed);
        let n = 3;
        let hard = limits(&mut random, n, 0, 5, 0, -1.0);
        let first = task(&mut random, n, 2, 1.0, 3.0);
        let second = task(&mut random, n, 3, 1.0, 3.0);
        let problem = hierarchy(n, hard.clone(), vec![level(1, first.clone()), level(2, second.clone())]);
        let found = answer(&problem);
        assert_eq!(found.status, Status::Solved, "seed {seed}");
        let best = least(&hard, &first, None);
        assert!((found.levels[0].cost - best).abs() < 1e-8 * (1.0 + best), "seed {seed}: {} {best}", found.levels[0].cost);
        let held = (&first, found.x.clone());
        let best = least(&hard, &second, Some(held));
        assert!((found.levels[1].cost - best).abs() < 1e-7 * (1.0 + best), "seed {seed}: {} {best}", found.levels[1].cost);
    }
}

fn least(hard: &ConicRows, task: &ResidualRows, held: Option<(&ResidualRows, Vec<f64>)>) -> f64 {
    use nalgebra::{DMatrix, DVector};
    let n = hard.matrix.columns;
    let dense = |m: &underfoot::conic::SparseRows, i: usize| {
        let mut row = vec![0.0; n];
        m.row(i).for_each(|(j, v)| row[j] = v);
        row
    };
    let mut best = f64::INFINITY;
    for set in 0..1usize << hard.rhs.len() {
        let mut rows: Vec<(Vec<f64>, f64)> =
            (0..hard.rhs.len()).filter(|i| set >> i & 1 == 1).map(|i| (dense(&hard.matrix, i), hard.rhs[i])).collect();
        if let Some((first, x)) = &held {
            rows.extend((0..first.rhs.len()).map(|i| (dense(&first.matrix, i), first.matrix.row_dot(i, x))));
        }
        let m = rows.len();
        let k = DMatrix::from_fn(n + m, n + m, |i, j| match (i < n, j < n) {
            (true, true) => (0..task.rhs.len()).map(|r| 2.0 * task.weight[r] * dense(&task.matrix, r)[i] * dense(&task.matrix, r)[j]).sum(),
            (true, false) => rows[j - n].0[i],
            (false, true) => rows[i - n].0[j],
            (false, false) => 0.0,
        });
        let right = DVector::from_fn(n + m, |i, _| {
            if i < n {
                (0..task.rhs.len()).map(|r| 2.0 * task.weight[r] * dense(&task.matrix, r)[i] * task.rhs[r]).sum()
            } else {
                rows[i - n].1
            }
        });
        let Ok(solution) = k.clone().svd(true, true).solve(&right, 1e-10) else { continue };
        let x: Vec<f64> = solution.iter().take(n).copied().collect();
        let met = rows.iter().all(|(row, b)| (row.iter().zip(&x).map(|(a, c)| a * c).sum::<f64>() - b).abs() < 1e-8);
        let inside = hard.slack(&x).iter().all(|&s| s > -1e-8);
        if met && inside {
            let cost: f64 = (0..task.rhs.len()).map(|r| task.weight[r] * (task.matrix.row_dot(r, &x) - task.rhs[r]).powi(2)).sum();
            best = best.min(cost);
        }
    }
    best
}

#[test]
fn redundant_and_empty_rows_change_nothing() {
    for seed in 0..60 {
        let problem = random_hierarchy(seed);
        let plain = answer(&problem);
        let mut doubled = problem.clone();
        let n = doubled.columns.len();
        let planes: Vec<(Vec<(usize, f64)>, f64)> =
            (0..problem.hard.rhs.len()).map(|i| (problem.hard.matrix.row(i).collect(), problem.hard.rhs[i])).collect();
        let mut at = 0;
        for cone in problem.hard.cones.clone() {
            let range = at..at + cone.dimension();
            at = range.end;
            if let Cone::SecondOrder(_) = cone {
                continue;
            }
            for (row, rhs) in &planes[range] {
                doubled.hard.matrix.push(row.iter().map(|&(j, v)| (j, 3.0 * v)));
                doubled.hard.rhs.push(3.0 * rhs);
                doubled.hard.names.push(name("again"));
            }
            doubled.hard.cones.push(cone);
        }
        for (cone, rhs) in [(Cone::Zero(1), 0.0), (Cone::Nonnegative(1), 0.0), (Cone::Nonnegative(1), 1.0)] {
            doubled.hard.matrix.push([]);
            doubled.hard.rhs.push(rhs);
            doubled.hard.names.push(name("empty"));
            doubled.hard.cones.push(cone);
        }
        for one in &mut doubled.levels {
            one.residuals.matrix.push([]);
            one.residuals.rhs.push(1.0);
            one.residuals.weight.push(1.0);
            one.residuals.names.push(name("empty"));
        }
        let found = answer(&doubled);
        assert_eq!(found.status, plain.status, "seed {seed}");
        assert_eq!(found.free.dimension, plain.free.dimension, "seed {seed}");
        assert_eq!(found.x.len(), n);
        for (a, b) in found.x.iter().zip(&plain.x) {
            assert!((a - b).abs() < 1e-8, "seed {seed}: {:?} {:?}", found.x, plain.x);
        }
        assert!(breach_of_all(&doubled, &found) < 1e-9, "seed {seed}");
    }
}

#[test]
fn opposing_limits_are_an_equality() {
    let limits = conic(2, &[Cone::Nonnegative(2)], &[(&[1., 1.], 1.), (&[-1., -1.], -1.)]);
    let problem = hierarchy(2, limits, vec![level(1, residuals(2, &[(1., &[1., 0.], 3.)]))]);
    let found = answer(&problem);
    assert_eq!(found.status, Status::Solved);
    close(&found.x, &[3., -2.], 1e-9);
    assert_eq!(found.free.dimension, 0);
    assert!(breach_of_all(&problem, &found) < 1e-9);
    let faces = found.hard_faces.iter().chain(found.levels.iter().flat_map(|l| &l.faces));
    assert!(faces.filter(|f| f.kind == FaceKind::Equality).count() >= 2);
}

/// A hard cone with no interior: fx = 60, fn = 100 must hold, mu = .6 (derived): fy = 0, whatever is asked of it.
#[test]
fn hard_cone_without_interior() {
    let rows: [(&[f64], f64); 5] =
        [(&[1., 0., 0.], 0.6), (&[0., 0., 1.], 1.0), (&[0., 0., -0.6], 0.), (&[-1., 0., 0.], 0.), (&[0., -1., 0.], 0.)];
    let hard = conic(3, &[Cone::Zero(2), Cone::SecondOrder(3)], &rows);
    let problem = hierarchy(3, hard.clone(), vec![level(1, residuals(3, &[(1., &[0., 1., 0.], 0.1)]))]);
    let found = answer(&problem);
    assert_eq!(found.status, Status::IllPosed, "{found:#?}");
    close(&found.x, &[0.6, 0., 1.], 1e-8);
    let found = answer(&hierarchy(3, hard, vec![]));
    assert_eq!((found.status, found.free.dimension), (Status::IllPosed, 0));
    close(&found.x, &[0.6, 0., 1.], 1e-8);
}

/// A lifted sole (derived): fn = 0 at the first level leaves the cone its apex, so no tangential force, and nothing ill posed about it.
#[test]
fn apex_by_an_earlier_level() {
    let cone = conic(3, &[Cone::SecondOrder(3)], &[(&[0., 0., -0.6], 0.), (&[-1., 0., 0.], 0.), (&[0., -1., 0.], 0.)]);
    let problem = hierarchy(
        3,
        cone,
        vec![
            level(1, residuals(3, &[(1., &[0., 0., 1.], 0.)])),
            level(2, residuals(3, &[(1., &[1., 0., 0.], 1.), (1., &[0., 1., 0.], 2.)])),
        ],
    );
    let found = answer(&problem);
    assert_eq!(found.status, Status::Solved, "{found:#?}");
    close(&found.x, &[0., 0., 0.], 1e-9);
    assert!(found.levels[0].faces.iter().any(|f| f.kind == FaceKind::Apex));
    // Asking for less than nothing exposes the apex by the multiplier itself.
    let mut below = problem.clone();
    below.levels[0].residuals.rhs[0] = -1.0;
    let found = answer(&below);
    assert_eq!(found.status, Status::Solved, "{found:#?}");
    close(&found.x, &[0., 0., 0.], 1e-11);
}

#[test]
fn empty_parts_are_answered() {
    let nothing = Hierarchy::default();
    let found = answer(&nothing);
    assert_eq!((found.status, found.x.len(), found.free.dimension), (Status::Solved, 0, 0));
    let problem = hierarchy(3, ConicRows::new(3), vec![]);
    let found = answer(&problem);
    assert_eq!((found.status, found.free.dimension), (Status::Solved, 3));
    close(&found.x, &[0., 0., 0.], 0.0);
    let problem = hierarchy(2, ConicRows::new(2), vec![level(1, ResidualRows::new(2)), level(2, identity(2))]);
    let found = answer(&problem);
    assert_eq!((found.status, found.free.dimension), (Status::Solved, 0));
}

#[test]
fn auxiliary_columns_do_not_count_as_free() {
    // x0 = x1 + x2; x0 is asked for, x1 and x2 share it: free, unless they are auxiliary.
    let hard = conic(3, &[Cone::Zero(1), Cone::Nonnegative(2)], &[(&[1., -1., -1.], 0.), (&[0., -1., 0.], 0.), (&[0., 0., -1.], 0.)]);
    let mut problem = hierarchy(3, hard, vec![level(1, residuals(3, &[(1., &[1., 0., 0.], 2.)]))]);
    let found = answer(&problem);
    assert_eq!((found.free.dimension, found.free.hull), (1, 1));
    close(&found.x, &[2., 1., 1.], 1e-10);
    problem.auxiliary = vec![1, 2];
    let found = answer(&problem);
    assert_eq!((found.free.dimension, found.free.hull), (0, 1));
    // With nothing asked of x0 it is free as well, one way only at its lower end: still one direction that counts.
    problem.levels.clear();
    let found = answer(&problem);
    assert_eq!((found.free.dimension, found.free.hull), (1, 2));
    assert!((found.free.basis[0][0].abs() - 1.0).abs() < 1e-12);
}

#[test]
fn an_active_limit_without_multiplier_leaves_freedom() {
    // x >= 0 and |x| made small: x = 0, active or not, nothing else asked: y is free, limited to y >= 0 at y = 0 or not.
    let hard = conic(2, &[Cone::Nonnegative(1)], &[(&[0., -1.], 0.)]);
    let problem = hierarchy(2, hard, vec![level(1, residuals(2, &[(1., &[1., 0.], 1.)]))]);
    let found = answer(&problem);
    assert_eq!((found.status, found.free.dimension), (Status::Solved, 1));
    close(&found.x, &[1., 0.], 1e-10);
}

#[test]
fn columns_nobody_asks_about_stay_bounded() {
    let mut problem = hierarchy(4, conic(4, &[Cone::Nonnegative(1)], &[(&[1., 1., 0., 0.], 1.)]), vec![]);
    problem.levels.push(level(1, residuals(4, &[(1., &[1., 0., 0., 0.], 2.)])));
    problem.tie_break = residuals(4, &[(1., &[0., 1., 0., 0.], 0.)]);
    let found = answer(&problem);
    assert_eq!((found.status, found.free.dimension), (Status::Solved, 3));
    assert!(found.x.iter().all(|v| v.abs() < 10.0), "{:?}", found.x);
}

#[test]
fn soft_limits_are_never_infeasible() {
    let mut one = level(1, ResidualRows::new(1));
    one.soft = conic(1, &[Cone::Nonnegative(2)], &[(&[1.], -1.), (&[-1.], -1.)]);
    one.soft_weight = vec![1., 3.];
    let problem = hierarchy(1, ConicRows::new(1), vec![one]);
    let found = answer(&problem);
    assert_eq!(found.status, Status::Solved);
    // (derived) minimise (x + 1)^2 + 3 (1 - x)^2: x = 1/2, slacks 3/2 and 1/2.
    close(&found.x, &[0.5], 1e-12);
    close(&found.levels[0].soft_slack, &[1.5, 0.5], 1e-12);
}

#[test]
fn contradicting_equalities_are_infeasible_with_a_certificate() {
    let hard = conic(2, &[Cone::Zero(3)], &[(&[1., 0.], 1.), (&[0., 1.], 1.), (&[1., 1.], 3.)]);
    let found = answer(&hierarchy(2, hard.clone(), vec![level(1, identity(2))]));
    assert_eq!(found.status, Status::Infeasible);
    let certificate = found.infeasibility.expect("certificate");
    let z = &certificate.multipliers;
    let mut rest = vec![0.0; 2];
    hard.matrix.add_transpose_times(z, &mut rest);
    assert!(rest.iter().all(|v| v.abs() < 1e-14), "{rest:?}");
    let value: f64 = hard.rhs.iter().zip(z).map(|(b, z)| b * z).sum();
    assert!(value < -0.9 && (value - certificate.value).abs() < 1e-15);
    // The equalities fix x outside a limit.
    let hard = conic(1, &[Cone::Zero(1), Cone::Nonnegative(1)], &[(&[1.], 1.), (&[1.], 0.)]);
    let found = answer(&hierarchy(1, hard, vec![]));
    assert_eq!(found.status, Status::Infeasible);
    close(&found.infeasibility.expect("certificate").multipliers, &[-1., 1.], 1e-12);
}

#[test]
fn random_contradictions_carry_a_valid_certificate() {
    for seed in 0..60 {
        let mut problem = random_hierarchy(seed);
        let n = problem.columns.len();
        let mut random = Random::new(77 + seed);
        let row = random.row(n, 1.0);
        for (sign, rhs) in [(1.0, 0.3), (-1.0, -0.4)] {
            problem.hard.matrix.push(row.iter().map(|&(j, v)| (j, sign * v)));
            problem.hard.rhs.push(rhs);
            problem.hard.names.push(name("contradiction"));
        }
        problem.hard.cones.push(Cone::Nonnegative(2));
        let found = answer(&problem);
        assert_eq!(found.status, Status::Infeasible, "seed {seed}");
        let z = found.infeasibility.expect("certificate").multipliers;
        let mut rest = vec![0.0; n];
        problem.hard.matrix.add_transpose_times(&z, &mut rest);
        let value: f64 = problem.hard.rhs.iter().zip(&z).map(|(b, z)| b * z).sum();
        let spill: f64 = rest.iter().map(|v| v.abs()).sum();
        assert!(value + 1e4 * spill < 0.0, "seed {seed}: {value} {spill}");
        let mut at = 0;
        for cone in &problem.hard.cones {
            let part = &z[at..at + cone.dimension()];
            at += cone.dimension();
            match cone {
                Cone::Zero(_) => {}
                Cone::Nonnegative(_) => assert!(part.iter().all(|&v| v >= 0.0)),
                Cone::SecondOrder(_) => assert!(part[0] >= part[1..].iter().map(|v| v * v).sum::<f64>().sqrt() - 1e-15),
            }
        }
    }
}

#[test]
fn a_raised_flag_cancels() {
    let flag = Arc::new(AtomicBool::new(true));
    let found = solve(&random_hierarchy(3), &Options::default(), Some(&flag)).expect("well formed");
    assert_eq!(found.status, Status::Cancelled);
}

#[test]
fn malformed_hierarchies_are_errors() {
    let good = random_hierarchy(5);
    let mut cases: Vec<Hierarchy> = Vec::new();
    let mut change = |f: &dyn Fn(&mut Hierarchy)| {
        let mut bad = good.clone();
        f(&mut bad);
        cases.push(bad);
    };
    change(&|h| h.hard.rhs.push(0.0));
    change(&|h| h.hard.cones.push(Cone::SecondOrder(0)));
    change(&|h| h.hard.cones.push(Cone::Nonnegative(usize::MAX)));
    change(&|h| h.tie_break.weight[0] = -1.0);
    change(&|h| h.tie_break.rhs[0] = f64::NAN);
    change(&|h| h.tie_break.matrix.index[0] = 1000);
    change(&|h| h.auxiliary = vec![1000]);
    change(&|h| h.levels[0].soft_weight.push(1.0));
    change(&|h| h.columns.truncate(1));
    for bad in cases {
        let found = solve(&bad, &Options::default(), None);
        assert!(matches!(found, Err(SolveError::Dimension { .. } | SolveError::Number { .. })), "{found:?}");
    }
}

/// Many half-planes through one point, so that active sets are degenerate and interiors thin or missing.
fn tight_breaches(seeds: std::ops::Range<u64>) -> Vec<(u64, Status, f64)> {
    let mut bad = Vec::new();
    for seed in seeds {
        let problem = shaped_hierarchy(seed, 1.0);
        let found = answer(&problem);
        let breach = if found.levels.len() == problem.levels.len() { breach_of_all(&problem, &found) } else { f64::NAN };
        if found.status != Status::Solved || breach > 1e-9 || breach.is_nan() {
            bad.push((seed, found.status, breach));
        }
    }
    bad
}

#[test]
fn degenerate_vertices_are_solved() {
    let bad = tight_breaches(0..300);
    assert!(bad.is_empty(), "{bad:?}");
}

/// The long campaign: `cargo test --test solve_random -- --ignored`.
#[test]
#[ignore = "minutes, not seconds"]
fn campaign() {
    let mut bad = Vec::new();
    for seed in 1_000..21_000 {
        let problem = random_hierarchy(seed);
        let warm = answer(&problem);
        let cold = solve(&problem, &Options { warm: false, ..Options::default() }, None).expect("well formed");
        let off = warm.x.iter().zip(&cold.x).fold(0.0f64, |m, (a, b)| m.max((a - b).abs() / (1.0 + b.abs())));
        let breach = if warm.levels.len() == problem.levels.len() { breach_of_all(&problem, &warm) } else { f64::NAN };
        let good = warm.status == Status::Solved && cold.status == Status::Solved && off < 1e-8 && breach < 1e-9;
        if !good || warm.free.dimension != cold.free.dimension {
            bad.push((seed, warm.status, cold.status, off, breach, warm.free.dimension, cold.free.dimension));
        }
    }
    let tight = tight_breaches(1_000..21_000);
    println!("{} of 20000: {bad:?}\n{} of 20000 tight: {tight:?}", bad.len(), tight.len());
    // What is called solved must be; what the solver itself calls inaccurate must stay rare.
    let wrong = bad.iter().filter(|b| b.1 != Status::Inaccurate).count() + tight.iter().filter(|b| b.1 != Status::Inaccurate).count();
    assert_eq!(wrong, 0);
    assert!(bad.len() + tight.len() <= 20);
}
