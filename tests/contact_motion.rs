//! Bodies on the bonded bed, integrated tick by tick with the tick map.

mod contact_support;

use contact_support::{HEX_SOLE, RECTANGLE, isotropic, level, patch, shape};
use underfoot::contact::law::bonded_wrench;
use underfoot::contact::tick::{advance_motion, tick_map};
use underfoot::contact::{Ground, Law, Rest, SoleMotion, TickRule};
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Mat3, Mat6, Pose, Twist, Vec3, Vec6, Wrench, exp_so3, head, stack, tail};

/// A single rigid body whose centre of mass is the sole origin.
struct Body {
    mass: f64,
    inertia: Mat3,
    gravity: Vec3,
}

impl Body {
    fn mass_matrix(&self, rotation: &Mat3) -> Mat6 {
        let mut m = Mat6::identity() * self.mass;
        let turned = rotation * self.inertia * rotation.transpose();
        m.fixed_view_mut::<3, 3>(3, 3).copy_from(&turned);
        m
    }

    /// `w x I w` and weight, as they stand on the left of the equation of motion.
    fn bias(&self, motion: &SoleMotion) -> Vec6 {
        let w = motion.twist.angular;
        let turned = motion.pose.rotation * self.inertia * motion.pose.rotation.transpose();
        stack(&(-self.gravity * self.mass), &w.cross(&(turned * w)))
    }

    /// Acceleration and tick-end wrench: `M a + h = (1 - theta) now + theta w`, and the contact equality.
    fn tick(&self, sole: &SoleShape, ground: &Ground, motion: &SoleMotion, rule: TickRule, tick: f64) -> (Vec6, Vec6) {
        let map = tick_map(&patch(sole, ground), motion, rule, tick, self.mass).expect("a map");
        let m = self.mass_matrix(&motion.pose.rotation);
        // w from the equation of motion, put into the equality (theta > 0).
        let from_acceleration = m / map.theta;
        let constant = (self.bias(motion) - map.now.to_vec6() * (1.0 - map.theta)) / map.theta;
        let left = map.acceleration_part + map.wrench_part * from_acceleration;
        let right = map.right_side - map.wrench_part * constant;
        let a = left.lu().solve(&right).expect("regular");
        (a, from_acceleration * a + constant)
    }
}

fn dropped(rule: TickRule, ticks: usize) -> [f64; 3] {
    let sole = shape(&RECTANGLE);
    let (ground, mut motion) = level(Law::Bonded(isotropic(3e6, 1.5e4)), Rest::Pose(Pose::identity()));
    let body = Body { mass: 30.0, inertia: Mat3::identity() * 0.3, gravity: Vec3::z() * -9.81 };
    let tick = 0.05 / ticks as f64;
    let mut force = 0.0;
    for _ in 0..ticks {
        let (a, w) = body.tick(&sole, &ground, &motion, rule, tick);
        motion = advance_motion(&motion, &a, tick, rule.position_weight());
        force = w[2];
    }
    [-motion.pose.translation.z, -motion.twist.linear.z, force]
}

/// Derived (ODE to 1e-15): 30 kg dropped at zero height onto the rectangle, g = 9.81; sink, velocity and force
/// at t = .05 s. The rules are of first and second order.
#[test]
fn a_drop_converges_at_the_order_of_its_rule() {
    let exact = [0.00649776260707095, 0.116145196668943, 467.180246967434];
    for (rule, order) in [(TickRule::BackwardEuler, 1), (TickRule::Trapezoid, 2)] {
        let runs = [400, 800, 1600].map(|ticks| dropped(rule, ticks));
        let factor = 2f64.powi(order);
        for i in 0..3 {
            let errors = runs.map(|run| (run[i] - exact[i]).abs() / exact[i]);
            for pair in errors.windows(2) {
                let ratio = pair[0] / pair[1];
                assert!((ratio / factor - 1.0).abs() < 0.05, "{rule:?} quantity {i}: {errors:?}");
            }
            // Two runs extrapolated remove the leading error: what is left is far below either.
            let extrapolated = (factor * runs[2][i] - runs[1][i]) / (factor - 1.0);
            let left = (extrapolated - exact[i]).abs() / exact[i];
            let bound = if order == 1 { 2e-5 } else { 1e-9 };
            assert!(left < bound, "{rule:?} quantity {i}: {left}");
        }
    }
}

/// Derived: static sink m g / (k A) = .00445909090909091 m, reached when the ringing has died away.
#[test]
fn a_drop_settles_at_the_static_sink() {
    let sole = shape(&RECTANGLE);
    let (ground, mut motion) = level(Law::Bonded(isotropic(3e6, 1.5e4)), Rest::Pose(Pose::identity()));
    let body = Body { mass: 30.0, inertia: Mat3::identity() * 0.3, gravity: Vec3::z() * -9.81 };
    for _ in 0..2000 {
        let (a, _) = body.tick(&sole, &ground, &motion, TickRule::BackwardEuler, 0.005);
        motion = advance_motion(&motion, &a, 0.005, 1.0);
    }
    assert!((-motion.pose.translation.z - 0.00445909090909091).abs() < 1e-14);
}

/// Derived: holding a wrench with c = 1/2 and b = 0 gives v+ = -v; with c = 1 it gives v+ = v b / (b + k T).
#[test]
fn holding_the_wrench_rings_or_damps_by_rule() {
    let sole = shape(&RECTANGLE);
    let (v, tick) = (0.03, 0.004);
    for (rule, damping, expected) in [
        (TickRule::Trapezoid, 0.0, -v),
        (TickRule::BackwardEuler, 2e4, v * 2e4 / (2e4 + 3e6 * tick)),
    ] {
        let hold = Wrench { force: Vec3::z() * 300.0, moment: Vec3::zeros() };
        let (ground, mut motion) = level(Law::Bonded(isotropic(3e6, damping)), Rest::Carries(hold));
        motion.twist.linear = Vec3::z() * v;
        let map = tick_map(&patch(&sole, &ground), &motion, rule, tick, 30.0).expect("a map");
        // Ask for w+ = the present wrench of the law.
        let change = map.drift - map.now.to_vec6();
        let a = map.gain.lu().solve(&change).expect("regular");
        let end = v + tick * a[2];
        assert!((end - expected).abs() < 1e-12, "{rule:?}: {end} {expected}");
    }
}

/// The wrench after `duration` by fourth-order Runge-Kutta in many small steps.
fn fine_wrench(body: &Body, sole: &SoleShape, rest: &Pose, start: &SoleMotion, duration: f64) -> Vec6 {
    let Law::Bonded(material) = bed() else { unreachable!() };
    let law = |motion: &SoleMotion| {
        bonded_wrench(sole, &material, &Vec3::z(), rest, &Twist::zero(), motion).to_vec6()
    };
    let acceleration = |motion: &SoleMotion| {
        let m = body.mass_matrix(&motion.pose.rotation);
        m.lu().solve(&(law(motion) - body.bias(motion))).expect("regular")
    };
    // Rotation columns are integrated as R' = w x R, and stay orthonormal to the order of the method.
    let slope = |m: &SoleMotion| (m.twist.linear, underfoot::spatial::skew(&m.twist.angular) * m.pose.rotation, acceleration(m));
    let step = |m: &SoleMotion, s: &(Vec3, Mat3, Vec6), h: f64| SoleMotion {
        pose: Pose { rotation: m.pose.rotation + s.1 * h, translation: m.pose.translation + s.0 * h },
        twist: Twist {
            linear: m.twist.linear + head(&s.2) * h,
            angular: m.twist.angular + tail(&s.2) * h,
        },
    };
    let steps = 200;
    let h = duration / steps as f64;
    let mut at = *start;
    for _ in 0..steps {
        let k1 = slope(&at);
        let k2 = slope(&step(&at, &k1, h / 2.0));
        let k3 = slope(&step(&at, &k2, h / 2.0));
        let k4 = slope(&step(&at, &k3, h));
        let mean = (
            (k1.0 + (k2.0 + k3.0) * 2.0 + k4.0) / 6.0,
            (k1.1 + (k2.1 + k3.1) * 2.0 + k4.1) / 6.0,
            (k1.2 + (k2.2 + k3.2) * 2.0 + k4.2) / 6.0,
        );
        at = step(&at, &mean, h);
    }
    law(&at)
}

fn bed() -> Law {
    Law::Bonded(isotropic(1e6, 1e4))
}

/// One tick of a single body against a fine integration: the error of the tick-end wrench falls as T^2, and
/// as T^3 by the trapezoid rule when the body starts without rotation.
#[test]
fn one_tick_error_falls_at_the_stated_order() {
    let sole = shape(&HEX_SOLE);
    let body = Body {
        mass: 30.0,
        inertia: Mat3::from_diagonal(&Vec3::new(0.4, 0.6, 0.3)),
        gravity: Vec3::new(0.0, 0.0, -9.81),
    };
    let rest = Pose::identity();
    for (rule, turning, order) in [
        (TickRule::BackwardEuler, 1.0, 2),
        (TickRule::Trapezoid, 1.0, 2),
        (TickRule::Trapezoid, 0.0, 3),
    ] {
        let (ground, mut motion) = level(bed(), Rest::Pose(rest));
        motion.pose.translation = Vec3::new(0.002, -0.001, -0.012);
        motion.pose.rotation = exp_so3(&Vec3::new(0.02, 0.03, -0.01));
        motion.twist.linear = Vec3::new(0.05, 0.02, -0.1);
        motion.twist.angular = Vec3::new(0.4, -0.3, 0.5) * turning;
        let errors = [8e-4, 4e-4, 2e-4, 1e-4].map(|tick| {
            let (_, w) = body.tick(&sole, &ground, &motion, rule, tick);
            (w - fine_wrench(&body, &sole, &rest, &motion, tick)).norm()
        });
        for pair in errors.windows(2) {
            let seen = (pair[0] / pair[1]).log2();
            assert!(seen > order as f64 - 0.25, "{rule:?} turning {turning}: {errors:?}");
        }
    }
}
