//! What the lines of a batch mean: each is the request that RFC 7396 (JSON Merge Patch) makes of template and line.

mod wire_common;

use serde_json::{Value, json};
use underfoot::cases::tally::{End, Fate, Tally};
use underfoot::http::{Catalogue, Errand, LineWork, Work};
use underfoot::wire::{Batch, batch_summary, merge_patch, schema};
use wire_common::{Nothing, bytes, dynamics_request, state};

fn example() -> Value {
    serde_json::from_str(include_str!("../schemas/example-solve.json")).expect("JSON")
}

fn head(template: &Value) -> Vec<u8> {
    bytes(&json!({ "format": "underfoot/1", "template": template }))
}

/// Holds a line that came back against its schema.
fn read(line: &[u8]) -> Value {
    assert_eq!(line.last(), Some(&b'\n'));
    let value: Value = serde_json::from_slice(line).expect("JSON");
    let schema: Value = serde_json::from_str(&schema("batch-answer").expect("a schema")).expect("JSON");
    let validator = jsonschema::validator_for(&schema).expect("a schema");
    let errors: Vec<String> = validator.iter_errors(&value).map(|e| e.to_string()).collect();
    assert!(errors.is_empty(), "{errors:?}");
    value
}

fn merged(template: &Value, line: &Value) -> Value {
    let batch = Batch::open(&head(template), &Nothing).expect("a good template");
    let entry = batch.entry(&bytes(line));
    serde_json::from_slice(entry.request.as_ref().expect("a good line")).expect("JSON")
}

/// The example test cases of RFC 7396, appendix A (published).
#[test]
fn the_published_examples_of_merge_patches() {
    let cases = [
        (json!({"a":"b"}), json!({"a":"c"}), json!({"a":"c"})),
        (json!({"a":"b"}), json!({"b":"c"}), json!({"a":"b","b":"c"})),
        (json!({"a":"b"}), json!({"a":null}), json!({})),
        (json!({"a":"b","b":"c"}), json!({"a":null}), json!({"b":"c"})),
        (json!({"a":["b"]}), json!({"a":"c"}), json!({"a":"c"})),
        (json!({"a":"c"}), json!({"a":["b"]}), json!({"a":["b"]})),
        (json!({"a":{"b":"c"}}), json!({"a":{"b":"d","c":null}}), json!({"a":{"b":"d"}})),
        (json!({"a":[{"b":"c"}]}), json!({"a":[1]}), json!({"a":[1]})),
        (json!(["a","b"]), json!(["c","d"]), json!(["c","d"])),
        (json!({"a":"b"}), json!(["c"]), json!(["c"])),
        (json!({"a":"foo"}), Value::Null, Value::Null),
        (json!({"a":"foo"}), json!("bar"), json!("bar")),
        (json!({"e":null}), json!({"a":1}), json!({"e":null,"a":1})),
        (json!([1,2]), json!({"a":"b","c":null}), json!({"a":"b"})),
        (json!({}), json!({"a":{"bb":{"ccc":null}}}), json!({"a":{"bb":{}}})),
    ];
    for (mut target, patch, result) in cases {
        merge_patch(&mut target, &patch);
        assert_eq!(target, result, "{patch}");
    }
}

#[test]
fn members_replace_members_and_objects_are_merged() {
    let template = example();
    let line = json!({ "id": 7, "state": { "base": { "position": [1.0, 2.0, 3.0] } }, "gravity": [0.0, 0.0, -1.62], "include": null });
    let request = merged(&template, &line);
    assert_eq!(request["state"]["base"]["position"], json!([1.0, 2.0, 3.0]));
    assert_eq!(request["state"]["base"]["orientation"], template["state"]["base"]["orientation"]);
    assert_eq!(request["state"]["joints"], template["state"]["joints"]);
    assert_eq!(request["gravity"], json!([0.0, 0.0, -1.62]));
    assert!(request.get("include").is_none() && request.get("id").is_none());
    for same in ["contacts", "tasks", "limits", "tick"] {
        assert_eq!(request[same], template[same], "{same}");
    }
}

#[test]
fn contacts_tasks_and_limits_are_merged_by_name() {
    let template = example();
    let name = template["tasks"][1]["name"].clone();
    let line = json!({
        "contacts": [{ "sole": "right", "measured_wrench": { "force": [0.0, 0.0, 90.0] }, "rest": null }],
        "tasks": [{ "name": name, "weight": 3.5 }, { "name": "new", "kind": "effort", "priority": 9 }],
        "without": { "contacts": ["left"], "tasks": [template["tasks"][0]["name"]] },
    });
    let request = merged(&template, &line);
    assert_eq!(request["contacts"].as_array().unwrap().len(), 1);
    let right = &request["contacts"][0];
    assert_eq!(right["sole"], "right");
    assert_eq!(right["law"], template["contacts"][1]["law"]);
    assert_eq!(right["measured_wrench"]["force"], json!([0.0, 0.0, 90.0]));
    assert!(right.get("rest").is_none());
    let tasks = request["tasks"].as_array().unwrap();
    assert_eq!(tasks.len(), template["tasks"].as_array().unwrap().len());
    assert_eq!((&tasks[0]["name"], &tasks[0]["weight"]), (&name, &json!(3.5)));
    assert_eq!(tasks.last().unwrap()["name"], "new");
}

#[test]
fn a_line_is_answered_as_its_request_is() {
    let catalogue = Catalogue::default();
    let cancel = Default::default();
    let template = example();
    let model = json!({ "format": "underfoot/1" }).as_object().unwrap().iter().chain(template["model"].as_object().unwrap())
        .map(|(k, v)| (k.clone(), v.clone())).collect::<serde_json::Map<_, _>>();
    let id = catalogue.run(Errand::Register, &bytes(&Value::Object(model)), &cancel).expect("a model").model.expect("an id");
    let mut without_state = template.clone();
    let full = without_state.as_object_mut().unwrap().remove("state").unwrap();
    let lines = catalogue.open(&head(&without_state)).expect("a good template");
    let done = lines.line(2, &bytes(&json!({ "id": "a/b", "state": full })), &cancel);
    assert_eq!(done.fate, Fate::Answered("solved".to_owned()));
    let mut request = template;
    request["model"] = id.into();
    let single = catalogue.run(Errand::Solve, &bytes(&request), &cancel).expect("an answer");
    let expected = [br#"{"line":2,"id":"a/b","answer":"#, single.body.as_slice(), b"}\n"].concat();
    assert!(done.text == expected, "the documents differ");
    read(&done.text);
}

#[test]
fn dynamics_lines_and_chosen_members() {
    let mut template = dynamics_request();
    template.as_object_mut().unwrap().remove("state");
    let head = json!({ "format": "underfoot/1", "operation": "dynamics", "template": template, "members": ["model", "format"] });
    let batch = Batch::open(&bytes(&head), &Nothing).expect("a good template");
    let done = batch.line(4, &bytes(&json!({ "state": state() })), &Default::default());
    assert_eq!(done.fate, Fate::Answered("answered".to_owned()));
    let line = read(&done.text);
    let members: Vec<&String> = line["answer"].as_object().unwrap().keys().collect();
    assert_eq!(members, ["format", "model"]);
    assert_eq!(line["id"], Value::Null);
}

/// (line, where the fault is).
#[test]
fn faults_are_pointed_at_where_the_user_wrote_them() {
    let mut template = example();
    // In the template, but fine as far as its form goes.
    template["contacts"][0]["friction"]["coefficient"] = json!(-0.5);
    let batch = Batch::open(&head(&template), &Nothing).expect("good form");
    let problem = |line: &Value| {
        let done = batch.line(9, &bytes(line), &Default::default());
        assert_eq!(done.fate, Fate::Refused, "{line}");
        let line = read(&done.text);
        assert_eq!((line["line"].as_u64(), &line["problem"]["instance"]), (Some(9), &json!("/v1/batch")));
        line
    };
    let pointers = |line: &Value| -> Vec<String> {
        let line = problem(line);
        line["problem"]["faults"].as_array().unwrap().iter().map(|f| f["pointer"].as_str().unwrap().to_owned()).collect()
    };
    let template_fault = "/template/contacts/0/friction/coefficient";
    assert_eq!(pointers(&json!({})), [template_fault]);
    // The same contact in the line, but not its friction.
    assert_eq!(pointers(&json!({ "contacts": [{ "sole": "left", "normal": [0.0, 0.0, 1.0] }] })), [template_fault]);
    // Right comes first in the line.
    let over = json!({ "contacts": [{ "sole": "right", "friction": { "coefficient": -1.0 } }, { "sole": "left", "friction": { "coefficient": 0.5 } }] });
    assert_eq!(pointers(&over), ["/contacts/0/friction/coefficient"]);
    // Without left, right is the first of the merged list, and still the second of the template.
    let mended = json!({ "without": { "contacts": ["left"], "tasks": [template["tasks"][1]["name"]] }, "contacts": [{ "sole": "right", "normal": [0.0, 0.0, 2.0] }] });
    assert_eq!(pointers(&mended), ["/contacts/0/normal"]);
    let good = json!({ "sole": "left", "friction": { "coefficient": 0.5 } });
    assert_eq!(pointers(&json!({ "contacts": [good], "state": { "base": { "position": [0.0, 0.0] } } })), ["/state/base/position"]);
    assert_eq!(pointers(&json!({ "contacts": [good], "frobnicate": 1 })), ["/frobnicate"]);
    assert_eq!(pointers(&json!({ "contacts": [good, good] })), ["/contacts/1/law", "/contacts/1/friction/set"]);
    assert_eq!(pointers(&json!({ "model": "x" })), ["/model"]);
    assert_eq!(pointers(&json!({ "id": [] })), ["/id"]);
    assert_eq!(pointers(&json!({ "without": { "tasks": ["no such task"] } })), ["/without/tasks/0"]);
    assert_eq!(pointers(&json!({ "without": { "soles": [] } })), ["/without/soles"]);
    let text = batch.line(3, b"{\"id\": 1, \"id\": 2}", &Default::default());
    assert_eq!(read(&text.text)["problem"]["code"], "duplicate-member");
    assert_eq!(read(&batch.line(3, b"[1, 2", &Default::default()).text)["problem"]["code"], "not-json");
    // Whatever is wrong, the id comes back where it can be read.
    assert_eq!(problem(&json!({ "id": "k", "frobnicate": 1 }))["id"], "k");
}

#[test]
fn a_bad_first_line_is_refused_with_pointers() {
    let open = |head: &Value| Batch::open(&bytes(head), &Nothing).expect_err("a bad first line");
    let pointer = |head: &Value| open(head).faults[0].pointer.clone();
    assert_eq!(pointer(&json!({ "format": "underfoot/1" })), "/template");
    assert_eq!(pointer(&json!({ "format": "underfoot/1", "template": {}, "tempo": 1 })), "/tempo");
    assert_eq!(pointer(&json!({ "format": "underfoot/1", "template": { "tick": { "length": 0.01 } } })), "/template/model");
    let mut template = example();
    template["tick"] = json!({ "length": "long" });
    assert_eq!(pointer(&json!({ "format": "underfoot/1", "template": template })), "/template/tick/length");
    let mut template = example();
    template["model"] = json!("not registered");
    let refusal = open(&json!({ "format": "underfoot/1", "template": template }));
    assert_eq!((refusal.status, refusal.code, refusal.faults[0].pointer.as_str()), (404, "unknown-model", "/template/model"));
}

#[test]
fn the_summary_counts() {
    let mut tally = Tally::default();
    for status in ["solved", "infeasible", "solved"] {
        tally.count(Fate::Answered(status.to_owned()));
    }
    tally.count(Fate::Refused);
    let line = read(&batch_summary(&tally, End::Idle));
    let expected = json!({ "ended": "idle", "lines": 4, "answered": 3, "bad": 1,
        "statuses": [{ "status": "solved", "count": 2 }, { "status": "infeasible", "count": 1 }] });
    assert_eq!(line["summary"], expected);
}

/// The audit example without its state and answer, as a first line.
fn audit_head() -> (Value, Value, Value) {
    let mut template: Value = serde_json::from_str(include_str!("../schemas/example-audit.json")).expect("JSON");
    let state = template["request"].as_object_mut().unwrap().remove("state").unwrap();
    let answer = template.as_object_mut().unwrap().remove("answer").unwrap();
    (json!({ "format": "underfoot/1", "operation": "audit", "template": template, "members": ["verdict", "causes"] }), state, answer)
}

#[test]
fn audit_lines_put_the_question_below_and_the_answer_beside() {
    let (head, state, answer) = audit_head();
    let batch = Batch::open(&bytes(&head), &Nothing).expect("a good template");
    let cancel = Default::default();
    let done = batch.line(2, &bytes(&json!({ "id": 1, "state": state, "answer": answer })), &cancel);
    assert_eq!(done.fate, Fate::Answered("pass".to_owned()), "{}", String::from_utf8_lossy(&done.text));
    assert_eq!(read(&done.text)["answer"], json!({ "verdict": "pass", "causes": null }));
    // A flipped sign fails on its line, with the cause.
    let mut flipped = answer.clone();
    let knee = flipped["joints"].as_array_mut().unwrap().iter_mut().find(|joint| joint["name"] == "left_knee").unwrap();
    knee["torque"] = json!(-knee["torque"].as_f64().unwrap());
    let done = batch.line(3, &bytes(&json!({ "state": state, "answer": flipped })), &cancel);
    assert_eq!(done.fate, Fate::Answered("fail".to_owned()));
    let causes = read(&done.text)["answer"]["causes"]["text"].as_str().unwrap().to_owned();
    assert!(causes.contains("the torque of left_knee with its sign flipped"), "{causes}");
    // `causes`, `tolerances` and `name` are the audit's own members, all others the question's.
    let line = json!({ "state": state, "answer": flipped, "causes": false, "name": "n", "tolerances": { "relative": 1e3 },
        "limits": [{ "name": "torque", "kind": "torque", "treatment": { "kind": "hard" } }], "without": { "tasks": ["effort"] } });
    let entry = batch.entry(&bytes(&line));
    let request: Value = serde_json::from_slice(entry.request.as_ref().expect("a good line")).unwrap();
    assert_eq!((&request["causes"], &request["name"], &request["tolerances"]), (&json!(false), &json!("n"), &json!({ "relative": 1e3 })));
    let tasks = request["request"]["tasks"].as_array().unwrap();
    assert_eq!(tasks.len(), head["template"]["request"]["tasks"].as_array().unwrap().len() - 1);
    assert_eq!(request["request"]["state"], state);
    assert!(request.get("state").is_none() && request.get("without").is_none());
    assert_eq!(batch.line(4, &bytes(&line), &cancel).fate, Fate::Answered("pass".to_owned()), "a tolerance of a thousand passes it");
}

#[test]
fn faults_of_audit_lines_are_pointed_at_where_the_user_wrote_them() {
    let (head, state, answer) = audit_head();
    let batch = Batch::open(&bytes(&head), &Nothing).expect("a good template");
    let pointers = |line: &Value| -> Vec<String> {
        let done = batch.line(9, &bytes(line), &Default::default());
        assert_eq!(done.fate, Fate::Refused, "{line}");
        let line = read(&done.text);
        line["problem"]["faults"].as_array().unwrap().iter().map(|f| f["pointer"].as_str().unwrap().to_owned()).collect()
    };
    assert_eq!(pointers(&json!({ "state": state, "answer": answer, "tick": { "length": -1.0 } })), ["/tick/length"]);
    let mut wrong = answer.clone();
    wrong["joints"][2]["name"] = json!("no such joint");
    assert_eq!(pointers(&json!({ "state": state, "answer": wrong }))[0], "/answer/joints/2/name");
    let contact = json!({ "sole": "right", "friction": { "coefficient": -1.0 } });
    assert_eq!(pointers(&json!({ "state": state, "answer": answer, "contacts": [contact] })), ["/contacts/0/friction/coefficient"]);
    assert_eq!(pointers(&json!({ "state": state, "answer": answer, "tolerances": { "relative": 0.0 } })), ["/tolerances/relative"]);
    assert_eq!(pointers(&json!({ "state": state, "answer": answer, "model": "x" })), ["/model"]);
    // What stands in the first line is pointed at there.
    let (mut head, ..) = audit_head();
    head["template"]["request"]["contacts"][0]["friction"]["coefficient"] = json!(-0.5);
    let batch = Batch::open(&bytes(&head), &Nothing).expect("good form");
    let done = batch.line(2, &bytes(&json!({ "state": state, "answer": answer })), &Default::default());
    let pointer = read(&done.text)["problem"]["faults"][0]["pointer"].clone();
    assert_eq!(pointer, "/template/request/contacts/0/friction/coefficient");
    let mut head = audit_head().0;
    head["template"]["request"]["tick"] = json!({ "length": "long" });
    let refusal = Batch::open(&bytes(&head), &Nothing).expect_err("a bad first line");
    assert_eq!(refusal.faults[0].pointer, "/template/request/tick/length");
}
