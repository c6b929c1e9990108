//! The demonstration biped standing in a crouch on soft ground, as a question. Invented data.
#![allow(dead_code)]

use std::sync::Arc;

use underfoot::contact::{Ground, Law, Material, Rest, TickRule};
use underfoot::dynamics::{self, VelocityAxes, Workspace};
use underfoot::model::{Model, ModelOptions, SoleSpec, State, read_urdf};
use underfoot::problem::question::*;
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Mat3, Pose, Twist, Vec3, Wrench};

pub const GRAVITY: f64 = 9.80665;

pub fn model() -> Arc<Model> {
    let urdf = include_str!("../../src/cli/demo/biped.urdf");
    let rectangle = vec![[-0.1, -0.05], [0.1, -0.05], [0.1, 0.05], [-0.1, 0.05]];
    let sole = |side: &str| SoleSpec {
        name: format!("{side}_sole"),
        link: format!("{side}_sole"),
        placement: Pose::identity(),
        shape: SoleShape::Polygon(Polygon::new(rectangle.clone()).unwrap()),
    };
    let options = ModelOptions { soles: vec![sole("left"), sole("right")], ..ModelOptions::default() };
    Arc::new(read_urdf(urdf, &options).unwrap())
}

/// A crouch: knees bent by `knee`, feet flat, base placed so that the left sole is at the origin's height.
pub fn crouch(model: &Model, knee: f64) -> State {
    let mut state = State {
        base_pose: Pose::identity(),
        base_twist: Twist::zero(),
        position: vec![0.0; model.joints.len()],
        velocity: vec![0.0; model.joints.len()],
    };
    for side in ["left", "right"] {
        for (name, value) in [("hip_pitch", -knee / 2.0), ("knee", knee), ("ankle_pitch", -knee / 2.0)] {
            let joint = model.joint(&format!("{side}_{name}")).unwrap();
            state.position[joint] = value;
        }
    }
    let mut ws = Workspace::new(model);
    ws.update(model, &state, &Vec3::zeros());
    let sole = &model.soles[0];
    let pose = dynamics::frame_pose(model, &ws, sole.body, &sole.placement);
    state.base_pose.translation = Vec3::new(0.0, 0.0, -pose.translation.z);
    state
}

pub fn material(stiffness: f64) -> Material {
    Material {
        normal_stiffness: stiffness,
        tangential_stiffness: stiffness,
        normal_damping: 0.01 * stiffness,
        tangential_damping: 0.01 * stiffness,
    }
}

/// Each sole carries half the weight, its centre of pressure under the centre of mass.
pub fn shared_weight(model: &Model, state: &State) -> Vec<Wrench> {
    let mut ws = Workspace::new(model);
    ws.update(model, state, &Vec3::zeros());
    let middle: Vec3 = model
        .soles
        .iter()
        .map(|s| dynamics::frame_pose(model, &ws, s.body, &s.placement).translation)
        .sum::<Vec3>()
        / model.soles.len() as f64;
    let share = ws.mass * GRAVITY / model.soles.len() as f64;
    let arm = ws.center_of_mass - middle;
    let force = Vec3::new(0.0, 0.0, share);
    model.soles.iter().map(|_| Wrench { force, moment: Vec3::new(arm.x, arm.y, 0.0).cross(&force) }).collect()
}

pub fn standing(stiffness: f64) -> Question {
    let model = model();
    let state = crouch(&model, 0.7);
    let loads = shared_weight(&model, &state);
    let contacts = loads
        .iter()
        .enumerate()
        .map(|(sole, wrench)| Contact {
            sole,
            ground: Ground {
                law: Law::Bonded(material(stiffness)),
                normal: Vec3::z(),
                rest: Rest::Carries(*wrench),
                rest_twist: Twist::zero(),
                measured: None,
            },
            friction: Some(Friction {
                set: FrictionSet::Vertex,
                coefficient: 0.6,
                torsion: None,
                facets: None,
                treatment: Treatment::Hard,
            }),
            normal_force: Some(NormalForce { least: Some(20.0), largest: None, treatment: Treatment::Hard }),
            wrench_rate: None,
        })
        .collect();
    let torque = model.joints.iter().enumerate().filter_map(|(i, j)| Some((i, j.effort?))).collect();
    let mut ws = Workspace::new(&model);
    ws.update(&model, &state, &Vec3::zeros());
    let base = model.frame("pelvis").unwrap();
    let tasks = tasks(&model, &state, ws.center_of_mass, base, &loads);
    Question {
        model: model.clone(),
        velocity_axes: VelocityAxes::default(),
        gravity: Vec3::new(0.0, 0.0, -GRAVITY),
        tick: Tick { length: 0.005, rule: TickRule::BackwardEuler, chosen: true },
        contacts,
        limits: vec![Limit { name: "torque".into(), kind: LimitKind::Torque(torque), treatment: Treatment::Hard }],
        tasks,
        external: Vec::new(),
        latency: None,
        include: Include::default(),
        state,
    }
}

fn tasks(model: &Model, state: &State, center: Vec3, base: usize, loads: &[Wrench]) -> Vec<Task> {
    let zero = [Vec3::zeros(); 2];
    let momentum = MomentumAim {
        second_rate: zero,
        rate: zero,
        reference: zero,
        center: center + Vec3::new(0.01, 0.0, -0.005),
        rate_gain: [24.0, 30.0],
        momentum_gain: [192.0, 200.0],
        position_gain: 512.0,
    };
    let task = |name: &str, priority: u32, kind| Task {
        name: name.into(),
        importance: Importance::Priority(priority),
        weight: 1.0,
        scale: 1.0,
        scale_angular: 1.0,
        axes: [true; 6],
        kind,
    };
    let gains = Gains { position: 100.0, velocity: 20.0 };
    let mut tasks = vec![task("momentum", 1, TaskKind::MomentumSecondRate(momentum))];
    for (contact, value) in loads.iter().enumerate() {
        let kind = TaskKind::Wrench { contact, value: *value, approach: Some(30.0) };
        tasks.push(task(&format!("load {contact}"), 2, kind));
    }
    let upright = OrientationAim {
        acceleration: Vec3::zeros(),
        velocity: Vec3::zeros(),
        orientation: Mat3::identity(),
        gains,
    };
    tasks.push(task("base upright", 3, TaskKind::FrameOrientation { frame: base, aim: upright }));
    let joints = (0..model.joints.len()).map(|j| (j, state.position[j], 0.0, 0.0)).collect();
    tasks.push(task("posture", 4, TaskKind::Posture { joints, gains }));
    tasks
}
