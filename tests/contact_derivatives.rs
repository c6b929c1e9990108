//! S, D and G against finite differences, and the closed form against quadrature, on random oblique
//! situations on moving ground.

mod contact_support;

use contact_support::{Dice, HEX_SOLE, RECTANGLE, Situation, patch, wrench_error};
use underfoot::contact::law::stiffness_and_damping;
use underfoot::contact::predict::wrench_at;
use underfoot::contact::quadrature::{bonded_wrench_by_quadrature, directional_derivative};
use underfoot::contact::report::bed_stiffness;
use underfoot::contact::tick::{advance_ground, advance_motion, tick_map};
use underfoot::contact::{SoleMotion, TickRule};
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Mat6, Pose, Twist, Vec6, exp_so3, head, tail};

const CASES: u64 = 60;

fn situations() -> impl Iterator<Item = Situation> {
    (0..CASES).map(|seed| {
        let mut dice = Dice::new(seed + 1);
        match seed % 3 {
            0 => Situation::random(&mut dice, &RECTANGLE),
            1 => Situation::random(&mut dice, &HEX_SOLE),
            _ => Situation::of(&mut dice, SoleShape::Point),
        }
    })
}

/// The sole moved by a pose and a twist perturbation.
fn nudged(motion: &SoleMotion, pose: &Vec6, twist: &Vec6) -> SoleMotion {
    SoleMotion {
        pose: Pose {
            rotation: exp_so3(&tail(pose)) * motion.pose.rotation,
            translation: motion.pose.translation + head(pose),
        },
        twist: Twist::from_vec6(&(motion.twist.to_vec6() + twist)),
    }
}

/// Largest error per column, relative to the largest entry of the same block row.
fn matrix_error(got: &Mat6, expected: &Mat6) -> f64 {
    let mut worst: f64 = 0.0;
    for rows in [0, 3] {
        for columns in [0, 3] {
            let (a, b) = (got.fixed_view::<3, 3>(rows, columns), expected.fixed_view::<3, 3>(rows, columns));
            let size = b.amax();
            if size > 0.0 {
                worst = worst.max((a - b).amax() / size);
            } else {
                worst = worst.max(a.amax());
            }
        }
    }
    worst
}

fn matrices(s: &Situation) -> (Mat6, Mat6) {
    stiffness_and_damping(&s.shape, &s.material, &s.normal, &s.rest, &s.rest_twist, &s.motion)
}

#[test]
fn stiffness_and_damping_by_finite_differences() {
    for s in situations() {
        let (stiffness, damping) = matrices(&s);
        let (mut s_numeric, mut d_numeric) = (Mat6::zeros(), Mat6::zeros());
        let h = 1e-5;
        for j in 0..6 {
            let step = Vec6::ith(j, h);
            let slope = |pose: Vec6, twist: Vec6| {
                let ahead = s.law_at(&nudged(&s.motion, &pose, &twist)).to_vec6();
                let behind = s.law_at(&nudged(&s.motion, &-pose, &-twist)).to_vec6();
                (ahead - behind) / (2.0 * h)
            };
            s_numeric.set_column(j, &-slope(step, Vec6::zeros()));
            d_numeric.set_column(j, &-slope(Vec6::zeros(), step));
        }
        let errors = [matrix_error(&stiffness, &s_numeric), matrix_error(&damping, &d_numeric)];
        assert!(errors.iter().all(|e| *e < 3e-7), "{errors:?}");
    }
}

#[test]
fn gain_by_finite_differences_of_the_nonlinear_law() {
    for s in situations() {
        let ground = s.ground();
        for rule in [TickRule::BackwardEuler, TickRule::Trapezoid] {
            let tick = 0.02;
            let map = tick_map(&patch(&s.shape, &ground), &s.motion, rule, tick, 40.0).expect("a map");
            let mut numeric = Mat6::zeros();
            let h = 0.05;
            for j in 0..6 {
                let at = |a: Vec6| {
                    wrench_at(&patch(&s.shape, &ground), &s.motion, &a, tick, rule).expect("a wrench").to_vec6()
                };
                let slope = (at(Vec6::ith(j, h)) - at(Vec6::ith(j, -h))) / (2.0 * h);
                numeric.set_column(j, &-slope);
            }
            let error = matrix_error(&map.gain, &numeric);
            assert!(error < 3e-6, "{error}");
        }
    }
}

/// The drift wrench, the gain and the nonlinear prediction come out of the public law on states
/// advanced by hand as well.
#[test]
fn drift_is_the_law_at_the_advanced_state() {
    for s in situations() {
        let ground = s.ground();
        let (tick, rule) = (0.008, TickRule::Trapezoid);
        let map = tick_map(&patch(&s.shape, &ground), &s.motion, rule, tick, 40.0).expect("a map");
        let (rest, normal) = advance_ground(&s.normal, &s.rest, &s.rest_twist, tick);
        let a = Dice::new(7).six(20.0, 100.0);
        for (acceleration, got) in [
            (Vec6::zeros(), underfoot::spatial::Wrench::from_vec6(&map.drift)),
            (a, wrench_at(&patch(&s.shape, &ground), &s.motion, &a, tick, rule).expect("a wrench")),
        ] {
            let motion = advance_motion(&s.motion, &acceleration, tick, 0.5);
            let expected = bonded_wrench_by_quadrature(
                &s.shape, &s.material, &normal, &rest, &s.rest_twist, &motion,
            );
            let error = wrench_error(&got, &expected);
            let moments = expected.moment.amax() > 0.0;
            assert!(error < 1e-10 || (!moments && (got.force - expected.force).amax() < 1e-9), "{error}");
        }
    }
}

/// With a measured wrench the prediction is that wrench plus the change of the law.
#[test]
fn a_measured_wrench_shifts_drift_and_prediction_alike() {
    for (i, s) in situations().enumerate() {
        let mut dice = Dice::new(2000 + i as u64);
        let modelled = s.ground();
        let mut measured = modelled;
        let (tick, rule, a) = (0.006, TickRule::BackwardEuler, dice.six(20.0, 100.0));
        let map = |ground| tick_map(&patch(&s.shape, ground), &s.motion, rule, tick, 40.0).expect("a map");
        let at = |ground, a: &Vec6| {
            wrench_at(&patch(&s.shape, ground), &s.motion, a, tick, rule).expect("a wrench").to_vec6()
        };
        let before = map(&modelled);
        let shift = dice.six(50.0, 2.0);
        let seen = underfoot::spatial::Wrench::from_vec6(&(before.now.to_vec6() + shift));
        measured.measured = Some(seen);
        let after = map(&measured);
        assert_eq!(after.now, seen);
        let size = before.drift.amax() + before.now.to_vec6().amax() + at(&modelled, &a).amax();
        for change in [
            after.drift - before.drift,
            at(&measured, &a) - at(&modelled, &a),
            at(&measured, &Vec6::zeros()) - before.drift,
        ] {
            assert!((change - shift).amax() < 1e-13 * size);
        }
    }
}

#[test]
fn closed_form_agrees_with_quadrature() {
    for s in situations() {
        let by_points = bonded_wrench_by_quadrature(
            &s.shape, &s.material, &s.normal, &s.rest, &s.rest_twist, &s.motion,
        );
        let law = s.law();
        let error = (law.force - by_points.force).amax() / by_points.force.amax();
        let moment_error = (law.moment - by_points.moment).amax();
        assert!(error < 1e-12, "{error}");
        assert!(moment_error <= 1e-12 * by_points.moment.amax(), "{moment_error}");
    }
}

#[test]
fn closed_form_derivatives_agree_with_quadrature() {
    for (i, s) in situations().enumerate() {
        let mut dice = Dice::new(1000 + i as u64);
        let (stiffness, damping) = matrices(&s);
        let (pose, twist) = (dice.six(1.0, 5.0), dice.six(1.0, 5.0));
        for (dp, dt) in [(pose, Vec6::zeros()), (Vec6::zeros(), twist), (pose, twist)] {
            let expected = directional_derivative(
                &s.shape, &s.material, &s.normal, &s.rest, &s.rest_twist, &s.motion, &dp, &dt,
            );
            let got = -(stiffness * dp + damping * dt);
            assert!((head(&got) - expected.force).amax() <= 1e-11 * expected.force.amax());
            assert!((tail(&got) - expected.moment).amax() <= 1e-11 * expected.moment.amax());
        }
    }
}

#[test]
fn bed_stiffness_is_the_stiffness_at_rest() {
    for mut s in situations() {
        s.rest = s.motion.pose;
        s.motion.twist = Twist::zero();
        s.rest_twist = Twist::zero();
        let (stiffness, _) = matrices(&s);
        let bed = bed_stiffness(&s.shape, &s.material, &s.normal, &s.motion.pose.rotation);
        assert!(matrix_error(&bed, &stiffness) < 1e-14);
        assert!((bed - bed.transpose()).amax() < 1e-12 * bed.amax());
    }
}
