//! Every range that the published schemas state is the one the gate enforces: just outside it a request is refused with a
//! pointer to that member, just inside it is not.

mod wire_common;

use serde_json::{Value, json};
use underfoot::wire::{Refusal, read_dynamics, read_model, read_solve, schema};
use wire_common::{Nothing, bytes, dynamics_request, model_request, solve_request};

/// A request in which every member that has a range stands somewhere.
fn full_request() -> Value {
    let mut request = solve_request();
    // A horizon and rates may be as small or large as their own range says only with the shortest tick.
    request["tick"] = json!({ "length": 1e-6, "rule": "backward_euler" });
    request["limits"][1]["joints"] = json!([{ "name": "r_hip", "stall": 100.0, "no_load_speed": 20.0 }]);
    request["limits"][1]["treatment"] =
        json!({ "kind": "soft", "priority": 1, "weight": 1.0, "scale": 1.0 });
    request["tasks"][5]["gains_angular"] = json!({ "position": 1.0, "velocity": 20.0 });
    request["tasks"][5]["scale_angular"] = json!(1.0);
    request["contacts"][0]["law"]["damping"] = json!({ "normal": 1e4, "tangential": 1e4 });
    request["limits"][4]["joints"] = json!([{ "name": "r_hip", "bound": 10.0 }]);
    request["limits"][4]["horizon"] = json!(0.1);
    request
}

/// The same with the joints of the state in bulk.
fn bulk_request() -> Value {
    let mut request = full_request();
    request["state"] = json!({
        "base": request["state"]["base"], "names": ["r_hip", "r_knee", "r_ankle", "l_hip", "l_knee", "l_ankle"],
        "positions": [0.1, 0.2, -0.1, 0.1, 0.2, -0.1], "velocities": [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    });
    request
}

/// A place in a request that the schema gives a range, with the schema of the place.
struct Ranged {
    pointer: String,
    schema: Value,
}

const RANGES: [&str; 8] = [
    "minimum", "maximum", "exclusiveMinimum", "exclusiveMaximum", "minItems", "maxItems", "minLength", "maxLength",
];

/// The bound of every number, whatever its unit.
const LARGEST: f64 = 1e15;

/// True where the schema states more than what holds for every number.
fn has_range(schema: &Value) -> bool {
    let general = |name: &&str| schema[*name].as_f64().is_some_and(|v| v.abs() == LARGEST);
    let fixed = schema.get("minItems").is_some() && schema.get("minItems") == schema.get("maxItems");
    !fixed && RANGES.iter().any(|name| schema.get(name).is_some() && !general(name))
}

/// Walks the request and its schema side by side.
fn walk(root: &Value, schema: &Value, value: &Value, here: &str, out: &mut Vec<Ranged>) {
    if RANGES.iter().any(|name| schema.get(name).is_some()) {
        out.push(Ranged { pointer: here.to_string(), schema: schema.clone() });
    }
    for form in forms(root, schema) {
        match value {
            Value::Object(members) => {
                for (name, member) in members {
                    if let Some(part) = form.pointer(&format!("/properties/{name}")) {
                        walk(root, part, member, &format!("{here}/{name}"), out);
                    }
                }
            }
            Value::Array(elements) => {
                for (i, element) in elements.iter().enumerate() {
                    if let Some(part) = form.pointer(&format!("/prefixItems/{i}")).or(form.get("items")) {
                        walk(root, part, element, &format!("{here}/{i}"), out);
                    }
                }
            }
            _ => {}
        }
    }
}

/// The schema itself, what it refers to, and its alternatives.
fn forms<'a>(root: &'a Value, schema: &'a Value) -> Vec<&'a Value> {
    let mut all = vec![schema];
    if let Some(target) = schema.get("$ref").and_then(Value::as_str) {
        let target = root.pointer(target.trim_start_matches('#')).expect("a local reference");
        all.extend(forms(root, target));
    }
    for form in schema.get("anyOf").and_then(Value::as_array).into_iter().flatten() {
        all.extend(forms(root, form));
    }
    all
}

/// Values just outside and just inside the range of `schema`, for the value that stands there.
fn edges(schema: &Value, now: &Value) -> (Vec<Value>, Vec<Value>) {
    let (mut outside, mut inside) = (Vec::new(), Vec::new());
    let bound = |name: &str| schema.get(name).and_then(Value::as_f64);
    let count = |name: &str| schema.get(name).and_then(Value::as_u64).map(|n| n as usize);
    let whole = schema["type"] == "integer";
    let step = |value: f64, up: bool| match (whole, up) {
        (true, true) => value + 1.0,
        (true, false) => value - 1.0,
        (false, true) => value.next_up(),
        (false, false) => value.next_down(),
    };
    if now.is_number() {
        if let Some(least) = bound("minimum") {
            outside.push(json!(step(least, false)));
            inside.push(json!(least));
        }
        if let Some(least) = bound("exclusiveMinimum") {
            outside.push(json!(least));
            inside.push(json!(step(least, true)));
        }
        if let Some(most) = bound("maximum") {
            outside.push(json!(step(most, true)));
            inside.push(json!(most));
        }
    }
    if let Some(elements) = now.as_array() {
        let of_length = |n: usize| Value::Array(elements.iter().cycle().take(n).cloned().collect());
        if let Some(least) = count("minItems").filter(|n| *n > 0) {
            outside.push(of_length(least - 1));
            inside.push(of_length(least));
        }
        if let Some(most) = count("maxItems") {
            outside.push(of_length(most + 1));
            inside.push(of_length(most));
        }
    }
    if now.is_string() {
        // Two bytes a character: lengths are counted in characters.
        if let Some(least) = count("minLength").filter(|n| *n > 0) {
            outside.push(json!("\u{e9}".repeat(least - 1)));
            inside.push(json!("\u{e9}".repeat(least)));
        }
        if let Some(most) = count("maxLength") {
            outside.push(json!("\u{e9}".repeat(most + 1)));
            inside.push(json!("\u{e9}".repeat(most)));
        }
    }
    (outside, inside)
}

fn check(name: &str, request: &Value, read: impl Fn(&[u8]) -> Result<(), Refusal>) -> Vec<String> {
    let root: Value = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
    assert_eq!(read(&bytes(request)), Ok(()), "{name}");
    let mut places = Vec::new();
    walk(&root, &root, request, "", &mut places);
    for place in &places {
        let now = request.pointer(&place.pointer).expect("a place");
        let (outside, inside) = edges(&place.schema, now);
        let with = |value: Value| {
            let mut changed = request.clone();
            *changed.pointer_mut(&place.pointer).expect("a place") = value;
            read(&bytes(&changed))
        };
        let points_here = |refusal: &Refusal| refusal.faults.iter().any(|fault| fault.pointer == place.pointer);
        for value in outside {
            let refusal = with(value.clone()).expect_err(&format!("{name}{} = {value} is outside", place.pointer));
            assert!(refusal.status == 422 && points_here(&refusal), "{}: {refusal:#?}", place.pointer);
        }
        // The bound that every number has leaves room for narrower ones by what stands beside it.
        for value in inside.into_iter().filter(|value| value.as_f64().is_none_or(|v| v.abs() < LARGEST)) {
            if let Err(refusal) = with(value.clone()) {
                assert!(!points_here(&refusal), "{} = {value} is inside: {refusal:#?}", place.pointer);
            }
        }
    }
    places.iter().map(|place| place.pointer.clone()).collect()
}

#[test]
fn stated_ranges_are_the_enforced_ones() {
    let solve = check("solve-request", &full_request(), |body| read_solve(body, &Nothing).map(|_| ()));
    check("solve-request", &bulk_request(), |body| read_solve(body, &Nothing).map(|_| ()));
    let model = check("model-request", &model_request(), |body| read_model(body).map(|_| ()));
    check("dynamics-request", &dynamics_request(), |body| read_dynamics(body, &Nothing).map(|_| ()));
    for pointer in [
        "/tick/length", "/contacts", "/contacts/0/law/stiffness/normal", "/contacts/2/law/stiffness", "/contacts/2/law/damping",
        "/contacts/0/friction/coefficient", "/contacts/0/friction/facets", "/contacts/1/friction/torsion",
        "/contacts/0/friction/treatment/rate", "/contacts/0/wrench_rate/force", "/contacts/0/wrench_rate/treatment/scale",
        "/tasks/0/priority", "/tasks/0/weight", "/tasks/0/name", "/tasks/0/axes", "/tasks/3/approach", "/tasks/7/gains/position",
        "/limits/0/joints", "/limits/0/joints/0/bound", "/limits/1/joints/0/stall", "/limits/3/horizon", "/latency/delay",
        "/loads/0/mass", "/spread/covariance/0/0", "/spread/samples", "/model/soles/0/vertices",
    ] {
        assert!(solve.iter().any(|place| place == pointer), "no range at {pointer}");
    }
    for pointer in ["/joints/1/rotor_inertia", "/joints/1/torque_speed/stall", "/joints/1/speed", "/soles", "/joints"] {
        assert!(model.iter().any(|place| place == pointer), "no range at {pointer}");
    }
}

/// No ranged member is left out of the test above: every range of the schema was met somewhere in the requests.
#[test]
fn every_range_is_met() {
    for (name, request) in
        [("solve-request", full_request()), ("model-request", model_request()), ("dynamics-request", dynamics_request())]
    {
        let root: Value = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
        let mut places = Vec::new();
        walk(&root, &root, &request, "", &mut places);
        let mut bulk = request.clone();
        bulk["state"] = bulk_request()["state"].clone();
        walk(&root, &root, &bulk, "", &mut places);
        let own = |schema: &Value| {
            let range: Vec<_> = RANGES.iter().map(|range| schema.get(range).cloned()).collect();
            (schema["description"].clone(), range)
        };
        let met: Vec<_> = places.iter().map(|place| own(&place.schema)).collect();
        let mut parts: Vec<&Value> = root["$defs"].as_object().into_iter().flat_map(|defs| defs.values()).collect();
        parts.push(&root);
        for part in parts {
            for (member, schema) in part["properties"].as_object().into_iter().flatten() {
                assert!(!has_range(schema) || met.contains(&own(schema)), "{name}: {member} of {} is not met", part["description"]);
            }
        }
    }
}
