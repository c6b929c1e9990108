//! Documents on their way out follow their schemas, hold no number that is not finite, and are the
//! same bytes each time.

mod wire_common;

use std::sync::Arc;

use serde_json::{Value, json};
use underfoot::certify::{Certificate, Check, LevelCheck};
use underfoot::conic::{Column, Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName};
use underfoot::explain::farkas::{Farkas, Multiplier};
use underfoot::explain::infeasible::{Alone, Explanation, IrreducibleSet};
use underfoot::explain::relax::{GroupRelaxation, Relaxation, RowRelaxation};
use underfoot::explain::sensitivity::{Derivative, NearChange, Sensitivity};
use underfoot::explain::spread::{Moments, Spread};
use underfoot::explain::uniqueness::{Range, Uniqueness};
use underfoot::explain::{Parameter, ParameterKind};
use underfoot::model::Model;
use underfoot::problem::question::Question;
use underfoot::reference::answer::{
    Answer, Binding, Blocking, DynamicsReport, Explained, FrameReport, FreeDirection, GroundReport, LevelAnswer,
    Margin, Motion, RelaxedAnswer, Rocking, SoleAnswer, SoleGround, Status, TaskAnswer, Warning,
};
use underfoot::spatial::{Vec3, Wrench};
use underfoot::wire::{
    ModelSource, fingerprint, read_dynamics, read_model, read_solve, schema, write_answer, write_dynamics,
    write_model, write_refusal,
};
use wire_common::{Nothing, bytes, dynamics_request, model_request, solve_request};

fn follows(name: &str, document: &[u8]) -> Value {
    let schema: Value = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
    let validator = jsonschema::validator_for(&schema).expect("a schema that can be used");
    let value: Value = serde_json::from_slice(document).expect("JSON");
    let errors: Vec<String> =
        validator.iter_errors(&value).map(|e| format!("{}: {e}", e.instance_path())).collect();
    assert!(errors.is_empty(), "{name}: {errors:#?}");
    value
}

fn question() -> Question {
    read_solve(&bytes(&solve_request()), &Nothing).expect("the request is good")
}

fn rows() -> ConicRows {
    let mut rows = ConicRows::new(2);
    rows.matrix.push([(0, 1.0), (1, -2.0)]);
    rows.matrix.push([]);
    rows.matrix.push([(1, 3.0)]);
    rows.rhs = vec![1.0, 0.0, 2.0];
    rows.cones = vec![Cone::Zero(1), Cone::SecondOrder(2)];
    rows.names = vec![row(), row(), row()];
    rows
}

fn row() -> RowName {
    RowName { group: "torque".into(), part: "r_hip".into(), unit: "N m", scale: 10.0, physics: false }
}

fn hierarchy() -> Hierarchy {
    let mut residuals = ResidualRows::new(2);
    residuals.matrix.push([(1, 1.0)]);
    residuals.rhs = vec![0.5];
    residuals.weight = vec![1.0];
    residuals.names = vec![row()];
    Hierarchy {
        columns: vec![
            Column { name: "torque:r_hip".into(), unit: "N m", scale: 10.0 },
            Column { name: "wrench:left:fz".into(), unit: "N", scale: 100.0 },
        ],
        hard: rows(),
        levels: vec![Level { priority: 1, residuals: residuals.clone(), soft: rows(), soft_weight: vec![1.0] }],
        tie_break: residuals,
        auxiliary: vec![1],
    }
}

fn report() -> DynamicsReport {
    let two = [Vec3::x(), Vec3::y()];
    DynamicsReport {
        mass: 20.0,
        velocities: vec!["base:vx".into(), "r_hip".into()],
        mass_matrix: vec![vec![20.0, 0.1], vec![0.1, 1.0]],
        bias: vec![0.0, 1.0],
        friction: vec![0.0, 0.1],
        center_of_mass: Vec3::z(),
        center_of_mass_velocity: Vec3::zeros(),
        momentum: two,
        momentum_matrix: vec![vec![1.0, 0.0]; 6],
        momentum_bias: two,
        kinetic_energy: 1.0,
        potential_energy: 2.0,
        frames: vec![FrameReport {
            name: "left".into(),
            position: Vec3::x(),
            orientation: [0.0, 0.0, 0.0, 1.0],
            twist: two,
            jacobian: vec![vec![1.0, 0.0]; 6],
            bias_acceleration: two,
        }],
    }
}

fn sole() -> SoleAnswer {
    let wrench = Some(Wrench { force: Vec3::z() * 100.0, moment: Vec3::x() });
    SoleAnswer {
        contact: 0,
        name: "left".into(),
        wrench,
        wrench_in_sole_axes: wrench,
        wrench_over_tick: wrench,
        present: wrench,
        present_in_sole_axes: None,
        normal_force: Some(100.0),
        center_of_pressure: Some([0.01, 0.0]),
        friction_use: Some(0.2),
        edge_distance: None,
        vertex_forces: vec![Vec3::z()],
        acceleration: Some([Vec3::x(), Vec3::y()]),
        linearisation_error: Some([0.1, 0.01]),
    }
}

fn answer() -> Answer {
    let level = LevelAnswer {
        priority: 1, cost: 0.1, rows: 6, rank: 5, smallest_kept: Some(0.1), largest_dropped: None,
        freedom_left: 3, faces: vec!["friction:left".into()], refined: true, error_bound: 1e-9, iterations: 9,
    };
    let check = Check {
        name: "dynamics", relative_to: "of the robot's weight", value: 1e-12, bound: 1e-9, worst: "r_hip".into(),
    };
    let level_check = LevelCheck {
        priority: 1, stationarity: 1e-10, complementarity: 0.0, dual_violation: 0.0, feasibility: 0.0,
        bound: 1e-8,
    };
    Answer {
        status: Status::Solved,
        motion: Some(Motion {
            torques: vec![1.0; 6],
            joint_accelerations: vec![-0.5; 6],
            base_acceleration: Some([Vec3::x(), Vec3::y()]),
        }),
        soles: vec![sole()],
        tasks: vec![TaskAnswer {
            name: "momentum".into(), unit: "N/s", priority: Some(1), rows: vec!["x".into()], units: vec!["N/s"],
            desired: vec![1.0], achieved: vec![1.5], residual: vec![0.5],
        }],
        levels: vec![level],
        binding: vec![Binding {
            limit: "torque".into(), part: "r_hip".into(), priority: 1, multiplier: 0.5, unit: "N m",
        }],
        margins: vec![Margin { limit: "torque".into(), part: "r_hip".into(), margin: 0.0, unit: "N m" }],
        free: vec![FreeDirection { parts: vec![("torque:r_hip".into(), 1.0, "N m")] }],
        certificate: Some(Certificate { holds: true, checks: vec![check], levels: vec![level_check] }),
        blocking: vec![Blocking { group: "torque".into(), share: 1.0 }],
        ground: GroundReport {
            omega_max: 100.0,
            omega_max_tick: 0.5,
            soles: vec![SoleGround {
                name: "left".into(), damping_time: Some(0.01), tick_stiffness_over_damping: Some(0.5), sink: None,
            }],
            rocking: Some(Rocking { bed: 500.0, weight: 200.0 }),
        },
        warnings: vec![Warning { code: "coarse-tick", text: "omega_max T is 0.5".into() }],
        problem: Some(Box::new(hierarchy())),
        dynamics: Some(Box::new(report())),
        explained: None,
        uniqueness: None,
        sensitivity: None,
        spread: None,
    }
}

fn explained(answer: &Answer) -> Explained {
    let relaxation = Relaxation {
        sum: 0.25,
        rows: vec![RowRelaxation {
            group: "torque".into(), part: "r_hip upper".into(), amount: 5.0, unit: "N m", size: 10.0, share: 1.0,
        }],
        groups: vec![GroupRelaxation { group: "torque".into(), share: 1.0 }],
        deltas: vec![0.5, 0.0, 0.0],
        proved: 0.249,
        multipliers: vec![1.0, 0.0, -1.0],
        exact: true,
    };
    let proof = Farkas {
        value: -1.0, spill: 1e-9, holds: true, acceleration_bound: 1e4, force_bound: 1e6,
        multipliers: vec![Multiplier { group: "dynamics".into(), part: "base:vx".into(), physics: true, value: -0.5 }],
        projected: vec![1.0, 0.0, -1.0],
    };
    let alone = vec![
        Alone { group: "torque".into(), needs: Some(relaxation.clone()) },
        Alone { group: "friction:left".into(), needs: None },
    ];
    Explained {
        explanation: Explanation {
            proof: Some(proof), relaxation: Some(relaxation), alone, alone_complete: true,
            irreducible: IrreducibleSet { groups: vec!["torque".into()], complete: true }, solves: 7,
        },
        relaxed: Some(RelaxedAnswer {
            status: Status::Solved, slack: 5e-5, motion: answer.motion.clone().expect("motion"),
            soles: answer.soles.clone(), tasks: answer.tasks.clone(), levels: answer.levels.clone(),
            margins: answer.margins.clone(),
        }),
    }
}

/// The answer with everything that can be asked for beyond it.
fn full() -> Answer {
    let mut answer = answer();
    let contact = |kind| Parameter { contact: 0, kind };
    let derivative = Derivative {
        parameter: contact(ParameterKind::Stiffness), value: None, torques: vec![0.1; 6],
        accelerations: (0..12).map(f64::from).collect(), wrenches: vec![[1.0, 2.0, 3.0, 4.0, 5.0, 6.0]; 3],
        margins: vec![-0.1], reaches: Some(0.2),
    };
    answer.explained = Some(Box::new(explained(&answer)));
    answer.uniqueness = Some(Box::new(Uniqueness {
        directions: 1,
        ranges: vec![Range {
            name: "torque:r_hip".into(), unit: "N m", value: 1.0, least: Some(0.5), largest: None, exact: true,
        }],
        solves: 2,
        complete: true,
    }));
    answer.sensitivity = Some(Box::new(Sensitivity {
        derivatives: vec![derivative],
        undefined: vec![contact(ParameterKind::Friction)],
        near: vec![NearChange { limit: "torque".into(), part: "r_hip".into(), value: 1e-5, binds: false }],
        why_not: None,
    }));
    let moments = Moments {
        answered: 8, failed: 1, cut: 0, torque_mean: vec![1.0; 6], torque_deviation: vec![0.1; 6],
        margin_mean: vec![0.5], margin_deviation: vec![0.2], margin_positive: vec![0.9],
    };
    answer.spread = Some(Box::new(Spread { sigma_points: moments.clone(), samples: Some(moments), seed: 7 }));
    answer
}

/// Everything asked for beyond the answer stands in the document under names.
#[test]
fn what_was_asked_for_beyond_the_answer_follows_the_schema() {
    let (question, answer) = (question(), full());
    let document = follows("solve-answer", &write_answer(&question, &answer, "f00d"));
    let alone = &document["explained"]["alone"];
    assert_eq!(alone[0]["needs"]["rows"][0]["amount"], 5.0);
    assert_eq!(alone[1], json!({ "group": "friction:left", "needs": null }));
    assert_eq!(document["explained"]["relaxed"]["joints"], document["joints"]);
    assert_eq!(document["uniqueness"]["ranges"][0]["largest"], Value::Null);
    let by = &document["sensitivity"]["derivatives"][0];
    assert_eq!((&by["sole"], &by["parameter"], &by["unit"]), (&json!("left"), &json!("stiffness"), &json!("N/m^3")));
    // The base comes before the joints.
    assert_eq!(by["base_acceleration"], json!({ "linear": [0.0, 1.0, 2.0], "angular": [3.0, 4.0, 5.0] }));
    assert_eq!(by["joints"][0], json!({ "name": "r_hip", "torque": 0.1, "acceleration": 6.0 }));
    assert_eq!(by["soles"][0]["wrench"], json!({ "force": [1.0, 2.0, 3.0], "moment": [4.0, 5.0, 6.0] }));
    assert_eq!(by["margins"][0], json!({ "limit": "torque", "part": "r_hip", "change": -0.1, "unit": "N m" }));
    assert_eq!(document["sensitivity"]["undefined"], json!([{ "sole": "left", "parameter": "friction" }]));
    let spread = &document["spread"]["samples"];
    assert_eq!(spread["joints"][5]["deviation"], 0.1);
    assert_eq!(
        spread["margins"],
        json!([{ "limit": "torque", "part": "r_hip", "mean": 0.5, "deviation": 0.2, "positive": 0.9, "unit": "N m" }])
    );
}

#[test]
fn answers_follow_their_schema() {
    let (question, answer) = (question(), answer());
    let document = follows("solve-answer", &write_answer(&question, &answer, "f00d"));
    assert_eq!(document["status"], "solved");
    assert_eq!(document["fingerprint"], "f00d");
    let tick = json!({ "length": 0.005, "rule": "backward_euler", "rule_by_default": false });
    assert_eq!(document["tick"], tick);
    let mut unnamed = question.clone();
    unnamed.tick.chosen = false;
    assert_eq!(follows("solve-answer", &write_answer(&unnamed, &answer, "00"))["tick"]["rule_by_default"], true);
    assert_eq!(document["velocity_axes"], json!({ "linear": "world", "angular": "base" }));
    assert_eq!(document["joints"][1], json!({ "name": "r_knee", "torque": 1.0, "acceleration": -0.5 }));
    let matrix = &document["problem"]["hard"]["matrix"];
    assert_eq!(
        *matrix,
        json!({ "rows": 3, "columns": 2, "row": [0, 0, 2], "column": [0, 1, 1], "value": [1.0, -2.0, 3.0] })
    );
    assert_eq!(document["problem"]["hard"]["cones"][1], json!({ "kind": "second_order", "rows": 2 }));
    for (status, word) in [
        (Status::Infeasible, "infeasible"), (Status::NotReachable, "not_reachable"),
        (Status::IllPosed, "ill_posed"), (Status::Inaccurate, "inaccurate"), (Status::Cancelled, "cancelled"),
    ] {
        let empty = Answer {
            status, motion: None, soles: vec![], certificate: None, problem: None, dynamics: None,
            ..answer.clone()
        };
        let document = follows("solve-answer", &write_answer(&question, &empty, ""));
        assert_eq!(document["status"], word);
        assert_eq!(document["joints"], Value::Null);
        assert!(document.get("problem").is_none());
    }
}

#[test]
fn same_answer_same_bytes() {
    let (question, answer) = (question(), answer());
    let first = write_answer(&question, &answer, "");
    for _ in 0..100 {
        assert_eq!(write_answer(&question, &answer, ""), first);
    }
}

/// Every double that is written reads back as the same double.
#[test]
fn doubles_survive() {
    let question = question();
    let mut answer = answer();
    let torques = vec![0.1 + 0.2, 5e-324, -1.7976931348623157e308, 1.0 / 3.0, -0.0, 6.02214076e23];
    if let Some(motion) = &mut answer.motion {
        motion.torques.clone_from(&torques);
    }
    let document = follows("solve-answer", &write_answer(&question, &answer, ""));
    for (i, torque) in torques.iter().enumerate() {
        let read = document["joints"][i]["torque"].as_f64().expect("a number");
        assert_eq!(read.to_bits(), torque.to_bits());
    }
}

/// A number that is not finite never passes as null: the answer is withheld and says so.
#[test]
fn numbers_that_are_not_finite_withhold_the_answer() {
    let question = question();
    let spoil: [fn(&mut Answer); 10] = [
        |a| a.motion.as_mut().expect("motion").torques[3] = f64::NAN,
        |a| a.soles[0].normal_force = Some(f64::INFINITY),
        |a| a.tasks[0].residual[0] = f64::NEG_INFINITY,
        |a| a.ground.omega_max = f64::NAN,
        |a| a.problem.as_mut().expect("problem").hard.rhs[0] = f64::NAN,
        |a| a.dynamics.as_mut().expect("dynamics").mass_matrix[1][1] = f64::NAN,
        |a| a.explained.as_mut().expect("explained").relaxed.as_mut().expect("relaxed").slack = f64::NAN,
        |a| a.uniqueness.as_mut().expect("uniqueness").ranges[0].largest = Some(f64::INFINITY),
        |a| a.sensitivity.as_mut().expect("sensitivity").derivatives[0].wrenches[2][5] = f64::NAN,
        |a| a.spread.as_mut().expect("spread").sigma_points.margin_mean[0] = f64::NAN,
    ];
    for spoil in spoil {
        let mut answer = full();
        spoil(&mut answer);
        let document = follows("solve-answer", &write_answer(&question, &answer, "f00d"));
        assert_eq!(document["status"], "inaccurate");
        assert_eq!(document["joints"], Value::Null);
        let warnings = document["warnings"].as_array().expect("warnings");
        assert!(warnings.iter().any(|warning| warning["code"] == "not-finite"), "{document}");
    }
}

#[test]
fn dynamics_follow_their_schema() {
    let request = bytes(&dynamics_request());
    let question = read_dynamics(&request, &Nothing).expect("the request is good");
    let mut report = report();
    let document = follows("dynamics-answer", &write_dynamics(&question, &report, &fingerprint(&request)));
    assert_eq!(document["dynamics"]["mass_matrix"], json!([[20.0, 0.1], [0.1, 1.0]]));
    report.bias[0] = f64::NAN;
    let document = follows("dynamics-answer", &write_dynamics(&question, &report, ""));
    assert_eq!(document["dynamics"], Value::Null);
}

/// A registered model stands for itself: by its id the same question comes out.
#[test]
fn a_model_can_be_named_by_its_id() {
    struct One(Arc<Model>);
    impl ModelSource for One {
        fn find(&self, id: &str) -> Option<Arc<Model>> {
            (id == self.0.id).then(|| self.0.clone())
        }
    }
    let model = read_model(&bytes(&model_request())).expect("the request is good");
    let document = follows("model", &write_model(&model));
    assert_eq!(document["joints"].as_array().map(Vec::len), Some(6));
    assert_eq!(document["soles"][2]["vertices"], json!([]));
    let mut request = solve_request();
    request["model"] = document["id"].clone();
    let by_id = read_solve(&bytes(&request), &One(Arc::new(model))).expect("the request is good");
    let inline = question();
    assert_eq!(by_id.model, inline.model);
    assert_eq!(by_id.tasks, inline.tasks);
}

#[test]
fn refusals_follow_their_schema() {
    let mut request = model_request();
    request["urdf"] = json!("<robot name='r'>\n<link/></robot>");
    let refusal = read_model(&bytes(&request)).expect_err("a bad model");
    let document = follows("problem", &write_refusal(&refusal, "/v1/models"));
    assert_eq!(document["status"], 422);
    assert_eq!(document["instance"], "/v1/models");
    assert_eq!(document["faults"][0]["line"], 2);
    let refusal = read_solve(b"{", &Nothing).expect_err("no JSON");
    let document = follows("problem", &write_refusal(&refusal, "/v1/solve"));
    assert_eq!((&document["status"], &document["code"]), (&json!(400), &json!("not-json")));
    assert!(document["faults"][0].get("line").is_none());
}

/// What was withheld is named, and so are the members of the request that are too large to compute with.
#[test]
fn a_withheld_answer_names_the_members_at_fault() {
    let mut answer = answer();
    answer.certificate.as_mut().expect("a certificate").checks[0].value = f64::NAN;
    answer.tasks[0].desired[0] = 5.1e14;
    let mut question = question();
    question.external[0].wrench.force.y = -1e12;
    let document = follows("solve-answer", &write_answer(&question, &answer, "00"));
    let warnings = document["warnings"].as_array().expect("warnings").clone();
    let text = warnings.iter().find(|w| w["code"] == "not-finite").expect("a warning")["text"].to_string();
    for part in ["in certificate;", "/tasks/0", "5.1e14", "/external/0/force (1.0e12 N)"] {
        assert!(text.contains(part), "{part}: {text}");
    }
    assert!(!text.contains("/state") && !text.contains("/tasks/1"), "{text}");
}
