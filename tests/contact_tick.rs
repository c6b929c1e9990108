//! The tick map, rest poses and refusals.

mod contact_support;

use contact_support::{
    Dice, HEX_SOLE, RECTANGLE, Situation, isotropic, level, patch, shape, wrench_error,
};
use underfoot::contact::quadrature::bonded_wrench_by_quadrature;
use underfoot::contact::rest::resolve;
use underfoot::contact::tick::tick_map;
use underfoot::contact::{
    ContactError, Direction, Ground, Law, Material, Rest, SoleMotion, TickMap, TickRule,
};
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Mat6, Pose, Twist, Vec3, Vec6, Wrench, exp_so3, head, tail};

const TICK: f64 = 0.005;
const MASS: f64 = 39.0;

fn load() -> Wrench {
    Wrench { force: Vec3::new(20.0, -10.0, 300.0), moment: Vec3::new(3.0, -5.0, 2.0) }
}

fn map_of(shape: &SoleShape, ground: &Ground, motion: &SoleMotion, rule: TickRule) -> TickMap {
    tick_map(&patch(shape, ground), motion, rule, TICK, MASS).expect("a map")
}

/// Both sides of the contact equality at (a, w): the largest mismatch per row scale.
fn mismatch(map: &TickMap, a: &Vec6, w: &Vec6) -> f64 {
    let residual = map.acceleration_part * a + map.wrench_part * w - map.right_side;
    (0..map.dimension).fold(0.0, |worst: f64, i| worst.max(residual[i].abs() / map.row_scale[i]))
}

#[test]
fn the_equality_says_what_the_gain_says() {
    for seed in 0..60 {
        let mut dice = Dice::new(300 + seed);
        let mut s = match seed % 3 {
            0 => Situation::random(&mut dice, &RECTANGLE),
            1 => Situation::random(&mut dice, &HEX_SOLE),
            _ => Situation::of(&mut dice, SoleShape::Point),
        };
        match seed % 5 {
            1 => s.material.tangential_stiffness = 0.0,
            2 => {
                s.material.tangential_stiffness = 0.0;
                s.material.tangential_damping = 0.0;
            }
            3 => s.material = isotropic(1e-3, 1e-5),
            _ => {}
        }
        let map = map_of(&s.shape, &s.ground(), &s.motion, TickRule::BackwardEuler);
        let mut a = dice.six(10.0, 50.0);
        if map.dimension == 3 {
            a.fixed_rows_mut::<3>(3).fill(0.0);
        }
        let w = map.drift - map.gain * a;
        let size = a.amax().max((map.wrench_part * map.drift).amax());
        assert!(mismatch(&map, &a, &w) < 1e-12 * size.max(1.0), "seed {seed}");
        // And it says it alone: a wrong wrench shows.
        let off = w + map.gain * Vec6::ith(0, 1.0) + Vec6::ith(0, MASS);
        assert!(mismatch(&map, &a, &off) > 0.3, "seed {seed}");
    }
}

#[test]
fn stiff_ground_meets_the_rigid_rows() {
    for vertices in [&RECTANGLE[..], &HEX_SOLE[..]] {
        let sole = shape(vertices);
        let mut before = f64::INFINITY;
        // From 1e9 on the gain outweighs the mass, where the gap falls as 1/k.
        for power in 9..=14 {
            let stiffness = 10f64.powi(power);
            let (ground, motion) =
                level(Law::Bonded(isotropic(stiffness, 0.01 * stiffness)), Rest::Carries(load()));
            let map = map_of(&sole, &ground, &motion, TickRule::BackwardEuler);
            assert!(wrench_error(&map.now, &load()) < 1e-12, "{power}");
            let (rigid_ground, _) = level(Law::Rigid { stop: false }, Rest::Pose(Pose::identity()));
            let rigid = map_of(&sole, &rigid_ground, &motion, TickRule::BackwardEuler);
            // In natural units: angular accelerations times the radius, wrenches over the weight.
            let length = |i: usize| 1.0 / map.row_scale[i];
            let mut gap: f64 = 0.0;
            for i in 0..6 {
                gap = gap.max((map.right_side - rigid.right_side)[i].abs() * length(i));
                for j in 0..6 {
                    let a = (map.acceleration_part - rigid.acceleration_part)[(i, j)];
                    let w = (map.wrench_part - rigid.wrench_part)[(i, j)];
                    gap = gap.max(a.abs() * length(i) / length(j));
                    gap = gap.max(w.abs() * length(i) * length(j) * MASS);
                }
            }
            // Tenfold each time, down to rounding.
            assert!(gap < 0.2 * before || gap < 1e-9, "k = 1e{power}: {gap} after {before}");
            before = gap;
        }
        // What is left at 1e14 is the load over the gain, (bed stiffness)^-1 load / (T^2 + T b/k).
        let bed = underfoot::contact::report::bed_stiffness(
            &sole, &isotropic(1e14, 0.0), &Vec3::z(), &underfoot::spatial::Mat3::identity(),
        );
        let (ground, motion) = level(Law::Bonded(isotropic(1e14, 1e12)), Rest::Carries(load()));
        let map = map_of(&sole, &ground, &motion, TickRule::BackwardEuler);
        let expected = bed.lu().solve(&load().to_vec6()).expect("regular") / (TICK * TICK + TICK * 0.01);
        for i in 0..6 {
            let error = (map.right_side - expected)[i].abs();
            assert!(error < 1e-5 * expected[i].abs(), "{} {expected}", map.right_side);
        }
    }
}

/// Derived: along the normal of the centred rectangle the equality is `(G a + w) / (m + G) = f / (m + G)` with
/// G = k A (T^2 + T b/k), to the last digits however stiff the ground.
#[test]
fn the_normal_row_keeps_its_digits_on_stiff_ground() {
    let sole = shape(&RECTANGLE);
    for power in 0..=14 {
        let stiffness = 10f64.powi(power);
        let law = Law::Bonded(isotropic(stiffness, 0.01 * stiffness));
        let lift = Wrench { force: Vec3::z() * 1e-4 * stiffness, moment: Vec3::zeros() };
        let (ground, mut motion) = level(law, Rest::Carries(lift));
        motion.pose.translation = Vec3::new(3.0, -2.0, 0.7);
        let map = map_of(&sole, &ground, &motion, TickRule::BackwardEuler);
        let gain = stiffness * 0.022 * (TICK * TICK + TICK * 0.01);
        for (got, expected) in [
            (map.acceleration_part[(2, 2)], gain / (MASS + gain)),
            (map.wrench_part[(2, 2)], 1.0 / (MASS + gain)),
            (map.right_side[2], 1e-4 * stiffness / (MASS + gain)),
        ] {
            assert!((got / expected - 1.0).abs() < 1e-12, "1e{power}: {got} {expected}");
        }
    }
}

/// On moving stiff ground the acceleration prescribed in the limit brings the sole to the ground's velocity within
/// the tick: what `stop` says on a rigid sole.
#[test]
fn stop_is_the_stiff_limit_in_motion() {
    let sole = shape(&RECTANGLE);
    for damping_time in [0.0, 0.01] {
        let (mut ground, mut motion) =
            level(Law::Bonded(isotropic(1e13, 1e13 * damping_time)), Rest::Carries(load()));
        ground.rest_twist = Twist { linear: Vec3::new(0.1, 0.0, 0.05), angular: Vec3::zeros() };
        motion.twist = Twist {
            linear: Vec3::new(0.02, 0.03, -0.04),
            angular: Vec3::new(0.02, -0.01, 0.03),
        };
        let map = map_of(&sole, &ground, &motion, TickRule::BackwardEuler);
        ground.law = Law::Rigid { stop: true };
        let rigid = map_of(&sole, &ground, &motion, TickRule::BackwardEuler);
        for i in 0..6 {
            let (soft, stiff) = (map.right_side[i], rigid.right_side[i]);
            let size = rigid.right_side.fixed_rows::<3>(3 * (i / 3)).norm();
            assert!((soft - stiff).abs() < 2e-4 * size, "row {i}: {soft} {stiff}");
        }
        let ground_speed = ground.rest_twist.linear.x;
        assert!((rigid.right_side[0] - (ground_speed - 0.02) / TICK).abs() < 1e-12);
    }
}

#[test]
fn rigid_rows() {
    let sole = shape(&HEX_SOLE);
    let (mut ground, mut motion) = level(Law::Rigid { stop: false }, Rest::Measured);
    motion.twist = Twist { linear: Vec3::new(0.1, 0.2, 0.3), angular: Vec3::x() };
    for rule in [TickRule::BackwardEuler, TickRule::Trapezoid, TickRule::Explicit] {
        let map = map_of(&sole, &ground, &motion, rule);
        assert!(map.rigid && map.theta == 1.0 && !map.now_known);
        assert_eq!(map.acceleration_part, Mat6::identity());
        assert_eq!(map.wrench_part, Mat6::zeros());
        assert_eq!(map.right_side, Vec6::zeros());
        assert_eq!(map.now, Wrench::zero());
    }
    assert_eq!(resolve(&patch(&sole, &ground), &motion), Ok(motion.pose));
    ground.measured = Some(load());
    let map = map_of(&sole, &ground, &motion, TickRule::BackwardEuler);
    assert!(map.now_known);
    assert_eq!(map.now, load());
    let point = map_of(&SoleShape::Point, &ground, &motion, TickRule::BackwardEuler);
    assert_eq!(point.dimension, 3);
    assert_eq!(point.acceleration_part.trace(), 3.0);
}

/// Without stiffness and damping the equality prescribes the wrench (none), whatever the acceleration.
#[test]
fn ground_that_resists_nothing_prescribes_no_wrench() {
    let (ground, motion) = level(Law::Bonded(isotropic(0.0, 0.0)), Rest::Pose(Pose::identity()));
    let map = map_of(&shape(&RECTANGLE), &ground, &motion, TickRule::Trapezoid);
    assert_eq!(map.acceleration_part, Mat6::zeros());
    assert_eq!(map.right_side, Vec6::zeros());
    assert!((map.wrench_part[(0, 0)] - 1.0 / MASS).abs() < 1e-15);
    // Z = m r^2 in the angular rows, r^2 = (L^2 + B^2)/12 of the rectangle: derived.
    let square = (0.22_f64.powi(2) + 0.1_f64.powi(2)) / 12.0;
    assert!((map.wrench_part[(4, 4)] * MASS * square - 1.0).abs() < 1e-13);
}

#[test]
fn frictionless_stiff_ground_fixes_some_accelerations_and_some_wrenches() {
    let material = Material {
        normal_stiffness: 1e14,
        tangential_stiffness: 0.0,
        normal_damping: 1e12,
        tangential_damping: 0.0,
    };
    let (mut ground, mut motion) = level(Law::Bonded(material), Rest::Pose(Pose::identity()));
    let turned = exp_so3(&Vec3::new(0.3, 0.5, -0.2));
    ground.normal = turned * Vec3::z();
    motion.pose.rotation = turned;
    ground.rest = Rest::Pose(motion.pose);
    let map = map_of(&shape(&RECTANGLE), &ground, &motion, TickRule::BackwardEuler);
    let block = turned.transpose() * map.acceleration_part.fixed_view::<3, 3>(0, 0) * turned;
    let wrench = turned.transpose() * map.wrench_part.fixed_view::<3, 3>(0, 0) * turned * MASS;
    for i in 0..3 {
        let (accelerating, bearing) = if i == 2 { (1.0, 0.0) } else { (0.0, 1.0) };
        assert!((block[(i, i)] - accelerating).abs() < 1e-6, "{block}");
        assert!((wrench[(i, i)] - bearing).abs() < 1e-6, "{wrench}");
    }
}

#[test]
fn a_measured_wrench_equal_to_the_modelled_one_changes_nothing() {
    for seed in 0..40 {
        let mut dice = Dice::new(500 + seed);
        let mut s = Situation::random(&mut dice, if seed % 2 == 0 { &RECTANGLE } else { &HEX_SOLE });
        // Stiff enough for the wrenches to be carried: k int y^2 = 37 N m/rad at least.
        s.material = Material { normal_stiffness: 3e6, tangential_stiffness: 3e6, ..s.material };
        let touchdown = Pose {
            rotation: exp_so3(&dice.vector(0.05)) * underfoot::spatial::rotation_with_z(&s.normal),
            translation: s.motion.pose.translation + dice.vector(0.01),
        };
        let rests = [
            Rest::Pose(s.rest),
            Rest::Touchdown { pose: touchdown, plane_point: s.motion.pose.translation },
            Rest::Carries(dice.wrench(100.0, 3.0)),
        ];
        for rest in rests {
            // The touchdown frame is laid along the normal, so the sole must be near it too.
            let mut motion = s.motion;
            if matches!(rest, Rest::Touchdown { .. }) {
                motion.pose.rotation = touchdown.rotation;
            }
            let mut ground = Ground { rest, ..s.ground() };
            let modelled = map_of(&s.shape, &ground, &motion, TickRule::BackwardEuler);
            ground.measured = Some(modelled.now);
            let measured = map_of(&s.shape, &ground, &motion, TickRule::BackwardEuler);
            assert_eq!(measured.now, modelled.now);
            assert_eq!(measured.gain, modelled.gain);
            assert_eq!(measured.acceleration_part, modelled.acceleration_part);
            let size = modelled.drift.amax().max(modelled.now.to_vec6().amax());
            assert!((measured.drift - modelled.drift).amax() <= 4.0 * f64::EPSILON * size);
        }
        // Rest unknown, sole at rest: the same as the rest pose that carries the wrench.
        let mut motion = s.motion;
        motion.twist = Twist::zero();
        let carried = dice.wrench(100.0, 3.0);
        let given = Ground { rest: Rest::Carries(carried), rest_twist: Twist::zero(), ..s.ground() };
        let unknown = Ground { rest: Rest::Measured, measured: Some(carried), ..given };
        let (a, b) = (
            map_of(&s.shape, &given, &motion, TickRule::Trapezoid),
            map_of(&s.shape, &unknown, &motion, TickRule::Trapezoid),
        );
        assert!((a.drift - b.drift).amax() < 1e-9 * carried.to_vec6().amax());
        assert_eq!(a.gain, b.gain);
        // Nothing moves, so the drift wrench is the measured one to the last bit.
        assert_eq!(b.drift, carried.to_vec6());
    }
}

#[test]
fn carried_wrenches_are_carried() {
    for seed in 0..60 {
        let mut dice = Dice::new(700 + seed);
        let mut s = Situation::random(&mut dice, if seed % 2 == 0 { &RECTANGLE } else { &HEX_SOLE });
        let wanted = dice.wrench(300.0, 8.0);
        s.material = Material { normal_stiffness: 3e6, tangential_stiffness: 2e6, ..s.material };
        if seed % 3 == 0 {
            s.material = Material { normal_stiffness: 6e5, tangential_stiffness: 6e5, ..s.material };
        }
        let ground = Ground { rest: Rest::Carries(wanted), ..s.ground() };
        let rest = resolve(&patch(&s.shape, &ground), &s.motion).expect("a rest pose");
        let standing = SoleMotion { twist: Twist::zero(), ..s.motion };
        let got = bonded_wrench_by_quadrature(
            &s.shape, &s.material, &s.normal, &rest, &Twist::zero(), &standing,
        );
        assert!(wrench_error(&got, &wanted) < 1e-9, "seed {seed}: {got:?} {wanted:?}");
    }
    // A point sole: d = K^-1 f.
    let (ground, motion) = level(
        Law::Bonded(isotropic(1e4, 0.0)),
        Rest::Carries(Wrench { force: Vec3::new(1.0, 2.0, 50.0), moment: Vec3::zeros() }),
    );
    let rest = resolve(&patch(&SoleShape::Point, &ground), &motion).expect("a rest pose");
    assert!((rest.translation - Vec3::new(1e-4, 2e-4, 5e-3)).amax() < 1e-15);
}

/// The wrench of a known rest pose, turned by up to .6 rad on oblique anisotropic ground, leads back to it.
#[test]
fn known_rest_poses_are_found_again() {
    for seed in 0..200 {
        let mut dice = Dice::new(1300 + seed);
        let mut s = Situation::random(&mut dice, if seed % 2 == 0 { &RECTANGLE } else { &HEX_SOLE });
        s.motion.twist = Twist::zero();
        s.rest_twist = Twist::zero();
        let turn = dice.vector(1.0).normalize() * (0.3 + 0.3 * dice.signed());
        s.rest = Pose {
            rotation: exp_so3(&turn) * s.motion.pose.rotation,
            translation: s.motion.pose.translation + dice.vector(0.02),
        };
        let ground = Ground { rest: Rest::Carries(s.law()), ..s.ground() };
        let rest = resolve(&patch(&s.shape, &ground), &s.motion);
        let rest = rest.unwrap_or_else(|e| panic!("seed {seed}, turn {}: {e}", turn.norm()));
        let error = (rest.rotation - s.rest.rotation).amax();
        let offset = (rest.translation - s.rest.translation).amax();
        assert!(error < 1e-8 && offset < 1e-8, "seed {seed}, turn {}: {error} {offset}", turn.norm());
    }
}

/// Half a radian from the closed form: the moment 266.2 sin(.5) of the rectangle needs a turn of .5 rad.
#[test]
fn large_turns_are_found_up_to_a_quarter_turn() {
    let sole = shape(&RECTANGLE);
    for (angle, found) in [(0.5_f64, true), (1.4, true)] {
        let moment = Vec3::y() * (266.2 * angle.sin());
        let (ground, motion) = level(
            Law::Bonded(isotropic(3e6, 0.0)),
            Rest::Carries(Wrench { force: Vec3::zeros(), moment }),
        );
        let rest = resolve(&patch(&sole, &ground), &motion);
        assert_eq!(rest.is_ok(), found);
        let turned = rest.expect("found").rotation;
        assert!((turned - exp_so3(&(Vec3::y() * angle))).amax() < 1e-9, "{angle}");
    }
}

#[test]
fn what_cannot_be_carried_is_refused_with_what_is_left_over() {
    let sole = shape(&RECTANGLE);
    let slippery = Material { tangential_stiffness: 0.0, ..isotropic(3e6, 1e4) };
    let cases = [
        (sole.clone(), slippery, load()),
        (sole.clone(), isotropic(3e6, 1e4), Wrench { moment: Vec3::y() * 300.0, ..load() }),
        (sole.clone(), isotropic(0.0, 1e4), load()),
        (SoleShape::Point, isotropic(3e4, 1e2), load()),
    ];
    for (i, (shape, material, wrench)) in cases.into_iter().enumerate() {
        let (mut ground, motion) = level(Law::Bonded(material), Rest::Carries(wrench));
        let refusal = resolve(&patch(&shape, &ground), &motion);
        let Err(ContactError::CannotCarry { force_residual, moment_residual, .. }) = refusal else {
            panic!("case {i}: {refusal:?}");
        };
        assert!(force_residual + moment_residual > 1e-3);
        if i == 0 {
            assert!((force_residual - 500f64.sqrt()).abs() < 1e-6, "{force_residual}");
        }
        // With a measurement only the change counts, so the same wrench is no obstacle.
        ground.rest = Rest::Measured;
        ground.measured = Some(wrench);
        let map = map_of(&shape, &ground, &motion, TickRule::BackwardEuler);
        assert_eq!(map.now, wrench);
        assert_eq!(map.drift, wrench.to_vec6());
    }
}

/// Measured, k_t = 0: what the springs can carry (normal force, roll, pitch) is carried all the same.
#[test]
fn an_unknown_rest_pose_carries_what_it_can() {
    let sole = shape(&RECTANGLE);
    let slippery = Material { tangential_stiffness: 0.0, ..isotropic(3e6, 1e4) };
    let (mut ground, motion) = level(Law::Bonded(slippery), Rest::Measured);
    ground.measured = Some(load());
    let rest = resolve(&patch(&sole, &ground), &motion).expect("a rest pose");
    let got = bonded_wrench_by_quadrature(
        &sole, &slippery, &Vec3::z(), &rest, &Twist::zero(), &motion,
    );
    assert!((got.force.z - 300.0).abs() < 1e-6);
    assert!((got.moment.x - 3.0).abs() < 1e-6 && (got.moment.y + 5.0).abs() < 1e-6);
    assert!(rest.translation.xy().norm() < 1e-9);
}

#[test]
fn touchdown_keeps_position_and_yaw_and_lies_on_the_plane() {
    let normal = Vec3::new(0.1, -0.2, 1.0).normalize();
    let plane_point = Vec3::new(0.3, 0.2, 0.1);
    let upright = underfoot::spatial::rotation_with_z(&normal) * exp_so3(&(Vec3::z() * 0.7));
    // Tilted about an axis in the plane: no yaw about the normal.
    let tilt = exp_so3(&(normal.cross(&Vec3::new(1.0, 2.0, 0.0)).normalize() * 0.15));
    let pose = Pose { rotation: tilt * upright, translation: Vec3::new(0.5, -0.1, 0.4) };
    let (ground, motion) = level(
        Law::Bonded(isotropic(1e6, 1e4)),
        Rest::Touchdown { pose, plane_point },
    );
    let ground = Ground { normal, ..ground };
    let sole = shape(&RECTANGLE);
    let rest = resolve(&patch(&sole, &ground), &motion).expect("a rest pose");
    assert!((rest.rotation - upright).amax() < 1e-12);
    assert!(normal.dot(&(rest.translation - plane_point)).abs() < 1e-15);
    assert!(normal.cross(&(rest.translation - pose.translation)).norm() < 1e-15);

    let upside_down = Pose { rotation: exp_so3(&(Vec3::x() * 3.0)), ..pose };
    let ground = Ground { rest: Rest::Touchdown { pose: upside_down, plane_point }, ..ground };
    let refusal = resolve(&patch(&sole, &ground), &motion);
    assert!(matches!(refusal, Err(ContactError::TouchdownTilt { .. })), "{refusal:?}");
    // A point foot may come down at any angle.
    let point = resolve(&patch(&SoleShape::Point, &ground), &motion).expect("a rest pose");
    assert_eq!(point.rotation, upside_down.rotation);
    assert_eq!(point.translation, rest.translation);
}

#[test]
fn explicit_rule_refusals() {
    let sole = shape(&RECTANGLE);
    let refused = |material: Material, tick: f64| {
        let (ground, motion) = level(Law::Bonded(material), Rest::Pose(Pose::identity()));
        tick_map(&patch(&sole, &ground), &motion, TickRule::Explicit, tick, MASS)
    };
    let good = isotropic(1e6, 1e4); // 2 b / k = 0.02 s
    let map = refused(good, 0.019).expect("a map");
    assert_eq!(map.theta, 0.0);
    assert!((map.gain[(2, 2)] - 0.019 * 1e4 * 0.022).abs() < 1e-12);
    assert_eq!(
        refused(good, 0.02),
        Err(ContactError::ExplicitTickTooLong {
            direction: Direction::Normal,
            tick: 0.02,
            limit: 0.02,
            stiffness: 1e6,
            damping: 1e4,
        })
    );
    let undamped = Material { tangential_damping: 0.0, ..good };
    assert_eq!(
        refused(undamped, 0.001),
        Err(ContactError::ExplicitNeedsDamping { direction: Direction::Tangential, damping: 0.0 })
    );
    let sluggish = Material { tangential_stiffness: 1e8, ..good };
    assert!(matches!(
        refused(sluggish, 0.001),
        Err(ContactError::ExplicitTickTooLong { direction: Direction::Tangential, .. })
    ));
}

#[test]
fn other_refusals() {
    let sole = shape(&RECTANGLE);
    let (ground, motion) = level(Law::Bonded(isotropic(1e6, 1e4)), Rest::Measured);
    let with = |ground: &Ground, tick: f64, mass: f64| {
        tick_map(&patch(&sole, ground), &motion, TickRule::BackwardEuler, tick, mass)
    };
    assert_eq!(with(&ground, TICK, MASS), Err(ContactError::MissingMeasurement));
    let ground = Ground { rest: Rest::Pose(Pose::identity()), ..ground };
    for (tick, mass) in [(0.0, 1.0), (-1.0, 1.0), (f64::NAN, 1.0), (0.01, 0.0), (0.01, f64::INFINITY)] {
        assert!(matches!(with(&ground, tick, mass), Err(ContactError::NotPositive { .. })));
    }
    let huge = Ground { law: Law::Bonded(isotropic(1e308, 1e308)), ..ground };
    let moving = SoleMotion { twist: Twist { linear: Vec3::z() * 1e5, angular: Vec3::x() }, ..motion };
    let overflow = tick_map(&patch(&sole, &huge), &moving, TickRule::BackwardEuler, 1e3, MASS);
    assert!(matches!(overflow, Err(ContactError::Degenerate { .. })), "{overflow:?}");
}

/// A sole that turns with undamped ground keeps its wrench in the ground's axes: rest pose and normal move
/// with the ground.
#[test]
fn turning_with_the_ground_turns_the_wrench() {
    for seed in 0..20 {
        let mut dice = Dice::new(900 + seed);
        let mut s = Situation::random(&mut dice, &HEX_SOLE);
        s.material.normal_damping = 0.0;
        s.material.tangential_damping = 0.0;
        // One rigid motion: turn about the rest origin, which moves at its own velocity.
        let turn = exp_so3(&(s.rest_twist.angular * TICK));
        let arm = s.motion.pose.translation - s.rest.translation;
        s.motion.twist = Twist {
            linear: s.rest_twist.linear + (turn * arm - arm) / TICK,
            angular: s.rest_twist.angular,
        };
        let map = map_of(&s.shape, &s.ground(), &s.motion, TickRule::BackwardEuler);
        let (force, moment) = (head(&map.drift), tail(&map.drift));
        let expected = map.now.rotated(&turn);
        assert!((force - expected.force).amax() < 1e-10 * expected.force.amax());
        assert!((moment - expected.moment).amax() < 1e-10 * expected.moment.amax());
    }
}
