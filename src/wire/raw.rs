//! The first step of the second pass: bytes to a JSON value, refusing (400) what is no JSON, what
//! names a member twice, what nests too deep and what holds a number no double can hold.

use std::fmt;

use serde::de::{DeserializeSeed, Deserializer, Error, MapAccess, SeqAccess, Visitor};
use serde_json::{Map, Number, Value};

use super::gate::{MAX_FAULTS, push_token};
use super::refusal::{Fault, Refusal};

/// The deepest nesting of arrays and objects in a request.
const MAX_DEPTH: usize = 32;

/// Values (of any kind) that are looked at one by one; a larger document is not.
const MAX_VALUES: usize = 20_000;

/// Why a body gave no value.
pub(super) enum Failure {
    /// It is refused.
    Refused(Refusal),
    /// It holds more values than are looked at one by one.
    TooManyValues,
}

/// The value of a request body.
pub(super) fn parse(body: &[u8]) -> Result<Value, Failure> {
    let mut trail = Trail::default();
    let mut json = serde_json::Deserializer::from_slice(body);
    let read = Build(&mut trail).deserialize(&mut json).and_then(|value| {
        trail.steps.clear();
        json.end().map(|()| value)
    });
    match read {
        Err(_) if trail.values > MAX_VALUES => Err(Failure::TooManyValues),
        Err(_) if trail.too_deep => Err(Failure::Refused(too_deep(&trail))),
        Err(error) => Err(Failure::Refused(not_json(&trail, &error))),
        Ok(_) if !trail.duplicates.is_empty() => Err(Failure::Refused(duplicates(trail.duplicates))),
        Ok(value) => Ok(value),
    }
}

fn too_deep(trail: &Trail) -> Refusal {
    let mut refusal = Refusal::new(
        400,
        "nesting-too-deep",
        "The document nests too deep",
        format!("arrays and objects may nest {MAX_DEPTH} deep at most"),
    );
    refusal.faults.push(Fault {
        pointer: trail.pointer(),
        expected: format!("nesting of at most {MAX_DEPTH}"),
        got: "more".to_string(),
        line: None,
    });
    refusal
}

fn not_json(trail: &Trail, error: &serde_json::Error) -> Refusal {
    let (line, column) = (error.line(), error.column());
    let mut refusal = Refusal::new(
        400,
        "not-json",
        "The body is not JSON that can be read",
        format!("line {line}, column {column}: {error}"),
    );
    refusal.faults.push(Fault {
        pointer: trail.pointer(),
        expected: "JSON (RFC 8259) whose numbers a double can hold".to_string(),
        got: error.to_string(),
        line: None,
    });
    refusal
}

fn duplicates(pointers: Vec<String>) -> Refusal {
    let mut refusal = Refusal::new(
        400,
        "duplicate-member",
        "An object names a member twice",
        "which of the two is meant cannot be told; see faults",
    );
    refusal.faults.extend(pointers.into_iter().map(|pointer| Fault {
        pointer,
        expected: "each member once".to_string(),
        got: "a second member of this name".to_string(),
        line: None,
    }));
    refusal
}

/// Where the reader stands, and what it met on the way. On an error the steps stay as they were.
#[derive(Default)]
struct Trail {
    steps: Vec<String>,
    duplicates: Vec<String>,
    too_deep: bool,
    values: usize,
}

impl Trail {
    fn pointer(&self) -> String {
        let mut text = String::new();
        self.steps.iter().for_each(|step| push_token(&mut text, step));
        text
    }

    fn enter<E: Error>(&mut self) -> Result<(), E> {
        if self.steps.len() >= MAX_DEPTH {
            self.too_deep = true;
            return Err(E::custom("nested too deep"));
        }
        Ok(())
    }
}

struct Build<'t>(&'t mut Trail);

impl<'de> DeserializeSeed<'de> for Build<'_> {
    type Value = Value;

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<Value, D::Error> {
        self.0.values += 1;
        if self.0.values > MAX_VALUES {
            return Err(D::Error::custom("too many values"));
        }
        deserializer.deserialize_any(self)
    }
}

impl<'de> Visitor<'de> for Build<'_> {
    type Value = Value;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a JSON value")
    }

    fn visit_bool<E: Error>(self, value: bool) -> Result<Value, E> {
        Ok(Value::Bool(value))
    }

    fn visit_i64<E: Error>(self, value: i64) -> Result<Value, E> {
        Ok(Value::Number(value.into()))
    }

    fn visit_u64<E: Error>(self, value: u64) -> Result<Value, E> {
        Ok(Value::Number(value.into()))
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<Value, E> {
        Number::from_f64(value).map(Value::Number).ok_or_else(|| E::custom("number out of range"))
    }

    fn visit_str<E: Error>(self, value: &str) -> Result<Value, E> {
        Ok(Value::String(value.to_string()))
    }

    fn visit_unit<E: Error>(self) -> Result<Value, E> {
        Ok(Value::Null)
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<Value, A::Error> {
        self.0.enter()?;
        let mut array = Vec::new();
        loop {
            self.0.steps.push(array.len().to_string());
            match elements.next_element_seed(Build(self.0))? {
                Some(value) => array.push(value),
                None => break,
            }
            self.0.steps.pop();
        }
        self.0.steps.pop();
        Ok(Value::Array(array))
    }

    fn visit_map<A: MapAccess<'de>>(self, mut members: A) -> Result<Value, A::Error> {
        self.0.enter()?;
        let mut object = Map::new();
        while let Some(name) = members.next_key::<String>()? {
            self.0.steps.push(name.clone());
            if object.contains_key(&name) && self.0.duplicates.len() < MAX_FAULTS {
                let pointer = self.0.pointer();
                self.0.duplicates.push(pointer);
            }
            let value = members.next_value_seed(Build(self.0))?;
            self.0.steps.pop();
            object.insert(name, value);
        }
        Ok(Value::Object(object))
    }
}
