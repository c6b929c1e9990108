//! Case files: audit requests that say besides what was pinned with them.

use serde_json::{Map, Value, json};

use super::raw;
use super::refusal::Refusal;
use crate::cases::changes::Amount;

/// Lists and objects up to this length stay on one line (characters).
const WIDTH: usize = 100;
/// Parts of a wrench as the problem's columns name them.
const WRENCH_PARTS: [(&str, [&str; 3]); 2] = [("force", ["fx", "fy", "fz"]), ("moment", ["mx", "my", "mz"])];
/// Parts of a base acceleration, likewise.
const BASE_PARTS: [(&str, [&str; 3]); 2] = [("linear", ["vx", "vy", "vz"]), ("angular", ["wx", "wy", "wz"])];

/// A case. Its members are known to be JSON alone: reading it as an audit request is what judges them.
#[derive(Debug, Clone)]
pub struct Case(Map<String, Value>);

/// Whose the answer of a case is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Whose {
    /// The reference's.
    Reference,
    /// A controller's.
    Controller,
}

impl Case {
    /// Reads a case file.
    ///
    /// # Errors
    /// 400 where it is no JSON object or names a member twice; 413 where it is too large.
    pub fn read(file: &[u8]) -> Result<Case, Refusal> {
        object(file, "case").map(Case)
    }

    /// A case from a solve request and an answer: a controller's as audits take it, or the document that answers a solve request.
    ///
    /// # Errors
    /// As [`Case::read`], for each of the two.
    pub fn of(request: &[u8], answer: &[u8], whose: Whose, name: Option<&str>, relative: f64) -> Result<Case, Refusal> {
        let request = object(request, "request")?;
        let answer = claim(object(answer, "answer")?);
        let mut case = Map::new();
        case.insert("format".to_owned(), json!("underfoot/1"));
        if let Some(name) = name {
            case.insert("name".to_owned(), json!(name));
        }
        case.insert("recorded".to_owned(), recorded(whose));
        case.insert("request".to_owned(), Value::Object(request));
        case.insert("answer".to_owned(), Value::Object(answer));
        case.insert("tolerances".to_owned(), json!({ "relative": relative }));
        Ok(Case(case))
    }

    /// Whose the answer is, where the case says so.
    pub fn whose(&self) -> Option<Whose> {
        match self.0.get("recorded")?.get("answer")?.as_str()? {
            "reference" => Some(Whose::Reference),
            "controller" => Some(Whose::Controller),
            _ => None,
        }
    }

    /// What the case calls itself.
    pub fn name(&self) -> Option<&str> {
        self.0.get("name")?.as_str()
    }

    /// The solve request within.
    pub fn request(&self) -> Vec<u8> {
        self.0.get("request").map(Value::to_string).unwrap_or_default().into_bytes()
    }

    /// Puts another answer of the reference in, the document that answers a solve request.
    ///
    /// # Errors
    /// As [`Case::read`], for the answer.
    pub fn renew(&mut self, answer: &[u8]) -> Result<(), Refusal> {
        let answer = claim(object(answer, "answer")?);
        self.0.insert("answer".to_owned(), Value::Object(answer));
        self.0.insert("recorded".to_owned(), recorded(Whose::Reference));
        Ok(())
    }

    /// The answer's torques, accelerations and wrench components (SI), as the problem's columns are named.
    pub fn amounts(&self) -> Vec<Amount> {
        let nothing = Value::Null;
        let answer = self.0.get("answer").unwrap_or(&nothing);
        let mut out = Vec::new();
        let mut push = |name: String, value: Option<&Value>| {
            out.extend(value.and_then(Value::as_f64).map(|value| Amount { name, value }));
        };
        for (joint, name) in named(answer.get("joints")) {
            push(format!("torque:{name}"), joint.get("torque"));
        }
        for (part, names) in BASE_PARTS {
            for (k, name) in names.iter().enumerate() {
                push(format!("acceleration:base:{name}"), answer.pointer(&format!("/base_acceleration/{part}/{k}")));
            }
        }
        for (joint, name) in named(answer.get("joints")) {
            push(format!("acceleration:{name}"), joint.get("acceleration"));
        }
        for (sole, name) in named(answer.get("soles")) {
            for (part, names) in WRENCH_PARTS {
                for (k, axis) in names.iter().enumerate() {
                    push(format!("wrench:{name}:{axis}"), sole.pointer(&format!("/wrench/{part}/{k}")));
                }
            }
        }
        out
    }

    /// The file, laid out for reading and for line-by-line comparison: numbers as exact as they came.
    pub fn text(self) -> Vec<u8> {
        let mut out = laid_out(&Value::Object(self.0), 0);
        out.push('\n');
        out.into_bytes()
    }
}

fn recorded(whose: Whose) -> Value {
    let whose = match whose {
        Whose::Reference => "reference",
        Whose::Controller => "controller",
    };
    json!({ "version": env!("CARGO_PKG_VERSION"), "answer": whose })
}

fn object(text: &[u8], what: &str) -> Result<Map<String, Value>, Refusal> {
    if text.len() > super::MAX_BODY {
        return Err(Refusal::new(413, "body-too-large", "The file is too large", format!("a {what} may have {} bytes", super::MAX_BODY)));
    }
    match raw::parse(text) {
        Ok(Value::Object(members)) => Ok(members),
        Ok(_) => Err(Refusal::new(400, "not-json", "The file is no JSON object", format!("a {what} is an object"))),
        Err(raw::Failure::Refused(refusal)) => Err(refusal),
        Err(raw::Failure::TooManyValues) => {
            Err(Refusal::new(413, "body-too-large", "The file is too large", format!("the {what} holds too many values")))
        }
    }
}

/// A controller's answer as audits take it. The document that answers a solve request, which says its `status`, holds more.
fn claim(answer: Map<String, Value>) -> Map<String, Value> {
    if !answer.contains_key("status") {
        return answer;
    }
    let part = |value: &Value, names: &[&str]| {
        let kept = names.iter().filter_map(|name| value.get(*name).filter(|v| !v.is_null()).map(|v| ((*name).to_owned(), v.clone())));
        Value::Object(kept.collect())
    };
    let list = |member: &str, names: &[&str]| -> Vec<Value> {
        answer.get(member).and_then(Value::as_array).into_iter().flatten().map(|entry| part(entry, names)).collect()
    };
    let mut out = Map::new();
    out.insert("joints".to_owned(), Value::Array(list("joints", &["name", "torque", "acceleration"])));
    if let Some(base) = answer.get("base_acceleration").filter(|base| !base.is_null()) {
        out.insert("base_acceleration".to_owned(), base.clone());
    }
    out.insert("soles".to_owned(), Value::Array(list("soles", &["name", "wrench"])));
    out
}

/// Elements of a list that have a name.
fn named(list: Option<&Value>) -> impl Iterator<Item = (&Value, &str)> {
    list.and_then(Value::as_array).into_iter().flatten().filter_map(|entry| Some((entry, entry.get("name")?.as_str()?)))
}

/// JSON with short values on one line. Depth is bounded by what [`raw::parse`] takes.
fn laid_out(value: &Value, depth: usize) -> String {
    let flat = value.to_string();
    if flat.chars().count() <= WIDTH {
        return flat;
    }
    let (open, close, inner): (char, char, Vec<String>) = match value {
        Value::Array(elements) => ('[', ']', elements.iter().map(|element| laid_out(element, depth + 1)).collect()),
        Value::Object(members) => {
            let member = |(name, value): (&String, &Value)| format!("{}: {}", json!(name), laid_out(value, depth + 1));
            ('{', '}', members.iter().map(member).collect())
        }
        _ => return flat,
    };
    let indent = "  ".repeat(depth + 1);
    format!("{open}\n{indent}{}\n{}{close}", inner.join(&format!(",\n{indent}")), "  ".repeat(depth))
}
