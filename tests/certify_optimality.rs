//! The optimality part of the certificate against published and derived optima.
#![allow(missing_docs)]

mod certify_support;

use certify_support::{push, residuals};
use nalgebra::{DMatrix, DVector};
use underfoot::certify::{LevelCheck, certify_optimality};
use underfoot::conic::{Cone, ConicRows, Hierarchy, Level, LevelProof};

/// `1/2 x'Px + q'x` as residual rows `1/2 |L'x - b|^2`, P = L L', so that `2 A'W r = P x + q`.
fn quadratic(p: DMatrix<f64>, q: DVector<f64>) -> underfoot::conic::ResidualRows {
    let n = q.len();
    let l = p.cholesky().expect("a convex example").l();
    let b = l.solve_lower_triangular(&(-q)).expect("no zero pivot");
    let rows: Vec<_> = (0..n).map(|i| (l.column(i).iter().copied().collect(), b[i], 0.5)).collect();
    residuals(n, &rows)
}

fn level(priority: u32, rows: underfoot::conic::ResidualRows, n: usize) -> Level {
    Level { priority, residuals: rows, soft: ConicRows::new(n), soft_weight: vec![] }
}

fn proof(priority: u32, system: &ConicRows, multipliers: Vec<f64>) -> LevelProof {
    LevelProof { priority, system: system.clone(), multipliers, ..Default::default() }
}

fn failing(check: &LevelCheck) -> Vec<&'static str> {
    let figures = [
        ("stationarity", check.stationarity),
        ("complementarity", check.complementarity),
        ("dual", check.dual_violation),
        ("feasibility", check.feasibility),
    ];
    figures.into_iter().filter(|f| f.1.is_nan() || f.1 > check.bound).map(|f| f.0).collect()
}

/// HS76 (Hock & Schittkowski 1981, published): optimum (3, 23, 0, 6)/11, multipliers 5/11 and 19/11.
fn hs76() -> (Hierarchy, Vec<f64>, LevelProof) {
    #[rustfmt::skip]
    let p = DMatrix::from_row_slice(4, 4, &[
        2.0, 0.0, -1.0, 0.0,
        0.0, 1.0, 0.0, 0.0,
        -1.0, 0.0, 2.0, 1.0,
        0.0, 0.0, 1.0, 1.0,
    ]);
    let q = DVector::from_vec(vec![-1.0, -3.0, 1.0, -1.0]);
    let mut hard = ConicRows::new(4);
    let mut rows = vec![
        (vec![1.0, 2.0, 1.0, 1.0], 5.0),
        (vec![3.0, 1.0, 2.0, -1.0], 4.0),
        (vec![0.0, -1.0, -4.0, 0.0], -1.5),
    ];
    for j in 0..4 {
        rows.push(((0..4).map(|k| if k == j { -1.0 } else { 0.0 }).collect(), 0.0));
    }
    push(&mut hard, Cone::Nonnegative(7), &rows, "hs76", false);
    let x = vec![3.0 / 11.0, 23.0 / 11.0, 0.0, 6.0 / 11.0];
    let z = vec![5.0 / 11.0, 0.0, 0.0, 0.0, 0.0, 19.0 / 11.0, 0.0];
    let proof = proof(1, &hard, z);
    let hierarchy = Hierarchy { hard, levels: vec![level(1, quadratic(p, q), 4)], ..Default::default() };
    (hierarchy, x, proof)
}

#[test]
fn hs76_is_accepted_with_its_published_multipliers() {
    let (hierarchy, x, proof) = hs76();
    let (faces, levels) = certify_optimality(&hierarchy, &x, &[proof]);
    assert!(faces.passes(), "{faces:?}");
    assert!(levels[0].passes(), "{levels:?}");
    assert!(levels[0].stationarity < 1e-15, "{levels:?}");
}

#[test]
fn hs76_with_any_multiplier_off_is_refused() {
    for (row, change, expected) in [
        (0, 1e-6, vec!["stationarity"]),
        (5, 1e-6, vec!["stationarity"]),
        // A multiplier on a row with room left is not complementary either.
        (1, 1e-6, vec!["stationarity", "complementarity"]),
        (3, -1e-6, vec!["stationarity", "complementarity", "dual"]),
    ] {
        let (hierarchy, x, mut proof) = hs76();
        proof.multipliers[row] += change;
        let (_, levels) = certify_optimality(&hierarchy, &x, &[proof]);
        assert_eq!(failing(&levels[0]), expected, "row {row}: {levels:?}");
    }
    for row in [0, 5] {
        let (hierarchy, x, mut proof) = hs76();
        proof.multipliers[row] *= -1.0;
        let (_, levels) = certify_optimality(&hierarchy, &x, &[proof]);
        assert_eq!(failing(&levels[0]), ["stationarity", "dual"], "row {row}: {levels:?}");
    }
}

#[test]
fn a_point_beside_the_optimum_is_refused() {
    // Along the active row, so that it stays feasible.
    let (hierarchy, mut x, proof) = hs76();
    x[0] += 2e-6;
    x[1] -= 1e-6;
    let (_, levels) = certify_optimality(&hierarchy, &x, &[proof]);
    assert_eq!(failing(&levels[0]), ["stationarity"], "{levels:?}");
    let (hierarchy, mut x, proof) = hs76();
    x[2] = -1e-6;
    let (_, levels) = certify_optimality(&hierarchy, &x, &[proof]);
    assert!(failing(&levels[0]).contains(&"feasibility"), "{levels:?}");
}

#[test]
fn numbers_that_are_none_and_missing_proofs_never_pass() {
    let (hierarchy, x, mut proof) = hs76();
    let (_, levels) = certify_optimality(&hierarchy, &x, &[]);
    assert!(!levels[0].passes());
    proof.multipliers[2] = f64::NAN;
    let (_, levels) = certify_optimality(&hierarchy, &x, &[proof]);
    assert!(!levels[0].passes(), "{levels:?}");
    let (hierarchy, x, mut proof) = hs76();
    proof.multipliers.pop();
    let (faces, levels) = certify_optimality(&hierarchy, &x, &[proof]);
    assert!(!levels[0].passes() && !faces.passes());
}

#[test]
fn hs35_is_accepted_with_its_multiplier() {
    // Hock & Schittkowski 1981, HS35, quoted from memory (exact): (4/3, 7/9, 4/9), multiplier 2/9.
    #[rustfmt::skip]
    let p = DMatrix::from_row_slice(3, 3, &[4.0, 2.0, 2.0,  2.0, 4.0, 0.0,  2.0, 0.0, 2.0]);
    let q = DVector::from_vec(vec![-8.0, -6.0, -4.0]);
    let mut hard = ConicRows::new(3);
    let rows = [
        (vec![1.0, 1.0, 2.0], 3.0),
        (vec![-1.0, 0.0, 0.0], 0.0),
        (vec![0.0, -1.0, 0.0], 0.0),
        (vec![0.0, 0.0, -1.0], 0.0),
    ];
    push(&mut hard, Cone::Nonnegative(4), &rows, "hs35", false);
    let proof = proof(1, &hard, vec![2.0 / 9.0, 0.0, 0.0, 0.0]);
    let hierarchy = Hierarchy { hard, levels: vec![level(1, quadratic(p, q), 3)], ..Default::default() };
    let (_, levels) = certify_optimality(&hierarchy, &[4.0 / 3.0, 7.0 / 9.0, 4.0 / 9.0], &[proof]);
    assert!(levels[0].passes(), "{levels:?}");
}

/// Projection of (30, 40; 60) on `|v| <= t/2`: (20.4, 27.2; 68) (Boyd & Vandenberghe 2004, quoted from memory);
/// the multiplier (32, -19.2, -25.6) is derived from stationarity.
fn projection() -> (Hierarchy, Vec<f64>, LevelProof) {
    let mut hard = ConicRows::new(3);
    let rows =
        [(vec![0.0, 0.0, -0.5], 0.0), (vec![-1.0, 0.0, 0.0], 0.0), (vec![0.0, -1.0, 0.0], 0.0)];
    push(&mut hard, Cone::SecondOrder(3), &rows, "cone", false);
    let task = residuals(
        3,
        &[(vec![1.0, 0.0, 0.0], 30.0, 1.0), (vec![0.0, 1.0, 0.0], 40.0, 1.0), (vec![0.0, 0.0, 1.0], 60.0, 1.0)],
    );
    let proof = proof(1, &hard, vec![32.0, -19.2, -25.6]);
    (Hierarchy { hard, levels: vec![level(1, task, 3)], ..Default::default() }, vec![20.4, 27.2, 68.0], proof)
}

#[test]
fn projection_on_a_second_order_cone() {
    let (hierarchy, x, good) = projection();
    let (_, levels) = certify_optimality(&hierarchy, &x, std::slice::from_ref(&good));
    assert!(levels[0].passes(), "{levels:?}");
    // Swapped components of the multiplier: still in the cone, yet wrong.
    let mut swapped = good.clone();
    swapped.multipliers.swap(1, 2);
    let (_, levels) = certify_optimality(&hierarchy, &x, &[swapped]);
    assert_eq!(failing(&levels[0]), ["stationarity", "complementarity"]);
    let mut outside = good;
    outside.multipliers[0] -= 1e-5;
    let (_, levels) = certify_optimality(&hierarchy, &x, &[outside]);
    assert!(failing(&levels[0]).contains(&"dual"), "{levels:?}");
}

#[test]
fn a_cone_face_exposed_by_its_multiplier_may_be_frozen() {
    // After the projection s lies on the ray (1, .6, .8) and the residuals are frozen; second priority: v_x = 0.
    // Everything is decided, so the multipliers of the frozen rows balance the second priority alone.
    let (mut hierarchy, x, first) = projection();
    hierarchy.levels.push(level(2, residuals(3, &[(vec![1.0, 0.0, 0.0], 0.0, 1.0)]), 3));
    let mut system = ConicRows::new(3);
    let face = [(vec![0.8, -0.6, 0.0], 0.0), (vec![-1.0, 0.0, 0.3], 0.0)];
    push(&mut system, Cone::Zero(2), &face, "face", false);
    push(&mut system, Cone::Zero(1), &[(vec![1.0, 0.0, 0.0], 20.4)], "frozen", false);
    push(&mut system, Cone::Nonnegative(1), &[(vec![0.0, 0.0, -1.0], 0.0)], "ray", false);
    let second = proof(2, &system, vec![0.0, 0.0, -40.8, 0.0]);
    let (faces, levels) = certify_optimality(&hierarchy, &x, &[first.clone(), second.clone()]);
    assert!(faces.passes() && levels[1].passes(), "{faces:?} {levels:?}");

    // The same without the first level's residuals: the ray alone is exposed, the frozen row is not.
    hierarchy.levels[0].residuals = residuals(3, &[]);
    let (faces, _) = certify_optimality(&hierarchy, &x, &[first, second]);
    assert!(!faces.passes() && faces.worst.contains("frozen"), "{faces:?}");
}

#[test]
fn a_level_may_not_assume_what_nothing_implies() {
    // Lexicographic case (derived): x + y <= 1, then (x, y) = (2, 2) gives (.5, .5). Claimed instead: (1, 0), made
    // "optimal" by a row of its own.
    let mut hard = ConicRows::new(2);
    push(&mut hard, Cone::Nonnegative(1), &[(vec![1.0, 1.0], 1.0)], "cap", false);
    let task = residuals(2, &[(vec![1.0, 0.0], 2.0, 1.0), (vec![0.0, 1.0], 2.0, 1.0)]);
    let hierarchy = Hierarchy { hard: hard.clone(), levels: vec![level(1, task, 2)], ..Default::default() };
    let honest = proof(1, &hard, vec![3.0]);
    let (faces, levels) = certify_optimality(&hierarchy, &[0.5, 0.5], &[honest]);
    assert!(faces.passes() && levels[0].passes(), "{faces:?} {levels:?}");

    for cone in [Cone::Zero(1), Cone::Nonnegative(1)] {
        let mut system = hard.clone();
        push(&mut system, cone, &[(vec![0.0, 1.0], 0.0)], "invented", false);
        let dishonest = proof(1, &system, vec![2.0, 2.0]);
        let (faces, levels) = certify_optimality(&hierarchy, &[1.0, 0.0], &[dishonest]);
        assert!(levels[0].passes(), "the proof is sound but for its premise: {levels:?}");
        assert!(!faces.passes() && faces.worst.contains("invented"), "{faces:?}");
    }
}

#[test]
fn strict_order_of_three_levels() {
    // Derived: sum x = 3; x1 - x2 = 1 and = 3; x = 0 gives (2, 0, 1).
    let sum = vec![1.0, 1.0, 1.0];
    let apart = vec![1.0, -1.0, 0.0];
    let unit = |k: usize| (0..3).map(|j| if j == k { 1.0 } else { 0.0 }).collect::<Vec<f64>>();
    let levels = vec![
        level(1, residuals(3, &[(sum.clone(), 3.0, 1.0)]), 3),
        level(2, residuals(3, &[(apart.clone(), 1.0, 1.0), (apart.clone(), 3.0, 1.0)]), 3),
        level(3, residuals(3, &[(unit(0), 0.0, 1.0), (unit(1), 0.0, 1.0), (unit(2), 0.0, 1.0)]), 3),
    ];
    let hierarchy = Hierarchy { hard: ConicRows::new(3), levels, ..Default::default() };
    let none = ConicRows::new(3);
    let mut first = ConicRows::new(3);
    push(&mut first, Cone::Zero(1), &[(sum, 3.0)], "level 1", false);
    let mut both = first.clone();
    push(&mut both, Cone::Zero(1), &[(apart, 2.0)], "level 2", false);
    // 2 x + y1 (1,1,1) + y2 (1,-1,0) = 0 at (2,0,1): y1 = -2, y2 = -2.
    let proofs = vec![proof(1, &none, vec![]), proof(2, &first, vec![0.0]), proof(3, &both, vec![-2.0, -2.0])];
    let (faces, checks) = certify_optimality(&hierarchy, &[2.0, 0.0, 1.0], &proofs);
    assert!(faces.passes() && checks.iter().all(LevelCheck::passes), "{faces:?} {checks:?}");

    // The least of the plain sum of all three costs (derived: 4 e'x = 9, 5 d'x = 8, e'x + x3 = 3) is another point.
    let (_, checks) = certify_optimality(&hierarchy, &[1.55, -0.05, 0.75], &proofs);
    assert!(!checks[0].passes() && !checks[1].passes());
}

/// Derived: x <= 0 and x >= 1, soft; y = x + 1; then x = 7 and y = 0: (.5, 1.5).
fn soft_limits() -> (Hierarchy, Vec<f64>, Vec<LevelProof>) {
    let mut soft = ConicRows::new(2);
    push(&mut soft, Cone::Nonnegative(2), &[(vec![1.0, 0.0], 0.0), (vec![-1.0, 0.0], -1.0)], "soft", false);
    let first = Level { priority: 1, residuals: residuals(2, &[]), soft, soft_weight: vec![1.0, 1.0] };
    let second = level(2, residuals(2, &[(vec![-1.0, 1.0], 1.0, 1.0)]), 2);
    let third = level(3, residuals(2, &[(vec![1.0, 0.0], 7.0, 1.0), (vec![0.0, 1.0], 0.0, 1.0)]), 2);
    let none = ConicRows::new(2);
    let one = LevelProof {
        soft_slack: vec![0.5, 0.5],
        soft_multipliers: vec![1.0, 1.0],
        ..proof(1, &none, vec![])
    };
    let mut relaxed = ConicRows::new(2);
    push(&mut relaxed, Cone::Nonnegative(2), &[(vec![1.0, 0.0], 0.5), (vec![-1.0, 0.0], -0.5)], "soft", false);
    let mut frozen = ConicRows::new(2);
    push(&mut frozen, Cone::Zero(2), &[(vec![1.0, 0.0], 0.5), (vec![-1.0, 1.0], 1.0)], "frozen", false);
    // 2 (x - 7, y) + y1 (1, 0) + y2 (-1, 1) = 0 at (.5, 1.5): y2 = -3, y1 = 13 - 3 = 10.
    let proofs = vec![one, proof(2, &relaxed, vec![0.0, 0.0]), proof(3, &frozen, vec![10.0, -3.0])];
    let hierarchy = Hierarchy { hard: none, levels: vec![first, second, third], ..Default::default() };
    (hierarchy, vec![0.5, 1.5], proofs)
}

#[test]
fn soft_limits_carry_their_excess_forward() {
    let (hierarchy, x, proofs) = soft_limits();
    let (faces, checks) = certify_optimality(&hierarchy, &x, &proofs);
    assert!(faces.passes() && checks.iter().all(LevelCheck::passes), "{faces:?} {checks:?}");
}

#[test]
fn a_soft_limit_whose_excess_is_misstated_is_refused() {
    let (hierarchy, x, mut proofs) = soft_limits();
    proofs[0].soft_slack[0] += 1e-6;
    let (_, checks) = certify_optimality(&hierarchy, &x, &proofs);
    assert!(failing(&checks[0]).contains(&"feasibility"), "{checks:?}");
    let (hierarchy, x, mut proofs) = soft_limits();
    proofs[0].soft_multipliers = vec![1.0 + 1e-6, 1.0 + 1e-6];
    let (_, checks) = certify_optimality(&hierarchy, &x, &proofs);
    // 2 w t - z < 0: more multiplier than the cost of the excess allows.
    assert_eq!(failing(&checks[0]), ["complementarity", "dual"], "{checks:?}");
    // Relaxed by more than was granted: not implied.
    let (hierarchy, x, mut proofs) = soft_limits();
    proofs[0].soft_multipliers = vec![0.0, 0.0];
    proofs[1].system.rhs[0] += 0.1;
    let (faces, _) = certify_optimality(&hierarchy, &x, &proofs);
    assert!(!faces.passes(), "{faces:?}");
}

#[test]
fn a_face_that_no_multiplier_exposes_is_not_certified() {
    // Derived, two ways: mu = .6, level 1 fx = 60 and fn = 100, level 2 fy = 10; the exact answer is fy = 0. Level 1
    // is met without any multiplier, so nothing in its proof exposes the face s_y = 0: ill-posed, not certified.
    let mut hard = ConicRows::new(3);
    let rows =
        [(vec![0.0, 0.0, -0.6], 0.0), (vec![-1.0, 0.0, 0.0], 0.0), (vec![0.0, -1.0, 0.0], 0.0)];
    push(&mut hard, Cone::SecondOrder(3), &rows, "cone", false);
    let wish = [(vec![1.0, 0.0, 0.0], 60.0, 1.0), (vec![0.0, 0.0, 1.0], 100.0, 1.0)];
    let levels = vec![
        level(1, residuals(3, &wish), 3),
        level(2, residuals(3, &[(vec![0.0, 1.0, 0.0], 10.0, 1.0)]), 3),
    ];
    let hierarchy = Hierarchy { hard: hard.clone(), levels, ..Default::default() };
    let first = proof(1, &hard, vec![0.0; 3]);
    let mut system = ConicRows::new(3);
    let frozen = [(vec![1.0, 0.0, 0.0], 60.0), (vec![0.0, 0.0, 1.0], 100.0), (vec![0.0, 1.0, 0.0], 0.0)];
    push(&mut system, Cone::Zero(3), &frozen, "frozen", false);
    let second = proof(2, &system, vec![0.0, 0.0, 20.0]);
    let (faces, checks) = certify_optimality(&hierarchy, &[60.0, 0.0, 100.0], &[first.clone(), second]);
    assert!(checks[1].passes() && !faces.passes(), "{faces:?} {checks:?}");

    // What an engine answered with the rows frozen and the cone kept: .22 N. Refused as well.
    let mut kept = hard.clone();
    push(&mut kept, Cone::Zero(2), &frozen[..2], "frozen", false);
    let second = proof(2, &kept, vec![0.0; 5]);
    let (_, checks) = certify_optimality(&hierarchy, &[60.0, 0.22, 100.0], &[first, second]);
    assert!(!checks[1].passes());
}

#[test]
fn opposite_rows_without_room_are_an_equality() {
    // x <= 1 and -x <= -1 (scaled differently), y = x wanted: (1, 1). With room between them x = 1 is an assumption.
    let verdict = |lower: f64| {
        let mut hard = ConicRows::new(2);
        push(&mut hard, Cone::Nonnegative(2), &[(vec![1.0, 0.0], 1.0), (vec![-3.0, 0.0], -3.0 * lower)], "range", false);
        let task = residuals(2, &[(vec![-1.0, 1.0], 0.0, 1.0)]);
        let hierarchy = Hierarchy { hard, levels: vec![level(1, task, 2)], ..Default::default() };
        let mut system = ConicRows::new(2);
        push(&mut system, Cone::Zero(1), &[(vec![2.0, 0.0], 2.0)], "pinched", false);
        certify_optimality(&hierarchy, &[1.0, 1.0], &[proof(1, &system, vec![0.0])])
    };
    let (faces, levels) = verdict(1.0);
    assert!(faces.passes() && levels[0].passes(), "{faces:?} {levels:?}");
    assert!(!verdict(0.999).0.passes());
}
