//! The dynamics of one state must not touch the heap: they run in every tick.

#[path = "common/hand_built.rs"]
mod hand_built;

use hand_built::{Rng, random_model, random_state};
use nalgebra::{DMatrix, DVector};
use underfoot::dynamics::{
    ExternalWrench, InverseScratch, Workspace, external_generalised_force, forward_dynamics_into,
    frame_bias_acceleration, frame_jacobian, inverse_dynamics,
};
use underfoot::model::BaseKind;
use underfoot::spatial::{Pose, Vec3, Wrench};

#[test]
fn the_counter_counts() {
    let seen = allocation_counter::measure(|| drop(std::hint::black_box(vec![1u8; 100])));
    assert_eq!(seen.count_total, 1);
}

#[test]
fn no_allocation_per_state() {
    for kind in [BaseKind::Floating, BaseKind::Fixed] {
        let model = random_model(7, 30, kind);
        let state = random_state(&mut Rng(8), &model);
        let nv = model.velocities();
        let gravity = Vec3::new(0.0, 0.0, -9.8);
        let wrench = Wrench { force: Vec3::x(), moment: Vec3::y() };
        let external = [ExternalWrench { body: 9, point: Vec3::z(), wrench }];
        let (mut ws, mut scratch) = (Workspace::new(&model), InverseScratch::new(&model));
        let (mut jacobian, mut force) = (DMatrix::zeros(6, nv), DVector::zeros(nv));
        let (mut out, mut tau, nu_dot) = (DVector::zeros(nv), vec![0.0; nv], vec![0.1; nv]);
        let place = Pose::identity();
        let seen = allocation_counter::measure(|| {
            ws.update(&model, &state, &gravity);
            frame_jacobian(&model, &ws, 30, &place, &mut jacobian);
            let bias = frame_bias_acceleration(&model, &ws, 30, &place);
            force[0] += bias[0];
            external_generalised_force(&model, &ws, 9, &Vec3::z(), &wrench, &mut force);
            let solved = forward_dynamics_into(&model, &mut ws, &state, &gravity, &force, &mut out);
            assert!(solved.is_ok());
            inverse_dynamics(&model, &state, &gravity, &nu_dot, &external, &mut scratch, &mut tau);
        });
        assert_eq!(seen.count_total, 0, "{kind:?}: {seen:?}");
        assert!(out.iter().chain(&tau).all(|x| x.is_finite()));
    }
}
