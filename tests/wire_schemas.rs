//! The checked-in schemas, OpenAPI description and example request are what the code says.
//! `UNDERFOOT_WRITE_SCHEMAS=1 cargo test --test wire_schemas` writes them anew.

mod wire_common;

use std::path::PathBuf;

use serde_json::{Value, json};
use underfoot::dynamics::{Workspace, frame_pose};
use underfoot::spatial::Vec3;
use underfoot::wire::{openapi, read_dynamics, read_identify, read_model, read_solve, schema, schema_names};
use wire_common::{Nothing, bytes, dynamics_request, identify_request, model_request, solve_request};

const BIPED: &str = include_str!("../src/cli/demo/biped.urdf");
const GRAVITY: f64 = 9.80665;
const STIFFNESS: f64 = 2e6;
const SOLE: [[f64; 2]; 4] = [[0.1, -0.05], [0.1, 0.05], [-0.1, 0.05], [-0.1, -0.05]];

fn directory() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("schemas")
}

/// Every generated file with its text.
fn files() -> Vec<(String, String)> {
    let schema = |name: &&str| (format!("{name}.json"), schema(name).expect("a schema of this name"));
    let mut files: Vec<(String, String)> = schema_names().iter().map(schema).collect();
    files.push(("openapi.json".to_string(), openapi()));
    files.push(("example-solve.json".to_string(), laid_out(&example(), 0) + "\n"));
    files.push(("example-audit.json".to_string(), laid_out(&audit_example(), 0) + "\n"));
    files
}

#[test]
fn checked_in_files_are_up_to_date() {
    let writing = std::env::var_os("UNDERFOOT_WRITE_SCHEMAS").is_some();
    for (name, text) in files() {
        let path = directory().join(&name);
        if writing {
            std::fs::write(&path, &text).expect("the file can be written");
        }
        let kept = std::fs::read_to_string(&path).unwrap_or_default();
        assert!(
            kept == text,
            "schemas/{name} is stale: run UNDERFOOT_WRITE_SCHEMAS=1 cargo test --test wire_schemas"
        );
    }
}

/// JSON with short values on one line.
fn laid_out(value: &Value, depth: usize) -> String {
    const WIDTH: usize = 100;
    let flat = value.to_string();
    let (open, close, inner) = match value {
        Value::Array(elements) if flat.len() > WIDTH => {
            ('[', ']', elements.iter().map(|element| laid_out(element, depth + 1)).collect::<Vec<_>>())
        }
        Value::Object(members) if flat.len() > WIDTH => {
            let member = |(name, value): (&String, &Value)| {
                format!("{}: {}", Value::from(name.as_str()), laid_out(value, depth + 1))
            };
            ('{', '}', members.iter().map(member).collect())
        }
        _ => return flat,
    };
    let indent = "  ".repeat(depth + 1);
    let body = inner.join(&format!(",\n{indent}"));
    format!("{open}\n{indent}{body}\n{}{close}", "  ".repeat(depth))
}

fn rounded(value: f64) -> f64 {
    (value * 1e6).round() / 1e6 + 0.0
}

fn rounded3(v: &Vec3) -> [f64; 3] {
    [rounded(v.x), rounded(v.y), rounded(v.z)]
}

/// Joint positions of the crouch in which the demo robot's centre of mass is above its soles.
fn crouch() -> Vec<(String, f64)> {
    let mut angles = Vec::new();
    for (side, sign) in [("left", 1.0), ("right", -1.0)] {
        let leg = [
            ("hip_yaw", 0.0), ("hip_roll", 0.0), ("hip_pitch", -0.2866), ("knee", 0.6),
            ("ankle_pitch", -0.3134), ("ankle_roll", 0.0),
        ];
        let arm = [("shoulder_pitch", 0.2), ("shoulder_roll", sign * 0.15), ("elbow", -0.5)];
        angles.extend(leg.iter().chain(&arm).map(|(joint, angle)| (format!("{side}_{joint}"), *angle)));
    }
    angles.push(("waist_yaw".to_string(), 0.0));
    angles
}

fn example_model() -> Value {
    json!({
        "urdf": BIPED,
        "fixed_base": false,
        "soles": [
            { "name": "left", "link": "left_sole", "kind": "polygon", "position": [0.0, 0.0, 0.0],
              "orientation": [0.0, 0.0, 0.0, 1.0], "vertices": SOLE },
            { "name": "right", "link": "right_sole", "kind": "polygon", "position": [0.0, 0.0, 0.0],
              "orientation": [0.0, 0.0, 0.0, 1.0], "vertices": SOLE },
        ],
        "joints": [
            { "name": "left_knee", "rotor_inertia": 0.02 },
            { "name": "right_knee", "rotor_inertia": 0.02 },
        ],
    })
}

fn example_state(height: f64) -> Value {
    let joint = |(name, position): &(String, f64)| json!({ "name": name, "position": position, "velocity": 0.0 });
    json!({
        "base": { "position": [0.0, 0.0, height], "orientation": [0.0, 0.0, 0.0, 1.0],
                  "linear_velocity": [0.0, 0.0, 0.0], "angular_velocity": [0.0, 0.0, 0.0] },
        "velocity_axes": { "linear": "world", "angular": "world" },
        "joints": crouch().iter().map(joint).collect::<Vec<_>>(),
    })
}

/// The biped stands still on a soft floor, sunk as deep as its weight asks for.
fn example() -> Value {
    let area = 0.2 * 0.1;
    let probe = json!({
        "format": "underfoot/1", "model": example_model(), "state": example_state(0.0),
    });
    let question = read_dynamics(&bytes(&probe), &Nothing).expect("the example's model is good");
    let model = &question.model;
    let mut workspace = Workspace::new(model);
    workspace.update(model, &question.state, &Vec3::zeros());
    let soles: Vec<Vec3> =
        model.soles.iter().map(|s| frame_pose(model, &workspace, s.body, &s.placement).translation).collect();
    let weight = model.mass() * GRAVITY;
    let sink = weight / (2.0 * area * STIFFNESS);
    let height = rounded(-sink - soles[0].z);
    let up = Vec3::new(0.0, 0.0, height);
    let center = rounded3(&(workspace.center_of_mass + up));
    let half = rounded(weight / 2.0);
    let contact = |name: &str, sole: &Vec3| json!({
        "sole": name,
        "law": { "kind": "bonded", "stiffness": STIFFNESS, "damping": 0.01 * STIFFNESS, "per": "area" },
        "normal": [0.0, 0.0, 1.0],
        "rest": { "kind": "touchdown", "position": rounded3(&(sole + up)),
                  "orientation": [0.0, 0.0, 0.0, 1.0], "plane_point": [0.0, 0.0, 0.0] },
        "friction": { "set": "vertex", "coefficient": 0.6, "treatment": { "kind": "hard" } },
        "normal_force": { "least": 20.0, "treatment": { "kind": "hard" } },
    });
    json!({
        "format": "underfoot/1",
        "model": example_model(),
        "state": example_state(height),
        "gravity": [0.0, 0.0, -GRAVITY],
        "tick": { "length": 0.005, "rule": "held" },
        "contacts": [contact("left", &soles[0]), contact("right", &soles[1])],
        "limits": [
            { "name": "torque", "kind": "torque", "treatment": { "kind": "hard" } },
            { "name": "range", "kind": "position", "horizon": 0.05 },
            { "name": "speed", "kind": "velocity", "horizon": 0.05 },
        ],
        "tasks": example_tasks(center, half),
        "external": [{ "frame": "torso", "point": [0.0, 0.0, 0.2], "force": [0.0, 0.0, 0.0],
                       "moment": [0.0, 0.0, 0.0] }],
        "include": [],
    })
}

/// Momentum over the distribution of wrenches, over the base, over the posture: the order that
/// recovered best from pushes.
fn example_tasks(center: [f64; 3], half: f64) -> Value {
    let posture = |(name, position): &(String, f64)| json!({ "name": name, "position": position });
    let load = |sole: &str| json!({
        "name": format!("load {sole}"), "kind": "wrench", "priority": 2, "scale": 10.0, "scale_angular": 1.0,
        "sole": sole, "wrench": { "force": [0.0, 0.0, half], "moment": [0.0, 0.0, 0.0] }, "approach": 30.0,
    });
    json!([
        { "name": "momentum", "kind": "momentum_second_rate", "priority": 1, "weight": 1.0, "scale": 100.0,
          "scale_angular": 10.0, "axes": ["x", "y", "z", "rx", "ry", "rz"], "center": center,
          "rate_gain": { "linear": 24.0, "angular": 30.0 },
          "momentum_gain": { "linear": 192.0, "angular": 200.0 }, "position_gain": 512.0 },
        load("left"),
        load("right"),
        { "name": "base", "kind": "frame_orientation", "priority": 3, "frame": "pelvis",
          "orientation": [0.0, 0.0, 0.0, 1.0], "gains_angular": { "position": 400.0, "velocity": 40.0 } },
        { "name": "posture", "kind": "posture", "priority": 4,
          "joints": crouch().iter().map(posture).collect::<Vec<_>>(),
          "gains": { "position": 100.0, "velocity": 20.0 } },
        { "name": "effort", "kind": "effort", "priority": 5, "scale": 10.0 },
    ])
}

/// A controller that answers the example as the reference does, to a millionth.
fn audit_example() -> Value {
    let question = read_solve(&bytes(&example()), &Nothing).expect("the example is good");
    let answer = underfoot::reference::solve(&question, &Default::default()).expect("the example has an answer");
    let motion = answer.motion.expect("the example is solved");
    let base = motion.base_acceleration.expect("a floating base");
    let values = motion.torques.iter().zip(&motion.joint_accelerations);
    let joints = question.model.joints.iter().zip(values).map(|(joint, (torque, acceleration))| {
        json!({ "name": joint.name, "torque": rounded(*torque), "acceleration": rounded(*acceleration) })
    });
    let soles = answer.soles.iter().map(|sole| {
        let wrench = sole.wrench.expect("the example is solved");
        json!({ "name": sole.name, "wrench": { "force": rounded3(&wrench.force), "moment": rounded3(&wrench.moment) } })
    });
    json!({
        "format": "underfoot/1",
        "request": example(),
        "answer": {
            "joints": joints.collect::<Vec<_>>(),
            "base_acceleration": { "linear": rounded3(&base[0]), "angular": rounded3(&base[1]) },
            "soles": soles.collect::<Vec<_>>(),
        },
        "tolerances": { "relative": 1e-4 },
    })
}

#[test]
fn the_example_is_accepted() {
    let text = std::fs::read(directory().join("example-solve.json")).expect("the example is checked in");
    let question = read_solve(&text, &Nothing).unwrap_or_else(|refusal| panic!("{refusal:#?}"));
    assert_eq!(question.model.joints.len(), 19);
    assert_eq!((question.contacts.len(), question.tasks.len(), question.limits.len()), (2, 6, 3));
}

/// Draft 2020-12 as the validator implements it accepts what the gate accepts.
#[test]
fn requests_follow_their_schemas() {
    let requests = [
        ("solve-request", solve_request()), ("solve-request", example()), ("audit-request", audit_example()),
        ("dynamics-request", dynamics_request()), ("model-request", model_request()),
        ("identify-request", identify_request()),
    ];
    for (name, request) in requests {
        let schema: Value = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
        assert_eq!(schema["$schema"], "https://json-schema.org/draft/2020-12/schema");
        let validator = jsonschema::validator_for(&schema).expect("a schema that can be used");
        let errors: Vec<String> = validator.iter_errors(&request).map(|error| error.to_string()).collect();
        assert!(errors.is_empty(), "{name}: {errors:?}");
    }
    assert!(read_model(&bytes(&model_request())).is_ok());
    assert!(read_identify(&bytes(&identify_request()), &Nothing).is_ok_and(|session| session.rows() == 2));
}

/// Every member of every document says its unit: a unit in parentheses, or that there is none.
#[test]
fn every_member_has_a_description_with_a_unit() {
    let mut lacking = Vec::new();
    for name in schema_names() {
        let schema: Value = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
        let parts = schema["$defs"].as_object().into_iter().flatten().map(|(part, value)| (part.as_str(), value));
        for (part, definition) in parts.chain([(*name, &schema)]) {
            for (member, value) in definition["properties"].as_object().into_iter().flatten() {
                let text = value["description"].as_str().unwrap_or_default();
                let unit = text.contains('(') || text.contains("own unit");
                if !unit {
                    lacking.push(format!("{name}: {part}.{member}: {text:?}"));
                }
            }
        }
    }
    assert!(lacking.is_empty(), "no unit in the description of {lacking:#?}");
}

/// The OpenAPI description refers to nothing that it does not hold, and gives each part one meaning.
#[test]
fn openapi_is_closed() {
    let document: Value = serde_json::from_str(&openapi()).expect("JSON");
    let mut references = Vec::new();
    collect(&document, &mut references);
    assert!(!references.is_empty());
    for reference in references {
        let pointer = reference.strip_prefix('#').expect("a local reference");
        assert!(document.pointer(pointer).is_some(), "{reference} leads nowhere");
    }
    let mut parts: std::collections::BTreeMap<String, Value> = Default::default();
    for name in schema_names() {
        let schema: Value = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
        let title = schema["title"].as_str().expect("a title").to_string();
        let defs = schema["$defs"].as_object().into_iter().flatten();
        for (part, value) in defs {
            let kept = parts.entry(part.clone()).or_insert_with(|| value.clone());
            assert_eq!(kept, value, "{part} means two things");
        }
        assert!(!parts.contains_key(&title), "{title} is both a document and a part of one");
    }
}

fn collect<'a>(value: &'a Value, references: &mut Vec<&'a str>) {
    match value {
        Value::Array(elements) => elements.iter().for_each(|element| collect(element, references)),
        Value::Object(members) => {
            if let Some(Value::String(target)) = members.get("$ref") {
                references.push(target);
            }
            members.values().for_each(|member| collect(member, references));
        }
        _ => {}
    }
}
