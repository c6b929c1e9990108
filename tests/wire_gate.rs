//! Requests that are accepted, and a table of requests that are refused: status and pointer.

mod wire_common;

use serde_json::{Value, json};
use underfoot::wire::{Refusal, read_dynamics, read_model, read_solve};
use wire_common::{Nothing, bytes, dynamics_request, model_request, solve_request};

fn refusal(body: &[u8]) -> Refusal {
    match read_solve(body, &Nothing) {
        Ok(_) => panic!("accepted: {}", String::from_utf8_lossy(body)),
        Err(refusal) => refusal,
    }
}

/// The refusal names this status and, among its faults, this pointer.
fn refused(request: &Value, status: u16, pointer: &str) {
    check(&refusal(&bytes(request)), status, pointer);
}

fn check(refusal: &Refusal, status: u16, pointer: &str) {
    assert_eq!(refusal.status, status, "{pointer}: {refusal:#?}");
    let found = refusal.faults.iter().any(|fault| fault.pointer == pointer);
    assert!(found, "no fault at {pointer:?}: {refusal:#?}");
}

/// The base request with one place replaced (or added).
fn with(pointer: &str, value: Value) -> Value {
    replaced(solve_request(), pointer, value)
}

fn replaced(mut request: Value, pointer: &str, value: Value) -> Value {
    let (parent, member) = pointer.rsplit_once('/').expect("a pointer");
    let parent = request.pointer_mut(parent).unwrap_or_else(|| panic!("no {pointer}"));
    match parent {
        Value::Object(members) => {
            members.insert(member.to_string(), value);
        }
        Value::Array(elements) => {
            let index: usize = member.parse().expect("an index");
            if index == elements.len() {
                elements.push(value);
            } else {
                elements[index] = value;
            }
        }
        _ => panic!("{pointer} has no parent that could hold it"),
    }
    request
}

fn without(pointer: &str) -> Value {
    let mut request = solve_request();
    let (parent, member) = pointer.rsplit_once('/').expect("a pointer");
    match request.pointer_mut(parent) {
        Some(Value::Object(members)) => {
            members.shift_remove(member).unwrap_or_else(|| panic!("no {pointer}"));
        }
        Some(Value::Array(elements)) => {
            elements.remove(member.parse().expect("an index"));
        }
        _ => panic!("no {pointer}"),
    }
    request
}

#[test]
fn full_requests_are_accepted() {
    let question = read_solve(&bytes(&solve_request()), &Nothing).expect("the request is good");
    assert_eq!(question.contacts.len(), 3);
    assert_eq!(question.tasks.len(), 12);
    assert_eq!(question.limits.len(), 5);
    let include = &question.include;
    assert!(include.explain && include.uniqueness && include.sensitivity);
    let spread = include.spread.expect("a spread");
    assert_eq!((spread.covariance, spread.shared), ([[0.04, 0.01], [0.01, 0.01]], false));
    assert_eq!((spread.samples, spread.seed), (100, 7));
    // A correlation of exactly 1 is still semidefinite.
    let edge = with("/spread/covariance", json!([[0.04, 0.02], [0.02, 0.01]]));
    assert!(read_solve(&bytes(&edge), &Nothing).is_ok());
    let include = read_solve(&bytes(&without("/include")), &Nothing).expect("the request is good").include;
    assert!(!(include.problem || include.dynamics || include.explain || include.uniqueness || include.sensitivity));
    assert!(read_solve(&bytes(&without("/spread")), &Nothing).expect("the request is good").include.spread.is_none());
    let question = read_dynamics(&bytes(&dynamics_request()), &Nothing).expect("the request is good");
    assert_eq!(question.frames.len(), 2);
    let model = read_model(&bytes(&model_request())).expect("the request is good");
    assert_eq!(model.soles.len(), 3);
}

#[test]
fn wrong_form_is_refused_at_its_pointer() {
    let cases = [
        ("/tick/length", json!("5 ms")),
        ("/tick", json!([0.005, "explicit"])),
        ("/state", json!([])),
        ("/tick/surprise", json!(1)),
        ("/surprise", json!(1)),
        ("/gravity", json!(null)),
        ("/contacts", json!(null)),
        ("/contacts/0/law/stiffness", json!("soft")),
        ("/contacts/0/law/stiffness/normal", json!("soft")),
        ("/contacts/0/law/stiffness/sideways", json!(1)),
        ("/gravity", json!([0.0, 0.0])),
        ("/gravity", json!([0.0, 0.0, 0.0, 0.0])),
        ("/gravity", json!({ "x": 0 })),
        ("/tick/rule", json!("euler")),
        ("/tick/rule", json!({ "explicit": null })),
        ("/tick/length", json!(1e200)),
        ("/format", json!("underfoot/2")),
        ("/tasks/0/priority", json!(1.5)),
        ("/tasks/0/priority", json!(-1)),
        ("/tasks/0/must_hold", json!(1)),
        ("/tasks/0/axes/0", json!("w")),
        ("/tasks/3/frame", json!("torso")),
        ("/contacts/1/law/stiffness", json!(1.0)),
        ("/include/0", json!("everything")),
        ("/spread/covariance", json!([[0.04, 0.01]])),
        ("/spread/covariance/0", json!([0.04])),
        ("/spread/shared", json!("yes")),
        ("/spread/samples", json!(1.5)),
        ("/spread/seed", json!(-1)),
        ("/model", json!(7)),
        ("/model", json!([])),
    ];
    for (pointer, value) in cases {
        refused(&with(pointer, value), 422, pointer);
    }
    for pointer in ["/format", "/model", "/state", "/tick", "/tick/length", "/tasks/0/kind", "/tasks/3/sole"] {
        refused(&without(pointer), 422, pointer);
    }
    refused(&json!([1, 2, 3]), 422, "");
    refused(&Value::Null, 422, "");
}

#[test]
fn every_fault_is_reported_at_once() {
    let mut request = with("/tick/length", json!("5 ms"));
    request["tasks"][0]["priority"] = json!("first");
    request["contacts"][0]["law"]["damping"] = json!(null);
    let refusal = refusal(&bytes(&request));
    for pointer in ["/tick/length", "/tasks/0/priority", "/contacts/0/law/damping"] {
        check(&refusal, 422, pointer);
    }
    assert_eq!(refusal.faults.len(), 3, "{refusal:#?}");
}

/// Well-formed values that do not hold what they must.
#[test]
fn wrong_values_are_refused_at_their_pointers() {
    let unit = json!([0.0, 0.0, 0.1, 1.0]);
    let two_joints = json!([{ "name": "r_hip", "bound": 1.0 }, { "name": "r_hip", "bound": 1.0 }]);
    let cases = [
        ("/state/base/orientation", unit.clone()),
        ("/contacts/0/rest/orientation", unit.clone()),
        ("/tasks/4/orientation", unit),
        ("/contacts/0/normal", json!([0.0, 0.1, 1.0])),
        ("/contacts/0/law/stiffness/normal", json!(-1.0)),
        ("/contacts/0/law/damping", json!(-1.0)),
        ("/contacts/2/law/stiffness", json!(-1.0)),
        ("/contacts/2/law/per", json!("area")),
        ("/contacts/0/friction/coefficient", json!(0.0)),
        ("/contacts/0/friction/coefficient", json!(-0.5)),
        ("/contacts/0/friction/facets", json!(2)),
        ("/contacts/0/friction/torsion", json!(0.1)),
        ("/contacts/0/friction/treatment/rate", json!(201.0)),
        ("/contacts/0/friction/treatment/rate", json!(-1.0)),
        ("/contacts/0/normal_force/largest", json!(1.0)),
        ("/contacts/0/wrench_rate/force", json!(0.0)),
        ("/contacts/0/sole", json!("middle")),
        ("/contacts/1/sole", json!("left")),
        ("/contacts/2/rest/moment", json!([0.0, 1.0, 0.0])),
        ("/tasks/0/priority", json!(0)),
        ("/tasks/0/priority", json!(101)),
        ("/tasks/0/must_hold", json!(true)),
        ("/tasks/0/weight", json!(0.0)),
        ("/tasks/0/scale", json!(-1.0)),
        ("/tasks/0/position_gain", json!(-1.0)),
        ("/tasks/0/axes", json!([])),
        ("/tasks/0/axes/1", json!("x")),
        ("/tasks/1/name", json!("momentum")),
        ("/tasks/1/name", json!("torque")),
        ("/tasks/1/name", json!("")),
        ("/tasks/3/sole", json!("middle")),
        ("/tasks/3/approach", json!(201.0)),
        ("/tasks/4/frame", json!("tail")),
        ("/tasks/7/joints/0/name", json!("r_elbow")),
        ("/tasks/11/joints/0/name", json!("l_ankle")),
        ("/limits/0/joints/0/name", json!("l_ankle")),
        ("/limits/0/joints/0/name", json!("r_elbow")),
        ("/limits/0/joints/0/bound", json!(-3.0)),
        ("/limits/0/joints", json!([])),
        ("/limits/3/horizon", json!(0.001)),
        ("/limits/3/joints/0/upper", json!(-1.0)),
        ("/limits/3/treatment/priority", json!(0)),
        ("/tick/length", json!(0.0)),
        ("/tick/length", json!(-0.005)),
        ("/tick/length", json!(2.0)),
        ("/external/0/frame", json!("tail")),
        ("/loads/0/frame", json!("tail")),
        ("/latency/delay", json!(0.0)),
        ("/latency/torques/0/name", json!("l_ankle")),
        ("/state/joints/0/name", json!("r_elbow")),
        ("/state/joints/1/name", json!("r_hip")),
        ("/spread/covariance/0/0", json!(-0.04)),
        ("/spread/covariance/1/1", json!(1.5)),
        ("/spread/covariance/1/0", json!(0.02)),
        ("/spread/samples", json!(2001)),
    ];
    for (pointer, value) in cases {
        refused(&with(pointer, value), 422, pointer);
    }
    // Symmetric, variances in range, but a correlation of 1.05.
    refused(&with("/spread/covariance", json!([[0.04, 0.021], [0.021, 0.01]])), 422, "/spread/covariance");
    refused(&with("/spread/covariance", json!([[0.0, 0.001], [0.001, 0.01]])), 422, "/spread/covariance");
    refused(&with("/limits/0/joints", two_joints), 422, "/limits/0/joints/1/name");
    refused(&with("/tasks/2/axes", json!(["x", "rx"])), 422, "/tasks/2/axes/1");
    refused(&with("/loads/0/mass", json!(-1.0)), 422, "/loads/0/mass");
    refused(&with("/contacts/0/friction/set", json!("wrench")), 422, "/contacts/0/friction/torsion");
    refused(&with("/limits/3/treatment", json!({ "kind": "decay", "rate": 1.0 })), 422, "/limits/3/treatment/kind");
    let decaying = json!({ "kind": "decay", "rate": 1.0 });
    refused(&with("/contacts/0/wrench_rate/treatment", decaying), 422, "/contacts/0/wrench_rate/treatment/kind");
}

#[test]
fn what_is_missing_is_named() {
    let cases = [
        ("/state/joints/2", "/state/joints"),
        ("/state/base", "/state/base"),
        ("/contacts/0/rest", "/contacts/0/rest"),
        ("/contacts/1/friction/torsion", "/contacts/1/friction/torsion"),
        ("/tasks/0/center", "/tasks/0/center"),
        ("/tasks/2/position", "/tasks/2/position"),
        ("/tasks/4/orientation", "/tasks/4/orientation"),
        ("/tasks/0/priority", "/tasks/0/priority"),
        ("/latency/torques/1", "/latency/torques"),
    ];
    for (member, pointer) in cases {
        refused(&without(member), 422, pointer);
    }
    let refusal = refusal(&bytes(&without("/state/joints/2")));
    assert!(refusal.faults[0].got.contains("r_ankle"), "{refusal:?}");
}

/// Choices that do not go together.
#[test]
fn contradictions_are_refused() {
    let mut request = without("/contacts/1/measured_wrench");
    // The second rate of momentum needs the present wrench of the rigid sole.
    refused(&request, 422, "/tasks/0/kind");
    request = without("/contacts/1/measured_wrench");
    request["contacts"][1]["wrench_rate"] = json!({ "force": 100.0 });
    refused(&request, 422, "/contacts/1/wrench_rate");
    request = without("/contacts/1/measured_wrench");
    request["contacts"][1]["friction"]["treatment"] = json!({ "kind": "decay", "rate": 1.0 });
    refused(&request, 422, "/contacts/1/friction/treatment/kind");
    request = with("/contacts/0/rest", json!({ "kind": "measured" }));
    refused(&request, 422, "/contacts/0/measured_wrench");
    request = with("/tick/rule", json!("explicit"));
    request["contacts"][0]["law"]["damping"] = json!(0.0);
    refused(&request, 422, "/contacts/0/law/damping");
    request = with("/tick/rule", json!("explicit"));
    request["contacts"][0]["law"]["damping"] = json!(4e3);
    refused(&request, 422, "/contacts/0/law/damping");
    // Without a rigid sole the explicit rule leaves the rate of momentum no freedom.
    request = with("/tick/rule", json!("explicit"));
    if let Some(contacts) = request["contacts"].as_array_mut() {
        contacts.remove(1);
    }
    refused(&request, 422, "/tasks/1/kind");
    refused(&request, 422, "/tasks/2/kind");
    request = with("/model/fixed_base", json!(true));
    refused(&request, 422, "/state/base/linear_velocity");
    refused(&request, 422, "/tasks/9/kind");
}

#[test]
fn too_many_of_anything_is_refused() {
    for (pointer, most) in [("/tasks", 200), ("/contacts", 32), ("/limits", 200), ("/external", 200), ("/loads", 200)] {
        let mut request = solve_request();
        let one = request.pointer(&format!("{pointer}/0")).expect("an entry").clone();
        *request.pointer_mut(pointer).expect("an array") = Value::Array(vec![one; most + 1]);
        refused(&request, 422, pointer);
    }
    let mut request = solve_request();
    let crowd: Vec<Value> = (0..300).map(|i| json!({ "name": format!("joint {i}"), "position": 0.0 })).collect();
    request["state"]["joints"] = json!(crowd);
    refused(&request, 422, "/state/joints");
    let polygon: Vec<[f64; 2]> = (0..65).map(|i| f64::from(i) * 0.09).map(|a| [a.cos(), a.sin()]).collect();
    refused(&with("/model/soles/0/vertices", json!(polygon)), 422, "/model/soles/0/vertices");
    let huge = vec![b' '; 5 * 1024 * 1024];
    assert_eq!(refusal(&huge).status, 413);
    let crowd = format!("[{}1]", "1,".repeat(1_000_000));
    check(&refusal(crowd.as_bytes()), 422, "");
}

/// Robots that cannot be used: the pointer leads to the URDF, the line into it, or to the option.
#[test]
fn bad_models_are_refused_at_their_place() {
    let cases = [
        ("/soles/0/vertices", json!([[0.1, 0.0], [0.0, 0.1]]), "/soles/0/vertices"),
        ("/soles/0/vertices", json!([[0.1, -0.05], [-0.06, -0.05], [-0.06, 0.05], [0.1, 0.05]]), "/soles/0/vertices"),
        ("/soles/0/vertices", json!([[0.1, -0.1], [0.1, 0.1], [0.05, 0.0], [-0.1, 0.1], [-0.1, -0.1]]),
         "/soles/0/vertices/2"),
        ("/soles/0/link", json!("tail"), "/soles/0/link"),
        ("/soles/1/name", json!("left"), "/soles/1/name"),
        ("/soles/0/orientation", json!([0.0, 0.0, 0.0, 2.0]), "/soles/0/orientation"),
        ("/soles/2/vertices", json!([[0.1, 0.0]]), "/soles/2/vertices"),
        ("/joints/0/name", json!("r_elbow"), "/joints/0/name"),
        ("/joints/1/rotor_inertia", json!(-0.1), "/joints/1/rotor_inertia"),
        ("/joints/1/torque_speed/stall", json!(0.0), "/joints/1/torque_speed/stall"),
        ("/joints/1/position/upper", json!(-3.0), "/joints/1/position/upper"),
        ("/urdf", json!("<robot name='r'>\n<link name='a'/>\n<link name='a'/></robot>"), "/urdf"),
        ("/urdf", json!("no robot"), "/urdf"),
    ];
    for (member, value, pointer) in cases {
        let mut request = replaced(model_request(), member, value);
        let refusal = read_model(&bytes(&request)).expect_err("a bad model");
        check(&refusal, 422, pointer);
        if pointer == "/urdf" {
            assert!(refusal.faults[0].line.is_some(), "{refusal:?}");
        }
        // The same robot inside a solve request: the same place below `model`.
        if let Some(members) = request.as_object_mut() {
            members.shift_remove("format");
        }
        check(&self::refusal(&bytes(&with("/model", request))), 422, &format!("/model{pointer}"));
    }
}

#[test]
fn what_is_no_json_is_refused() {
    let good = String::from_utf8(bytes(&solve_request())).expect("text");
    let cases = [
        (String::new(), ""),
        ("{".to_string(), ""),
        ("{\"tick\": {\"length\": 1e999}}".to_string(), "/tick/length"),
        ("{\"tick\": {\"length\": NaN}}".to_string(), "/tick/length"),
        ("{\"tasks\": [1, 2, }".to_string(), "/tasks/2"),
        (good.replace("\"length\":0.005", "\"length\":0.005,\"length\":0.006"), "/tick/length"),
        (good.clone() + "x", ""),
        ("[".repeat(200_000), &"/0".repeat(32)),
        (format!("{{\"tick\": {}{}}}", "[".repeat(40), "]".repeat(40)), &("/tick".to_string() + &"/0".repeat(31))),
    ];
    for (text, pointer) in cases {
        check(&refusal(text.as_bytes()), 400, pointer);
    }
    let twice = good.replace("\"length\":0.005", "\"length\":0.005,\"length\":0.006");
    assert_eq!(refusal(twice.as_bytes()).code, "duplicate-member");
    assert_eq!(refusal(&[0xff, 0xfe, b'{']).status, 400);
}

#[test]
fn unknown_models_are_not_found() {
    let refusal = refusal(&bytes(&with("/model", json!("0123"))));
    check(&refusal, 404, "/model");
    assert_eq!(refusal.code, "unknown-model");
}

/// What the gate makes of a good request.
#[test]
fn values_are_converted() {
    let question = read_solve(&bytes(&solve_request()), &Nothing).expect("the request is good");
    // Stiffness for the whole sole is divided by its area; a point keeps it.
    let per_sole = with("/contacts/0/law/per", json!("sole"));
    let per_sole = read_solve(&bytes(&per_sole), &Nothing).expect("the request is good");
    let stiffness = |question: &underfoot::problem::question::Question, i: usize| {
        match question.contacts[i].ground.law {
            underfoot::contact::Law::Bonded(material) => material.normal_stiffness,
            underfoot::contact::Law::Rigid { .. } => panic!("bonded ground was asked for"),
        }
    };
    let area = 0.16 * 0.1;
    assert!((stiffness(&per_sole, 0) * area - stiffness(&question, 0)).abs() < 1e-6);
    assert_eq!(stiffness(&question, 2), 5e4);
    // A quaternion within 1e-6 of unit length is normalised.
    let nearly = with("/state/base/orientation", json!([0.0, 0.0, 0.6000003, 0.8]));
    let nearly = read_solve(&bytes(&nearly), &Nothing).expect("the request is good");
    let rotation = nearly.state.base_pose.rotation;
    assert!((rotation.transpose() * rotation - underfoot::spatial::Mat3::identity()).amax() < 1e-14);
    // The angular velocity came in base axes, turned about z with cosine 0.28 and sine 0.96.
    let angular = nearly.state.base_twist.angular;
    assert!((angular.x + 0.192).abs() < 1e-6 && (angular.y - 0.056).abs() < 1e-6, "{angular:?}");
    // Joints in bulk mean the same.
    let mut bulk = solve_request();
    bulk["state"] = json!({
        "base": bulk["state"]["base"], "velocity_axes": bulk["state"]["velocity_axes"],
        "names": ["l_ankle", "l_knee", "l_hip", "r_ankle", "r_knee", "r_hip"],
        "positions": [-0.1, 0.2, 0.1, -0.1, 0.2, 0.1], "velocities": [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    });
    assert_eq!(read_solve(&bytes(&bulk), &Nothing).expect("the request is good").state, question.state);
    bulk["state"]["positions"] = json!([0.0]);
    refused(&bulk, 422, "/state/positions");
    // Whole numbers may be written with a decimal point.
    let one = with("/tasks/0/priority", json!(1.0));
    assert!(read_solve(&bytes(&one), &Nothing).is_ok());
    assert_eq!(question.latency.map(|latency| latency.torques), Some(vec![1.0, 1.0, 1.0, 1.0, 1.0, 0.0]));
}

/// Rows are divided by the bound they state. A torque limit of 1e-320 N m made such a row overflow, though every number of
/// the request was finite, and the service answered 500.
#[test]
fn a_limit_too_small_to_divide_by_is_a_fault_and_no_defect() {
    for tiny in [1e-320, 5e-324, 1e-12] {
        refused(&with("/limits/0/joints/0/bound", json!(tiny)), 422, "/limits/0/joints/0/bound");
        refused(&with("/limits/4/joints", json!([{ "name": "r_hip", "bound": tiny }])), 422, "/limits/4/joints/0/bound");
        let line = json!([{ "name": "r_hip", "stall": 100.0, "no_load_speed": tiny }]);
        refused(&with("/limits/1/joints", line), 422, "/limits/1/joints/0/no_load_speed");
        let narrow = json!([{ "name": "r_knee", "lower": 0.0, "upper": tiny }]);
        refused(&with("/limits/3/joints", narrow), 422, "/limits/3/joints/0/upper");
    }
    let single = json!([{ "name": "r_knee", "lower": 0.2, "upper": 0.2 }]);
    assert!(read_solve(&bytes(&with("/limits/3/joints", single)), &Nothing).is_ok());
}

/// A sole without area is not called clockwise.
#[test]
fn a_flat_polygon_is_told_what_is_wrong_with_it() {
    for flat in [
        json!([[0.0, 0.0], [0.1, 0.0], [0.2, 0.0]]), json!([[0.2, 0.1], [0.1, 0.05], [0.0, 0.0], [-0.1, -0.05]]),
        json!([[0.1, 0.3], [0.1, 0.3], [0.1, 0.3]]), json!([[0.0, 0.0], [0.1, 1e-12], [0.2, 0.0]]),
    ] {
        let refusal = refusal(&bytes(&with("/model/soles/0/vertices", flat)));
        check(&refusal, 422, "/model/soles/0/vertices");
        let got = &refusal.faults[0].got;
        assert!(got.contains("one line") && !got.contains("clockwise"), "{got}");
    }
    let crossed = json!([[0.0, 0.0], [0.1, 0.1], [0.1, 0.0], [0.0, 0.1]]);
    let refusal = refusal(&bytes(&with("/model/soles/0/vertices", crossed)));
    assert!(refusal.faults[0].got.contains("not strictly convex"), "{refusal:?}");
}

/// A tick without a rule is held, and the question remembers that nobody chose it.
#[test]
fn the_default_tick_rule_is_held() {
    use underfoot::contact::TickRule;
    let tick = |request: &Value| read_solve(&bytes(request), &Nothing).expect("the request is good").tick;
    let default = tick(&without("/tick/rule"));
    assert_eq!((default.rule, default.chosen), (TickRule::Held, false));
    for (name, rule) in [
        ("held", TickRule::Held), ("backward_euler", TickRule::BackwardEuler), ("trapezoid", TickRule::Trapezoid),
    ] {
        let named = tick(&with("/tick/rule", json!(name)));
        assert_eq!((named.rule, named.chosen), (rule, true));
    }
}
