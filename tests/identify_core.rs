//! Recursive least squares against published and certified results.

mod identify_support;

use identify_support::Random;
use nalgebra::{DMatrix, DVector};
use serde_json::Value;
use underfoot::identify::change::compare;
use underfoot::identify::square_root::SquareRoot;
use underfoot::identify::whiteness::{LAGS, Whiteness, chi_squared_above};
use underfoot::identify::{Estimator, Prior};

fn data(text: &str) -> Value {
    serde_json::from_str(text).unwrap()
}

fn numbers(value: &Value) -> Vec<f64> {
    value.as_array().unwrap().iter().map(|x| x.as_f64().unwrap()).collect()
}

fn close(got: f64, expected: f64, tolerance: f64, what: &str) {
    assert!((got - expected).abs() <= tolerance * expected.abs(), "{what}: got {got:e}, expected {expected:e}");
}

/// Rows of a certified problem: powers of x, or the full matrix.
fn rows(name: &str, set: &Value) -> Vec<Vec<f64>> {
    if let Some(x) = set.get("X") {
        return x.as_array().unwrap().iter().map(numbers).collect();
    }
    let powers: &[i32] = match name {
        "NoInt1" | "NoInt2" => &[1],
        "Norris" => &[0, 1],
        "Pontius" => &[0, 1, 2],
        "Wampler1" => &[0, 1, 2, 3, 4, 5],
        _ => panic!("{name}"),
    };
    numbers(&set["x"]).iter().map(|x| powers.iter().map(|p| x.powi(*p)).collect()).collect()
}

/// NIST Statistical Reference Datasets, linear regression, certified values (published; the file holds them beside
/// exact rational solutions). The recursion takes the rows one by one and must reach them.
#[test]
fn certified_regressions_row_by_row_and_in_a_block() {
    let all = data(include_str!("data/nist_rls.json"));
    // Digits that a double carries, less what the conditioning of each problem takes (Longley is the worst).
    let sets = [("NoInt1", 1e-13), ("NoInt2", 1e-13), ("Norris", 1e-11), ("Pontius", 1e-10), ("Longley", 1e-8), ("Wampler1", 1e-8)];
    for (name, tolerance) in sets {
        let set = &all[name];
        let (rows, y) = (rows(name, set), numbers(&set["y"]));
        let n = rows[0].len();
        let mut recursive = SquareRoot::unknown(n);
        for (row, y) in rows.iter().zip(&y) {
            recursive.update(row, *y);
        }
        let mut block = SquareRoot::unknown(n);
        block.update_block(&DMatrix::from_fn(rows.len(), n, |i, k| rows[i][k]), &DVector::from_column_slice(&y));
        let certified = numbers(&set["certified_beta"]);
        let deviations = numbers(&set["certified_sd"]);
        let residual = set["certified_residual_sd"].as_f64().unwrap();
        for (way, core) in [("recursive", &recursive), ("block", &block)] {
            let x = core.solution().unwrap();
            let s = (core.rss() / (rows.len() - n) as f64).sqrt();
            let p = core.covariance().unwrap();
            for k in 0..n {
                close(x[k], certified[k], tolerance, &format!("{name} {way} beta {k}"));
                if residual > 0.0 {
                    close(s * p[(k, k)].sqrt(), deviations[k], tolerance.max(1e-13), &format!("{name} {way} sd {k}"));
                }
            }
            if residual > 0.0 {
                close(s, residual, tolerance, &format!("{name} {way} residual"));
            } else {
                assert!(s < 1e-6, "{name} {way}: {s}");
            }
        }
    }
}

/// Recursive least squares is the regularised batch solution (Ljung 1999, System Identification, quoted from memory):
/// `(lambda^n P0^-1 + sum lambda^(n-i) h'h)^-1 ...`. The figures are exact rationals, derived.
#[test]
fn the_recursion_is_the_regularised_batch_solution() {
    let all = data(include_str!("data/nist_rls.json"));
    for (name, lambda, p0) in [
        ("NoInt1", 1.0, 1.0), ("NoInt1", 1.0, 1e6), ("NoInt1", 0.95, 1.0), ("NoInt1", 0.95, 1e6),
        ("Norris", 1.0, 1.0), ("Norris", 1.0, 1e6), ("Norris", 0.98, 1.0), ("Norris", 0.98, 1e6),
    ] {
        let set = &all[name];
        let n = rows(name, set)[0].len();
        let mut core = SquareRoot::prior(&vec![0.0; n], &vec![f64::sqrt(p0); n]);
        for (row, y) in rows(name, set).iter().zip(numbers(&set["y"])) {
            core.forget(lambda);
            core.update(row, y);
        }
        let expected = &all["RLS"][format!("{name} lam={lambda:?} P0={p0:?}")];
        let (x, p) = (core.solution().unwrap(), core.covariance().unwrap());
        for i in 0..n {
            close(x[i], numbers(&expected["theta"])[i], 1e-11, &format!("{name} {lambda} {p0} theta {i}"));
            for k in 0..n {
                close(p[(i, k)], numbers(&expected["P"][i])[k], 1e-10, &format!("{name} {lambda} {p0} P {i}{k}"));
            }
        }
    }
}

/// A covariance reset in the middle of NoInt1, the value kept (exact rationals, derived).
#[test]
fn a_covariance_reset_keeps_the_value() {
    let all = data(include_str!("data/nist_rls.json"));
    let expected = &all["RLS"]["NoInt1 P0=0.01 theta0=0, 5 samples then covariance reset to 0.01 keeping theta, 6 samples"];
    let mut estimator = Estimator::new(Prior { scale: vec![1.0], mean: vec![0.0], deviation: vec![0.1] }, 1);
    let set = &all["NoInt1"];
    for (i, (x, y)) in numbers(&set["x"]).iter().zip(numbers(&set["y"])).enumerate() {
        if i == 5 {
            close(estimator.value().unwrap()[0], numbers(&expected["theta_before"])[0], 1e-13, "before");
            estimator.reset_covariance();
        }
        estimator.update(0, &[*x], y);
    }
    close(estimator.value().unwrap()[0], numbers(&expected["theta_after"])[0], 1e-13, "after");
    close(estimator.estimate().unwrap().memory[(0, 0)], expected["P_after"].as_f64().unwrap(), 1e-12, "P after");
}

struct Drop {
    rows: Vec<(usize, [f64; 2], f64)>,
    expected: Value,
}

/// Two landings on different ground, invented, with batch and recursive results derived by an independent code.
fn drop_log() -> Drop {
    let expected = data(include_str!("data/drop_log_expected.json"));
    let area = expected["A"].as_f64().unwrap();
    let lines = include_str!("data/drop_log.csv").lines().skip(1);
    let rows = lines
        .map(|line| {
            let cells: Vec<f64> = line.split(',').map(|cell| cell.parse().unwrap()).collect();
            (cells[0] as usize, [area * cells[2], area * cells[3]], cells[4])
        })
        .collect();
    Drop { rows, expected }
}

/// `vague` = 1 is the prior of the recorded recursion, P0 = diag(1e14, 1e10).
fn drop_estimator(vague: f64) -> Estimator {
    Estimator::new(Prior { scale: vec![1e6, 1e4], mean: vec![0.0; 2], deviation: vec![1e7 * vague, 1e5 * vague] }, 2)
}

/// The estimate after the whole drop log, `reset` being done at the second touchdown.
fn after_drop(reset: fn(&mut Estimator)) -> Vec<f64> {
    let mut estimator = drop_estimator(1.0);
    let mut stance = 0;
    for (touchdown, row, force) in &drop_log().rows {
        if *touchdown != stance {
            reset(&mut estimator);
        }
        stance = *touchdown;
        estimator.update(0, row, *force);
    }
    estimator.value().unwrap()
}

/// With the reset the second stance finds its own ground; without it both are mixed (derived, see [`drop_log`]; the
/// figures after a reset to the prior are the exact rational solution, derived). A reset that keeps the values as the new
/// mean differs from one that goes back to the prior's mean by as little as the prior weighs.
#[test]
fn a_reset_at_touchdown_forgets_the_first_ground() {
    let drop = drop_log();
    let results = &drop.expected["results"]["rls_P0=diag(1e14,1e10)_theta0=0"];
    let kept = numbers(&results["after_td1_with_reset"]);
    let mixed = numbers(&results["after_200_without_reset"]);
    let anew = vec![2000005.4355077804, 10000.090745907954];
    let ways: [(fn(&mut Estimator), _, _); 3] = [
        (Estimator::reset_covariance, kept, "covariance reset"),
        (Estimator::reset, anew, "reset"),
        (|_| (), mixed, "no reset"),
    ];
    for (reset, expected, name) in ways {
        for (got, expected) in after_drop(reset).iter().zip(expected) {
            close(*got, expected, 1e-11, name);
        }
    }
    let truth = drop.expected["true"][1][0].as_f64().unwrap();
    assert!((after_drop(Estimator::reset)[0] - truth).abs() < 1e-4 * truth);
    assert!((after_drop(|_| ())[0] - truth).abs() > 0.1 * truth);
    let p = &results["P_after_td1_reset"];
    let mut estimator = drop_estimator(1.0);
    drop.rows.iter().filter(|row| row.0 == 1).for_each(|(_, row, force)| { estimator.update(0, row, *force); });
    let memory = estimator.estimate().unwrap().memory;
    let scale = [1e6, 1e4];
    for i in 0..2 {
        for k in 0..2 {
            close(memory[(i, k)] * scale[i] * scale[k], numbers(&p[i])[k], 1e-7, "P after the second touchdown");
        }
    }
}

/// Error bars of the batch solution (derived, see [`drop_log`]).
#[test]
fn error_bars_of_the_drop_log() {
    let drop = drop_log();
    for stance in 0..2 {
        let rows: Vec<_> = drop.rows.iter().filter(|row| row.0 == stance).collect();
        let expected = &drop.expected["results"][format!("batch_touchdown{stance}")];
        let mut recursive = drop_estimator(1e3);
        let mut block = drop_estimator(1e3);
        rows.iter().for_each(|(_, row, force)| { recursive.update(0, row, *force); });
        block.update_block(
            0,
            &DMatrix::from_fn(rows.len(), 2, |i, k| rows[i].1[k]),
            &DVector::from_fn(rows.len(), |i, _| rows[i].2),
        );
        for (way, estimator) in [("recursive", recursive), ("block", block)] {
            let estimate = estimator.estimate().unwrap();
            close(estimate.value[0], expected["k"].as_f64().unwrap(), 1e-10, way);
            close(estimate.value[1], expected["b"].as_f64().unwrap(), 1e-10, way);
            close(estimate.covariance[(0, 0)].sqrt(), expected["sd_k"].as_f64().unwrap(), 1e-4, way);
            close(estimate.covariance[(1, 1)].sqrt(), expected["sd_b"].as_f64().unwrap(), 1e-4, way);
        }
    }
}

/// What is kept as `P W P` is the recursion `V <- (I - K h) V (I - K h)' + s^2 K K'`, written out here with the gain.
#[test]
fn the_sandwich_is_the_joseph_recursion() {
    let mut random = Random(7);
    let lambda = 0.97;
    let mut estimator = Estimator::new(Prior { scale: vec![1.0; 3], mean: vec![0.0; 3], deviation: vec![10.0; 3] }, 3);
    let mut p = DMatrix::identity(3, 3) * 100.0;
    let mut v = p.clone();
    let rows: Vec<[f64; 3]> = (0..300).map(|_| [random.normal(), random.normal(), random.normal()]).collect();
    let y: Vec<f64> = rows.iter().map(|r| r[0] - 2.0 * r[1] + 0.5 * r[2] + 0.3 * random.normal()).collect();
    for (row, y) in rows.iter().zip(&y) {
        estimator.forget(lambda);
        estimator.update(0, row, *y);
    }
    let estimate = estimator.estimate().unwrap();
    let variance = estimate.noise[0].unwrap().powi(2);
    for row in &rows {
        let h = DMatrix::from_row_slice(1, 3, row);
        p /= lambda;
        let gain = &p * h.transpose() / (1.0 + (&h * &p * h.transpose())[0]);
        let left = DMatrix::identity(3, 3) - &gain * &h;
        p = &left * p;
        v = &left * v * left.transpose() + &gain * gain.transpose() * variance;
    }
    for (got, expected) in estimate.covariance.iter().zip(v.iter()) {
        assert!((got - expected).abs() < 1e-9 * v.amax(), "{got} {expected}");
    }
}

/// Tables of the chi-squared distribution (published in every handbook; quoted from memory): upper 5 % and 1 % points.
#[test]
fn chi_squared_tails() {
    for (degrees, five, one) in [(2, 5.991, 9.210), (4, 9.488, 13.277), (10, 18.307, 23.209)] {
        close(chi_squared_above(five, degrees), 0.05, 2e-3, "5 %");
        close(chi_squared_above(one, degrees), 0.01, 2e-3, "1 %");
    }
}

/// White residuals are refused in 5 % of cases at the 5 % level; residuals that remember half of the last one always.
#[test]
fn whiteness_tells_white_from_coloured() {
    let runs = 1000;
    let mut refused = [0; 2];
    for run in 0..runs {
        let mut random = Random(1000 + run);
        for (coloured, refused) in refused.iter_mut().enumerate() {
            let mut test = Whiteness::default();
            let mut last = 0.0;
            for _ in 0..300 {
                last = random.normal() + 0.5 * coloured as f64 * last;
                test.push(last);
            }
            *refused += usize::from(test.verdict().unwrap().probability < 0.05);
        }
    }
    assert_eq!(LAGS, 10);
    // Three standard errors of a share of 5 % in 1000 runs are 2.1 %.
    assert!((29..=71).contains(&refused[0]), "{refused:?}");
    assert!(refused[1] > 990, "{refused:?}");
}

/// The same ground twice is called changed in 5 % of cases at the 5 % level.
#[test]
fn a_change_is_called_as_often_as_it_should_be() {
    let covariance = DMatrix::from_row_slice(2, 2, &[4.0, 1.0, 1.0, 9.0]);
    let lower = covariance.clone().cholesky().unwrap().l();
    let mut random = Random(3);
    let mut called = 0;
    for _ in 0..2000 {
        let mut draw = || {
            let x = &lower * DVector::from_vec(vec![random.normal(), random.normal()]);
            [100.0 + x[0], 50.0 + x[1]]
        };
        let (first, second) = (draw(), draw());
        let change = compare((&first, &covariance), (&second, &covariance)).unwrap();
        called += usize::from(change.probability < 0.05);
    }
    // Derived: 100 expected, standard error 9.7; three of them.
    assert!((71..=129).contains(&called), "{called}");
}

/// A long still stretch under strong forgetting leaves an estimator that can be read and that learns again.
#[test]
fn forgetting_does_not_wind_up() {
    let mut random = Random(9);
    let mut estimator = Estimator::new(Prior { scale: vec![1.0; 2], mean: vec![0.0; 2], deviation: vec![1e3; 2] }, 2);
    for i in 0..60_000 {
        let still = i > 200 && i < 59_000;
        let row = if still { [1.0, 0.0] } else { [random.normal(), random.normal()] };
        estimator.forget(0.9);
        estimator.update(0, &row, 2.0 * row[0] - 3.0 * row[1] + 0.1 * random.normal());
        if i == 58_999 {
            let estimate = estimator.estimate().unwrap();
            // Next to nothing is remembered of the second parameter; its value stands, and so does the error of that value.
            assert!(estimate.memory[(1, 1)] > 1e6 && estimate.memory[(1, 1)] < 1e20, "{estimate:?}");
            assert!((estimate.value[0] - 2.0).abs() < 0.2 && (estimate.value[1] + 3.0).abs() < 0.2);
        }
    }
    let value = estimator.value().unwrap();
    assert!((value[0] - 2.0).abs() < 0.2 && (value[1] + 3.0).abs() < 0.2, "{value:?}");
}

/// A touchdown forgets the ground and keeps the sensor's bias with its error bar; over many stances the bias is known as
/// well as from all samples at once, by intervals that hold the truth in 95 % of runs.
#[test]
fn a_reset_keeps_what_is_known_of_the_sensor() {
    let (runs, stances, bias) = (1000, 8, 3.0);
    let mut held = 0;
    for run in 0..runs {
        let mut random = Random(40_000 + run);
        let prior = Prior { scale: vec![1.0, 10.0], mean: vec![0.0; 2], deviation: vec![1e3, 1e4] };
        let mut estimator = Estimator::new(prior, 1);
        for stance in 0..stances {
            if stance > 0 {
                let before = estimator.estimate().unwrap();
                estimator.reset();
                let after = estimator.estimate().unwrap();
                close(after.value[1], before.value[1], 1e-9, "bias");
                close(after.covariance[(1, 1)], before.covariance[(1, 1)], 1e-9, "its variance");
                assert!(after.covariance[(0, 0)].sqrt() > 900.0 && after.value[0].abs() < 1e-9, "{after:?}");
            }
            let stiffness = 5.0 + stance as f64;
            for _ in 0..30 {
                let x = 1.0 + 0.3 * random.normal();
                estimator.update(0, &[x, 1.0], stiffness * x + bias + 0.5 * random.normal());
            }
        }
        let estimate = estimator.estimate().unwrap();
        let deviation = estimate.covariance[(1, 1)].sqrt();
        // Derived: the slope's share of a stance's 30 samples leaves the bias 0.5 sqrt(1 + 1/0.09) / sqrt(30), eight times.
        close(deviation, 0.5 * (1.0_f64 + 1.0 / 0.09).sqrt() / (30.0 * stances as f64).sqrt(), 0.35, "deviation");
        held += usize::from((estimate.value[1] - bias).abs() <= 1.96 * deviation);
    }
    println!("bias over stances: {held} of {runs}");
    assert!((930..=970).contains(&held), "{held}");
}
