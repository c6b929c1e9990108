//! The typed pass and the schema pass refuse the same requests: good requests are damaged at random,
//! and whatever the one says, the other must say.

mod wire_common;

use proptest::prelude::*;
use serde_json::{Value, json};
use underfoot::wire::{Refusal, read_dynamics, read_identify, read_model, read_solve, schema};
use wire_common::{Nothing, bytes, dynamics_request, identify_request, model_request, solve_request};

/// Every place in a value.
fn places(value: &Value, here: String, out: &mut Vec<String>) {
    out.push(here.clone());
    match value {
        Value::Array(elements) => {
            elements.iter().enumerate().for_each(|(i, element)| places(element, format!("{here}/{i}"), out));
        }
        Value::Object(members) => {
            members.iter().for_each(|(name, member)| places(member, format!("{here}/{name}"), out));
        }
        _ => {}
    }
}

/// What is put in place of a value.
fn strange() -> Vec<Value> {
    vec![
        json!(null), json!(true), json!(0), json!(-1), json!(1.5), json!(3.0), json!(1e15), json!(1.1e15),
        json!(-1e300), json!(u64::MAX), json!(i64::MIN), json!(4294967296u64), json!(""), json!("x"),
        json!("bonded"), json!("rigid"), json!("posture"), json!("soft"), json!("measured"), json!([]),
        json!([0.0]), json!([0.0, 0.0]), json!([0.0, 0.0, 1.0]), json!([0.0, 0.0, 0.0, 1.0]), json!({}),
        json!({ "kind": "hard" }), json!({ "linear": null }), json!({ "normal": 1.0, "tangential": 2.0 }),
        json!({ "explicit": null }),
    ]
}

#[derive(Debug, Clone)]
enum Damage {
    Replace(usize, usize),
    Remove(usize),
    Add(usize, usize),
    Rename(usize),
    /// A struct as the array of its members.
    Flatten(usize),
    /// Members of one object added to another.
    Graft(usize, usize),
}

fn damage() -> impl Strategy<Value = Damage> {
    let place = 0usize..10_000;
    prop_oneof![
        (place.clone(), 0usize..100).prop_map(|(a, b)| Damage::Replace(a, b)),
        place.clone().prop_map(Damage::Remove),
        (place.clone(), 0usize..100).prop_map(|(a, b)| Damage::Add(a, b)),
        place.clone().prop_map(Damage::Rename),
        place.clone().prop_map(Damage::Flatten),
        (place.clone(), place).prop_map(|(a, b)| Damage::Graft(a, b)),
    ]
}

fn pick(value: &Value, number: usize) -> String {
    let mut all = Vec::new();
    places(value, String::new(), &mut all);
    all[number % all.len()].clone()
}

fn apply(request: &mut Value, damage: &Damage) {
    let (number, other) = match damage {
        Damage::Replace(a, b) | Damage::Add(a, b) | Damage::Graft(a, b) => (*a, *b),
        Damage::Remove(a) | Damage::Rename(a) | Damage::Flatten(a) => (*a, 0),
    };
    let pointer = pick(request, number);
    let strange = strange();
    let new = strange[other % strange.len()].clone();
    let grafted = request.pointer(&pick(request, other)).cloned().unwrap_or_default();
    let parts = pointer.rsplit_once('/').map(|(parent, name)| (parent.to_string(), name.to_string()));
    match damage {
        Damage::Replace(..) => *request.pointer_mut(&pointer).expect("a place") = new,
        Damage::Remove(_) | Damage::Rename(_) => {
            let Some((parent, name)) = parts else { return };
            match request.pointer_mut(&parent) {
                Some(Value::Object(members)) => {
                    let value = members.shift_remove(&name).unwrap_or_default();
                    if matches!(damage, Damage::Rename(_)) {
                        members.insert(format!("{name}_"), value);
                    }
                }
                Some(Value::Array(elements)) => {
                    elements.remove(name.parse().expect("an index"));
                }
                _ => {}
            }
        }
        Damage::Add(..) => match request.pointer_mut(&pointer) {
            Some(Value::Object(members)) => {
                members.insert("stop".to_string(), new);
            }
            Some(Value::Array(elements)) => elements.push(new),
            _ => {}
        },
        Damage::Flatten(_) => {
            let place = request.pointer_mut(&pointer).expect("a place");
            if let Value::Object(members) = place {
                *place = Value::Array(members.values().cloned().collect());
            }
        }
        Damage::Graft(..) => {
            if let (Some(Value::Object(members)), Value::Object(more)) =
                (request.pointer_mut(&pointer), grafted)
            {
                members.extend(more);
            }
        }
    }
}

fn agree(name: &str, request: &Value, outcome: Result<(), Refusal>) -> Result<(), TestCaseError> {
    thread_local! {
        static VALIDATORS: std::cell::RefCell<std::collections::HashMap<String, jsonschema::Validator>> =
            Default::default();
    }
    let valid = VALIDATORS.with_borrow_mut(|validators| {
        let validator = validators.entry(name.to_string()).or_insert_with(|| {
            let schema = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
            jsonschema::validator_for(&schema).expect("a schema that can be used")
        });
        validator.is_valid(request)
    });
    match outcome {
        Ok(()) => prop_assert!(valid, "the gate accepts what the schema refuses: {request}"),
        Err(refusal) => {
            prop_assert!([422, 404].contains(&refusal.status), "{refusal:?}");
            prop_assert_ne!(refusal.code, "unusable-form", "the schema sees no fault: {:?}", refusal);
            prop_assert!(!refusal.faults.is_empty());
        }
    }
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 1500, ..ProptestConfig::default() })]

    #[test]
    fn damaged_requests_are_judged_alike(damages in prop::collection::vec(damage(), 1..4)) {
        let mut request = solve_request();
        damages.iter().for_each(|damage| apply(&mut request, damage));
        agree("solve-request", &request, read_solve(&bytes(&request), &Nothing).map(|_| ()))?;
        let mut request = model_request();
        damages.iter().for_each(|damage| apply(&mut request, damage));
        agree("model-request", &request, read_model(&bytes(&request)).map(|_| ()))?;
        let mut request = dynamics_request();
        damages.iter().for_each(|damage| apply(&mut request, damage));
        agree("dynamics-request", &request, read_dynamics(&bytes(&request), &Nothing).map(|_| ()))?;
        let mut request = identify_request();
        damages.iter().for_each(|damage| apply(&mut request, damage));
        agree("identify-request", &request, read_identify(&bytes(&request), &Nothing).map(|_| ()))?;
    }

    /// Whatever the bytes, the gate answers with one of its statuses.
    #[test]
    fn damaged_bytes_are_refused_or_read(
        cuts in prop::collection::vec((0usize..20_000, 0usize..256, any::<bool>()), 1..6),
    ) {
        let mut body = bytes(&solve_request());
        for (at, byte, insert) in cuts {
            let at = at % body.len();
            let byte = u8::try_from(byte).unwrap_or(0);
            if insert { body.insert(at, byte) } else { body[at] = byte }
        }
        if let Err(refusal) = read_solve(&body, &Nothing) {
            prop_assert!([400, 404, 422].contains(&refusal.status), "{refusal:?}");
            prop_assert_ne!(refusal.code, "unusable-form", "{:?}", refusal);
        }
    }
}
