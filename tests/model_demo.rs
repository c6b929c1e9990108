//! The built-in biped stands as it should: its mass, its joints, its mirror symmetry, its crouch.

use underfoot::model::{JointSpec, Model, ModelOptions, read_urdf};
use underfoot::spatial::{Mat3, Vec3};

const BIPED: &str = include_str!("../src/cli/demo/biped.urdf");

/// The crouch, per side; shoulder roll is mirrored. The waist stays at 0.
const HIP_PITCH: f64 = -0.2866;
const KNEE: f64 = 0.6;
const SHOULDER_PITCH: f64 = 0.2;
const SHOULDER_ROLL: f64 = 0.15;
const ELBOW: f64 = -0.5;

fn crouch(hip_pitch: f64) -> Vec<(String, f64)> {
    let mut angles = vec![("waist_yaw".to_string(), 0.0)];
    for (side, sign) in [("left", 1.0), ("right", -1.0)] {
        let per_side = [
            ("hip_yaw", 0.0),
            ("hip_roll", 0.0),
            ("hip_pitch", hip_pitch),
            ("knee", KNEE),
            ("ankle_pitch", -hip_pitch - KNEE),
            ("ankle_roll", 0.0),
            ("shoulder_pitch", SHOULDER_PITCH),
            ("shoulder_roll", sign * SHOULDER_ROLL),
            ("elbow", ELBOW),
        ];
        angles.extend(per_side.map(|(joint, angle)| (format!("{side}_{joint}"), angle)));
    }
    angles
}

/// The robot frozen in a posture: one body, whose frames are the forward kinematics.
fn frozen(hip_pitch: f64) -> Model {
    let joints = crouch(hip_pitch)
        .iter()
        .map(|(name, at)| JointSpec { locked_at: Some(*at), ..JointSpec::named(name) })
        .collect();
    match read_urdf(BIPED, &ModelOptions { joints, ..ModelOptions::default() }) {
        Ok(model) => model,
        Err(error) => panic!("{error}"),
    }
}

#[test]
fn size_and_limits() {
    let model = read_urdf(BIPED, &ModelOptions::default()).expect("the demo robot is good");
    assert_eq!((model.joints.len(), model.velocities()), (19, 25));
    assert!((model.mass() - 39.0).abs() < 1e-12, "{}", model.mass());
    assert!(model.remarks.is_empty(), "{:?}", model.remarks);
    for joint in &model.joints {
        assert!(joint.effort.is_some_and(|e| (20.0..=180.0).contains(&e)), "{joint:?}");
        assert!(joint.speed.is_some() && joint.position.is_some() && joint.actuated);
    }
    for (name, angle) in crouch(HIP_PITCH) {
        let joint = &model.joints[model.joint(&name).expect("a joint of the robot")];
        assert!(joint.position.is_some_and(|(l, u)| (l..=u).contains(&angle)), "{name}");
    }
}

#[test]
fn crouch_stands_flat_under_the_centre_of_mass() {
    let model = frozen(HIP_PITCH);
    let body = model.bodies[0].inertia;
    let sole = |name| model.frames[model.frame(name).expect("a sole link")].placement;
    let (left, right) = (sole("left_sole"), sole("right_sole"));
    for pose in [left, right] {
        assert!((pose.rotation - Mat3::identity()).amax() < 1e-12);
    }
    println!("centre {:?}, left {:?}, right {:?}", body.center, left.translation, right.translation);
    let middle = (left.translation + right.translation) / 2.0;
    let mirrored = Vec3::new(1.0, -1.0, 1.0).component_mul(&left.translation);
    assert!((mirrored - right.translation).amax() < 1e-12);
    assert!((body.center.x - middle.x).abs() < 1e-3 && (body.center.y - middle.y).abs() < 1e-12);
    // Mirror symmetry: no products of inertia across the plane y = 0.
    assert!(body.about_center[(0, 1)].abs() < 1e-12 && body.about_center[(1, 2)].abs() < 1e-12);
}
