//! The whole certificate on a box with a sliding mass on a soft bed, everything about it derived by hand.
//!
//! The box is upright and does not turn, its sole is centred on the sole origin, so that mass matrix, bias,
//! ground law and its derivatives have one-line closed forms; the optimum and its multipliers come from
//! dense least squares in this file.
#![allow(missing_docs)]

mod certify_support;

use std::sync::Arc;

use certify_support::{body, column, dense, failing, joint, least_squares, name, push, rescale, residuals};
use nalgebra::{DMatrix, DVector};
use underfoot::certify::{Certificate, Claim, certify, linearisation_error};
use underfoot::conic::{Cone, ConicRows, Hierarchy, Level, LevelProof};
use underfoot::contact::{Ground, Law, Material, Rest, TickRule};
use underfoot::dynamics::axes::VelocityAxes;
use underfoot::model::{BaseKind, Frame, JointKind, Model, Sole, State};
use underfoot::problem::question::{
    Contact, ExternalWrench, Friction, FrictionSet, Include, Limit, LimitKind, NormalForce, Question, Tick, Treatment,
    WrenchRate,
};
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Inertia, Mat3, Pose, Twist, Vec3, Vec6, Wrench, skew};

const TICK: f64 = 0.005;
const MASSES: [f64; 2] = [30.0, 5.0];
const LENGTH: f64 = 0.22;
const WIDTH: f64 = 0.10;
const LARGEST_TORQUE: f64 = 55.0;
const AREA: f64 = LENGTH * WIDTH;
const MATERIAL: Material =
    Material { normal_stiffness: 2e6, tangential_stiffness: 1e6, normal_damping: 1e4, tangential_damping: 6e3 };
/// Columns: 7 accelerations, 1 torque, 6 wrench parts, 12 vertex forces.
const COLUMNS: usize = 26;

fn about() -> [Vec3; 2] {
    [Vec3::new(0.9, 0.7, 0.5), Vec3::new(0.02, 0.03, 0.01)]
}

fn slider_at() -> Vec3 {
    Vec3::new(0.02, 0.01, 0.1)
}

fn velocity() -> Vec3 {
    Vec3::new(0.02, -0.01, -0.05)
}

fn sole_at() -> Vec3 {
    Vec3::new(0.001, -0.002, -0.008)
}

fn corners() -> Vec<[f64; 2]> {
    let (x, y) = (LENGTH / 2.0, WIDTH / 2.0);
    vec![[x, -y], [x, y], [-x, y], [-x, -y]]
}

fn external() -> ExternalWrench {
    ExternalWrench {
        frame: 0,
        point: Vec3::new(0.03, 0.0, 0.02),
        wrench: Wrench { force: Vec3::new(4.0, -3.0, 2.0), moment: Vec3::new(0.5, 0.2, -0.3) },
    }
}

fn model() -> Model {
    let inertia = |i: usize| Inertia {
        mass: MASSES[i],
        center: Vec3::zeros(),
        about_center: Mat3::from_diagonal(&about()[i]),
    };
    let mut slide = joint("slide", JointKind::Prismatic, 1, Vec3::z());
    slide.rotor_inertia = 0.4;
    slide.viscous_friction = 2.0;
    slide.coulomb_friction = 1.5;
    Model {
        name: "box".into(),
        id: "box".into(),
        base: BaseKind::Floating,
        bodies: vec![
            body("box", None, None, Vec3::zeros(), inertia(0)),
            body("slider", Some(0), Some(0), slider_at(), inertia(1)),
        ],
        joints: vec![slide],
        frames: vec![Frame { name: "slider".into(), body: 1, placement: Pose::identity() }],
        soles: vec![Sole {
            name: "foot:left".into(),
            link: "box".into(),
            body: 0,
            placement: Pose { translation: Vec3::new(0.0, 0.0, -0.2), ..Pose::identity() },
            shape: SoleShape::Polygon(Polygon::new(corners()).expect("convex")),
        }],
        remarks: vec![],
    }
}

fn question(rule: TickRule, law: Law) -> Question {
    Question {
        model: Arc::new(model()),
        state: State {
            base_pose: Pose { translation: sole_at() + Vec3::new(0.0, 0.0, 0.2), ..Pose::identity() },
            base_twist: Twist { linear: velocity(), angular: Vec3::zeros() },
            position: vec![0.05],
            velocity: vec![0.3],
        },
        velocity_axes: VelocityAxes::default(),
        gravity: Vec3::new(0.0, 0.0, -9.80665),
        tick: Tick { length: TICK, rule, chosen: true },
        contacts: vec![Contact {
            sole: 0,
            ground: Ground {
                law,
                normal: Vec3::z(),
                rest: Rest::Pose(Pose::identity()),
                rest_twist: Twist::zero(),
                measured: None,
            },
            friction: Some(Friction {
                set: FrictionSet::Vertex,
                coefficient: 0.7,
                torsion: None,
                facets: None,
                treatment: Treatment::Hard,
            }),
            normal_force: None,
            wrench_rate: None,
        }],
        limits: vec![Limit {
            name: "drive".into(),
            kind: LimitKind::Torque(vec![(0, LARGEST_TORQUE)]),
            treatment: Treatment::Hard,
        }],
        tasks: vec![],
        external: vec![external()],
        latency: None,
        include: Include::default(),
    }
}

/// `(c, theta)`.
fn factors(rule: TickRule) -> (f64, f64) {
    match rule {
        TickRule::BackwardEuler => (1.0, 1.0),
        TickRule::Trapezoid => (0.5, 0.5),
        TickRule::Explicit => (0.0, 0.0),
        TickRule::Held => unreachable!("these tests are for the rules with fixed factors"),
    }
}

/// Present wrench, drift wrench and the diagonal of G (closed forms of a centred, upright, unturned rectangle).
fn law(rule: TickRule) -> ([Vec6; 2], Vec6) {
    let (c, m) = (factors(rule).0, MATERIAL);
    let k = Vec3::new(m.tangential_stiffness, m.tangential_stiffness, m.normal_stiffness) * AREA;
    let b = Vec3::new(m.tangential_damping, m.tangential_damping, m.normal_damping) * AREA;
    let force = |o: Vec3| -k.component_mul(&o) - b.component_mul(&velocity());
    let six = |f: Vec3| Vec6::new(f.x, f.y, f.z, 0.0, 0.0, 0.0);
    let (xx, yy) = (WIDTH * LENGTH.powi(3) / 12.0, LENGTH * WIDTH.powi(3) / 12.0);
    let whole = |normal: f64, across: f64| {
        let [x, y] = [across * AREA, normal * AREA];
        Vec6::new(x, x, y, normal * yy, normal * xx, across * (xx + yy))
    };
    let gain = whole(m.normal_damping, m.tangential_damping) * TICK
        + whole(m.normal_stiffness, m.tangential_stiffness) * (c * TICK * TICK);
    ([six(force(sole_at())), six(force(sole_at() + velocity() * TICK))], gain)
}

/// 6 x 7 Jacobian of a point at `arm` from the base origin; `slides` adds the joint.
fn jacobian(arm: &Vec3, slides: bool) -> DMatrix<f64> {
    let mut j = DMatrix::zeros(6, 7);
    j.view_mut((0, 0), (6, 6)).fill_with_identity();
    j.view_mut((0, 3), (3, 3)).copy_from(&-skew(arm));
    j[(2, 6)] = if slides { 1.0 } else { 0.0 };
    j
}

struct Case {
    question: Question,
    hierarchy: Hierarchy,
    x: Vec<f64>,
    proofs: Vec<LevelProof>,
}

/// Mass matrix and everything on the right of `M nu_dot = right + e7 u + J' w_bar`.
fn balance(question: &Question) -> (DMatrix<f64>, DVector<f64>) {
    let slider = slider_at() + Vec3::z() * question.state.position[0];
    let j2 = jacobian(&slider, true);
    let mut m = DMatrix::zeros(7, 7);
    let mut spread = DMatrix::identity(6, 6) * MASSES[1];
    for i in 0..3 {
        m[(i, i)] = MASSES[0];
        m[(3 + i, 3 + i)] = about()[0][i];
        spread[(3 + i, 3 + i)] = about()[1][i];
    }
    m += j2.transpose() * spread * &j2;
    m[(6, 6)] += 0.4;
    let weight = |mass: f64| DVector::from_vec(vec![0.0, 0.0, -9.80665 * mass, 0.0, 0.0, 0.0]);
    let load = external();
    let at_load = jacobian(&(slider + load.point), true);
    let wrench = DVector::from_column_slice(load.wrench.to_vec6().as_slice());
    let mut right = jacobian(&Vec3::zeros(), false).transpose() * weight(MASSES[0])
        + j2.transpose() * weight(MASSES[1])
        + at_load.transpose() * wrench;
    right[6] -= 2.0 * question.state.velocity[0] + 1.5;
    (m, right)
}

/// Physics rows of the problem, drive limit and friction cones.
fn hard_rows(question: &Question) -> ConicRows {
    let rule = question.tick.rule;
    let rigid = matches!(question.contacts[0].ground.law, Law::Rigid { .. });
    let theta = if rigid { 1.0 } else { factors(rule).1 };
    let (m, right) = balance(question);
    let jacobian = jacobian(&Vec3::new(0.0, 0.0, -0.2), false);
    let ([now, drift], gain) = law(rule);
    let now = DVector::from_column_slice(now.as_slice());
    let right = right + jacobian.transpose() * now * (1.0 - theta);
    let mut hard = ConicRows::new(COLUMNS);
    let empty = || vec![0.0; COLUMNS];
    let mut dynamics = Vec::new();
    for i in 0..7 {
        let mut row = empty();
        (0..7).for_each(|j| row[j] = m[(i, j)]);
        row[7] = if i == 6 { -1.0 } else { 0.0 };
        (0..6).for_each(|k| row[8 + k] = -theta * jacobian[(k, i)]);
        dynamics.push((row, right[i]));
    }
    push(&mut hard, Cone::Zero(7), &dynamics, "dynamics", true);
    let mut contact = Vec::new();
    for k in 0..6 {
        let mut row = empty();
        (0..7).for_each(|j| row[j] = if rigid { 1.0 } else { gain[k] } * jacobian[(k, j)]);
        row[8 + k] = if rigid { 0.0 } else { 1.0 };
        let stops = question.contacts[0].ground.law == (Law::Rigid { stop: true });
        let stop = if stops && k < 3 { -velocity()[k] / TICK } else { 0.0 };
        contact.push((row, if rigid { stop } else { drift[k] }));
    }
    push(&mut hard, Cone::Zero(6), &contact, "contact:foot:left", true);
    let mut vertices = vec![(empty(), 0.0); 6];
    for (v, corner) in corners().iter().enumerate() {
        let arm = skew(&Vec3::new(corner[0], corner[1], 0.0));
        for k in 0..3 {
            vertices[k].0[14 + 3 * v + k] = -1.0;
            (0..3).for_each(|j| vertices[3 + k].0[14 + 3 * v + j] = -arm[(k, j)]);
        }
    }
    (0..6).for_each(|k| vertices[k].0[8 + k] = 1.0);
    push(&mut hard, Cone::Zero(6), &vertices, "vertices:foot:left", true);
    let unit = |j: usize, value: f64| {
        let mut row = empty();
        row[j] = value;
        row
    };
    let drive = [(unit(7, 1.0), LARGEST_TORQUE), (unit(7, -1.0), LARGEST_TORQUE)];
    push(&mut hard, Cone::Nonnegative(2), &drive, "drive", false);
    for v in 0..4 {
        let at = 14 + 3 * v;
        let cone = [(unit(at + 2, -0.7), 0.0), (unit(at, -1.0), 0.0), (unit(at + 1, -1.0), 0.0)];
        push(&mut hard, Cone::SecondOrder(3), &cone, "friction", false);
    }
    hard
}

fn column_names() -> Vec<String> {
    let mut names: Vec<String> =
        ["vx", "vy", "vz", "wx", "wy", "wz", "slide"].iter().map(|n| format!("acceleration:{n}")).collect();
    names.push("torque:slide".into());
    names.extend(["fx", "fy", "fz", "mx", "my", "mz"].map(|n| format!("wrench:foot:left:{n}")));
    for v in 0..4 {
        names.extend(["x", "y", "z"].map(|n| format!("vertex:foot:left:{v}:{n}")));
    }
    names
}

/// Level 1: slider acceleration 3 m/s^2, which the drive limit does not allow. Level 2: small vertex forces.
fn case(rule: TickRule, law: Law) -> Case {
    let question = question(rule, law);
    let mut hierarchy = Hierarchy {
        columns: column_names().iter().map(|n| column(n)).collect(),
        hard: hard_rows(&question),
        auxiliary: (14..26).collect(),
        ..Default::default()
    };
    let unit = |j: usize| (0..COLUMNS).map(|k| if k == j { 1.0 } else { 0.0 }).collect::<Vec<f64>>();
    let small: Vec<_> = (14..26).map(|j| (unit(j), 0.0, 1.0)).collect();
    for (priority, rows) in [(1, residuals(COLUMNS, &[(unit(6), 3.0, 2.0)])), (2, residuals(COLUMNS, &small))] {
        let level = Level { priority, residuals: rows, soft: ConicRows::new(COLUMNS), soft_weight: vec![] };
        hierarchy.levels.push(level);
    }
    // The optimum: all physics with the drive at its limit, vertex forces as short as possible.
    let matrix = dense(&hierarchy.hard.matrix);
    let mut fixed = matrix.rows(0, 20).into_owned();
    let rhs = DVector::from_column_slice(&hierarchy.hard.rhs[..20]);
    // Least squares finds the shortest solution; accelerations, torque and wrench are fixed, so it is the one.
    let mut x: Vec<f64> = least_squares(&fixed, &rhs).iter().copied().collect();
    rescale(&mut hierarchy, &mut x);

    fixed = dense(&hierarchy.hard.matrix).rows(0, 20).into_owned();
    let multipliers = |level: &Level| -> Vec<f64> {
        let a = dense(&level.residuals.matrix);
        let mut r = &a * DVector::from_column_slice(&x) - DVector::from_column_slice(&level.residuals.rhs);
        r.component_mul_assign(&DVector::from_column_slice(&level.residuals.weight));
        least_squares(&fixed.transpose(), &(a.transpose() * r * -2.0)).iter().copied().collect()
    };
    let mut first = multipliers(&hierarchy.levels[0]);
    first.resize(hierarchy.hard.rhs.len(), 0.0);
    let second = multipliers(&hierarchy.levels[1]);
    let mut frozen = ConicRows::new(COLUMNS);
    for i in 0..20 {
        frozen.matrix.push(hierarchy.hard.matrix.row(i));
        frozen.rhs.push(hierarchy.hard.rhs[i]);
        frozen.names.push(name("frozen", "", false));
    }
    frozen.cones.push(Cone::Zero(20));
    let proof = |priority, system: &ConicRows, multipliers| LevelProof {
        priority,
        system: system.clone(),
        multipliers,
        ..Default::default()
    };
    let proofs = vec![proof(1, &hierarchy.hard, first), proof(2, &frozen, second)];
    Case { question, hierarchy, x, proofs }
}

/// The claim that the point makes, to be spoilt by tests.
#[derive(Clone)]
struct Spoken {
    acceleration: Vec<f64>,
    torques: Vec<f64>,
    wrench: Vec6,
    forces: Vec<Vec3>,
}

impl Case {
    fn soft(rule: TickRule) -> Case {
        case(rule, Law::Bonded(MATERIAL))
    }

    fn spoken(&self) -> Spoken {
        let physical: Vec<f64> = self.x.iter().zip(&self.hierarchy.columns).map(|(x, c)| x * c.scale).collect();
        Spoken {
            acceleration: physical[..7].to_vec(),
            torques: physical[7..8].to_vec(),
            wrench: Vec6::from_column_slice(&physical[8..14]),
            forces: physical[14..].chunks(3).map(Vec3::from_column_slice).collect(),
        }
    }

    fn verdict(&self, spoken: &Spoken) -> Certificate {
        let wrenches = [Some(Wrench::from_vec6(&spoken.wrench))];
        let forces = [spoken.forces.clone()];
        let claim = Claim {
            acceleration: &spoken.acceleration,
            torques: &spoken.torques,
            wrenches: &wrenches,
            vertex_forces: &forces,
        };
        certify(&self.question, &claim, &self.hierarchy, &self.x, &self.proofs)
    }

    fn failing(&self) -> Vec<String> {
        failing(&self.verdict(&self.spoken()))
    }
}

const RULES: [TickRule; 3] = [TickRule::BackwardEuler, TickRule::Trapezoid, TickRule::Explicit];

#[test]
fn a_right_answer_is_certified_under_every_rule() {
    for rule in RULES {
        let case = Case::soft(rule);
        let certificate = case.verdict(&case.spoken());
        assert_eq!(failing(&certificate), Vec::<String>::new(), "{rule:?}: {certificate:#?}");
        let drive = case.proofs[0].multipliers[19];
        assert!(drive > 1e-3, "the drive limit binds: {drive}");
        for check in &certificate.checks {
            assert!(check.value < 1e-11, "{check:?}");
        }
    }
}

#[test]
fn a_right_answer_on_rigid_ground_is_certified() {
    let mut rigid = case(TickRule::BackwardEuler, Law::Rigid { stop: false });
    let certificate = rigid.verdict(&rigid.spoken());
    assert_eq!(failing(&certificate), Vec::<String>::new(), "{certificate:#?}");
    rigid.question.contacts[0].ground.law = Law::Rigid { stop: true };
    assert_eq!(rigid.failing(), ["contact", "problem-matches"]);
    // To stop the sole within the tick takes more friction than there is, and nothing else is wrong.
    let stopped = case(TickRule::BackwardEuler, Law::Rigid { stop: true });
    assert_eq!(stopped.failing(), ["limits", "hard-rows", "level 1 feasibility"]);
}

#[test]
fn each_quantity_of_the_claim_is_held_to_its_own_check() {
    let case = Case::soft(TickRule::BackwardEuler);
    let good = case.spoken();
    let mut torque = good.clone();
    torque.torques[0] *= 1.0 - 1e-6;
    assert_eq!(failing(&case.verdict(&torque)), ["dynamics", "answer-point"]);
    for k in 0..6 {
        let mut wrench = good.clone();
        wrench.wrench[k] += 35.0 * 9.8 * 1e-7;
        assert_eq!(
            failing(&case.verdict(&wrench)),
            ["dynamics", "contact", "vertex-sum", "answer-point"],
            "wrench part {k}"
        );
    }
    let mut vertex = good.clone();
    vertex.forces[2].y += 1e-5;
    assert_eq!(failing(&case.verdict(&vertex)), ["vertex-sum", "answer-point"]);
    for k in 0..7 {
        let mut acceleration = good.clone();
        acceleration.acceleration[k] += 1e-5;
        let expected: &[&str] =
            if k < 6 { &["dynamics", "contact", "answer-point"] } else { &["dynamics", "answer-point"] };
        assert_eq!(failing(&case.verdict(&acceleration)), expected, "acceleration {k}");
    }
    let mut swapped = good.clone();
    swapped.wrench.swap_rows(0, 1);
    assert_eq!(failing(&case.verdict(&swapped)), ["dynamics", "contact", "vertex-sum", "answer-point"]);
    let mut none = good;
    none.wrench[4] = f64::NAN;
    assert_eq!(failing(&case.verdict(&none)), ["dynamics", "contact", "vertex-sum", "answer-point"]);
}

#[test]
fn a_problem_solved_at_another_point_is_refused() {
    let mut case = Case::soft(TickRule::BackwardEuler);
    case.x[7] *= 1.0 - 1e-6;
    let failing = case.failing();
    for name in ["dynamics", "hard-rows", "level 1 feasibility", "level 2 feasibility"] {
        assert!(failing.contains(&name.to_string()), "{failing:?}");
    }
    assert!(!failing.contains(&"contact".to_string()) && !failing.contains(&"answer-point".to_string()));
}

#[test]
fn wrong_rule_wrong_ground_and_wrong_measurement_are_refused() {
    let mut case = Case::soft(TickRule::Trapezoid);
    for rule in [TickRule::BackwardEuler, TickRule::Explicit] {
        case.question.tick.rule = rule;
        assert_eq!(case.failing(), ["dynamics", "contact", "problem-matches"], "{rule:?}");
    }
    let mut case = Case::soft(TickRule::BackwardEuler);
    let mut softer = MATERIAL;
    softer.tangential_stiffness *= 1.0 - 1e-6;
    case.question.contacts[0].ground.law = Law::Bonded(softer);
    assert_eq!(case.failing(), ["contact", "problem-matches"]);

    // A measured wrench equal to the modelled one changes nothing; another one does.
    for rule in RULES {
        let mut case = Case::soft(rule);
        let now = law(rule).0[0];
        case.question.contacts[0].ground.measured = Some(Wrench::from_vec6(&now));
        assert_eq!(case.failing(), Vec::<String>::new());
        let off = now + Vec6::new(0.0, 0.0, 1e-5, 0.0, 0.0, 0.0);
        case.question.contacts[0].ground.measured = Some(Wrench::from_vec6(&off));
        let expected: &[&str] = match rule {
            TickRule::BackwardEuler => &["contact", "problem-matches"],
            _ => &["dynamics", "contact", "problem-matches"],
        };
        assert_eq!(case.failing(), expected, "{rule:?}");
    }
}

#[test]
fn a_load_or_joint_term_left_out_is_refused() {
    let edits: [fn(&mut Question); 4] = [
        |q| q.external.clear(),
        |q| Arc::make_mut(&mut q.model).joints[0].rotor_inertia = 0.0,
        |q| Arc::make_mut(&mut q.model).joints[0].viscous_friction = 0.0,
        |q| Arc::make_mut(&mut q.model).joints[0].coulomb_friction = 0.0,
    ];
    for edit in edits {
        let mut case = Case::soft(TickRule::BackwardEuler);
        edit(&mut case.question);
        assert_eq!(case.failing(), ["dynamics", "problem-matches"]);
    }
}

#[test]
fn limits_are_read_from_the_question() {
    let normal = |case: &Case| case.spoken().wrench[2];
    let base = || Case::soft(TickRule::BackwardEuler);
    let now = law(TickRule::BackwardEuler).0[0];

    let mut case = base();
    case.question.limits[0].kind = LimitKind::Torque(vec![(0, LARGEST_TORQUE * (1.0 - 1e-6))]);
    assert_eq!(case.failing(), ["limits"]);

    for (room, expected) in [(1e-6, vec![]), (-1e-6, vec!["limits"])] {
        let mut case = base();
        let force = normal(&case);
        case.question.contacts[0].normal_force =
            Some(NormalForce { least: None, largest: Some(force * (1.0 + room)), treatment: Treatment::Hard });
        assert_eq!(case.failing(), expected, "largest {room}");
        case.question.contacts[0].normal_force =
            Some(NormalForce { least: Some(force * (1.0 - room)), largest: None, treatment: Treatment::Hard });
        assert_eq!(case.failing(), expected, "least {room}");

        // Decay: as much of the present excess as remains may stay.
        let mut case = base();
        let bound = force.min(now[2]) - 10.0;
        let rate = (1.0 - (force - bound) / (now[2] - bound) - room) / TICK;
        if rate >= 0.0 {
            case.question.contacts[0].normal_force =
                Some(NormalForce { least: None, largest: Some(bound), treatment: Treatment::Decay { rate } });
            assert_eq!(case.failing(), expected, "decay {room}");
        }

        let mut case = base();
        let wrench = case.spoken().wrench;
        let step = (0..3).map(|k| (wrench[k] - now[k]).abs()).fold(0.0, f64::max);
        case.question.contacts[0].wrench_rate =
            Some(WrenchRate { force: Some(step / TICK * (1.0 + room)), moment: None, treatment: Treatment::Hard });
        assert_eq!(case.failing(), expected, "rate {room}");
    }
}

#[test]
fn friction_is_read_from_the_question() {
    let case = Case::soft(TickRule::BackwardEuler);
    let spoken = case.spoken();
    let worst = spoken.forces.iter().map(|f| f.x.hypot(f.y) / f.z).fold(0.0, f64::max);
    let whole = spoken.wrench.x.hypot(spoken.wrench.y) / spoken.wrench.z;
    // A square pyramid inscribed in the cone, its facets at mu cos(45 deg) along the sole's axes.
    let facet = spoken.forces.iter().map(|f| f.x.abs().max(f.y.abs()) / f.z).fold(0.0, f64::max) * 2f64.sqrt();
    let yaw = (spoken.wrench[5] / spoken.wrench[2]).abs();
    for (room, expected) in [(1e-6, vec![]), (-1e-6, vec!["limits"])] {
        let set = |set, coefficient: f64, facets, torsion| {
            let mut changed = Case::soft(TickRule::BackwardEuler);
            let treatment = Treatment::Hard;
            changed.question.contacts[0].friction = Some(Friction { set, coefficient, torsion, facets, treatment });
            changed.failing()
        };
        let more = 1.0 + room;
        assert_eq!(set(FrictionSet::Vertex, worst * more, None, None), expected, "vertex {room}");
        assert_eq!(set(FrictionSet::Vertex, facet * more, Some(4), None), expected, "pyramid {room}");
        assert_eq!(set(FrictionSet::Wrench, whole * more, None, None), expected, "wrench {room}");
        // The yaw moment is a few thousandths of the weight, to which the figure is relative.
        let much_more = 1.0 + 1e3 * room;
        assert_eq!(set(FrictionSet::Wrench, 1.0, None, Some(yaw * much_more)), expected, "yaw {room}");
    }
}

#[test]
fn proofs_are_checked() {
    let base = Case::soft(TickRule::BackwardEuler);
    let drive = base.proofs[0].multipliers[19];
    let mut case = Case::soft(TickRule::BackwardEuler);
    case.proofs[0].multipliers[19] = -drive;
    assert_eq!(case.failing(), ["level 1 stationarity", "level 1 dual"]);
    let mut case = Case::soft(TickRule::BackwardEuler);
    case.proofs[0].multipliers[0] += 1e-3;
    assert_eq!(case.failing(), ["level 1 stationarity"]);
    let mut case = Case::soft(TickRule::BackwardEuler);
    case.proofs[1].multipliers[14] += 1e-2;
    assert_eq!(case.failing(), ["level 2 stationarity"]);
    let mut case = Case::soft(TickRule::BackwardEuler);
    case.proofs.pop();
    assert!(case.failing().contains(&"level 2 stationarity".to_string()));
}

#[test]
fn what_linearising_costs_is_told_apart() {
    let error = |rule| {
        let case = Case::soft(rule);
        let spoken = case.spoken();
        let wrenches = [Some(Wrench::from_vec6(&spoken.wrench))];
        let claim = Claim {
            acceleration: &spoken.acceleration,
            torques: &spoken.torques,
            wrenches: &wrenches,
            vertex_forces: std::slice::from_ref(&spoken.forces),
        };
        linearisation_error(&case.question, &claim)[0].expect("soft")
    };
    // Explicit: the law is linear in the velocity, so nothing is lost. Otherwise the turn of the sole over the tick
    // enters at second order.
    let [force, moment] = error(TickRule::Explicit);
    assert!(force < 1e-9 && moment < 1e-9, "{force} {moment}");
    let [force, moment] = error(TickRule::BackwardEuler);
    assert!(force + moment > 1e-12 && force < 0.1 && moment < 0.1, "{force} {moment}");
}
