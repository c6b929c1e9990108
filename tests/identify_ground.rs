//! From samples to the ground: the regression against the law, coverage of error bars, changing ground, noise on the motion,
//! lag between force and motion. The truth is the bonded law, which has checks of its own against quadrature.

mod identify_support;

use identify_support::*;
use underfoot::identify::regressor::{Sole, columns};
use underfoot::identify::setup::*;
use underfoot::identify::parameters::Parameter;
use underfoot::identify::{Follower, Frame, Report, Row, Session, SoleRow};
use underfoot::contact::law::bonded_wrench;
use underfoot::contact::{Material, SoleMotion};
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Mat6, Pose, Twist, Vec3, Vec6, exp_so3};

const STEP: f64 = 0.002;

/// The columns times the parameters are the law's wrench, for any pose, twist and ground.
#[test]
fn columns_make_up_the_law() {
    let mut random = Random(11);
    for shape in [rectangle(), SoleShape::Point] {
        for _ in 0..200 {
            let material = Material {
                normal_stiffness: 1e6 * random.uniform(),
                tangential_stiffness: 1e6 * random.uniform(),
                normal_damping: 1e4 * random.uniform(),
                tangential_damping: 1e4 * random.uniform(),
            };
            let normal = random.vector(1.0).normalize();
            let pose = |random: &mut Random| Pose { rotation: exp_so3(&random.vector(0.5)), translation: random.vector(0.1) };
            let rest = pose(&mut random);
            let motion = underfoot::identify::regressor::Motion {
                pose: pose(&mut random),
                twist: Twist { linear: random.vector(0.3), angular: random.vector(0.5) },
            };
            let height = 0.01 * random.normal();
            let raised = Pose { translation: rest.translation + normal * height, ..rest };
            let state = SoleMotion { pose: motion.pose, twist: motion.twist };
            let law = bonded_wrench(&shape, &material, &normal, &raised, &Twist::zero(), &state);
            let law = law.rotated(&motion.pose.rotation.transpose()).to_vec6();
            use Parameter as P;
            let parameters = [P::NormalStiffness, P::TangentialStiffness, P::NormalDamping, P::TangentialDamping, P::Height];
            let mut out = vec![Vec6::zeros(); 5];
            columns(&Sole::of(&shape), &parameters, &normal, &rest, &Mat6::identity(), &motion, &mut out);
            let values = [
                material.normal_stiffness, material.tangential_stiffness, material.normal_damping,
                material.tangential_damping, material.normal_stiffness * height,
            ];
            let sum = out.iter().zip(values).fold(Vec6::zeros(), |sum, (column, value)| sum + column * value);
            assert!((sum - law).amax() < 1e-12 * law.amax().max(1.0), "{sum} {law}");
        }
    }
}

/// One stance of `count` samples on k = 2e6, b = 2e4; the estimator at its end.
fn one_stance(setup: &Setup, frame: &Frame, seed: u64, count: usize, noise: (f64, f64)) -> Follower {
    let mut random = Random(seed);
    let mut follower = Follower::new(setup, frame, setup.lags[0]);
    let (shape, truth) = (rectangle(), isotropic(2e6, 2e4));
    for i in 0..count {
        let t = STEP * i as f64;
        let motion = stance_motion(t, 0.001, 0.008);
        let wrench = wrench(&shape, &truth, &motion, 0.001);
        follower.push(setup, 0, frame, &sample(&mut random, t, motion, &wrench, noise));
    }
    follower
}

/// Share of runs in which the 95 % interval of k and of b holds the truth, from the sandwich and from P alone.
fn coverage(setup: &Setup, noise: (f64, f64), runs: u64) -> [[f64; 2]; 2] {
    let frame = frame(setup);
    let mut held = [[0; 2]; 2];
    for run in 0..runs {
        let follower = one_stance(setup, &frame, 5000 + run, 400, noise);
        let estimate = follower.estimator().estimate().unwrap();
        let scale = &follower.estimator().prior().scale;
        for (k, truth) in [2e6, 2e4].into_iter().enumerate() {
            let error = (estimate.value[k] - truth).abs();
            let sandwich = estimate.covariance[(k, k)].sqrt();
            let memory = estimate.memory[(k, k)].sqrt() * scale[k] * estimate.noise[0].unwrap();
            held[0][k] += usize::from(error <= 1.96 * sandwich);
            held[1][k] += usize::from(error <= 1.96 * memory);
        }
    }
    held.map(|way| way.map(|count| count as f64 / runs as f64))
}

/// Noise on the wrench only, nothing forgotten, rest height unknown; moments three times as noisy as assumed.
#[test]
fn intervals_hold_the_truth_in_95_per_cent_of_runs() {
    let setup = setup(rectangle());
    let [sandwich, _] = coverage(&setup, (4.0, 0.8), 1000);
    println!("coverage without forgetting: {sandwich:?}");
    assert!(sandwich.iter().all(|share| (0.93..=0.97).contains(share)), "{sandwich:?}");
}

/// With forgetting the sandwich form still holds; P alone covers nearly everything, as it is no covariance then.
#[test]
fn intervals_hold_under_forgetting_in_the_sandwich_form_alone() {
    let setup = Setup { forgetting: Forgetting::Factor(0.99), ..setup(rectangle()) };
    let [sandwich, memory] = coverage(&setup, (4.0, 0.3), 1000);
    println!("coverage with lambda = 0.99: sandwich {sandwich:?}, P alone {memory:?}");
    assert!(sandwich.iter().all(|share| (0.93..=0.97).contains(share)), "{sandwich:?}");
    assert!(memory.iter().all(|share| *share > 0.98), "{memory:?}");
}

fn row(line: u64, time: f64, sample: &underfoot::identify::Matched, twist: bool) -> Row {
    let motion = Some((sample.motion.pose, twist.then_some(sample.motion.twist)));
    Row { line, time, soles: vec![SoleRow { sole: 0, wrench: sample.wrench.to_vec6(), motion, stands: None }], state: None }
}

/// A sole walks over four patches of different ground, 1.6 s on each, 0.4 s of coming down before, and 0.2 s without samples
/// between.
const PATCHES: [(f64, f64, f64); 4] = [(3e6, 3e4, 0.0), (8e5, 1.2e4, 0.01), (2e6, 1e4, -0.005), (5e6, 6e4, 0.002)];

fn walk(seed: u64, noise: (f64, f64), mut push: impl FnMut(f64, underfoot::identify::Matched, usize, f64)) {
    let mut random = Random(seed);
    let shape = rectangle();
    let mut line = 0;
    for (patch, (k, b, height)) in PATCHES.into_iter().enumerate() {
        let sink = 400.0 / (k * 0.022);
        for i in 0..1000 {
            let t = STEP * i as f64 - 0.4;
            let time = STEP * line as f64 + 0.2 * patch as f64;
            line += 1;
            let (motion, force) = if t < 0.0 {
                // On the way down at the speed of the touchdown.
                let mut down = stance_motion(0.0, height, sink);
                down.pose.translation += down.twist.linear * t;
                down.pose.rotation = exp_so3(&(down.twist.angular * t));
                (down, underfoot::spatial::Wrench::zero())
            } else {
                let motion = stance_motion(t, height, sink);
                let mut force = wrench(&shape, &isotropic(k, b), &motion, height);
                // The ground does not pull: the last samples of a fall may hold damping alone.
                if force.force.z < 0.0 {
                    force = underfoot::spatial::Wrench::zero();
                }
                (motion, force)
            };
            push(time, sample(&mut random, time, motion, &force, noise), patch, t);
        }
    }
}

/// With the reset, estimates settle within a second of each touchdown (common practice, no source): k within 3 % and b within
/// 10 % of the truth from then on; the error bar of b is some 3 % by then on the ground that tells it least.
#[test]
fn estimates_settle_within_a_second_of_touchdown_on_ground_that_changes() {
    let setup = setup(rectangle());
    let frame = frame(&setup);
    for seed in 0..20 {
        let mut follower = Follower::new(&setup, &frame, setup.lags[0]);
        let mut worst = [0.0_f64; 2];
        walk(seed, (3.0, 0.2), |_, sample, patch, t| {
            follower.push(&setup, 0, &frame, &sample);
            if t >= 1.0 {
                let value = follower.estimator().value().unwrap();
                let (k, b, _) = PATCHES[patch];
                worst[0] = worst[0].max((value[0] / k - 1.0).abs());
                worst[1] = worst[1].max((value[1] / b - 1.0).abs());
            }
        });
        assert!(worst[0] < 0.03 && worst[1] < 0.1, "seed {seed}: {worst:?}");
    }
}

fn report(setup: Setup, seed: u64, noise: (f64, f64), twist: bool) -> Report {
    let mut session = Session::new(setup);
    let mut line = 0;
    walk(seed, noise, |time, sample, _, _| {
        line += 1;
        session.push(&row(line, time, &sample, twist));
    });
    session.finish()
}

/// The whole path: four stances, each on its own ground, every change significant; rest heights come out as well.
#[test]
fn a_session_reports_every_stance_and_every_change() {
    let report = report(setup(rectangle()), 1, (3.0, 0.2), true);
    let sole = &report.soles[0];
    assert_eq!(sole.stances.len(), 4);
    for (stance, (k, b, _)) in sole.stances.iter().zip(PATCHES) {
        assert!((stance.values[0].value / k - 1.0).abs() < 0.02, "{stance:?}");
        assert!((stance.values[1].value / b - 1.0).abs() < 0.08, "{stance:?}");
        assert!(stance.unphysical.is_empty() && stance.axes.len() == 6);
        assert!((stance.axes[2].rms - 3.0).abs() < 0.3 && (stance.axes[3].rms - 0.2).abs() < 0.02, "{:?}", stance.axes);
    }
    assert!(sole.stances[0].change.is_none());
    assert!(sole.stances[1..].iter().all(|stance| stance.change.unwrap().probability < 1e-6));
    assert_eq!((report.rows, report.skipped), (4000, 0));
    assert!(sole.history.len() <= 401 && sole.history.len() > 100);
}

/// Without twists the local polynomial finds them.
#[test]
fn twists_are_found_from_poses() {
    let report = report(setup(rectangle()), 2, (3.0, 0.2), false);
    for (stance, (k, b, _)) in report.soles[0].stances.iter().zip(PATCHES) {
        assert!((stance.values[0].value / k - 1.0).abs() < 0.03, "{stance:?}");
        // The window of 22 ms rounds off the fall of the first 30 ms.
        assert!((stance.values[1].value / b - 1.0).abs() < 0.1, "{stance:?}");
    }
}

/// Force 6 ms late through a low-pass of 4 ms: found on a grid, and the ground with it; taken for nothing, b is off.
#[test]
fn a_lag_between_force_and_motion_is_found() {
    let (delay, constant) = (0.006, 0.004);
    let lags = |delays: &[f64], constants: &[f64]| {
        delays.iter().flat_map(|d| constants.iter().map(|c| Lag { delay: *d, time_constant: *c })).collect::<Vec<_>>()
    };
    let found = |lags: Vec<Lag>| {
        // Where the sole rests in the plane is unknown: the anchor is the pose at the touchdown less the lag.
        let setup = Setup { lags, unknown: Unknown { height: true, offset: true, ..Unknown::default() }, ..setup(rectangle()) };
        let mut session = Session::new(setup);
        let mut random = Random(21);
        let mut filtered = Vec6::zeros();
        let fine = 0.0001;
        for i in 0..40_000 {
            // The low-pass, in small steps, on the force as it was `delay` ago.
            let t = fine * f64::from(i);
            let motion = stance_motion((t - delay).max(0.0), 0.0, 0.008);
            let force = wrench(&rectangle(), &isotropic(2e6, 2e4), &motion, 0.0).rotated(&motion.pose.rotation.transpose());
            filtered += (force.to_vec6() - filtered) * (1.0 - (-fine / constant).exp());
            if i % 20 == 0 {
                let wrench = underfoot::spatial::Wrench::from_vec6(&filtered);
                let now = stance_motion(t, 0.0, 0.008);
                let plain = underfoot::identify::Matched { time: t, wrench, motion: now, stands: None, amplification: 0.0 };
                let mut row = row(1 + u64::from(i as u32), t, &plain, true);
                for k in 0..6 {
                    row.soles[0].wrench[k] += random.normal() * if k < 3 { 1.0 } else { 0.05 };
                }
                session.push(&row);
            }
        }
        session.finish()
    };
    let grid = found(lags(&[0.0, 0.002, 0.004, 0.006, 0.008, 0.010], &[0.0, 0.002, 0.004, 0.008]));
    let sole = &grid.soles[0];
    assert_eq!((sole.lag.delay, sole.lag.time_constant), (delay, constant), "{:?}", sole.lag);
    assert!((sole.delay_between.unwrap() - delay).abs() < 0.0005, "{:?}", sole.delay_between);
    let error = |report: &Report, k: usize, truth: f64| (report.soles[0].stances[0].values[k].value / truth - 1.0).abs();
    assert!(error(&grid, 0, 2e6) < 0.01 && error(&grid, 1, 2e4) < 0.03);
    let blind = found(lags(&[0.0], &[0.0]));
    assert!(error(&blind, 1, 2e4) > 0.2, "{:?}", blind.soles[0].stances[0].values[1]);
}

/// Noise of 1 mm on the pose makes the ground look softer by tens of per cent when its height is unknown, which was known
/// beforehand (derived: some 17 % for k in one setting). The bias told must be the error seen, on average over runs.
#[test]
fn the_bias_from_noise_on_the_pose_is_told() {
    // The first pose is the anchor and as noisy as any: where the sole would rest in the plane is unknown, too.
    let setup = Setup { unknown: Unknown { height: true, offset: true, ..Unknown::default() }, ..setup(rectangle()) };
    let (mut seen, mut told) = ([0.0; 2], [0.0; 2]);
    let runs = 40;
    for run in 0..runs {
        let mut random = Random(900 + run);
        let mut session = Session::new(setup.clone());
        for i in 0..1500 {
            let t = STEP * f64::from(i);
            let motion = stance_motion(t, 0.0, 0.008);
            let wrench = wrench(&rectangle(), &isotropic(2e6, 2e4), &motion, 0.0);
            let mut sample = sample(&mut random, t, motion, &wrench, (2.0, 0.1));
            sample.motion.pose.translation += random.vector(0.001);
            sample.motion.twist.linear += random.vector(0.01);
            session.push(&row(i as u64 + 1, t, &sample, true));
        }
        let report = session.finish();
        let stance = &report.soles[0].stances[0];
        for (k, truth) in [2e6, 2e4].into_iter().enumerate() {
            seen[k] += (stance.values[k].value / truth - 1.0) / runs as f64;
            told[k] += stance.values[k].bias.unwrap() / truth / runs as f64;
        }
    }
    println!("bias seen {seen:?}, told {told:?}");
    assert!(seen[0] < -0.1, "{seen:?}");
    for k in 0..2 {
        assert!((seen[k] - told[k]).abs() < 0.15 * seen[k].abs() + 0.005, "{seen:?} {told:?}");
    }
}

/// A log in which the sole hardly moves says so, and what would help.
#[test]
fn a_still_sole_does_not_tell_its_damping() {
    let mut session = Session::new(setup(rectangle()));
    let mut random = Random(77);
    for i in 0..1500 {
        let t = STEP * f64::from(i);
        let mut motion = stance_motion(5.0, 0.0, 0.008);
        motion.twist = Twist { linear: Vec3::new(0.0, 0.0, 0.0002 * (3.0 * t).cos()), angular: Vec3::zeros() };
        motion.pose.translation.z += 0.0002 / 3.0 * (3.0 * t).sin();
        let wrench = wrench(&rectangle(), &isotropic(2e6, 2e4), &motion, 0.0);
        session.push(&row(i as u64 + 1, t, &sample(&mut random, t, motion, &wrench, (5.0, 0.4)), true));
    }
    let report = session.finish();
    let damping = &report.soles[0].stances[0].values[1];
    assert_eq!(damping.excitation, underfoot::identify::excitation::Excitation::NotIdentifiable);
    assert!(damping.advice.as_ref().unwrap().contains("mm/s"), "{:?}", damping.advice);
}

/// Time stamps that repeat, go back or leave gaps are told with their lines, and stances end at gaps.
#[test]
fn faults_of_the_clock_are_told_with_their_lines() {
    let mut session = Session::new(setup(rectangle()));
    let mut random = Random(5);
    for (i, time) in [0.0, 0.002, 0.002, 0.001, 0.004, 0.006, 1.0, 1.002].into_iter().enumerate() {
        let motion = stance_motion(0.1 + time, 0.0, 0.008);
        let wrench = wrench(&rectangle(), &isotropic(2e6, 2e4), &motion, 0.0);
        session.push(&row(i as u64 + 10, time, &sample(&mut random, time, motion, &wrench, (1.0, 0.1)), true));
    }
    let report = session.finish();
    let lines = |code: &str| report.remarks.iter().find(|r| r.code == code).map(|r| (r.count, r.lines.clone(), r.skipped));
    assert_eq!(lines("time-repeats"), Some((1, vec![12], 1)));
    assert_eq!(lines("time-goes-back"), Some((1, vec![13], 1)));
    assert_eq!(lines("time-gap"), Some((1, vec![16], 0)));
    assert_eq!((report.rows, report.skipped, report.soles[0].stances.len()), (8, 2, 2));
}

/// The recorded landings through the whole path, touchdowns given and the plane known. Values are those of the batch solution
/// of each landing (derived by an independent code); taken for one stance, without the reset between, both mix to the
/// batch solution of all rows.
#[test]
fn recorded_landings_are_reset_at_touchdown() {
    let expected: serde_json::Value = serde_json::from_str(include_str!("data/drop_log_expected.json")).unwrap();
    let run = |stances: Vec<(f64, f64)>| {
        let setup = Setup {
            unknown: Unknown::default(),
            plane: Plane { normal: Vec3::z(), point: Some(Vec3::zeros()) },
            touchdown: Touchdown::Given(vec![stances]),
            longest_step: 10.0,
            ..setup(rectangle())
        };
        let mut session = Session::new(setup);
        for (i, text) in include_str!("data/drop_log.csv").lines().skip(1).enumerate() {
            let cells: Vec<f64> = text.split(',').map(|cell| cell.parse().unwrap()).collect();
            let pose = Pose { translation: Vec3::new(0.0, 0.0, -cells[2]), ..Pose::identity() };
            let twist = Twist { linear: Vec3::new(0.0, 0.0, -cells[3]), angular: Vec3::zeros() };
            let wrench = Vec6::new(0.0, 0.0, cells[4], 0.0, 0.0, 0.0);
            let sole = SoleRow { sole: 0, wrench, motion: Some((pose, Some(twist))), stands: None };
            session.push(&Row { line: i as u64 + 2, time: cells[0] * 10.0 + cells[1], soles: vec![sole], state: None });
        }
        session.finish().soles.remove(0).stances
    };
    let compare = |stance: &underfoot::identify::report::Stance, name: &str| {
        for (value, key) in stance.values.iter().zip(["k", "b"]) {
            let truth = expected["results"][name][key].as_f64().unwrap();
            assert!((value.value / truth - 1.0).abs() < 1e-9, "{name} {key}: {} {truth}", value.value);
        }
    };
    let apart = run(vec![(0.0, 5.0), (10.0, 15.0)]);
    assert_eq!(apart.len(), 2);
    compare(&apart[0], "batch_touchdown0");
    compare(&apart[1], "batch_touchdown1");
    compare(&run(vec![(0.0, 15.0)])[0], "batch_all200");
}

/// Savitzky and Golay's weights for a quadratic through five points: first derivative (-2, -1, 0, 1, 2)/10, second
/// (2, -1, -2, -1, 2)/7 (published 1964, Anal. Chem. 36:1627-1639; quoted from memory).
#[test]
fn twists_have_the_published_weights() {
    use underfoot::identify::smoother::{Reading, Smoother};
    let h = 0.01;
    let x = [0.3, -1.2, 0.7, 2.5, -0.4];
    let mut smoother = Smoother::new(2, true);
    let mut out = Vec::new();
    for (i, x) in x.into_iter().enumerate() {
        let pose = Pose { translation: Vec3::new(x, 0.0, -2.0 * x), ..Pose::identity() };
        out.extend(smoother.push(Reading { line: 1, time: h * i as f64, wrench: Vec6::zeros(), pose, twist: None, stands: None }));
    }
    // The first two come with windows of their own size as soon as two samples follow; the third has all five.
    let third = out[2];
    let sum = |weights: [f64; 5]| weights.iter().zip(x).map(|(w, x)| w * x).sum::<f64>();
    let first = sum([-2.0, -1.0, 0.0, 1.0, 2.0]) / (10.0 * h);
    let second = 2.0 * sum([2.0, -1.0, -2.0, -1.0, 2.0]) / (14.0 * h * h);
    assert!((third.motion.twist.linear.x - first).abs() < 1e-9 * first.abs());
    assert!((third.motion.twist.linear.z + 2.0 * first).abs() < 1e-9 * first.abs());
    assert!((third.acceleration.x - second).abs() < 1e-9 * second.abs(), "{} {second}", third.acceleration.x);
    assert!((third.amplification - 1.0 / (10.0 * h * h)).abs() < 1e-6);
}
