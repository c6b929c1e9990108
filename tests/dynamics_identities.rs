//! Identities of rigid-body dynamics on random trees: fixed and floating bases, branched, revolute,
//! continuous and sliding joints, rotors and friction. The identities are textbook mechanics; the robots
//! and states are random.

#[path = "common/hand_built.rs"]
mod hand_built;

use hand_built::{Rng, nu, random_model, random_state};
use nalgebra::{DMatrix, DVector};
use underfoot::dynamics::{
    Axes, DynamicsError, ExternalWrench, InverseScratch, VelocityAxes, Workspace,
    external_generalised_force, forward_dynamics, frame_bias_acceleration, frame_jacobian,
    frame_pose, frame_twist, integrate, inverse_dynamics, predict,
};
use underfoot::model::{BaseKind, Model, State};
use underfoot::spatial::{
    Inertia, Pose, Twist, Vec3, Vec6, Wrench, exp_so3, head, log_so3, stack, tail,
};

const CASES: u64 = 40;
const STEP: f64 = 1e-4;

fn gravity() -> Vec3 {
    Vec3::new(0.7, -1.1, -9.6)
}

/// Random robots of 1 to 14 joints, every third one with a fixed base.
fn cases() -> impl Iterator<Item = (Model, State, Rng)> {
    (0..CASES).map(|seed| {
        let kind = if seed % 3 == 0 { BaseKind::Fixed } else { BaseKind::Floating };
        let model = random_model(seed, 1 + (seed as usize * 5) % 14, kind);
        let mut rng = Rng(seed + 1000);
        let state = random_state(&mut rng, &model);
        (model, state, rng)
    })
}

fn updated(model: &Model, state: &State) -> Workspace {
    let mut ws = Workspace::new(model);
    ws.update(model, state, &gravity());
    ws
}

fn small(difference: f64, scale: f64, tolerance: f64, what: &str) {
    assert!(
        difference <= tolerance * scale.max(1.0),
        "{what}: off by {difference:e} where the size is {scale:e}"
    );
}

fn external(rng: &mut Rng, model: &Model) -> Vec<ExternalWrench> {
    let mut one = || ExternalWrench {
        body: rng.below(model.bodies.len()),
        point: rng.vector(1.0),
        wrench: Wrench { force: rng.vector(50.0), moment: rng.vector(10.0) },
    };
    vec![one(), one(), one()]
}

/// The state along a motion with constant acceleration, at four times around now.
struct Motion {
    at: [State; 4],
}

impl Motion {
    fn new(model: &Model, state: &State, nu_dot: &[f64]) -> Self {
        Motion { at: [-2.0, -1.0, 1.0, 2.0].map(|k| integrate(model, state, nu_dot, k * STEP)) }
    }

    /// Rate now of a quantity, by the five-point difference (error of fourth order in the step).
    fn rate(&self, quantity: impl Fn(&State) -> DVector<f64>) -> DVector<f64> {
        let [a, b, c, d] = self.at.each_ref().map(quantity);
        ((c - b) * 8.0 - (d - a)) / (12.0 * STEP)
    }
}

fn list(v: &Vec6) -> DVector<f64> {
    DVector::from_column_slice(v.as_slice())
}

#[test]
fn mass_matrix_is_symmetric_and_positive_definite() {
    for (model, state, mut rng) in cases() {
        let mut ws = updated(&model, &state);
        let m = &ws.mass_matrix;
        assert_eq!(*m, m.transpose());
        let lowest = m.clone().symmetric_eigenvalues().min();
        assert!(lowest > 0.0, "lowest eigenvalue {lowest:e}");
        ws.factorise(&model).expect("positive definite");
        let x = DVector::from_vec(rng.list(model.velocities(), 1.0));
        let mut b = &ws.mass_matrix * &x;
        ws.solve_factored(&mut b);
        small((&b - &x).amax(), 1.0, 1e-10, "solve");
    }
}

/// The mass matrix from Jacobians: `sum m J_c' J_c + J_w' I J_w`, rotors on the diagonal.
#[test]
fn mass_matrix_is_the_sum_over_bodies() {
    for (model, state, _) in cases() {
        let ws = updated(&model, &state);
        let nv = model.velocities();
        let (mut sum, mut j) = (DMatrix::zeros(nv, nv), DMatrix::zeros(6, nv));
        for (i, body) in model.bodies.iter().enumerate() {
            let mut center = Pose::identity();
            center.translation = body.inertia.center;
            frame_jacobian(&model, &ws, i, &center, &mut j);
            let (linear, angular) = (j.rows(0, 3), j.rows(3, 3));
            let r = ws.body_pose(i).rotation;
            let inertia = r * body.inertia.about_center * r.transpose();
            sum += body.inertia.mass * linear.transpose() * linear
                + angular.transpose() * inertia * angular;
        }
        for (i, joint) in model.joints.iter().enumerate() {
            let k = model.joint_offset() + i;
            sum[(k, k)] += joint.rotor_inertia;
        }
        small((&ws.mass_matrix - &sum).amax(), sum.amax(), 1e-13, "M");
    }
}

#[test]
fn inverse_dynamics_agrees_with_mass_matrix_and_bias() {
    for (model, state, mut rng) in cases() {
        let ws = updated(&model, &state);
        let nu_dot = rng.list(model.velocities(), 5.0);
        let loads = external(&mut rng, &model);
        let mut want = &ws.mass_matrix * DVector::from_column_slice(&nu_dot) + &ws.bias;
        for load in &loads {
            let minus = Wrench { force: -load.wrench.force, moment: -load.wrench.moment };
            external_generalised_force(&model, &ws, load.body, &load.point, &minus, &mut want);
        }
        let mut got = DVector::zeros(model.velocities());
        let mut scratch = InverseScratch::new(&model);
        let g = gravity();
        let out = got.as_mut_slice();
        inverse_dynamics(&model, &state, &g, &nu_dot, &loads, &mut scratch, out);
        small((&got - &want).amax(), want.amax(), 1e-13, "inverse dynamics");
    }
}

#[test]
fn external_wrench_is_the_jacobian_transposed() {
    for (model, state, mut rng) in cases() {
        let ws = updated(&model, &state);
        let mut j = DMatrix::zeros(6, model.velocities());
        for load in external(&mut rng, &model) {
            let mut point = Pose::identity();
            point.translation = ws.body_pose(load.body).inverse().point(&load.point);
            frame_jacobian(&model, &ws, load.body, &point, &mut j);
            let want = j.transpose() * load.wrench.to_vec6();
            let mut got = DVector::zeros(model.velocities());
            let w = &load.wrench;
            external_generalised_force(&model, &ws, load.body, &load.point, w, &mut got);
            small((&got - &want).amax(), want.amax(), 1e-13, "J' w");
        }
    }
}

/// `J nu` is the rate of the frame's pose, and `J nu_dot + J_dot nu` the rate of its twist, along a
/// motion with an acceleration.
#[test]
fn jacobian_and_its_rate_by_differences_along_a_motion() {
    for (model, state, mut rng) in cases() {
        let nu_dot = rng.list(model.velocities(), 3.0);
        let (body, place) = (rng.below(model.bodies.len()), rng.pose());
        let ws = updated(&model, &state);
        let motion = Motion::new(&model, &state, &nu_dot);
        let mut j = DMatrix::zeros(6, model.velocities());
        frame_jacobian(&model, &ws, body, &place, &mut j);

        let here = frame_pose(&model, &ws, body, &place);
        let numeric = motion.rate(|s| {
            let there = frame_pose(&model, &updated(&model, s), body, &place);
            let turned = log_so3(&(there.rotation * here.rotation.transpose()));
            list(&stack(&there.translation, &turned))
        });
        let twist = &j * DVector::from_vec(nu(&model, &state));
        small((&twist - numeric).amax(), twist.amax(), 1e-9, "twist");
        let direct = frame_twist(&model, &ws, body, &place).to_vec6();
        small((&twist - direct).amax(), twist.amax(), 1e-13, "J nu");

        let rate = motion.rate(|s| {
            list(&frame_twist(&model, &updated(&model, s), body, &place).to_vec6())
        });
        let bias = frame_bias_acceleration(&model, &ws, body, &place);
        let want = &j * DVector::from_vec(nu_dot) + bias;
        small((want - rate).amax(), want.amax(), 1e-9, "J nu_dot + J_dot nu");
    }
}

/// Power of the generalised forces is the rate of the energy; with friction it takes what friction
/// takes. Equivalent to `M_dot - 2 C` being skew.
#[test]
fn power_is_the_rate_of_energy() {
    for (model, state, mut rng) in cases() {
        let mut ws = Workspace::new(&model);
        let force = DVector::from_vec(rng.list(model.velocities(), 20.0));
        let nu_dot = forward_dynamics(&model, &mut ws, &state, &gravity(), &force).expect("regular");
        let velocity = DVector::from_vec(nu(&model, &state));
        let kinetic = 0.5 * velocity.dot(&(&ws.mass_matrix * &velocity));
        small((kinetic - ws.kinetic_energy).abs(), kinetic, 1e-13, "kinetic energy");
        let motion = Motion::new(&model, &state, nu_dot.as_slice());
        let rate = motion.rate(|s| {
            let there = updated(&model, s);
            DVector::from_element(1, there.kinetic_energy + there.potential_energy)
        })[0];
        let power = velocity.dot(&(&force - &ws.friction));
        let gross = velocity.abs().dot(&(force.abs() + ws.bias.abs()));
        small((rate - power).abs(), gross, 1e-9, "power");
        let lost = velocity.dot(&ws.friction);
        assert!(lost > 0.0, "friction takes energy");
    }
}

/// Momentum changes by what acts from outside and by nothing else, whatever the joints do; and its
/// matrix and rate term say the same.
#[test]
fn momentum_follows_the_external_wrenches() {
    for (model, state, mut rng) in cases() {
        if model.base == BaseKind::Fixed {
            continue;
        }
        let mut ws = updated(&model, &state);
        let loads = external(&mut rng, &model);
        let mut force = DVector::from_vec(rng.list(model.velocities(), 20.0));
        force.rows_mut(0, 6).fill(0.0);
        let (mut total, mut moment) = (gravity() * ws.mass, Vec3::zeros());
        for load in &loads {
            external_generalised_force(&model, &ws, load.body, &load.point, &load.wrench, &mut force);
            total += load.wrench.force;
            moment += load.wrench.moment
                + (load.point - ws.center_of_mass).cross(&load.wrench.force);
        }
        // Rotors are reflected inertias that carry no momentum of their own; without them the
        // balance is exact.
        let mut model = model;
        model.joints.iter_mut().for_each(|j| j.rotor_inertia = 0.0);
        let nu_dot = forward_dynamics(&model, &mut ws, &state, &gravity(), &force).expect("regular");
        let rate = &ws.momentum_matrix * &nu_dot + ws.momentum_bias;
        let want = stack(&total, &moment);
        small((rate - want).amax(), want.amax(), 1e-9, "rate of momentum");
        let motion = Motion::new(&model, &state, nu_dot.as_slice());
        let numeric = motion.rate(|s| list(&updated(&model, s).momentum));
        small((numeric - want).amax(), want.amax(), 1e-8, "rate of momentum by differences");
    }
}

#[test]
fn momentum_matrix_and_bias() {
    for (model, state, mut rng) in cases() {
        let ws = updated(&model, &state);
        let velocity = DVector::from_vec(nu(&model, &state));
        let momentum = &ws.momentum_matrix * &velocity;
        small((&momentum - ws.momentum).amax(), momentum.amax(), 1e-13, "A nu");
        let nu_dot = rng.list(model.velocities(), 3.0);
        let motion = Motion::new(&model, &state, &nu_dot);
        let numeric = motion.rate(|s| list(&updated(&model, s).momentum));
        let want = &ws.momentum_matrix * DVector::from_vec(nu_dot) + ws.momentum_bias;
        small((want - numeric).amax(), want.amax(), 1e-9, "A nu_dot + A_dot nu");
        let drift = motion.rate(|s| {
            DVector::from_column_slice(updated(&model, s).center_of_mass.as_slice())
        });
        let difference = (ws.center_of_mass_velocity - &drift).amax();
        small(difference, drift.amax(), 1e-9, "velocity of the centre of mass");
    }
}

#[test]
fn rotor_inertia_touches_the_diagonal_only() {
    for (model, state, _) in cases() {
        let with = updated(&model, &state);
        let mut bare = model.clone();
        bare.joints.iter_mut().for_each(|j| j.rotor_inertia = 0.0);
        let without = updated(&bare, &state);
        assert_eq!(with.bias, without.bias);
        assert_eq!(with.momentum_matrix, without.momentum_matrix);
        let mut difference = &with.mass_matrix - &without.mass_matrix;
        for (i, joint) in model.joints.iter().enumerate() {
            let k = model.joint_offset() + i;
            small((difference[(k, k)] - joint.rotor_inertia).abs(), 1.0, 1e-13, "rotor");
            difference[(k, k)] = 0.0;
        }
        assert_eq!(difference.amax(), 0.0);
    }
}

/// Another numbering of the bodies (parents still first), joints as they were: same results.
#[test]
fn order_of_bodies_does_not_matter() {
    let mut moved = 0;
    for (model, state, mut rng) in cases() {
        let n = model.bodies.len();
        let (mut order, mut open) = (vec![0], vec![]);
        open.extend((1..n).filter(|&i| model.bodies[i].parent == Some(0)));
        while !open.is_empty() {
            let next = open.swap_remove(rng.below(open.len()));
            order.push(next);
            open.extend((1..n).filter(|&i| model.bodies[i].parent == Some(next)));
        }
        moved += usize::from(order.windows(2).any(|w| w[0] > w[1]));
        let new_index = |old: usize| order.iter().position(|&o| o == old).expect("a permutation");
        let mut other = model.clone();
        other.bodies = order.iter().map(|&old| model.bodies[old].clone()).collect();
        other.bodies.iter_mut().for_each(|b| b.parent = b.parent.map(new_index));
        other.joints.iter_mut().for_each(|j| j.body = new_index(j.body));
        let (a, b) = (updated(&model, &state), updated(&other, &state));
        let size = a.mass_matrix.amax();
        small((&a.mass_matrix - &b.mass_matrix).amax(), size, 1e-13, "M");
        small((&a.bias - &b.bias).amax(), a.bias.amax(), 1e-13, "h");
        let size = a.momentum_matrix.amax();
        small((&a.momentum_matrix - &b.momentum_matrix).amax(), size, 1e-13, "A");
    }
    assert!(moved > 10, "only {moved} robots were renumbered");
}

#[test]
fn a_used_workspace_gives_the_bits_of_a_fresh_one() {
    for (model, state, mut rng) in cases() {
        let fresh = updated(&model, &state);
        let mut used = updated(&model, &random_state(&mut rng, &model));
        used.update(&model, &state, &gravity());
        assert_eq!(fresh.mass_matrix, used.mass_matrix);
        assert_eq!(fresh.bias, used.bias);
        assert_eq!(fresh.momentum_matrix, used.momentum_matrix);
        assert_eq!(fresh.momentum_bias, used.momentum_bias);
        assert_eq!(fresh.kinetic_energy, used.kinetic_energy);
    }
}

/// In every choice of axes: the equation of motion, power, momentum and frame accelerations mean the
/// same thing.
#[test]
fn velocity_axes_agree_with_each_other() {
    for (model, state, mut rng) in cases() {
        let ws = updated(&model, &state);
        let (body, place) = (rng.below(model.bodies.len()), rng.pose());
        let mut j = DMatrix::zeros(6, model.velocities());
        frame_jacobian(&model, &ws, body, &place, &mut j);
        let rate = frame_bias_acceleration(&model, &ws, body, &place);
        let nu_dot = DVector::from_vec(rng.list(model.velocities(), 5.0));
        for linear in [Axes::World, Axes::Base] {
            for angular in [Axes::World, Axes::Base] {
                let axes = VelocityAxes { linear, angular };
                let rotation = &state.base_pose.rotation;
                let user_twist = axes.twist_from_world(rotation, &state.base_twist);
                let back = axes.twist_to_world(rotation, &user_twist).to_vec6();
                small((back - state.base_twist.to_vec6()).amax(), 1.0, 1e-14, "twist");

                let map = axes.map(&model, &state);
                let mut user_state = state.clone();
                user_state.base_twist = user_twist;
                let user_nu = DVector::from_vec(nu(&model, &user_state));
                let mut user_nu_dot = nu_dot.clone();
                map.acceleration_from_world(user_nu_dot.as_mut_slice());
                let mut again = user_nu_dot.clone();
                map.acceleration_to_world(again.as_mut_slice());
                small((&again - &nu_dot).amax(), nu_dot.amax(), 1e-13, "acceleration");

                let (mut m, mut h, mut user_j) = (ws.mass_matrix.clone(), ws.bias.clone(), j.clone());
                map.bias_from_world(&ws.mass_matrix, &mut h);
                map.mass_matrix_from_world(&mut m);
                map.jacobian_from_world(&mut user_j);
                let mut force = &ws.mass_matrix * &nu_dot + &ws.bias;
                let size = force.amax();
                map.force_from_world(force.as_mut_slice());
                small((&m * &user_nu_dot + &h - &force).amax(), size, 1e-13, "equation of motion");
                let kinetic = 0.5 * user_nu.dot(&(&m * &user_nu));
                small((kinetic - ws.kinetic_energy).abs(), kinetic, 1e-13, "kinetic energy");
                map.force_to_world(force.as_mut_slice());
                let world = &ws.mass_matrix * &nu_dot + &ws.bias;
                small((&force - &world).amax(), size, 1e-13, "force");

                let user_rate = map.rate_from_world(&j, &rate);
                let a = &user_j * &user_nu_dot + user_rate;
                let b = &j * &nu_dot + rate;
                small((a - b).amax(), b.amax(), 1e-13, "frame acceleration");
            }
        }
    }
}

/// The rate of base-axes velocity numbers by differences: what `nu_dot_user` has to be.
#[test]
fn base_axes_acceleration_is_the_rate_of_base_axes_velocity() {
    for (model, state, mut rng) in cases() {
        if model.base == BaseKind::Fixed {
            continue;
        }
        let nu_dot = rng.list(model.velocities(), 3.0);
        let axes = VelocityAxes { linear: Axes::Base, angular: Axes::Base };
        let user = |s: &State| axes.twist_from_world(&s.base_pose.rotation, &s.base_twist).to_vec6();
        let rate = Motion::new(&model, &state, &nu_dot).rate(|s| list(&user(s)));
        let mut got = nu_dot.clone();
        axes.map(&model, &state).acceleration_from_world(&mut got);
        for k in 0..6 {
            small((rate[k] - got[k]).abs(), rate.amax(), 1e-9, "base acceleration");
        }
    }
}

#[test]
fn fixed_base_ignores_a_base_twist() {
    let model = random_model(3, 6, BaseKind::Fixed);
    let mut rng = Rng(4);
    let state = random_state(&mut rng, &model);
    let mut still = state.clone();
    still.base_twist = Twist::zero();
    let (a, b) = (updated(&model, &state), updated(&model, &still));
    assert_eq!(a.bias, b.bias);
    assert_eq!(a.momentum, b.momentum);
    let mut scratch = InverseScratch::new(&model);
    let (mut x, mut y) = (vec![0.0; 6], vec![0.0; 6]);
    let g = gravity();
    inverse_dynamics(&model, &state, &g, &[0.0; 6], &[], &mut scratch, &mut x);
    inverse_dynamics(&model, &still, &g, &[0.0; 6], &[], &mut scratch, &mut y);
    assert_eq!(x, y);
}

/// A free body: no joints at all, gravity only.
#[test]
fn a_lone_body_falls_and_keeps_its_momentum() {
    let mut model = random_model(11, 1, BaseKind::Floating);
    let body = model.bodies[0].inertia;
    model.bodies.truncate(1);
    model.joints.clear();
    let mut rng = Rng(12);
    let state = random_state(&mut rng, &model);
    let mut ws = Workspace::new(&model);
    let none = DVector::zeros(6);
    let before = updated(&model, &state);
    let after = predict(&model, &mut ws, &state, &gravity(), &none, 0.2).expect("regular");
    let after = updated(&model, &after);
    let linear = head(&before.momentum) + gravity() * body.mass * 0.2;
    small((head(&after.momentum) - linear).amax(), 1.0, 1e-6, "linear momentum");
    let difference = tail(&after.momentum) - tail(&before.momentum);
    small(difference.amax(), 1.0, 1e-6, "angular momentum");
}

/// Halving nothing but the time step of a coarse motion: the midpoint prediction converges to what
/// many short explicit steps give.
#[test]
fn prediction_agrees_with_short_steps() {
    for (model, state, mut rng) in cases().filter(|(m, _, _)| m.joints.len() > 3).take(6) {
        let mut model = model;
        // Coulomb friction jumps where a speed changes sign; no scheme is smooth there.
        model.joints.iter_mut().for_each(|j| j.coulomb_friction = 0.0);
        let force = DVector::from_vec(rng.list(model.velocities(), 5.0));
        let mut ws = Workspace::new(&model);
        let g = gravity();
        let got = predict(&model, &mut ws, &state, &g, &force, 0.01).expect("regular");
        let mut fine = state.clone();
        for _ in 0..4000 {
            let a = forward_dynamics(&model, &mut ws, &fine, &g, &force).expect("regular");
            fine = integrate(&model, &fine, a.as_slice(), 0.01 / 4000.0);
        }
        for (a, b) in got.position.iter().zip(&fine.position) {
            small((a - b).abs(), 1.0, 1e-5, "position");
        }
        let turned = log_so3(&(got.base_pose.rotation * fine.base_pose.rotation.transpose()));
        small(turned.norm(), 1.0, 1e-5, "base rotation");
    }
    let model = random_model(1, 2, BaseKind::Fixed);
    let state = random_state(&mut Rng(1), &model);
    let (mut ws, none) = (Workspace::new(&model), DVector::zeros(2));
    for bad in [-0.1, 1.5, f64::NAN] {
        let answer = predict(&model, &mut ws, &state, &gravity(), &none, bad);
        assert!(matches!(answer, Err(DynamicsError::PredictionTime { .. })), "{bad}");
    }
}

/// Links that weigh nothing, and no rotors: the first joint has nothing to move.
#[test]
fn a_joint_without_inertia_is_named() {
    let mut model = random_model(5, 4, BaseKind::Floating);
    model.joints.iter_mut().for_each(|j| j.rotor_inertia = 0.0);
    for body in &mut model.bodies[1..] {
        body.inertia = Inertia::zero();
    }
    let state = random_state(&mut Rng(6), &model);
    let mut ws = updated(&model, &state);
    match ws.factorise(&model) {
        Err(DynamicsError::MassMatrixNotPositiveDefinite { row, coordinate, pivot, .. }) => {
            assert_eq!((row, pivot), (6, 0.0));
            assert_eq!(coordinate, format!("joint {}", model.joints[0].name));
        }
        other => panic!("expected an error, got {other:?}"),
    }
    let mut broken = state.clone();
    broken.position[0] = f64::NAN;
    let mut ws = updated(&random_model(5, 4, BaseKind::Floating), &broken);
    assert!(ws.factorise(&model).is_err());
}

/// Turning the whole world turns every answer with it.
#[test]
fn nothing_depends_on_the_world_axes() {
    for (model, state, mut rng) in cases() {
        let turn = exp_so3(&rng.vector(2.0));
        let mut other = state.clone();
        other.base_pose.rotation = turn * state.base_pose.rotation;
        other.base_pose.translation = turn * state.base_pose.translation;
        other.base_twist.linear = turn * state.base_twist.linear;
        other.base_twist.angular = turn * state.base_twist.angular;
        let a = updated(&model, &state);
        let mut b = Workspace::new(&model);
        b.update(&model, &other, &(turn * gravity()));
        let offset = model.joint_offset();
        let n = model.joints.len();
        let size = a.bias.amax();
        small((a.bias.rows(offset, n) - b.bias.rows(offset, n)).amax(), size, 1e-12, "h");
        let view = |w: &Workspace| w.mass_matrix.view((offset, offset), (n, n)).into_owned();
        small((view(&a) - view(&b)).amax(), a.mass_matrix.amax(), 1e-12, "M");
        small((turn * head(&a.momentum) - head(&b.momentum)).amax(), 10.0, 1e-12, "momentum");
        small((turn * tail(&a.momentum) - tail(&b.momentum)).amax(), 10.0, 1e-12, "momentum");
    }
}
