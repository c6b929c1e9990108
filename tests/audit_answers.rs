//! Audits against a textbook's arm, against statics, and against what follows from the definition of strict priorities.
#![allow(missing_docs)]

mod certify_support;
#[path = "common/biped.rs"]
mod biped;

use std::sync::Arc;

use certify_support::{body, two_link_arm};
use underfoot::audit::report::{AuditReport, Comparison, Conclusion, ReasonKind, TargetSource, Verdict};
use underfoot::audit::{AuditError, Claim, Tolerances, audit};
use underfoot::contact::{Ground, Law, Rest, TickRule};
use underfoot::dynamics::axes::VelocityAxes;
use underfoot::model::{BaseKind, Model, Sole, State};
use underfoot::problem::question::*;
use underfoot::reference;
use underfoot::reference::answer::Status;
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Inertia, Mat3, Pose, Twist, Vec3, Wrench};

/// Planar 2R closed form (Spong, Robot Modeling and Control, quoted from memory; a physics engine agrees): these torques lead to
/// these accelerations.
const TORQUES: [f64; 2] = [10.840651164272955, 2.0665331973942886];
const CHANGE: [f64; 2] = [0.3, 0.4];
const SPEED: [f64; 2] = [1.2, -0.7];
const MASS_MATRIX: [[f64; 2]; 2] = [[0.5211572076824897, 0.10845360384124487], [0.10845360384124487, 0.04575]];

fn judge(question: &Question, claim: &Claim) -> AuditReport {
    audit(question, claim, &Tolerances::default(), &Default::default()).expect("a question that can be worked out")
}

fn arm(tasks: Vec<Task>, limits: Vec<Limit>) -> Question {
    let model = two_link_arm();
    let state = State {
        base_pose: Pose::identity(),
        base_twist: Twist::zero(),
        position: vec![0.5, -0.8],
        velocity: SPEED.to_vec(),
    };
    about(model, state, Vec3::new(0.0, -9.81, 0.0), vec![], limits, tasks)
}

fn about(model: Model, state: State, gravity: Vec3, contacts: Vec<Contact>, limits: Vec<Limit>, tasks: Vec<Task>) -> Question {
    Question {
        model: Arc::new(model),
        state,
        velocity_axes: VelocityAxes::default(),
        gravity,
        tick: Tick { length: 0.005, rule: TickRule::Held, chosen: true },
        contacts,
        limits,
        tasks,
        external: vec![],
        latency: None,
        include: Include::default(),
    }
}

fn wanted(name: &str, importance: Importance, joint: usize, value: f64) -> Task {
    Task {
        name: name.into(),
        importance,
        weight: 1.0,
        scale: 1.0,
        scale_angular: 1.0,
        axes: [true; 6],
        kind: TaskKind::JointAcceleration(vec![(joint, value)]),
    }
}

fn both() -> Vec<Task> {
    vec![
        wanted("shoulder", Importance::Priority(1), 0, CHANGE[0]),
        wanted("elbow", Importance::Priority(2), 1, CHANGE[1]),
    ]
}

/// The published torques changed so that the accelerations change by this much: `M delta` with the published M.
fn torques_for(delta: [f64; 2]) -> Vec<f64> {
    (0..2).map(|i| TORQUES[i] + MASS_MATRIX[i][0] * delta[0] + MASS_MATRIX[i][1] * delta[1]).collect()
}

fn kinds(report: &AuditReport) -> Vec<ReasonKind> {
    report.judgements[0].reasons.iter().map(|r| r.kind).collect()
}

#[test]
fn published_torques_imply_the_published_accelerations() {
    let question = arm(both(), vec![]);
    let mut claim = Claim::of_torques(&question, TORQUES.to_vec());
    claim.joint_accelerations = CHANGE.map(Some).to_vec();
    let report = judge(&question, &claim);
    assert_eq!((report.verdict, report.rule_dependent), (Verdict::Pass, false), "{report:#?}");
    assert!(report.causes.is_none());
    let implied = report.judgements[0].implied.as_ref().expect("an arm without soles");
    for (found, published) in implied.joint_accelerations.iter().zip(CHANGE) {
        assert!((found - published).abs() < 1e-10, "{found} {published}");
    }
    // An acceleration that does not follow is no matter of torques: it is named, with the numbers.
    claim.joint_accelerations[1] = Some(0.5);
    let report = judge(&question, &claim);
    assert_eq!(report.verdict, Verdict::Fail);
    assert_eq!(kinds(&report), [ReasonKind::ClaimedPhysics]);
    let broken: Vec<_> = report.judgements[0].claimed.iter().filter(|d| d.broken).collect();
    assert_eq!(broken.len(), 1);
    assert_eq!((broken[0].name.as_str(), broken[0].claimed), ("acceleration:elbow", 0.5));
    assert!((broken[0].implied - 0.4).abs() < 1e-10);
}

/// Derived: with M published, torques `tau + M (d, 0)` miss the first priority by exactly d rad/s^2.
#[test]
fn the_first_priority_that_differs_is_told_in_its_own_unit_and_lower_ones_are_not_compared() {
    let question = arm(both(), vec![]);
    for (delta, first) in [([0.05, 0.0], 1), ([0.05, 0.7], 1), ([0.0, 0.7], 2)] {
        let report = judge(&question, &Claim::of_torques(&question, torques_for(delta)));
        assert_eq!(report.verdict, Verdict::Fail);
        let comparison = &report.judgements[0].comparisons[0];
        assert_eq!(comparison.first_difference, Some(first));
        let level = comparison.levels.iter().find(|l| l.priority == first).expect("both are there");
        let part = &level.tasks[0].parts[0];
        assert_eq!((part.unit, part.reference_norm.is_some_and(|n| n < 1e-12)), ("rad/s^2", true));
        assert!((part.norm - delta[first as usize - 1].abs()).abs() < 1e-9, "{part:?}");
        assert_eq!(comparison.levels.iter().map(|l| l.comparable).collect::<Vec<_>>(), [true, first == 2]);
    }
}

/// Derived: where only the shoulder's acceleration is wanted, the set of equally good torques is `tau + M (0, e)`, one direction.
#[test]
fn torques_count_only_where_the_question_determines_them() {
    let question = arm(vec![wanted("shoulder", Importance::Priority(1), 0, CHANGE[0])], vec![]);
    let report = judge(&question, &Claim::of_torques(&question, torques_for([0.0, -3.0])));
    assert_eq!(report.verdict, Verdict::Pass, "{report:#?}");
    let comparison = &report.judgements[0].comparisons[0];
    assert_eq!(comparison.free, 1);
    let shoulder = &comparison.torques[0];
    assert!((shoulder.claimed - shoulder.reference).abs() > 0.1 && shoulder.determined_difference.abs() < 1e-9, "{shoulder:?}");
    let report = judge(&question, &Claim::of_torques(&question, torques_for([0.1, -3.0])));
    assert_eq!(report.verdict, Verdict::Fail);
    assert!(report.judgements[0].comparisons[0].torques.iter().any(|t| t.differs));
}

/// Limits by hand: `|tau| <= bound`, `|q_dot + H q_ddot| <= bound`, `sum coefficient tau <= bound`.
#[test]
fn every_limit_is_read_in_its_own_unit() {
    let limit = |name: &str, kind| Limit { name: name.into(), kind, treatment: Treatment::Hard };
    let limits = vec![
        limit("torque", LimitKind::Torque(vec![(0, 10.0), (1, 3.0)])),
        limit("speed", LimitKind::Velocity { joints: vec![(0, 1.25)], horizon: 0.1 }),
        limit("coupled", LimitKind::CoupledTorque { coefficients: vec![(0, 1.0), (1, -2.0)], bound: 7.0 }),
    ];
    let question = arm(both(), limits);
    let report = judge(&question, &Claim::of_torques(&question, TORQUES.to_vec()));
    assert_eq!(report.verdict, Verdict::Fail);
    let margin = |limit: &str, part: &str| {
        let found = report.judgements[0].limits.iter().find(|l| l.limit == limit && l.part == part);
        found.map(|l| (l.margin, l.unit, l.broken)).expect("every limit is read")
    };
    for (limit, part, expected, unit, broken) in [
        ("torque", "shoulder upper", 10.0 - TORQUES[0], "N m", true),
        ("torque", "shoulder lower", 10.0 + TORQUES[0], "N m", false),
        ("torque", "elbow upper", 3.0 - TORQUES[1], "N m", false),
        ("speed", "shoulder upper", 1.25 - (SPEED[0] + 0.1 * CHANGE[0]), "rad/s", false),
        ("coupled", "sum", 7.0 - (TORQUES[0] - 2.0 * TORQUES[1]), "N m", false),
    ] {
        let (found, found_unit, found_broken) = margin(limit, part);
        assert!((found - expected).abs() < 1e-9, "{limit} {part}: {found} {expected}");
        assert_eq!((found_unit, found_broken), (unit, broken), "{limit} {part}");
    }
    let causes = report.causes.expect("asked for");
    assert_eq!(causes.conclusion, Conclusion::Consistent);
    assert!(causes.hypotheses.iter().any(|h| h.consistent && h.mistake == "limit_ignored" && h.subject == "torque"), "{causes:#?}");
}

#[test]
fn own_targets_test_the_optimiser_and_the_requests_the_tuning() {
    let question = arm(both(), vec![]);
    let mut claim = Claim::of_torques(&question, torques_for([0.05, 0.0]));
    claim.targets[0] = Some(vec![CHANGE[0] + 0.05]);
    let report = judge(&question, &claim);
    let seen = |c: &Comparison| (c.targets, c.verdict, c.first_difference);
    let comparisons: Vec<_> = report.judgements[0].comparisons.iter().map(seen).collect();
    assert_eq!(comparisons, [(TargetSource::Own, Verdict::Pass, None), (TargetSource::Request, Verdict::Fail, Some(1))]);
    assert_eq!(report.verdict, Verdict::Fail);
    // Targets for another number of rows cannot be compared.
    claim.targets[0] = Some(vec![0.0, 0.0]);
    let refused = audit(&question, &claim, &Tolerances::default(), &Default::default());
    assert_eq!(refused, Err(AuditError::Targets { task: 0, expected: 1, found: 2 }));
}

#[test]
fn what_must_hold_is_told_apart() {
    let mut tasks = both();
    tasks[0].importance = Importance::MustHold;
    let question = arm(tasks, vec![]);
    assert_eq!(judge(&question, &Claim::of_torques(&question, TORQUES.to_vec())).verdict, Verdict::Pass);
    let report = judge(&question, &Claim::of_torques(&question, torques_for([0.05, 0.0])));
    assert!(kinds(&report).contains(&ReasonKind::MustHoldBroken), "{report:#?}");
    let task = &report.judgements[0].comparisons[0].must_hold[0];
    assert!(task.broken && (task.parts[0].norm - 0.05).abs() < 1e-9, "{task:?}");
}

#[test]
fn without_a_reference_answer_nothing_is_failed_for_what_nobody_can_do() {
    let mut tasks = both();
    tasks.push(wanted("again", Importance::MustHold, 0, 1.0));
    tasks.push(wanted("and again", Importance::MustHold, 0, 2.0));
    let question = arm(tasks, vec![]);
    let report = judge(&question, &Claim::of_torques(&question, TORQUES.to_vec()));
    assert_eq!(report.verdict, Verdict::Undecided);
    assert_eq!(report.judgements[0].comparisons[0].reference, Status::Infeasible);
    assert!(report.causes.is_none());
}

/// A block of 30 kg on rigid soles, no joints: statics tells every wrench.
fn block(soles: usize, friction: Option<Friction>, push: f64) -> Question {
    let mut model = certify_block();
    let square = vec![[-0.1, -0.1], [0.1, -0.1], [0.1, 0.1], [-0.1, 0.1]];
    for k in 0..soles {
        model.soles.push(Sole {
            name: format!("sole {k}"),
            link: "block".into(),
            body: 0,
            placement: Pose { rotation: Mat3::identity(), translation: Vec3::new(0.5 * (k as f64 - 0.5 * (soles - 1) as f64), 0.0, 0.0) },
            shape: SoleShape::Polygon(Polygon::new(square.clone()).expect("a square")),
        });
    }
    let contact = |sole| Contact {
        sole,
        ground: Ground {
            law: Law::Rigid { stop: false },
            normal: Vec3::z(),
            rest: Rest::Measured,
            rest_twist: Twist::zero(),
            measured: None,
        },
        friction,
        normal_force: Some(NormalForce { least: Some(5.0), largest: None, treatment: Treatment::Hard }),
        wrench_rate: None,
    };
    let state = State { base_pose: Pose::identity(), base_twist: Twist::zero(), position: vec![], velocity: vec![] };
    let mut question = about(model, state, Vec3::new(0.0, 0.0, -9.81), (0..soles).map(contact).collect(), vec![], vec![]);
    let force = Vec3::new(push, 0.0, 0.0);
    question.external.push(ExternalWrench { frame: 0, point: Vec3::zeros(), wrench: Wrench { force, moment: Vec3::zeros() } });
    question
}

fn certify_block() -> Model {
    let inertia = Inertia { mass: 30.0, center: Vec3::new(0.0, 0.0, 0.3), about_center: Mat3::from_diagonal(&Vec3::new(0.4, 0.5, 0.6)) };
    let mut model = Model {
        name: "block".into(),
        id: "block".into(),
        base: BaseKind::Floating,
        bodies: vec![body("block", None, None, Vec3::zeros(), inertia)],
        joints: vec![],
        frames: vec![],
        soles: vec![],
        remarks: vec![],
    };
    model.frames.push(underfoot::model::Frame { name: "block".into(), body: 0, placement: Pose::identity() });
    model
}

/// Derived: n vertices share a central wrench, so the largest room that all of them can have is `(mu f_n - |f_t|) / n`: the sum over the
/// vertices of `mu f_n,i - |f_t,i|` is never more than `mu f_n - |f_t|`, and equal shares reach it.
#[test]
fn friction_over_vertices_is_read_at_the_best_spread() {
    for (push, facets) in [(40.0, None), (40.0, Some(4)), (200.0, None)] {
        let friction = Friction { set: FrictionSet::Vertex, coefficient: 0.6, torsion: None, facets, treatment: Treatment::Hard };
        let question = block(1, Some(friction), push);
        let report = judge(&question, &Claim::of_torques(&question, vec![]));
        let normal = 30.0 * 9.81;
        let slope = facets.map_or(0.6, |n: usize| 0.6 * (std::f64::consts::PI / n as f64).cos());
        let expected = (slope * normal - push) / 4.0;
        let reading = report.judgements[0].limits.iter().find(|l| l.limit == "friction:sole 0").expect("read");
        assert!((reading.margin - expected).abs() < 1e-6 * normal, "{reading:?} {expected}");
        assert_eq!(reading.broken, expected < 0.0);
        let wrench = &report.judgements[0].implied.as_ref().expect("one rigid sole").soles[0].wrench;
        assert!((wrench.force - Vec3::new(-push, 0.0, normal)).norm() < 1e-8 * normal, "{wrench:?}");
    }
}

/// Two rigid soles under one rigid body state everything twice: statics gives the sum of their wrenches, nothing gives the parts.
#[test]
fn soles_that_state_a_constraint_twice_leave_wrenches_open() {
    let question = block(2, None, 0.0);
    let mut claim = Claim::of_torques(&question, vec![]);
    let report = judge(&question, &claim);
    let implied = report.judgements[0].implied.as_ref().expect("they do not contradict each other");
    assert_eq!((implied.open_wrenches, implied.at_claimed_wrenches), (6, false));
    let sum: Vec3 = implied.soles.iter().map(|s| s.wrench.force).sum();
    assert!((sum - Vec3::new(0.0, 0.0, 30.0 * 9.81)).norm() < 1e-7, "{sum:?}");
    assert!(report.judgements[0].limits.iter().all(|l| !l.determined && !l.broken));
    // Claimed parts of unequal size that balance, about the middle too.
    let part = |force: f64, moment: f64| Some(Wrench { force: Vec3::new(0.0, 0.0, force), moment: Vec3::new(0.0, moment, 0.0) });
    let weight = 30.0 * 9.81;
    claim.wrenches = vec![part(0.7 * weight, 0.0), part(0.3 * weight, -0.1 * weight)];
    let report = judge(&question, &claim);
    let judgement = &report.judgements[0];
    assert!(judgement.implied.as_ref().expect("as before").at_claimed_wrenches, "{report:#?}");
    assert!(judgement.claimed.iter().all(|d| !d.broken));
    claim.wrenches[0] = part(0.7 * weight + 10.0, 0.0);
    assert!(kinds(&judge(&question, &claim)).contains(&ReasonKind::ClaimedPhysics));
}

/// Its own answer passes under every rule; the same answer judged under another rule is flagged, not hidden.
#[test]
fn the_references_own_answer_passes() {
    for rule in [TickRule::BackwardEuler, TickRule::Trapezoid, TickRule::Held] {
        let mut question = biped::standing(2e6);
        question.tick.rule = rule;
        let answer = reference::solve(&question, &Default::default()).expect("a good question");
        let motion = answer.motion.expect("solved");
        let mut claim = Claim::of_torques(&question, motion.torques.clone());
        claim.joint_accelerations = motion.joint_accelerations.iter().copied().map(Some).collect();
        claim.base_acceleration = motion.base_acceleration;
        claim.wrenches = answer.soles.iter().map(|s| s.wrench).collect();
        let report = judge(&question, &claim);
        assert_eq!(report.verdict, Verdict::Pass, "{rule:?} {:#?}", report.judgements[0].reasons);
        assert_eq!(report.judgements.len(), if rule == TickRule::Held { 1 } else { 2 });
        assert_eq!(report.rule_dependent, rule != TickRule::Held);
        // The same torques under a wrong sign of one wrench: the claim contradicts itself.
        claim.wrenches[0] = claim.wrenches[0].map(|w| Wrench { force: -w.force, moment: -w.moment });
        assert_eq!(kinds(&judge(&question, &claim))[0], ReasonKind::ClaimedPhysics);
        // All of them the other way round is a convention, and told.
        claim.wrenches[1] = claim.wrenches[1].map(|w| Wrench { force: -w.force, moment: -w.moment });
        let causes = judge(&question, &claim).causes.expect("asked for");
        let found: Vec<&str> = causes.hypotheses.iter().filter(|h| h.consistent).map(|h| h.mistake).collect();
        assert_eq!((causes.conclusion, found), (Conclusion::Consistent, vec!["wrench_sign"]));
    }
}
