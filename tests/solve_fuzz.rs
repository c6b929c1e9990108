//! Hostile solve requests: the example request with damage to its tree, to its URDF and to its bytes. Whatever comes, the
//! result is an answer that follows its schema or a problem document whose pointers lead somewhere.
//!
//! `UNDERFOOT_CAMPAIGN=N` runs N times as many, `UNDERFOOT_SEED=S` others (`tests/campaign` sets both).

#[path = "common/rng.rs"]
mod rng;

use std::collections::BTreeMap;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use rng::Rng;
use serde_json::{Value, json};
use underfoot::http::{Catalogue, Errand, Work};
use underfoot::wire::{Refusal, schema, write_refusal};

const EXAMPLE: &str = include_str!("../schemas/example-solve.json");
/// Damaged requests of each kind in one plain run.
const RUNS: usize = 500;
/// The longest piece of a request that a failure prints (bytes).
const PRINTED: usize = 20_000;

fn setting(name: &str, default: u64) -> u64 {
    std::env::var(name).ok().and_then(|text| text.parse().ok()).unwrap_or(default)
}

fn validator(name: &str) -> jsonschema::Validator {
    let schema = serde_json::from_str(&schema(name).expect("a schema")).expect("JSON");
    jsonschema::validator_for(&schema).expect("a schema that can be used")
}

struct Judge {
    catalogue: Catalogue,
    answer: jsonschema::Validator,
    problem: jsonschema::Validator,
    seen: BTreeMap<String, usize>,
}

impl Judge {
    fn new() -> Self {
        Judge {
            catalogue: Catalogue::default(),
            answer: validator("solve-answer"),
            problem: validator("problem"),
            seen: BTreeMap::new(),
        }
    }

    fn judge(&mut self, run: usize, body: &[u8]) {
        let never = Arc::new(AtomicBool::new(false));
        let about = || format!("request {run}: {}", String::from_utf8_lossy(&body[..body.len().min(PRINTED)]));
        let outcome = catch_unwind(AssertUnwindSafe(|| self.catalogue.run(Errand::Solve, body, &never)));
        let word = match outcome.unwrap_or_else(|_| panic!("it panicked: {}", about())) {
            Ok(document) => {
                let answer: Value = serde_json::from_slice(&document.body).unwrap_or_else(|_| panic!("{}", about()));
                assert!(self.answer.is_valid(&answer), "{answer}\n{}", about());
                answer["status"].as_str().unwrap_or_default().to_string()
            }
            Err(refusal) => {
                let sound = self.sound(&refusal, body);
                assert!(sound.is_ok(), "{}\n{refusal:#?}\n{}", sound.unwrap_err(), about());
                refusal.status.to_string()
            }
        };
        *self.seen.entry(word).or_default() += 1;
    }

    /// A documented status, a document that follows its schema, pointers into the request.
    fn sound(&self, refusal: &Refusal, body: &[u8]) -> Result<(), String> {
        let document: Value =
            serde_json::from_slice(&write_refusal(refusal, "/v1/solve")).map_err(|error| error.to_string())?;
        if !self.problem.is_valid(&document) || document["status"] != refusal.status {
            return Err(format!("the problem document is not one: {document}"));
        }
        if ![400, 404, 413, 422].contains(&refusal.status) {
            return Err("a status that no request may lead to".to_string());
        }
        if refusal.status == 422 && refusal.faults.is_empty() {
            return Err("no fault is named".to_string());
        }
        // A body that is no JSON has no places to check; of a member that stands twice either may be meant.
        let request: Option<Value> = serde_json::from_slice(body).ok().filter(|_| refusal.status != 400);
        for fault in &refusal.faults {
            let pointer = &fault.pointer;
            let leads_somewhere = request.as_ref().is_none_or(|request| leads_into(request, pointer));
            if !(pointer.is_empty() || pointer.starts_with('/')) || !leads_somewhere || fault.expected.is_empty() {
                return Err(format!("the fault at {pointer:?} cannot be used"));
            }
        }
        Ok(())
    }
}

/// True where the member exists, or is missing from an object or array that exists.
fn leads_into(request: &Value, pointer: &str) -> bool {
    let parent = pointer.rsplit_once('/').map(|(parent, _)| parent);
    let holds = |parent: &str| request.pointer(parent).is_some_and(|value| value.is_object() || value.is_array());
    request.pointer(pointer).is_some() || parent.is_some_and(holds)
}

fn places(value: &Value, here: &str, out: &mut Vec<String>) {
    out.push(here.to_string());
    match value {
        Value::Array(elements) => {
            elements.iter().enumerate().for_each(|(i, element)| places(element, &format!("{here}/{i}"), out));
        }
        Value::Object(members) => {
            members.iter().for_each(|(name, member)| places(member, &format!("{here}/{name}"), out));
        }
        _ => {}
    }
}

fn odd(rng: &mut Rng) -> Value {
    let values = [
        json!(null), json!(true), json!(0), json!(-1), json!(1e-320), json!(5e-324), json!(1e15), json!(-1e15), json!(1e300),
        json!(u64::MAX), json!(4294967296u64), json!(100), json!(""), json!("x"), json!("\u{0}~/\u{1f9b6}"), json!("left"),
        json!("pelvis"), json!("held"), json!("explicit"), json!("rigid"), json!("wrench"), json!([]), json!({}), json!([[[]]]),
        json!([0, 0, 0]), json!([1e12, -1e12, 1e12]), json!([0, 0, 0, 1]), json!({ "kind": "rigid" }),
        json!({ "kind": "soft", "priority": 1 }), json!({ "kind": "decay", "rate": 200.0 }),
        json!({ "force": [0, 0, 1e9] }), json!(["explain", "uniqueness"]), json!(["problem", "dynamics", "sensitivity"]),
    ];
    rng.pick(&values).clone()
}

/// One change somewhere in the tree.
fn damage(rng: &mut Rng, request: &mut Value) {
    let mut all = Vec::new();
    places(request, "", &mut all);
    let place = rng.pick(&all[1.min(all.len() - 1)..]).clone();
    let other = request.pointer(rng.pick(&all).as_str()).cloned().unwrap_or_default();
    let choice = rng.below(9);
    if let Some(value) = request.pointer_mut(&place) {
        match (choice, &mut *value) {
            (0 | 1, _) => *value = odd(rng),
            (2, Value::Object(members)) => drop(members.insert("unheard_of".to_string(), odd(rng))),
            (3, Value::Array(elements)) if !elements.is_empty() => {
                let again = rng.pick(elements).clone();
                elements.push(again);
            }
            (4, Value::Object(members)) => *value = Value::Array(members.values().cloned().collect()),
            (5, Value::Object(members)) => {
                if let Value::Object(more) = other {
                    members.extend(more);
                }
            }
            (6..=8, Value::Number(number)) => {
                let factors = [-1.0, 0.0, 1e-12, 0.5, 2.0, 1e3, 1e6, 1e12, 1e-300];
                *value = json!(number.as_f64().unwrap_or(1.0) * rng.pick(&factors));
            }
            (6, Value::String(text)) => text.push('_'),
            (7, _) => *value = other,
            _ => remove(request, &place),
        }
    }
}

fn remove(request: &mut Value, place: &str) {
    let Some((parent, last)) = place.rsplit_once('/') else { return };
    match request.pointer_mut(parent) {
        Some(Value::Object(members)) => drop(members.shift_remove(last)),
        Some(Value::Array(elements)) => {
            if let Some(index) = last.parse().ok().filter(|index: &usize| *index < elements.len()) {
                elements.remove(index);
            }
        }
        _ => {}
    }
}

/// Damage to a text that stays text: a piece cut out or doubled, a wild character, an attribute with a wild number.
fn damage_text(rng: &mut Rng, text: &mut String) {
    let boundary = |text: &str, mut at: usize| {
        while !text.is_char_boundary(at) {
            at -= 1;
        }
        at
    };
    let start = boundary(text, rng.below(text.len() + 1));
    let end = boundary(text, (start + rng.below(80)).min(text.len())).max(start);
    match rng.below(5) {
        0 => text.replace_range(start..end, ""),
        1 => {
            let piece = text[start..end].to_string();
            text.insert_str(start, &piece);
        }
        2 => text.insert(start, *rng.pick(&['<', '>', '"', '&', '\u{0}', '\u{e9}', '/', '~'])),
        _ => {
            let quotes: Vec<usize> = text.match_indices('"').map(|(i, _)| i).collect();
            if quotes.len() >= 2 {
                let pair = 2 * rng.below(quotes.len() / 2);
                let wild = ["0", "-0", "1e9", "-1", "1e-320", "nan", "inf", "", "1 2", "0.1", "1e308"];
                text.replace_range(quotes[pair] + 1..quotes[pair + 1], rng.pick::<&str>(&wild));
            }
        }
    }
}

fn run(kind: &str, make: impl Fn(&mut Rng, &Value) -> Vec<u8>) -> BTreeMap<String, usize> {
    let seed = setting("UNDERFOOT_SEED", 0);
    let example: Value = serde_json::from_str(EXAMPLE).expect("the example is JSON");
    let mut judge = Judge::new();
    let mut rng = Rng(seed ^ kind.bytes().fold(0, |hash: u64, byte| hash.wrapping_mul(31).wrapping_add(u64::from(byte))));
    let runs = RUNS * usize::try_from(setting("UNDERFOOT_CAMPAIGN", 1)).expect("a factor");
    for i in 0..runs {
        let body = make(&mut rng, &example);
        judge.judge(i, &body);
    }
    println!("{runs} requests with damaged {kind}, seed {seed}: {:?}", judge.seen);
    judge.seen
}

fn text(value: &Value) -> Vec<u8> {
    serde_json::to_vec(value).expect("a value can be written")
}

#[test]
fn damaged_trees() {
    let seen = run("tree", |rng, example| {
        let mut request = example.clone();
        for _ in 0..=rng.below(3) {
            damage(rng, &mut request);
        }
        text(&request)
    });
    // The damage reaches the gate and, now and then, the solver.
    assert!(seen.contains_key("422") && seen.contains_key("solved"), "{seen:?}");
}

#[test]
fn damaged_robots() {
    let seen = run("URDF", |rng, example| {
        let mut request = example.clone();
        let mut urdf = request["model"]["urdf"].as_str().expect("text").to_string();
        for _ in 0..=rng.below(3) {
            damage_text(rng, &mut urdf);
        }
        request["model"]["urdf"] = json!(urdf);
        text(&request)
    });
    assert!(seen.contains_key("422") && seen.contains_key("solved"), "{seen:?}");
}

#[test]
fn damaged_bytes() {
    let seen = run("bytes", |rng, _| {
        let mut body = EXAMPLE.as_bytes().to_vec();
        match rng.below(4) {
            0 => body.truncate(rng.below(body.len())),
            1 => (0..=rng.below(4)).for_each(|_| {
                let at = rng.below(body.len());
                body[at] = rng.below(256) as u8;
            }),
            2 => {
                let piece = *rng.pick(&["1e999", "NaN", "\"\\ud800\"", "{", "]", ",", ":", "\"a\":1,", "9007199254740993"]);
                let at = rng.below(body.len());
                body.splice(at..at, piece.bytes());
            }
            _ => body = (0..rng.below(2000)).map(|_| rng.below(256) as u8).collect(),
        }
        body
    });
    assert!(seen.contains_key("400"), "{seen:?}");
}
