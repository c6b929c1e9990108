//! Dynamics of robots read from URDF: the check robots, and random trees whose elements stand in
//! shuffled order.

// Both kinds of robot bring the generator of random numbers along.
#![allow(clippy::duplicate_mod)]

#[path = "common/hand_built.rs"]
mod hand_built;
#[path = "common/random_tree.rs"]
mod random_tree;

use hand_built::{Rng, nu, random_state};
use nalgebra::{DMatrix, DVector};
use serde_json::Value;
use underfoot::dynamics::{
    InverseScratch, Workspace, frame_jacobian, frame_twist, inverse_dynamics,
};
use underfoot::model::{Model, ModelOptions, State, read_urdf};
use underfoot::spatial::{Pose, Twist, Vec3, rotation_from_quaternion, stack};

fn numbers(v: &Value) -> Vec<f64> {
    v.as_array().expect("a list").iter().map(|x| x.as_f64().expect("a number")).collect()
}

fn model_of(text: &str, fixed_base: bool) -> Model {
    read_urdf(text, &ModelOptions { fixed_base, ..ModelOptions::default() }).expect("a good robot")
}

fn file(path: &str) -> String {
    std::fs::read_to_string(path).expect("check data is there")
}

/// Source of the numbers: derived, Jacobian-sum code against a general-purpose physics engine.
#[test]
fn floating_biped_from_urdf() {
    let model = model_of(&file("tests/data/biped7.urdf"), false);
    let check: Value =
        serde_json::from_str(&file("tests/data/biped7_check.json")).expect("check data is JSON");
    let names: Vec<_> = numbers_named(&check);
    assert_eq!(model.joints.iter().map(|j| j.name.as_str()).collect::<Vec<_>>(), names);
    let q = numbers(&check["quat_wxyz"]);
    let vector = |key: &str| Vec3::from_column_slice(&numbers(&check[key]));
    let each = |key: &str| {
        names.iter().map(|n| check[key][*n].as_f64().expect("a number")).collect::<Vec<_>>()
    };
    let state = State {
        base_pose: Pose {
            rotation: rotation_from_quaternion(&[q[1], q[2], q[3], q[0]]),
            translation: vector("p"),
        },
        base_twist: Twist { linear: vector("v_world"), angular: vector("w_world") },
        position: each("q"),
        velocity: each("qd"),
    };
    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &vector("gravity"));
    let rows = check["M_world_lin_world_ang"].as_array().expect("rows");
    for (r, row) in rows.iter().enumerate() {
        for (c, want) in numbers(row).into_iter().enumerate() {
            let got = ws.mass_matrix[(r, c)];
            assert!((got - want).abs() <= 5e-14, "M[{r},{c}]: got {got}, want {want}");
        }
    }
    let bias = DVector::from_vec(numbers(&check["bias_world"]));
    assert!((&ws.bias - &bias).amax() <= 1e-9 * bias.amax(), "bias {}", ws.bias);
    assert!((ws.center_of_mass - vector("com")).amax() <= 1e-14);
}

fn numbers_named(check: &Value) -> Vec<&str> {
    let order = check["joint_order"].as_array().expect("names").iter();
    order.map(|n| n.as_str().expect("a name")).collect()
}

/// Source: after Lynch & Park, Modern Robotics, chapter 8; numbers derived, two codes.
#[test]
fn three_link_arm_from_urdf() {
    let model = model_of(&file("tests/data/mr3link.urdf"), true);
    let state = State {
        base_pose: Pose::identity(),
        base_twist: Twist::zero(),
        position: vec![0.1; 3],
        velocity: vec![0.1, 0.2, 0.3],
    };
    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &Vec3::new(0.0, 0.0, -9.8));
    let mass = [
        [2.101039598738, 0.035069743210, 0.001819114477],
        [0.035069743210, 1.968507166256, 0.432157368293],
        [0.001819114477, 0.432157368293, 0.191630857514],
    ];
    let bias = [0.001152703502, -37.808029531391 - 0.002689807370, -5.463350352147 + 0.001799784864];
    for i in 0..3 {
        for j in 0..3 {
            assert!((ws.mass_matrix[(i, j)] - mass[i][j]).abs() <= 6e-13);
        }
        assert!((ws.bias[i] - bias[i]).abs() <= 1.2e-12, "bias {i}");
    }
}

/// Identities again where fixed joints weld links together and frames sit off their bodies.
#[test]
fn identities_on_random_descriptions() {
    for seed in 0..30 {
        let text = random_tree::random_urdf(seed, 1 + (seed as usize * 7) % 40);
        let model = model_of(&text, seed % 4 == 0);
        let mut rng = Rng(seed);
        let state = random_state(&mut rng, &model);
        let gravity = rng.vector(9.0);
        let mut ws = Workspace::new(&model);
        ws.update(&model, &state, &gravity);
        ws.factorise(&model).expect("positive definite");

        let nu_dot = DVector::from_vec(rng.list(model.velocities(), 4.0));
        let want = &ws.mass_matrix * &nu_dot + &ws.bias;
        let mut got = DVector::zeros(model.velocities());
        let (mut scratch, out) = (InverseScratch::new(&model), got.as_mut_slice());
        inverse_dynamics(&model, &state, &gravity, nu_dot.as_slice(), &[], &mut scratch, out);
        let off = (&got - &want).amax();
        assert!(off <= 1e-13 * want.amax().max(1.0), "seed {seed}: off by {off:e}");

        let velocity = DVector::from_vec(nu(&model, &state));
        let mut jacobian = DMatrix::zeros(6, model.velocities());
        for frame in &model.frames {
            frame_jacobian(&model, &ws, frame.body, &frame.placement, &mut jacobian);
            let twist = frame_twist(&model, &ws, frame.body, &frame.placement);
            let off = (&jacobian * &velocity - stack(&twist.linear, &twist.angular)).amax();
            assert!(off <= 1e-12, "seed {seed}, frame {}: off by {off:e}", frame.name);
        }
    }
}
