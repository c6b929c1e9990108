//! The rule `held`: closed forms, coupling, limits, certificates.

#[path = "common/biped.rs"]
mod biped;

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use nalgebra::{DMatrix, DVector};
use underfoot::certify::{self, Claim};
use underfoot::conic::LevelProof;
use underfoot::contact::{Ground, Law, Material, Rest, TickRule, law};
use underfoot::dynamics::VelocityAxes;
use underfoot::model::{Model, ModelOptions, SoleSpec, State, read_urdf};
use underfoot::problem::assemble;
use underfoot::problem::question::*;
use underfoot::problem::scene::Scene;
use underfoot::reference::{self, answer::*};
use underfoot::solve;
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Mat3, Pose, Twist, Vec3, Vec6, Wrench, skew};

fn solved(question: &Question, what: &str) -> Answer {
    let answer = reference::solve(question, &Arc::new(AtomicBool::new(false))).unwrap();
    assert_eq!(answer.status, Status::Solved, "{what}: {:#?}\n{:?}", answer.certificate, answer.blocking);
    answer
}

fn held(stiffness: f64) -> Question {
    let mut question = biped::standing(stiffness);
    question.tick.rule = TickRule::Held;
    question
}

/// One box of 30 kg whose soles are rectangles at the given places of its underside (the box frame is at their height).
fn block(mass: f64, places: &[Vec3], material: Material, gravity: f64) -> Question {
    let urdf = format!(
        r#"<robot name="block"><link name="block"><inertial><origin xyz="0 0 0"/><mass value="{mass}"/>
        <inertia ixx="0.3" iyy="0.4" izz="0.5" ixy="0" ixz="0" iyz="0"/></inertial></link></robot>"#
    );
    let corners = vec![[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]];
    let soles = places
        .iter()
        .enumerate()
        .map(|(i, place)| SoleSpec {
            name: format!("sole{i}"),
            link: "block".into(),
            placement: Pose { translation: *place, ..Pose::identity() },
            shape: SoleShape::Polygon(Polygon::new(corners.clone()).unwrap()),
        })
        .collect();
    let model: Arc<Model> = Arc::new(read_urdf(&urdf, &ModelOptions { soles, ..ModelOptions::default() }).unwrap());
    let contacts = places
        .iter()
        .enumerate()
        .map(|(sole, place)| Contact {
            sole,
            ground: Ground {
                law: Law::Bonded(material),
                normal: Vec3::z(),
                rest: Rest::Pose(Pose { translation: *place, ..Pose::identity() }),
                rest_twist: Twist::zero(),
                measured: None,
            },
            friction: None,
            normal_force: None,
            wrench_rate: None,
        })
        .collect();
    let state = State { base_pose: Pose::identity(), base_twist: Twist::zero(), position: vec![], velocity: vec![] };
    Question {
        model,
        state,
        velocity_axes: VelocityAxes::default(),
        gravity: Vec3::new(0.0, 0.0, -gravity),
        tick: Tick { length: 0.05, rule: TickRule::Held, chosen: true },
        contacts,
        limits: Vec::new(),
        tasks: Vec::new(),
        external: Vec::new(),
        latency: None,
        include: Include::default(),
    }
}

fn isotropic(k: f64, b: f64) -> Material {
    Material { normal_stiffness: k, tangential_stiffness: k, normal_damping: b, tangential_damping: b }
}

#[test]
fn a_dropped_block_follows_the_damped_oscillator() {
    // Derived (ODE to 1e-15): 30 kg dropped at zero height onto .22 x .10 m, k = 3e6, b = 1.5e4, g = 9.81; at t = .05
    // sink .00649776260707095, v = .116145196668943, F = 467.180246967434.
    let question = block(30.0, &[Vec3::zeros()], isotropic(3e6, 1.5e4), 9.81);
    let response = reference::respond(&question, &[]).unwrap();
    assert!((response.acceleration[2] * 0.05 + 0.116145196668943).abs() < 1e-12, "{}", response.acceleration[2] * 0.05);
    assert!((response.wrenches[0].force.z - 467.180246967434).abs() < 1e-9, "{:?}", response.wrenches[0]);
    // Newton over the tick: the average force is what the change of momentum and the weight need.
    let mean = 30.0 * (9.81 + response.acceleration[2]);
    assert!((response.over_tick[0].force.z - mean).abs() < 1e-10);
}

#[test]
fn half_a_period_without_damping_has_an_answer() {
    // Derived: from rest at zero load, F(t) = m g (1 - cos(omega t)); at omega T = pi the average acceleration is zero whatever
    // pushes, F(T) = 2 m g and the average force is m g.
    let t = 0.05;
    let k = 30.0 * (std::f64::consts::PI / t).powi(2) / 0.022;
    let question = block(30.0, &[Vec3::zeros()], isotropic(k, 0.0), 9.81);
    let response = reference::respond(&question, &[]).unwrap();
    assert!(response.acceleration[2].abs() < 1e-11);
    assert!((response.wrenches[0].force.z - 2.0 * 30.0 * 9.81).abs() < 1e-9);
    assert!((response.over_tick[0].force.z - 30.0 * 9.81).abs() < 1e-9);
    solved(&question, "half a period");
}

#[test]
fn two_soles_on_one_block_share_one_motion() {
    // Derived: the block's six coordinates, both beds acting on them, by a dense exponential of the block's own system.
    let places = [Vec3::new(0.2, 0.15, 0.0), Vec3::new(-0.25, -0.1, 0.0)];
    let material = Material { normal_stiffness: 2e6, tangential_stiffness: 1e6, normal_damping: 4e3, tangential_damping: 6e3 };
    let mut question = block(30.0, &places, material, 9.81);
    question.tick.length = 0.01;
    question.state.base_pose.translation.z = -0.003;
    question.external = vec![ExternalWrench {
        frame: question.model.frame("block").unwrap(),
        point: Vec3::zeros(),
        wrench: Wrench { force: Vec3::new(30.0, -20.0, 5.0), moment: Vec3::new(4.0, 3.0, -2.0) },
    }];
    let response = reference::respond(&question, &[]).unwrap();

    // Arms from the block's origin to the soles (the block is not turned and does not move yet).
    let carry = |arm: &Vec3| {
        let mut x = DMatrix::<f64>::identity(6, 6);
        x.view_mut((0, 3), (3, 3)).copy_from(&-skew(arm));
        x
    };
    let mut inertia = DMatrix::<f64>::zeros(6, 6);
    for (i, m) in [30.0, 30.0, 30.0, 0.3, 0.4, 0.5].into_iter().enumerate() {
        inertia[(i, i)] = m;
    }
    let inverse = inertia.try_inverse().unwrap();
    let (mut stiffness, mut damping) = (DMatrix::<f64>::zeros(6, 6), DMatrix::<f64>::zeros(6, 6));
    let mut force = DVector::from_column_slice(&[30.0, -20.0, 5.0 - 30.0 * 9.81, 4.0, 3.0, -2.0]);
    let mut beds = Vec::new();
    for (contact, place) in question.contacts.iter().zip(&places) {
        let Rest::Pose(rest) = contact.ground.rest else { unreachable!() };
        let motion = underfoot::contact::SoleMotion {
            pose: Pose { translation: place + question.state.base_pose.translation, rotation: Mat3::identity() },
            twist: Twist::zero(),
        };
        let shape = &question.model.soles[contact.sole].shape;
        let now = law::bonded_wrench(shape, &material, &Vec3::z(), &rest, &Twist::zero(), &motion);
        let (s, d) = law::stiffness_and_damping(shape, &material, &Vec3::z(), &rest, &Twist::zero(), &motion);
        let j = carry(place);
        let (s, d) = (DMatrix::from_fn(6, 6, |a, b| s[(a, b)]), DMatrix::from_fn(6, 6, |a, b| d[(a, b)]));
        stiffness += j.transpose() * &s * &j;
        damping += j.transpose() * &d * &j;
        force += j.transpose() * DVector::from_column_slice(now.to_vec6().as_slice());
        beds.push((j, s, d, now));
    }
    let t = question.tick.length;
    let mut system = DMatrix::<f64>::zeros(13, 13);
    system.view_mut((0, 6), (6, 6)).copy_from(&DMatrix::identity(6, 6));
    system.view_mut((6, 0), (6, 6)).copy_from(&-(&inverse * &stiffness));
    system.view_mut((6, 6), (6, 6)).copy_from(&-(&inverse * &damping));
    system.view_mut((6, 12), (6, 1)).copy_from(&(&inverse * &force));
    let end = (system * t).exp();
    let (x, v) = (end.view((0, 12), (6, 1)).into_owned(), end.view((6, 12), (6, 1)).into_owned());
    for i in 0..6 {
        assert!((response.acceleration[i] * t - v[i]).abs() < 1e-11 * v.amax(), "{i}: {} {}", response.acceleration[i] * t, v[i]);
    }
    for (i, (j, s, d, now)) in beds.iter().enumerate() {
        let wanted = Vec6::from_column_slice((-(s * (j * &x)) - d * (j * &v)).as_slice()) + now.to_vec6();
        let got = response.wrenches[i].to_vec6();
        assert!((got - wanted).amax() < 1e-10 * wanted.amax(), "{got} {wanted}");
    }
    solved(&question, "two soles");
}

#[test]
fn answers_under_held_are_certified() {
    for stiffness in [3e5, 2e6, 1e7, 1e9] {
        solved(&held(stiffness), &format!("{stiffness:e}"));
        let mut question = held(stiffness);
        question.state.base_twist = Twist { linear: Vec3::new(0.01, -0.01, 0.005), angular: Vec3::new(0.02, 0.03, -0.01) };
        question.contacts[0].ground.rest_twist = Twist { linear: Vec3::new(0.01, 0.0, 0.002), angular: Vec3::new(0.0, 0.01, 0.02) };
        question.external = vec![ExternalWrench {
            frame: question.model.frame("pelvis").unwrap(),
            point: Vec3::new(0.1, 0.0, 0.1),
            wrench: Wrench { force: Vec3::new(5.0, -8.0, 3.0), moment: Vec3::new(1.0, 0.5, -0.5) },
        }];
        for contact in &mut question.contacts {
            contact.friction = None;
            contact.normal_force = None;
        }
        solved(&question, &format!("{stiffness:e}, moving"));
    }
    let mut question = held(2e6);
    let Rest::Carries(load) = question.contacts[0].ground.rest else { panic!("carries") };
    question.contacts[0].ground.measured = Some(Wrench { force: load.force + Vec3::new(3.0, 1.0, -9.0), ..load });
    solved(&question, "measured");
    for stop in [false, true] {
        let mut question = held(2e6);
        question.contacts[1].ground.law = Law::Rigid { stop };
        question.contacts[1].ground.rest = Rest::Measured;
        question.contacts[1].ground.measured = Some(load);
        solved(&question, "one sole rigid");
        question.contacts[0] = Contact { sole: 0, ..question.contacts[1].clone() };
        for task in &mut question.tasks {
            if let TaskKind::Wrench { approach, .. } = &mut task.kind {
                *approach = None;
            }
        }
        solved(&question, "both rigid");
    }
    let frictionless = Material { tangential_stiffness: 0.0, tangential_damping: 0.0, ..biped::material(2e6) };
    let nothing = isotropic(0.0, 0.0);
    for material in [frictionless, nothing] {
        let mut question = held(2e6);
        for contact in &mut question.contacts {
            let Rest::Carries(load) = contact.ground.rest else { panic!("carries") };
            contact.ground.law = Law::Bonded(material);
            contact.ground.rest = Rest::Measured;
            contact.ground.measured = Some(load);
        }
        question.tasks.truncate(1);
        question.tasks[0].importance = Importance::Priority(1);
        solved(&question, "ground that resists little or nothing");
    }
}

#[test]
fn ever_stiffer_ground_answers_torques_as_rigid_ground_does() {
    // Derived: a sole at rest gives way by a speed of order w/b and an acceleration of order w/(b T), so the gap closes like 1/k.
    let mut rigid = held(2e6);
    for contact in &mut rigid.contacts {
        contact.ground.law = Law::Rigid { stop: false };
        contact.ground.rest = Rest::Measured;
    }
    let torques: Vec<f64> = rigid.model.joints.iter().enumerate().map(|(i, _)| 3.0 * (i as f64).sin()).collect();
    let wanted = reference::respond(&rigid, &torques).unwrap();
    let gaps = [1e8, 1e10, 1e12].map(|k| {
        let got = reference::respond(&held(k), &torques).unwrap();
        let accelerations = (&got.acceleration - &wanted.acceleration).amax() / wanted.acceleration.amax();
        let forces = got.over_tick.iter().zip(&wanted.over_tick).map(|(a, b)| (a.force - b.force).norm() / b.force.norm());
        [accelerations, forces.fold(0.0, f64::max)]
    });
    for part in 0..2 {
        let closing = gaps[0][part] / gaps[1][part];
        assert!((50.0..200.0).contains(&closing) && gaps[2][part] < 0.02 * gaps[1][part], "{gaps:?}");
    }
    assert!(gaps[2][0] < 1e-5 && gaps[2][1] < 1e-5, "{gaps:?}");
}

/// The certificate of the answer to `question`, held against `other`.
fn certificate(question: &Question, other: &Question) -> certify::Certificate {
    let scene = Scene::new(question).unwrap();
    let assembly = assemble(question, &scene, &vec![0.0; question.contacts.len()]);
    let solution = solve::solve(&assembly.hierarchy, &solve::Options::default(), None).unwrap();
    let layout = &assembly.layout;
    let x = layout.physical(&solution.x);
    let torques: Vec<f64> = layout.torque.iter().map(|c| c.map_or(0.0, |c| x[c])).collect();
    let wrenches: Vec<Option<Wrench>> =
        layout.contacts.iter().map(|c| Some(Wrench::from_vec6(&Vec6::from_fn(|k, _| x[c.wrench + k])))).collect();
    let vertex_forces: Vec<Vec<Vec3>> = layout
        .contacts
        .iter()
        .map(|c| (0..c.vertex_count).map(|i| Vec3::from_fn(|k, _| x[c.vertices.unwrap() + 3 * i + k])).collect())
        .collect();
    let proofs: Vec<LevelProof> = solution
        .levels
        .iter()
        .map(|level| LevelProof {
            priority: level.priority,
            system: level.system.rows.clone(),
            multipliers: level.multipliers.clone(),
            soft_slack: level.soft_slack.clone(),
            soft_multipliers: level.soft_multipliers.clone(),
        })
        .collect();
    let claim =
        Claim { acceleration: &x[..layout.velocities], torques: &torques, wrenches: &wrenches, vertex_forces: &vertex_forces };
    certify::certify(other, &claim, &assembly.hierarchy, &solution.x, &proofs)
}

#[test]
fn the_certificate_refuses_other_physics() {
    let question = held(2e6);
    let right = certificate(&question, &question);
    assert!(right.holds, "{right:#?}");
    let failing = |other: &Question| -> Vec<&'static str> {
        certificate(&question, other).checks.iter().filter(|c| !c.passes()).map(|c| c.name).collect()
    };
    let mut stiffer = question.clone();
    stiffer.contacts[0].ground.law = Law::Bonded(biped::material(2e6 * 1.0001));
    let mut rougher = question.clone();
    let mut model = (*question.model).clone();
    model.joints[4].viscous_friction *= 1.01;
    rougher.model = Arc::new(model);
    let mut longer = question.clone();
    longer.tick.length *= 1.0001;
    for (what, other) in [("stiffer", stiffer), ("rougher joint", rougher), ("longer tick", longer)] {
        let names = failing(&other);
        assert!(names.contains(&"problem-matches") && names.contains(&"dynamics"), "{what}: {names:?}");
    }
    let mut rule = question.clone();
    rule.tick.rule = TickRule::Trapezoid;
    assert!(failing(&rule).contains(&"problem-matches"));
}
