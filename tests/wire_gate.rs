//! Requests that are accepted, and a table of requests that are refused: status and pointer.

mod wire_common;

use serde_json::{Value, json};
use underfoot::wire::{Refusal, read_dynamics, read_model, read_solve};
use wire_common::{Nothing, bytes, dynamics_request, inline_model, model_request, solve_request};

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
    let mut request = solve_request();
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
