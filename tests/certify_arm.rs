//! Balance and joint limits on a two-link arm with a fixed base, against a textbook's numbers.
#![allow(missing_docs)]

mod certify_support;

use std::sync::Arc;

use certify_support::{column, failing, push, residuals, two_link_arm};
use underfoot::certify::{Certificate, Claim, certify};
use underfoot::conic::{Cone, ConicRows, Hierarchy, Level, LevelProof};
use underfoot::contact::TickRule;
use underfoot::dynamics::axes::VelocityAxes;
use underfoot::model::{State};
use underfoot::problem::question::{Include, Limit, LimitKind, Question, Tick, Treatment};
use underfoot::spatial::{Pose, Twist, Vec3};

const SPEED: [f64; 2] = [1.2, -0.7];
const CHANGE: [f64; 2] = [0.3, 0.4];
/// Planar 2R closed form (Spong, Robot Modeling and Control, quoted from memory; a physics engine agrees).
const TORQUES: [f64; 2] = [10.840651164272955, 2.0665331973942886];
const MASS_MATRIX: [[f64; 2]; 2] = [[0.5211572076824897, 0.10845360384124487], [0.10845360384124487, 0.04575]];
const CORIOLIS: [f64; 2] = [-0.0768288373353389, -0.09296934938057817];
const GRAVITY: [f64; 2] = [10.71775139776705, 2.1086664656224934];

fn question(limits: Vec<Limit>) -> Question {
    Question {
        model: Arc::new(two_link_arm()),
        state: State {
            base_pose: Pose::identity(),
            base_twist: Twist::zero(),
            position: vec![0.5, -0.8],
            velocity: SPEED.to_vec(),
        },
        velocity_axes: VelocityAxes::default(),
        gravity: Vec3::new(0.0, -9.81, 0.0),
        tick: Tick { length: 0.005, rule: TickRule::BackwardEuler, chosen: true },
        contacts: vec![],
        limits,
        tasks: vec![],
        external: vec![],
        latency: None,
        include: Include::default(),
    }
}

/// `M q_ddot - tau = -h` with the published M and h, and one level that wants the published accelerations.
fn verdict(question: &Question, change: &[f64], torques: &[f64], edit: impl Fn(&mut Hierarchy)) -> Certificate {
    let mut hard = ConicRows::new(4);
    let row = |i: usize| {
        let tau = [[-1.0, 0.0], [0.0, -1.0]][i];
        (vec![MASS_MATRIX[i][0], MASS_MATRIX[i][1], tau[0], tau[1]], -CORIOLIS[i] - GRAVITY[i])
    };
    push(&mut hard, Cone::Zero(2), &[row(0), row(1)], "dynamics", true);
    let task = residuals(4, &[(vec![1.0, 0.0, 0.0, 0.0], CHANGE[0], 1.0), (vec![0.0, 1.0, 0.0, 0.0], CHANGE[1], 1.0)]);
    let names = ["acceleration:shoulder", "acceleration:elbow", "torque:shoulder", "torque:elbow"];
    let mut hierarchy = Hierarchy {
        columns: names.map(column).to_vec(),
        hard,
        levels: vec![Level { priority: 1, residuals: task, soft: ConicRows::new(4), soft_weight: vec![] }],
        ..Default::default()
    };
    edit(&mut hierarchy);
    let system = hierarchy.hard.clone();
    let proof = LevelProof { priority: 1, system, multipliers: vec![0.0; 2], ..Default::default() };
    let x = [change[0], change[1], torques[0], torques[1]];
    let claim = Claim { acceleration: change, torques, wrenches: &[], vertex_forces: &[] };
    certify(question, &claim, &hierarchy, &x, &[proof])
}

#[test]
fn textbook_torques_balance() {
    let certificate = verdict(&question(vec![]), &CHANGE, &TORQUES, |_| {});
    assert_eq!(failing(&certificate), Vec::<String>::new(), "{certificate:#?}");
    let dynamics = certificate.checks.iter().find(|c| c.name == "dynamics").expect("always checked");
    assert!(dynamics.value < 1e-15, "{dynamics:?}");
}

#[test]
fn a_torque_off_by_a_millionth_is_refused() {
    let certificate = verdict(&question(vec![]), &CHANGE, &[TORQUES[0], TORQUES[1] * (1.0 + 1e-6)], |_| {});
    assert_eq!(failing(&certificate), ["dynamics", "hard-rows", "level 1 feasibility"], "{certificate:#?}");
    let worst = &certificate.checks[0];
    assert_eq!((worst.name, worst.worst.as_str()), ("dynamics", "elbow"));
}

#[test]
fn gravity_of_the_wrong_sign_and_a_forgotten_bias_are_refused() {
    let mut upside_down = question(vec![]);
    upside_down.gravity = -upside_down.gravity;
    let certificate = verdict(&upside_down, &CHANGE, &TORQUES, |_| {});
    assert_eq!(failing(&certificate), ["dynamics", "problem-matches"]);
    let mut still = question(vec![]);
    still.state.velocity = vec![0.0, 0.0];
    let certificate = verdict(&still, &CHANGE, &TORQUES, |_| {});
    assert_eq!(failing(&certificate), ["dynamics", "problem-matches"]);
}

#[test]
fn a_problem_that_is_not_the_robot_is_refused() {
    // Swapped joint order in the mass matrix, seen at the perturbed points: one entry moved between columns such that
    // the row still holds at the answer.
    let certificate = verdict(&question(vec![]), &CHANGE, &TORQUES, |hierarchy| {
        let rows = &mut hierarchy.hard.matrix;
        rows.value[0] += 1e-4;
        rows.value[1] -= 1e-4 * CHANGE[0] / CHANGE[1];
    });
    let names = failing(&certificate);
    assert!(names.contains(&"problem-matches".to_string()) && !names.contains(&"hard-rows".to_string()), "{names:?}");
    // The whole row negated is the same equality.
    let certificate = verdict(&question(vec![]), &CHANGE, &TORQUES, |hierarchy| {
        hierarchy.hard.matrix.value.iter_mut().for_each(|v| *v = -*v);
        hierarchy.hard.rhs.iter_mut().for_each(|v| *v = -*v);
    });
    assert_eq!(failing(&certificate), Vec::<String>::new());
    // Columns named the wrong way round.
    let certificate = verdict(&question(vec![]), &CHANGE, &TORQUES, |hierarchy| hierarchy.columns.swap(2, 3));
    assert_eq!(failing(&certificate), ["answer-point", "problem-matches"]);
}

#[test]
fn joint_friction_and_rotor_inertia_take_their_torque() {
    let mut question = question(vec![]);
    let mut model = (*question.model).clone();
    model.joints[0].rotor_inertia = 0.7;
    model.joints[0].viscous_friction = 0.11;
    model.joints[1].coulomb_friction = 0.05;
    question.model = Arc::new(model);
    // Derived: tau gains 0.7 q_ddot + 0.11 q_dot, and 0.05 against the motion.
    let torques = [TORQUES[0] + 0.7 * CHANGE[0] + 0.11 * SPEED[0], TORQUES[1] - 0.05];
    let certificate = verdict(&question, &CHANGE, &torques, |hierarchy| {
        hierarchy.hard.matrix.value[0] += 0.7;
        hierarchy.hard.rhs[0] -= 0.11 * SPEED[0];
        hierarchy.hard.rhs[1] += 0.05;
    });
    assert_eq!(failing(&certificate), Vec::<String>::new(), "{certificate:#?}");
}

fn hard(kind: LimitKind) -> Vec<Limit> {
    vec![Limit { name: "limit".into(), kind, treatment: Treatment::Hard }]
}

#[test]
fn every_joint_limit_holds_with_room_and_fails_without() {
    // Each limit as a function of its bound, which is set just beyond and just short of the value reached
    // (all values derived).
    let horizon = 0.05;
    let reached = 0.5 + horizon * SPEED[0] + 0.5 * horizon * horizon * CHANGE[0];
    let speed = (SPEED[1] + horizon * CHANGE[1]).abs();
    let stall = TORQUES[0] / (1.0 - SPEED[0] / 10.0);
    type Make = Box<dyn Fn(f64) -> LimitKind>;
    let cases: Vec<(&str, f64, Make)> = vec![
        ("torque", TORQUES[0], Box::new(|b| LimitKind::Torque(vec![(0, b), (1, 50.0)]))),
        ("torque-speed", stall, Box::new(|b| LimitKind::TorqueSpeed(vec![(0, b, 10.0)]))),
        (
            "coupled",
            TORQUES[0] - 0.5 * TORQUES[1],
            Box::new(|b| LimitKind::CoupledTorque { coefficients: vec![(0, 1.0), (1, -0.5)], bound: b }),
        ),
        ("upper", reached, Box::new(move |b| LimitKind::Position { joints: vec![(0, -2.0, b)], horizon })),
        ("lower", -reached, Box::new(move |b| LimitKind::Position { joints: vec![(0, -b, 2.0)], horizon })),
        ("velocity", speed, Box::new(move |b| LimitKind::Velocity { joints: vec![(1, b)], horizon })),
    ];
    for (what, bound, make) in cases {
        let room = bound + 1e-7 * bound.abs();
        let certificate = verdict(&question(hard(make(room))), &CHANGE, &TORQUES, |_| {});
        assert_eq!(failing(&certificate), Vec::<String>::new(), "{what}: {certificate:#?}");
        let short = bound - 1e-7 * bound.abs();
        let certificate = verdict(&question(hard(make(short))), &CHANGE, &TORQUES, |_| {});
        assert_eq!(failing(&certificate), ["limits"], "{what}: {certificate:#?}");
        // A soft limit is no business of this check.
        let mut soft = question(hard(make(short)));
        soft.limits[0].treatment = Treatment::Soft { priority: 1, weight: 1.0, scale: 1.0 };
        let certificate = verdict(&soft, &CHANGE, &TORQUES, |_| {});
        assert_eq!(failing(&certificate), Vec::<String>::new(), "{what}");
    }
}

#[test]
fn a_passive_joint_has_no_torque() {
    let mut question = question(vec![]);
    let mut model = (*question.model).clone();
    model.joints[1].actuated = false;
    question.model = Arc::new(model);
    let certificate = verdict(&question, &CHANGE, &TORQUES, |_| {});
    assert_eq!(failing(&certificate), ["limits"]);
}

#[test]
fn what_does_not_fit_never_passes() {
    let question = question(vec![]);
    let certificate = verdict(&question, &CHANGE, &[f64::NAN, TORQUES[1]], |_| {});
    assert!(!certificate.holds);
    let claim = Claim { acceleration: &CHANGE[..1], torques: &TORQUES, wrenches: &[], vertex_forces: &[] };
    let certificate = certify(&question, &claim, &Hierarchy::default(), &[], &[]);
    assert!(!certificate.holds);
}
