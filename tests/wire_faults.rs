//! One refusal lists every fault: wrong types, values out of range, unknown names, each with its pointer; and says nothing
//! that only the other faults are the cause of.

mod wire_common;

use serde_json::{Value, json};
use underfoot::wire::{Refusal, read_dynamics, read_model, read_solve};
use wire_common::{Nothing, bytes, dynamics_request, model_request, solve_request};

fn refusal(request: &Value) -> Refusal {
    match read_solve(&bytes(request), &Nothing) {
        Ok(_) => panic!("accepted: {request}"),
        Err(refusal) => refusal,
    }
}

fn pointers(refusal: &Refusal) -> Vec<&str> {
    refusal.faults.iter().map(|fault| fault.pointer.as_str()).collect()
}

/// Exactly these places, each once.
fn exactly(request: &Value, expected: &[&str]) {
    let refusal = refusal(request);
    let (mut found, mut expected) = (pointers(&refusal), expected.to_vec());
    found.sort_unstable();
    expected.sort_unstable();
    assert_eq!(found, expected, "{refusal:#?}");
    assert_eq!(refusal.status, 422);
}

#[test]
fn types_values_and_names_are_listed_together() {
    let mut request = solve_request();
    request["tick"]["length"] = json!("5 ms");
    request["gravity"] = json!(null);
    request["contacts"][0]["law"]["damping"] = json!(null);
    request["contacts"][0]["normal"] = json!([0.0, 0.1, 1.0]);
    request["contacts"][2]["sole"] = json!("middle");
    request["tasks"][0]["priority"] = json!("first");
    request["tasks"][1]["priority"] = json!(0);
    request["tasks"][3]["sole"] = json!("elsewhere");
    request["tasks"][4]["frame"] = json!("tail");
    request["tasks"][4]["surprise"] = json!(1);
    request["limits"][0]["joints"][0]["name"] = json!("r_elbow");
    request["limits"][0]["joints"][1]["bound"] = json!(-3.0);
    request["state"]["joints"][0]["position"] = json!([0.1]);
    request["state"]["joints"][5]["name"] = json!("l_ancle");
    exactly(&request, &[
        "/tick/length", "/gravity", "/contacts/0/law/damping", "/contacts/0/normal", "/contacts/2/sole", "/tasks/0/priority",
        "/tasks/1/priority", "/tasks/3/sole", "/tasks/4/frame", "/tasks/4/surprise", "/limits/0/joints/0/name",
        "/limits/0/joints/1/bound", "/state/joints/0/position", "/state/joints/5/name",
        // The toe is not among the contacts, whose name for it nobody knows.
        "/tasks/10/sole",
    ]);
}

/// Elements that are left out move those behind them; the pointers still say where they stand in the request.
#[test]
fn pointers_hold_behind_parts_that_are_left_out() {
    let mut request = solve_request();
    request["tasks"][0]["name"] = json!(7);
    request["tasks"][2]["kind"] = json!(null);
    request["tasks"][7]["joints"][0] = json!("r_hip");
    request["tasks"][7]["joints"][1]["name"] = json!("l_hop");
    request["tasks"][11]["joints"][0]["name"] = json!("l_ankle");
    exactly(&request, &[
        "/tasks/0/name", "/tasks/2/kind", "/tasks/7/joints/0", "/tasks/7/joints/1/name", "/tasks/11/joints/0/name",
    ]);
}

/// Without a usable robot no name can be looked up, but everything else is judged.
#[test]
fn a_bad_robot_hides_no_other_fault() {
    let mut request = solve_request();
    request["model"]["soles"][0]["vertices"] = json!([[0.1, -0.05], [-0.06, -0.05], [-0.06, 0.05], [0.1, 0.05]]);
    request["tick"]["length"] = json!(-1.0);
    request["tasks"][0]["priority"] = json!(0);
    request["spread"]["covariance"] = json!([[0.04, 0.01], [0.02, 0.01]]);
    exactly(&request, &["/model/soles/0/vertices", "/tick/length", "/tasks/0/priority", "/spread/covariance/1/0"]);
    request["model"]["joints"][1]["speed"] = json!("fast");
    request["model"]["urdf"] = json!(1);
    exactly(&request, &[
        "/model/soles/0/vertices", "/model/joints/1/speed", "/model/urdf", "/tick/length", "/tasks/0/priority",
        "/spread/covariance/1/0",
    ]);
}

#[test]
fn an_unknown_model_is_listed_among_faults_of_form() {
    let mut request = solve_request();
    request["model"] = json!("m-0");
    request["tick"]["length"] = json!("5 ms");
    exactly(&request, &["/model", "/tick/length"]);
}

#[test]
fn a_refused_tick_is_the_only_fault() {
    for length in [-1.0, 0.0, 5.0] {
        let mut request = solve_request();
        request["tick"]["length"] = json!(length);
        exactly(&request, &["/tick/length"]);
    }
}

#[test]
fn the_list_is_bounded() {
    let mut request = solve_request();
    let task = json!({ "name": 1, "kind": "posture", "priority": 0, "joints": [] });
    request["tasks"] = json!(vec![task; 150]);
    assert_eq!(refusal(&request).faults.len(), 50);
}

/// Every place in a value.
fn places(value: &Value, here: String, out: &mut Vec<String>) {
    match value {
        Value::Array(elements) => {
            elements.iter().enumerate().for_each(|(i, element)| places(element, format!("{here}/{i}"), out));
        }
        Value::Object(members) => {
            members.iter().for_each(|(name, member)| places(member, format!("{here}/{name}"), out));
        }
        _ => {}
    }
    out.push(here);
}

/// A value of the wrong type anywhere is the one thing that is said: nothing is a consequence of leaving it out.
#[test]
fn one_wrong_type_is_one_fault() {
    type Read = fn(&[u8]) -> Result<(), Refusal>;
    let documents: [(Value, Read); 3] = [
        (solve_request(), |body| read_solve(body, &Nothing).map(|_| ())),
        (dynamics_request(), |body| read_dynamics(body, &Nothing).map(|_| ())),
        (model_request(), |body| read_model(body).map(|_| ())),
    ];
    for (request, read) in documents {
        let mut all = Vec::new();
        places(&request, String::new(), &mut all);
        assert!(all.len() > 40);
        for pointer in all {
            let mut changed = request.clone();
            let place = changed.pointer_mut(&pointer).expect("a place");
            *place = if place.is_boolean() { json!("no") } else { json!(false) };
            let refusal = read(&bytes(&changed)).expect_err("a wrong type");
            assert_eq!(pointers(&refusal), [pointer.as_str()], "{refusal:#?}");
        }
    }
}

/// A value fault is said whatever else has the wrong type, as long as that is not around it and not in the robot.
#[test]
fn wrong_types_hide_no_wrong_values() {
    let values = [
        ("/state/base/orientation", json!([0.0, 0.0, 0.1, 1.0])), ("/contacts/0/normal", json!([0.0, 0.1, 1.0])),
        ("/contacts/0/friction/facets", json!(2)), ("/contacts/0/normal_force/largest", json!(1.0)),
        ("/tasks/0/axes/1", json!("x")),
        ("/tasks/1/name", json!("momentum")), ("/tasks/4/frame", json!("tail")), ("/limits/3/joints/0/upper", json!(-1.0)),
        ("/external/0/frame", json!("tail")), ("/latency/torques/0/name", json!("l_ankle")),
        ("/spread/covariance/1/0", json!(0.02)), ("/state/joints/1/name", json!("r_hip")),
    ];
    let types = [
        "/gravity/1", "/tick", "/contacts/1/law/kind", "/contacts/1/measured_wrench", "/tasks/6/must_hold", "/tasks/7/joints/1/position",
        "/limits/0/kind", "/include/2", "/state/velocity_axes/angular", "/loads/0/mass",
    ];
    for (value_at, value) in &values {
        for wrong in types {
            let mut request = solve_request();
            *request.pointer_mut(value_at).expect("a place") = value.clone();
            let place = request.pointer_mut(wrong).expect("a place");
            *place = if place.is_boolean() { json!("no") } else { json!(false) };
            let refusal = refusal(&request);
            for expected in [*value_at, wrong] {
                assert!(pointers(&refusal).contains(&expected), "{value_at} and {wrong}: {refusal:#?}");
            }
        }
    }
}
