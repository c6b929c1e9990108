//! The problem's own mass matrix, bias, Jacobians and closed-form ground law against the certificate's balance and
//! quadrature, on random robots in random motion on every kind of ground. Derived: two codes that share
//! nothing must agree; that they can disagree is tested as well.
#![allow(missing_docs)]

#[path = "common/hand_built.rs"]
mod hand_built;

use std::sync::Arc;

use hand_built::Rng;
use underfoot::certify::{Certificate, Claim, certify};
use underfoot::contact::{Ground, Law, Material, Rest, TickRule};
use underfoot::dynamics::axes::VelocityAxes;
use underfoot::model::{BaseKind, Frame, Sole};
use underfoot::problem::assemble;
use underfoot::problem::question::{
    Contact, ExternalWrench, Friction, FrictionSet, Include, Question, Tick, Treatment,
};
use underfoot::problem::scene::Scene;
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Pose, Twist, Vec3, Wrench, exp_so3};

const ROUNDS: u64 = 300;

fn wrench(rng: &mut Rng, force: f64, moment: f64) -> Wrench {
    Wrench { force: rng.vector(force), moment: rng.vector(moment) }
}

fn shape(rng: &mut Rng) -> SoleShape {
    if rng.below(4) == 0 {
        return SoleShape::Point;
    }
    let hexagon = [[0.14, -0.03], [0.14, 0.02], [0.10, 0.05], [-0.08, 0.04], [-0.08, -0.04], [0.08, -0.05]];
    let (dx, dy) = (rng.uniform(-0.05, 0.05), rng.uniform(-0.05, 0.05));
    SoleShape::Polygon(Polygon::new(hexagon.iter().map(|v| [v[0] + dx, v[1] + dy]).collect()).expect("convex"))
}

/// A pose a small way from another.
fn near(rng: &mut Rng, pose: &Pose) -> Pose {
    Pose {
        rotation: exp_so3(&rng.vector(0.05)) * pose.rotation,
        translation: pose.translation + rng.vector(0.01),
    }
}

fn ground(rng: &mut Rng, point: bool, pose: &Pose) -> Ground {
    let area = if point { 0.02 } else { 1.0 };
    let mut coefficient = |size: f64| size * rng.uniform(0.5, 2.0) * area;
    let material = Material {
        normal_stiffness: coefficient(2e6),
        tangential_stiffness: coefficient(1e6),
        normal_damping: coefficient(2e4),
        tangential_damping: coefficient(1e4),
    };
    let soft = rng.below(4) > 0;
    let law = if soft { Law::Bonded(material) } else { Law::Rigid { stop: rng.below(2) == 0 } };
    let mut load = wrench(rng, 100.0, if point { 0.0 } else { 3.0 });
    load.force.z += 200.0;
    let rest = match rng.below(4) {
        0 => Rest::Pose(near(rng, pose)),
        1 => Rest::Touchdown { pose: near(rng, pose), plane_point: pose.translation + rng.vector(0.01) },
        2 => Rest::Carries(load),
        _ => Rest::Measured,
    };
    let measured = (rest == Rest::Measured || rng.below(3) == 0).then_some(load);
    let up: Vec3 = pose.rotation.column(2).into();
    let rest_twist = match rng.below(2) {
        0 => Twist::zero(),
        _ => Twist { linear: rng.vector(0.3), angular: rng.vector(0.5) },
    };
    Ground { law, normal: (up + rng.vector(0.2)).normalize(), rest, rest_twist, measured }
}

/// A robot of up to eight joints with two soles on soft, rigid, sloping and moving ground.
fn question(seed: u64) -> Question {
    let rng = &mut Rng(seed);
    let kind = if rng.below(4) == 0 { BaseKind::Fixed } else { BaseKind::Floating };
    let joints = 2 + rng.below(7);
    let mut model = hand_built::random_model(seed, joints, kind);
    model.joints[0].actuated = rng.below(2) == 0;
    for (i, body) in [joints, joints / 2].into_iter().enumerate() {
        let placement = rng.pose();
        let shape = shape(rng);
        model.soles.push(Sole { name: format!("sole:{i}"), link: format!("l{body}"), body, placement, shape });
    }
    model.frames.push(Frame { name: "loaded".into(), body: joints, placement: rng.pose() });
    let mut state = hand_built::random_state(rng, &model);
    if kind == BaseKind::Fixed {
        state.base_twist = Twist::zero();
    }
    let mut ws = underfoot::dynamics::Workspace::new(&model);
    ws.update(&model, &state, &Vec3::zeros());
    let contacts = (0..2)
        .map(|sole| {
            let s = &model.soles[sole];
            let pose = underfoot::dynamics::frame_pose(&model, &ws, s.body, &s.placement);
            let set = if rng.below(2) == 0 { FrictionSet::Vertex } else { FrictionSet::Wrench };
            let friction = Friction { set, coefficient: 0.6, torsion: None, facets: None, treatment: Treatment::Hard };
            let point = s.shape == SoleShape::Point;
            Contact {
                sole,
                ground: ground(rng, point, &pose),
                friction: (!point).then_some(friction),
                normal_force: None,
                wrench_rate: None,
            }
        })
        .collect();
    let rule = [TickRule::BackwardEuler, TickRule::Trapezoid, TickRule::Explicit][rng.below(3)];
    Question {
        model: Arc::new(model),
        state,
        velocity_axes: VelocityAxes::default(),
        gravity: rng.vector(10.0),
        tick: Tick { length: rng.uniform(0.001, 0.0049), rule, chosen: true },
        contacts,
        limits: vec![],
        tasks: vec![],
        external: vec![ExternalWrench { frame: 0, point: rng.vector(0.1), wrench: wrench(rng, 20.0, 5.0) }],
        latency: None,
        include: Include::default(),
    }
}

/// The certificate of a point that answers nothing, at which problem and physics can be compared all the same. `asked`
/// made the problem, `judged` is what the certificate is told.
fn compared(asked: &Question, judged: &Question, seed: u64) -> Certificate {
    let scene = Scene::new(asked).unwrap_or_else(|e| panic!("seed {seed}: {e}"));
    let hierarchy = assemble(asked, &scene, &[0.0; 2]).hierarchy;
    let x = Rng(seed ^ 0x55).list(hierarchy.columns.len(), 1.0);
    let joints = asked.model.joints.len();
    let (zeros, torques) = (vec![0.0; asked.model.velocities()], vec![0.0; joints]);
    let claim = Claim {
        acceleration: &zeros,
        torques: &torques,
        wrenches: &[None, None],
        vertex_forces: &[vec![], vec![]],
    };
    certify(judged, &claim, &hierarchy, &x, &[])
}

fn mismatch(certificate: &Certificate) -> (f64, String) {
    let check = certificate.checks.iter().find(|c| c.name == "problem-matches").expect("always there");
    (check.value, check.worst.clone())
}

#[test]
fn problem_and_physics_agree_on_random_robots() {
    let mut largest: f64 = 0.0;
    for seed in 0..ROUNDS {
        let question = question(seed);
        let certificate = compared(&question, &question, seed);
        let (value, place) = mismatch(&certificate);
        let grounds: Vec<_> = question.contacts.iter().map(|c| c.ground).collect();
        assert!(value <= 1e-9, "seed {seed}: {value:e} at {place}\n{grounds:#?} {:?}", question.tick);
        assert!(!certificate.holds);
        largest = largest.max(value);
    }
    println!("largest mismatch {largest:e}");
    assert!(largest > 0.0, "two codes that round differently");
}

#[test]
fn friction_under_a_point_foot_can_be_assembled() {
    let treatment = Treatment::Hard;
    for seed in 0..ROUNDS {
        let mut question = question(seed);
        for contact in &mut question.contacts {
            let set = FrictionSet::Wrench;
            contact.friction = Some(Friction { set, coefficient: 0.6, torsion: None, facets: None, treatment });
        }
        let (value, place) = mismatch(&compared(&question, &question, seed));
        assert!(value <= 1e-9, "seed {seed}: {value:e} at {place}");
    }
}

#[test]
fn a_question_changed_after_assembly_is_noticed() {
    type Edit = fn(&mut Question);
    let edits: [(&str, Edit); 7] = [
        ("gravity", |q| q.gravity *= 1.0 + 1e-6),
        ("tick", |q| q.tick.length *= 1.0 + 1e-5),
        ("mass", |q| Arc::make_mut(&mut q.model).bodies[1].inertia.mass *= 1.0 + 1e-4),
        ("inertia", |q| Arc::make_mut(&mut q.model).bodies[1].inertia.about_center *= 1.0 + 1e-4),
        ("axis", |q| {
            let joint = &mut Arc::make_mut(&mut q.model).joints[1];
            joint.axis = exp_so3(&Vec3::new(1e-6, 1e-6, -1e-6)) * joint.axis;
        }),
        ("speed", |q| q.state.velocity[0] += 1e-5),
        ("load", |q| q.external[0].point.x += 1e-5),
    ];
    for (what, edit) in edits {
        for seed in 0..10 {
            let asked = question(seed);
            let mut judged = asked.clone();
            edit(&mut judged);
            let (value, _) = mismatch(&compared(&asked, &judged, seed));
            // A tick of another length is seen only where there is soft ground, or rigid ground to stop on.
            let unseen = |c: &Contact| matches!(c.ground.law, Law::Rigid { stop: false });
            if what == "tick" && asked.contacts.iter().all(unseen) {
                continue;
            }
            assert!(value.is_nan() || value > 1e-9, "{what} seed {seed}: {value:e}");
        }
    }
}
