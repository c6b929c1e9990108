//! What the reader makes of good descriptions: masses, frames, welds, locks, loops, ids, loads.

#[path = "common/random_tree.rs"]
mod random_tree;

use underfoot::model::{
    BaseKind, JointKind, JointSpec, Load, Model, ModelOptions, SoleSpec, TorqueSpeedLine, read_urdf, with_loads,
};
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Mat3, Pose, Vec3, exp_so3, parallel_axis, rotation_from_rpy};

const BIPED7: &str = include_str!("data/biped7.urdf");
const MR3LINK: &str = include_str!("data/mr3link.urdf");

fn read(xml: &str, options: &ModelOptions) -> Model {
    match read_urdf(xml, options) {
        Ok(model) => model,
        Err(error) => panic!("{error}\n{xml}"),
    }
}

fn plain(xml: &str) -> Model {
    read(xml, &ModelOptions::default())
}

fn close(a: &Mat3, b: &Mat3, tolerance: f64) -> bool {
    (a - b).amax() <= tolerance
}

#[test]
fn biped7_has_its_mass_bodies_and_frames() {
    let model = plain(BIPED7);
    // Derived, an independent Jacobian-sum code: the mass in biped7_check.json.
    assert!((model.mass() - 26.499999999999996).abs() < 1e-13);
    assert_eq!((model.velocities(), model.bodies.len(), model.base), (12, 7, BaseKind::Floating));
    let names: Vec<&str> = model.joints.iter().map(|j| j.name.as_str()).collect();
    assert_eq!(names, ["r_hip", "r_knee", "r_ankle", "l_hip", "l_knee", "l_ankle"]);
    let frames: Vec<&str> = model.frames.iter().map(|f| f.name.as_str()).collect();
    assert_eq!(
        frames,
        ["torso", "r_thigh", "r_shank", "r_foot", "l_thigh", "l_shank", "l_foot", "head", "imu"]
    );
    let head = &model.frames[7];
    assert_eq!((head.body, head.placement.translation), (0, Vec3::new(0.01, 0.0, 0.35)));
    assert!(close(&head.placement.rotation, &rotation_from_rpy(0.0, 0.1, 0.2), 0.0));
    for (index, body) in model.bodies.iter().enumerate() {
        assert!(body.parent.is_none_or(|parent| parent < index));
        let joint = body.joint.map(|j| &model.joints[j]);
        assert!(joint.is_none_or(|j| j.body == index && (j.axis.norm() - 1.0).abs() < 1e-15));
    }
    assert_eq!(model.joints[3].axis, Vec3::new(-0.6, 0.8, 0.0));
    assert!(model.remarks.is_empty(), "{:?}", model.remarks);
}

/// Derived, by hand with the parallel-axis theorem: torso and head of biped7 as one body.
#[test]
fn welding_is_the_parallel_axis_theorem() {
    let base = plain(BIPED7).bodies[0].inertia;
    let r_torso = rotation_from_rpy(0.1, -0.2, 0.3);
    let i_torso = Mat3::new(0.25, 0.01, -0.005, 0.01, 0.22, 0.004, -0.005, 0.004, 0.09);
    let c_torso = Vec3::new(0.02, -0.01, 0.15);
    let r_head = rotation_from_rpy(0.0, 0.1, 0.2);
    let i_head = Mat3::from_diagonal(&Vec3::new(0.004, 0.004, 0.003));
    let c_head = Vec3::new(0.01, 0.0, 0.35) + r_head * Vec3::new(0.0, 0.0, 0.05);
    let center = (c_torso * 12.0 + c_head * 1.3) / 13.3;
    let about = r_torso * i_torso * r_torso.transpose()
        + parallel_axis(12.0, &(c_torso - center))
        + r_head * i_head * r_head.transpose()
        + parallel_axis(1.3, &(c_head - center));
    assert!((base.mass - 13.3).abs() < 1e-14);
    assert!((base.center - center).amax() < 1e-15);
    assert!(close(&base.about_center, &about, 1e-15));
    assert_eq!(base.about_center, base.about_center.transpose());
}

#[test]
fn arm_with_a_fixed_base_and_a_weightless_root() {
    let options = ModelOptions { fixed_base: true, ..ModelOptions::default() };
    let model = read(MR3LINK, &options);
    assert_eq!((model.velocities(), model.base, model.bodies[0].inertia.mass), (3, BaseKind::Fixed, 0.0));
    assert_eq!(model.bodies[3].placement.translation, Vec3::new(0.425, 0.0, 0.0));
    assert_ne!(model.id, read(BIPED7, &options).id);
}

/// Derived: with every joint locked the robot is one body, whose frames are the forward kinematics.
/// Chained by hand here, with the exponential map for the joints.
#[test]
fn locks_weld_at_the_given_position() {
    let angles = [("r_hip", 0.3), ("r_knee", 0.6), ("r_ankle", -0.2), ("l_hip", -0.4), ("l_knee", 0.9), ("l_ankle", 0.1)];
    let joints: Vec<JointSpec> = angles
        .iter()
        .map(|(name, at)| JointSpec { locked_at: Some(*at), ..JointSpec::named(name) })
        .collect();
    let model = read(BIPED7, &ModelOptions { joints, ..ModelOptions::default() });
    assert_eq!((model.bodies.len(), model.velocities()), (1, 6));
    let step = |xyz: [f64; 3], rpy: [f64; 3], axis: [f64; 3], q: f64| Pose {
        rotation: rotation_from_rpy(rpy[0], rpy[1], rpy[2]) * exp_so3(&(Vec3::from(axis) * q)),
        translation: Vec3::from(xyz),
    };
    let foot = step([0.0, -0.09, -0.02], [0.05, 0.0, -0.1], [0.6, 0.8, 0.0], 0.3)
        .compose(&step([0.0, 0.0, -0.36], [0.0; 3], [0.0, 1.0, 0.0], 0.6))
        .compose(&step([0.0, 0.0, -0.34], [0.0, 0.0, 0.02], [0.0, 1.0, 0.0], -0.2));
    let got = model.frames[model.frame("r_foot").expect("r_foot")].placement;
    assert!(close(&got.rotation, &foot.rotation, 1e-15));
    assert!((got.translation - foot.translation).amax() < 1e-15);
    // The centre of mass of biped7_check.json, same joint positions, taken back into base axes
    // (derived, an independent Jacobian-sum code).
    let base = Pose {
        rotation: underfoot::spatial::rotation_from_quaternion(&[
            0.10259783520851541, -0.20519567041703082, 0.3077935056255462, 0.9233805168766387,
        ]),
        translation: Vec3::new(0.3, -0.2, 0.75),
    };
    let world = Vec3::new(0.29534480302079663, -0.1538554357652881, 0.6708492012682812);
    let com = base.point(&model.bodies[0].inertia.center);
    assert!((com - world).amax() < 1e-14, "{com:?}");
    // Whole turns change nothing but rounding; locking one joint leaves the others.
    let lock = |at| ModelOptions {
        joints: vec![JointSpec { locked_at: Some(at), ..JointSpec::named("r_knee") }],
        ..ModelOptions::default()
    };
    let (once, twice) = (read(BIPED7, &lock(0.5)), read(BIPED7, &lock(0.5 + std::f64::consts::TAU)));
    assert_eq!(once.joints.len(), 5);
    let shank = |m: &Model| m.frames[m.frame("r_shank").expect("r_shank")].placement.rotation;
    assert!(close(&shank(&once), &shank(&twice), 1e-15));
    assert!(twice.remarks.iter().any(|r| r.contains("outside")), "{:?}", twice.remarks);
}

const MASS: &str = r#"<inertial><mass value="1"/><inertia ixx="1" ixy="0" ixz="0" iyy="1" iyz="0" izz="1"/></inertial>"#;

/// A four-bar linkage: base a, bars b and c, coupler d held by both.
fn four_bar(last: &str) -> String {
    let links: String = ["a", "b", "c", "d"].iter().map(|n| format!("<link name=\"{n}\">{MASS}</link>")).collect();
    let joint = |name: &str, parent: &str, child: &str, more: &str| {
        format!("<joint name=\"{name}\" type=\"continuous\"><parent link=\"{parent}\"/><child link=\"{child}\"/><axis xyz=\"0 1 0\"/>{more}</joint>")
    };
    format!(
        "<robot name=\"bars\">{links}{}{}{}{}</robot>",
        joint("ab", "a", "b", ""), joint("ac", "a", "c", ""), joint("bd", "b", "d", ""), joint("cd", "c", "d", last)
    )
}

fn locked(names: &[&str]) -> ModelOptions {
    let joints = names.iter().map(|n| JointSpec { locked_at: Some(0.0), ..JointSpec::named(n) }).collect();
    ModelOptions { joints, ..ModelOptions::default() }
}

#[test]
fn a_locked_joint_cuts_its_loop() {
    assert_eq!(read_urdf(&four_bar(""), &ModelOptions::default()).map_err(|e| e.code()), Err("kinematic-loop"));
    for (name, kept) in [("cd", ["ab", "ac", "bd"]), ("bd", ["ab", "ac", "cd"])] {
        let model = read(&four_bar(""), &locked(&[name]));
        let names: Vec<&str> = model.joints.iter().map(|j| j.name.as_str()).collect();
        assert_eq!(names, kept);
        assert_eq!(model.mass(), 4.0);
        assert!(model.remarks.iter().any(|r| r.contains(name) && r.contains("cut")), "{:?}", model.remarks);
    }
    // Both locked: one welds, one is cut.
    let model = read(&four_bar(""), &locked(&["bd", "cd"]));
    assert_eq!((model.joints.len(), model.bodies.len()), (2, 3));
    // A joint from the last link back to the first, locked: the ring opens there.
    let ring = format!(
        "<robot name=\"ring\"><link name=\"a\">{MASS}</link><link name=\"b\">{MASS}</link>
         <joint name=\"ab\" type=\"continuous\"><parent link=\"a\"/><child link=\"b\"/></joint>
         <joint name=\"ba\" type=\"continuous\"><parent link=\"b\"/><child link=\"a\"/></joint></robot>"
    );
    assert_eq!(read(&ring, &locked(&["ba"])).bodies[0].name, "a");
    assert_eq!(read(&ring, &locked(&["ab"])).bodies[0].name, "b");
    // Locking elsewhere in the loop does not help a link with two moving parents.
    assert!(read_urdf(&four_bar(""), &locked(&["ab"])).is_err());
    // A mimic joint that is locked is a weld.
    let mimic = four_bar("<mimic joint=\"ab\"/>").replace("<joint name=\"bd\" type=\"continuous\"><parent link=\"b\"/><child link=\"d\"/><axis xyz=\"0 1 0\"/></joint>", "");
    assert!(read_urdf(&mimic, &ModelOptions::default()).is_err());
    assert_eq!(read(&mimic, &locked(&["cd"])).joints.len(), 2);
}

#[test]
fn limits_and_motors() {
    let xml = format!(
        "<robot name=\"r\"><link name=\"a\">{MASS}</link><link name=\"b\">{MASS}</link>
         <joint name=\"j\" type=\"revolute\"><parent link=\"a\"/><child link=\"b\"/><axis xyz=\"0 3 4\"/>
         <limit lower=\"-1\" upper=\"2\" effort=\"0\" velocity=\"0\"/><dynamics damping=\"0.2\" friction=\"0.3\"/></joint></robot>"
    );
    let model = plain(&xml);
    let j = &model.joints[0];
    assert_eq!((j.kind, j.position, j.effort, j.speed), (JointKind::Revolute, Some((-1.0, 2.0)), None, None));
    assert_eq!((j.viscous_friction, j.coulomb_friction, j.actuated), (0.2, 0.3, true));
    assert!((j.axis - Vec3::new(0.0, 0.6, 0.8)).amax() < 1e-16);
    assert_eq!(model.remarks.len(), 2);
    assert!(model.remarks[0].contains("effort limit 0"), "{:?}", model.remarks);
    let line = TorqueSpeedLine { stall: 9.0, no_load_speed: 30.0 };
    let spec = JointSpec {
        rotor_inertia: Some(0.01),
        viscous_friction: Some(0.0),
        torque_speed: Some(line),
        actuated: Some(false),
        position: Some((-0.5, 0.5)),
        effort: Some(7.0),
        ..JointSpec::named("j")
    };
    let model = read(&xml, &ModelOptions { joints: vec![spec], ..ModelOptions::default() });
    let j = &model.joints[0];
    assert_eq!((j.rotor_inertia, j.viscous_friction, j.coulomb_friction), (0.01, 0.0, 0.3));
    assert_eq!((j.torque_speed, j.actuated, j.position, j.effort), (Some(line), false, Some((-0.5, 0.5)), Some(7.0)));
    assert_eq!(model.remarks.len(), 1);
}

#[test]
fn what_is_not_understood_is_listed() {
    let xml = format!(
        "<robot name=\"r\" xmlns:x=\"urn:x\"><link name=\"a\">{MASS}<visual/><visual/><collision><geometry/></collision></link>
         <transmission/><x:joint/><link name=\"b\">{MASS}</link><joint name=\"j\" type=\"continuous\"><parent link=\"a\"/><child link=\"b\"/>
         <dynamics dampning=\"3\"/></joint></robot>"
    );
    let model = plain(&xml);
    let expected = [
        "ignored: <collision> (1)",
        "ignored: <joint> (1)",
        "ignored: <transmission> (1)",
        "ignored: <visual> (2)",
        "ignored: attribute \"dampning\" of <dynamics> (1)",
    ];
    assert_eq!(model.remarks, expected);
}

#[test]
fn same_content_same_id() {
    let a = r#"<robot name="r"><link name="a"><inertial><mass value="1"/><inertia ixx="1" ixy="0" ixz="0" iyy="1" iyz="0" izz="1"/></inertial></link>
      <link name="b"><inertial><mass value="2"/><inertia ixx="1" ixy="0" ixz="0" iyy="1" iyz="0" izz="1"/></inertial></link>
      <joint name="j" type="revolute"><parent link="a"/><child link="b"/><origin xyz="0 0.1 0" rpy="0 0 0"/><limit lower="-1" upper="1" effort="10" velocity="5"/></joint></robot>"#;
    // White space, comments, attribute order, number spelling, defaults written out.
    let b = r#"<?xml version="1.0"?> <!-- hello -->
      <robot name='r'> <link name="a"><inertial><inertia izz="1e0" iyz="-0" iyy="1." ixz="0.0" ixy="0" ixx="10e-1"/><mass value="1.000"/></inertial></link>
      <joint type="revolute" name="j"><child link="b"/><parent link="a"/><limit velocity="5" effort="1e1" upper="+1" lower="-1.0"/>
      <axis xyz="1  0 0"/><origin xyz=" 0 .1 -0 "/></joint>
      <link name="b"><inertial><mass value="2"/><inertia ixx="1" ixy="0" ixz="0" iyy="1" iyz="0" izz="1"/></inertial></link></robot>"#;
    assert_eq!(plain(a), plain(b));
    let id = plain(a).id;
    assert!(id.len() == 34 && id.starts_with("m-"), "{id}");
    // An option that says what the URDF says is the same content.
    let same = JointSpec { effort: Some(10.0), actuated: Some(true), ..JointSpec::named("j") };
    assert_eq!(read(a, &ModelOptions { joints: vec![same], ..ModelOptions::default() }).id, id);
    let mut ids = vec![id];
    for (from, to) in [
        ("value=\"2\"", "value=\"2.0000000000000004\""),
        ("name=\"r\"", "name=\"s\""),
        ("0.1", "0.2"),
        ("effort=\"10\"", "effort=\"11\""),
        ("revolute", "prismatic"),
        ("</robot>", "<gazebo/></robot>"),
    ] {
        ids.push(plain(&a.replacen(from, to, 1)).id);
    }
    let sole = |shape| SoleSpec { name: "s".into(), link: "b".into(), placement: Pose::identity(), shape };
    let square = Polygon::new(vec![[0.0, 0.0], [0.1, 0.0], [0.1, 0.1]]).expect("a triangle");
    let specs = [
        JointSpec { locked_at: Some(0.0), ..JointSpec::named("j") },
        JointSpec { rotor_inertia: Some(1.0), ..JointSpec::named("j") },
        JointSpec { actuated: Some(false), ..JointSpec::named("j") },
    ];
    ids.extend(specs.map(|spec| read(a, &ModelOptions { joints: vec![spec], ..ModelOptions::default() }).id));
    ids.push(read(a, &ModelOptions { fixed_base: true, ..ModelOptions::default() }).id);
    for shape in [SoleShape::Point, SoleShape::Polygon(square)] {
        ids.push(read(a, &ModelOptions { soles: vec![sole(shape)], ..ModelOptions::default() }).id);
    }
    let count = ids.len();
    ids.sort();
    ids.dedup();
    assert_eq!(ids.len(), count);
}

#[test]
fn loads_are_carried() {
    let model = plain(BIPED7);
    assert_eq!(with_loads(&model, &[]), Ok(model.clone()));
    let head = model.frame("head").expect("head");
    let load = Load { frame: head, mass: 2.0, center: Vec3::new(0.0, 0.0, 0.1), about_center: Mat3::zeros() };
    let loaded = with_loads(&model, &[load]).expect("a point mass");
    let place = model.frames[head].placement.point(&load.center);
    let before = model.bodies[0].inertia;
    let after = loaded.bodies[0].inertia;
    let center = (before.center * before.mass + place * 2.0) / (before.mass + 2.0);
    assert!((loaded.mass() - model.mass() - 2.0).abs() < 1e-14);
    assert!((after.center - center).amax() < 1e-15);
    // Derived: two bodies about their common centre add their reduced mass times distance squared.
    let reduced = before.mass * 2.0 / (before.mass + 2.0);
    let about = before.about_center + parallel_axis(reduced, &(place - before.center));
    assert!(close(&after.about_center, &about, 1e-15));
    assert_ne!(loaded.id, model.id);
    assert_eq!(loaded.id, with_loads(&model, &[load]).expect("again").id);
    for bad in [
        Load { frame: 99, ..load },
        Load { mass: -1.0, ..load },
        Load { mass: f64::NAN, ..load },
        Load { center: Vec3::new(f64::NAN, 0.0, 0.0), ..load },
        Load { about_center: Mat3::from_diagonal(&Vec3::new(1.0, 1.0, 3.0)), ..load },
        Load { about_center: Mat3::from_diagonal(&Vec3::new(1.0, f64::NAN, 1.0)), ..load },
    ] {
        assert!(with_loads(&model, &[bad]).is_err(), "{bad:?}");
    }
}

/// Derived: welding loses no mass, and the total is that of the links as written.
#[test]
fn random_trees_keep_their_mass() {
    for seed in 0..60 {
        let joints = 1 + (seed as usize * 7) % 40;
        let xml = random_tree::random_urdf(seed, joints);
        let model = plain(&xml);
        let written: f64 = xml
            .split("<mass value=\"")
            .skip(1)
            .map(|rest| rest.split('"').next().unwrap_or("").parse::<f64>().expect("a number"))
            .sum();
        assert!((model.mass() - written).abs() < 1e-12 * written);
        let moving = joints - xml.matches("type=\"fixed\"").count();
        assert_eq!((model.joints.len(), model.bodies.len(), model.frames.len()), (moving, moving + 1, joints + 1));
        assert!(model.bodies.iter().enumerate().all(|(i, b)| b.parent.is_none_or(|p| p < i)));
    }
}
