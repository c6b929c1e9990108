//! Dynamics against numbers from outside the project. Robots are built by hand here.

#[path = "common/hand_built.rs"]
mod hand_built;

use hand_built::{at, empty, hang};
use nalgebra::{DMatrix, DVector};
use serde_json::Value;
use underfoot::dynamics::{
    Axes, InverseScratch, VelocityAxes, Workspace, frame_jacobian, frame_pose, inverse_dynamics,
};
use underfoot::model::{BaseKind, JointKind, Model, State};
use underfoot::spatial::{
    Inertia, Mat3, Pose, Twist, Vec3, rotation_from_quaternion, rotation_from_rpy,
};

fn close(got: f64, want: f64, tolerance: f64, what: &str) {
    assert!((got - want).abs() <= tolerance, "{what}: got {got:.16e}, want {want:.16e}");
}

fn close_matrix(got: &DMatrix<f64>, want: &DMatrix<f64>, tolerance: f64, what: &str) {
    assert_eq!(got.shape(), want.shape(), "{what}");
    let worst = (got - want).amax();
    assert!(worst <= tolerance, "{what}: off by {worst:e}");
}

fn fixed_state(position: &[f64], velocity: &[f64]) -> State {
    State {
        base_pose: Pose::identity(),
        base_twist: Twist::zero(),
        position: position.to_vec(),
        velocity: velocity.to_vec(),
    }
}

fn inertia(mass: f64, center: Vec3, about_center: Mat3) -> Inertia {
    Inertia { mass, center, about_center }
}

fn diagonal(x: f64, y: f64, z: f64) -> Mat3 {
    Mat3::from_diagonal(&Vec3::new(x, y, z))
}

fn inverse(model: &Model, state: &State, gravity: &Vec3, acceleration: &[f64]) -> Vec<f64> {
    let mut out = vec![0.0; model.velocities()];
    let mut scratch = InverseScratch::new(model);
    inverse_dynamics(model, state, gravity, acceleration, &[], &mut scratch, &mut out);
    out
}

/// Planar two-link arm. Source: textbook closed form (Spong, Hutchinson & Vidyasagar, Robot Modeling
/// and Control; published, quoted from memory, not opened); the numbers are derived from it and a
/// general-purpose physics engine agrees with them.
#[test]
fn planar_two_link_arm() {
    let mut model = empty(BaseKind::Fixed, Inertia::zero());
    let revolute = JointKind::Revolute;
    let one = inertia(2.0, Vec3::new(0.2, 0.0, 0.0), diagonal(0.03, 0.03, 0.03));
    let two = inertia(1.5, Vec3::new(0.15, 0.0, 0.0), diagonal(0.012, 0.012, 0.012));
    let first = hang(&mut model, 0, Pose::identity(), revolute, Vec3::z(), one);
    hang(&mut model, first, at(0.4, 0.0, 0.0), revolute, Vec3::z(), two);
    let state = fixed_state(&[0.5, -0.8], &[1.2, -0.7]);
    let gravity = Vec3::new(0.0, -9.81, 0.0);

    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &gravity);
    close(ws.mass_matrix[(0, 0)], 0.5211572076824897, 1e-15, "M11");
    close(ws.mass_matrix[(0, 1)], 0.10845360384124487, 1e-15, "M12");
    close(ws.mass_matrix[(1, 1)], 0.04575, 1e-15, "M22");
    let coriolis = [-0.0768288373353389, -0.09296934938057817];
    let weight = [10.71775139776705, 2.1086664656224934];
    for i in 0..2 {
        close(ws.bias[i], coriolis[i] + weight[i], 1e-14, "bias");
    }
    ws.update(&model, &state, &Vec3::zeros());
    for i in 0..2 {
        close(ws.bias[i], coriolis[i], 1e-15, "Coriolis");
    }
    let tau = inverse(&model, &state, &gravity, &[0.3, 0.4]);
    close(tau[0], 10.840651164272955, 1e-14, "torque 1");
    close(tau[1], 2.0665331973942886, 1e-14, "torque 2");
}

/// Three-link arm after the worked example of Lynch & Park, Modern Robotics, chapter 8, with a
/// proper unit axis. Numbers: derived, two codes; given to twelve decimals.
#[test]
fn three_link_arm() {
    let half_pi = std::f64::consts::FRAC_PI_2;
    let turned = |d: Mat3| {
        let r = rotation_from_rpy(0.0, half_pi, 0.0);
        r * d * r.transpose()
    };
    let mut model = empty(BaseKind::Fixed, Inertia::zero());
    let revolute = JointKind::Revolute;
    let one = inertia(3.7, Vec3::new(0.0, 0.0, 0.089159), diagonal(0.010267, 0.010267, 0.00666));
    let two = inertia(
        8.393,
        Vec3::new(0.28, 0.13585, 0.000159),
        turned(diagonal(0.22689, 0.22689, 0.0151074)),
    );
    let three = inertia(
        2.275,
        Vec3::new(0.25, 0.01615, 0.000159),
        turned(diagonal(0.0494433, 0.0494433, 0.004095)),
    );
    let a = hang(&mut model, 0, Pose::identity(), revolute, Vec3::z(), one);
    let b = hang(&mut model, a, at(0.0, 0.0, 0.089), revolute, Vec3::y(), two);
    hang(&mut model, b, at(0.425, 0.0, 0.0), revolute, Vec3::y(), three);
    let state = fixed_state(&[0.1, 0.1, 0.1], &[0.1, 0.2, 0.3]);

    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &Vec3::zeros());
    let mass = [
        [2.101039598738, 0.035069743210, 0.001819114477],
        [0.035069743210, 1.968507166256, 0.432157368293],
        [0.001819114477, 0.432157368293, 0.191630857514],
    ];
    let coriolis = [0.001152703502, -0.002689807370, 0.001799784864];
    for i in 0..3 {
        for j in 0..3 {
            close(ws.mass_matrix[(i, j)], mass[i][j], 6e-13, "M");
        }
        close(ws.bias[i], coriolis[i], 6e-13, "Coriolis");
    }
    let still = fixed_state(&[0.1, 0.1, 0.1], &[0.0; 3]);
    ws.update(&model, &still, &Vec3::new(0.0, 0.0, -9.8));
    for (i, want) in [0.0, -37.808029531391, -5.463350352147].into_iter().enumerate() {
        close(ws.bias[i], want, 6e-13, "gravity");
    }
}

/// The floating-base check robot: oblique hip axes, head and imu welded to the torso.
fn biped() -> Model {
    let full = |ixx, iyy, izz, ixy, ixz, iyz| {
        Mat3::new(ixx, ixy, ixz, ixy, iyy, iyz, ixz, iyz, izz)
    };
    let pose = |x: [f64; 3], rpy: [f64; 3]| Pose {
        rotation: rotation_from_rpy(rpy[0], rpy[1], rpy[2]),
        translation: Vec3::from(x),
    };
    let link = |mass, placement: Pose, about| {
        inertia(mass, Vec3::zeros(), about).placed(&placement)
    };
    let torso = link(
        12.0,
        pose([0.02, -0.01, 0.15], [0.1, -0.2, 0.3]),
        full(0.25, 0.22, 0.09, 0.01, -0.005, 0.004),
    );
    let head = link(1.3, at(0.0, 0.0, 0.05), diagonal(0.004, 0.004, 0.003))
        .placed(&pose([0.01, 0.0, 0.35], [0.0, 0.1, 0.2]));
    let mut model = empty(BaseKind::Floating, torso.combined(&head));
    for side in [-1.0, 1.0] {
        let thigh = link(
            3.5,
            at(0.01, 0.005 * side, -0.17),
            full(0.04, 0.041, 0.006, 0.0, 0.001, 0.0),
        );
        let shank = link(
            2.2,
            pose([0.005, 0.0, -0.16], [0.0, 0.05, 0.0]),
            diagonal(0.025, 0.0255, 0.003),
        );
        let foot = link(0.9, at(0.03, 0.0, -0.04), diagonal(0.0008, 0.003, 0.0032));
        let hip = pose([0.0, 0.09 * side, -0.02], [-0.05 * side, 0.0, 0.1 * side]);
        let ankle = pose([0.0, 0.0, -0.34], [0.0, 0.0, -0.02 * side]);
        let kind = JointKind::Revolute;
        let a = hang(&mut model, 0, hip, kind, Vec3::new(-0.6 * side, 0.8, 0.0), thigh);
        let b = hang(&mut model, a, at(0.0, 0.0, -0.36), kind, Vec3::y(), shank);
        hang(&mut model, b, ankle, kind, Vec3::y(), foot);
    }
    model
}

fn read(path: &str) -> Value {
    let text = std::fs::read_to_string(path).expect("check data is there");
    serde_json::from_str(&text).expect("check data is JSON")
}

fn numbers(v: &Value) -> Vec<f64> {
    v.as_array().expect("a list").iter().map(|x| x.as_f64().expect("a number")).collect()
}

fn vector(v: &Value) -> Vec3 {
    Vec3::from_column_slice(&numbers(v))
}

fn matrix(v: &Value) -> DMatrix<f64> {
    let rows: Vec<Vec<f64>> = v.as_array().expect("rows").iter().map(numbers).collect();
    DMatrix::from_fn(rows.len(), rows[0].len(), |r, c| rows[r][c])
}

fn biped_state(check: &Value) -> State {
    let named = |key: &str| {
        let order = check["joint_order"].as_array().expect("names").iter();
        order.map(|n| check[key][n.as_str().expect("a name")].as_f64().expect("a number")).collect()
    };
    let q = numbers(&check["quat_wxyz"]);
    State {
        base_pose: Pose {
            rotation: rotation_from_quaternion(&[q[1], q[2], q[3], q[0]]),
            translation: vector(&check["p"]),
        },
        base_twist: Twist { linear: vector(&check["v_world"]), angular: vector(&check["w_world"]) },
        position: named("q"),
        velocity: named("qd"),
    }
}

/// Floating base with oblique axes and welded links. Source of every number: derived, Jacobian-sum
/// code against a general-purpose physics engine (mass matrix to 4e-15, the rest to 1e-9).
#[test]
fn floating_biped_in_world_axes() {
    let check = read("tests/data/biped7_check.json");
    let (model, state) = (biped(), biped_state(&check));
    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &vector(&check["gravity"]));

    let number = |key: &str| check[key].as_f64().expect("a number");
    close_matrix(&ws.mass_matrix, &matrix(&check["M_world_lin_world_ang"]), 5e-14, "M");
    let bias = DVector::from_vec(numbers(&check["bias_world"]));
    let worst = (&ws.bias - &bias).amax();
    assert!(worst <= 1e-9 * bias.amax(), "bias off by {worst:e}");
    close(ws.mass, number("mass"), 1e-13, "mass");
    close(model.mass(), number("mass"), 1e-13, "mass of the model");
    close((ws.center_of_mass - vector(&check["com"])).amax(), 0.0, 1e-14, "centre of mass");
    close((ws.center_of_mass_velocity - vector(&check["vcom"])).amax(), 0.0, 1e-14, "its velocity");
    let angular = ws.momentum.fixed_rows::<3>(3) - vector(&check["L_com_world"]);
    close(angular.amax(), 0.0, 1e-9, "angular momentum");
    let linear = ws.momentum.fixed_rows::<3>(0) - vector(&check["vcom"]) * ws.mass;
    close(linear.amax(), 0.0, 1e-12, "linear momentum");
    let inertia = DMatrix::from_fn(3, 3, |r, c| ws.centroidal_inertia[(r, c)]);
    close_matrix(&inertia, &matrix(&check["Icom_world"]), 1e-9, "centroidal inertia");
    close(ws.kinetic_energy, number("kinetic"), 1e-12, "kinetic energy");
    close(ws.potential_energy, number("potential"), 1e-9, "potential energy");
}

/// The same robot with both base velocities in base axes. Source: as above.
#[test]
fn floating_biped_in_base_axes() {
    let check = read("tests/data/biped7_check.json");
    let (model, state) = (biped(), biped_state(&check));
    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &vector(&check["gravity"]));
    let map = VelocityAxes { linear: Axes::Base, angular: Axes::Base }.map(&model, &state);
    let (mut mass, mut bias) = (ws.mass_matrix.clone(), ws.bias.clone());
    map.bias_from_world(&ws.mass_matrix, &mut bias);
    map.mass_matrix_from_world(&mut mass);
    close_matrix(&mass, &matrix(&check["M_basetwist"]), 5e-14, "M");
    let want = DVector::from_vec(numbers(&check["bias_basetwist"]));
    let worst = (&bias - &want).amax();
    assert!(worst <= 1e-9 * want.amax(), "bias off by {worst:e}");
}

/// A chain of screws `(omega, v)` through the world origin's axes: each is a turn about its axis
/// and, by its pitch `omega . v`, a slide along it. Returns the model and the pitches.
fn screw_chain(screws: &[[f64; 6]]) -> (Model, Vec<f64>) {
    let mut model = empty(BaseKind::Fixed, Inertia::zero());
    let (mut pitches, mut body, mut last) = (vec![], 0, Vec3::zeros());
    for s in screws {
        let (w, v) = (Vec3::new(s[0], s[1], s[2]), Vec3::new(s[3], s[4], s[5]));
        if w.norm() == 0.0 {
            let placement = Pose { rotation: Mat3::identity(), translation: -last };
            body = hang(&mut model, body, placement, JointKind::Prismatic, v, Inertia::zero());
            last = Vec3::zeros();
            pitches.push(f64::NAN);
            continue;
        }
        let point = w.cross(&v);
        let placement = Pose { rotation: Mat3::identity(), translation: point - last };
        body = hang(&mut model, body, placement, JointKind::Revolute, w, Inertia::zero());
        body = hang(&mut model, body, Pose::identity(), JointKind::Prismatic, w, Inertia::zero());
        (last, pitches) = (point, [pitches, vec![w.dot(&v)]].concat());
    }
    (model, pitches)
}

/// Joint positions of the chain for the screw angles.
fn screw_positions(pitches: &[f64], angles: &[f64]) -> Vec<f64> {
    let pairs = pitches.iter().zip(angles);
    pairs.flat_map(|(h, &q)| if h.is_nan() { vec![q] } else { vec![q, h * q] }).collect()
}

/// Where the chain's last body sits at rest (its axes are the world's).
fn rest_origin(model: &Model) -> Vec3 {
    model.bodies.iter().map(|b| b.placement.translation).sum()
}

/// Forward kinematics. Source: Lynch & Park, Modern Robotics, code library, `FKinSpace` example: inputs
/// published, quoted from memory; output as the library prints it, at full precision.
#[test]
fn forward_kinematics_of_a_published_arm() {
    let check = read("tests/data/mr_kinematics.json");
    let screws = [
        [0.0, 0.0, 1.0, 4.0, 0.0, 0.0],
        [0.0, 0.0, 0.0, 0.0, 1.0, 0.0],
        [0.0, 0.0, -1.0, -6.0, 0.0, -0.1],
    ];
    let pi = std::f64::consts::PI;
    let (model, pitches) = screw_chain(&screws);
    let home = Pose {
        rotation: Mat3::new(-1.0, 0.0, 0.0, 0.0, 1.0, 0.0, 0.0, 0.0, -1.0),
        translation: Vec3::new(0.0, 6.0, 2.0) - rest_origin(&model),
    };
    let position = screw_positions(&pitches, &[pi / 2.0, 3.0, pi]);
    let mut ws = Workspace::new(&model);
    let speeds = vec![0.0; position.len()];
    ws.update(&model, &fixed_state(&position, &speeds), &Vec3::zeros());
    let got = frame_pose(&model, &ws, model.bodies.len() - 1, &home);
    let want = matrix(&check["FKinSpace"]);
    for r in 0..3 {
        for c in 0..3 {
            close(got.rotation[(r, c)], want[(r, c)], 1e-14, "rotation");
        }
        close(got.translation[r], want[(r, 3)], 1e-14, "translation");
    }
}

/// Jacobians. Source: Lynch & Park, Modern Robotics, code library, `JacobianSpace` and `JacobianBody`
/// examples: inputs published, quoted from memory; outputs as the library prints them, at full
/// precision. Angular rows come first there.
#[test]
fn jacobians_of_a_published_arm() {
    let check = read("tests/data/mr_kinematics.json");
    let screws = [
        [0.0, 0.0, 1.0, 0.0, 0.2, 0.2],
        [1.0, 0.0, 0.0, 2.0, 0.0, 3.0],
        [0.0, 1.0, 0.0, 0.0, 2.0, 1.0],
        [1.0, 0.0, 0.0, 0.2, 0.3, 0.4],
    ];
    let (model, pitches) = screw_chain(&screws);
    let position = screw_positions(&pitches, &[0.2, 1.1, 0.1, 1.2]);
    let mut ws = Workspace::new(&model);
    let speeds = vec![0.0; position.len()];
    ws.update(&model, &fixed_state(&position, &speeds), &Vec3::zeros());
    let last = model.bodies.len() - 1;
    let mut j = DMatrix::zeros(6, model.velocities());

    // At the world's origin, in world axes; a screw's column is turn + pitch * slide.
    frame_jacobian(&model, &ws, last, &ws.body_pose(last).inverse(), &mut j);
    let want = matrix(&check["JacobianSpace"]);
    for (k, h) in pitches.iter().enumerate() {
        let column = j.column(2 * k) + j.column(2 * k + 1) * *h;
        for r in 0..3 {
            close(column[3 + r], want[(r, k)], 1e-14, "space, angular");
            close(column[r], want[(3 + r, k)], 1e-14, "space, linear");
        }
    }

    // At the frame that rested on the world's, in its own axes.
    let tool = Pose { rotation: Mat3::identity(), translation: -rest_origin(&model) };
    frame_jacobian(&model, &ws, last, &tool, &mut j);
    let turn = frame_pose(&model, &ws, last, &tool).rotation.transpose();
    let want = matrix(&check["JacobianBody"]);
    for (k, h) in pitches.iter().enumerate() {
        let column = j.column(2 * k) + j.column(2 * k + 1) * *h;
        let linear = turn * Vec3::new(column[0], column[1], column[2]);
        let angular = turn * Vec3::new(column[3], column[4], column[5]);
        for r in 0..3 {
            close(angular[r], want[(r, k)], 1e-14, "body, angular");
            close(linear[r], want[(3 + r, k)], 1e-14, "body, linear");
        }
    }
}
