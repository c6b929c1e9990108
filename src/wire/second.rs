//! The second pass over a request that the typed one refused: find every fault of form, each with
//! its pointer.

use std::sync::OnceLock;

use jsonschema::error::{TypeKind, ValidationErrorKind};
use jsonschema::{ValidationError, Validator};
use serde_json::Value;

use super::gate::{MAX_FAULTS, push_token, quoted};
use super::raw;
use super::refusal::{Fault, Refusal};
use super::schema;

/// Request documents.
#[derive(Debug, Clone, Copy)]
pub(super) enum Document {
    Solve,
    Dynamics,
    Model,
    Batch,
    Compare,
}

/// Why the body is refused, given what the typed pass said.
pub(super) fn refusal(document: Document, body: &[u8], typed: &serde_json::Error) -> Refusal {
    let value = match raw::parse(body) {
        Ok(value) => value,
        Err(raw::Failure::Refused(refusal)) => return refusal,
        Err(raw::Failure::TooManyValues) => return unlocated(typed),
    };
    let Some(validator) = validator(document) else { return unlocated(typed) };
    let mut faults = Vec::new();
    for error in validator.iter_errors(&value) {
        add(&error, &mut faults);
        if faults.len() >= MAX_FAULTS {
            faults.truncate(MAX_FAULTS);
            break;
        }
    }
    if faults.is_empty() { unlocated(typed) } else { Refusal::unusable(faults) }
}

/// The typed pass's own words, where the second pass cannot point at members. Not met unless the
/// document is huge; tests hold that both passes refuse the same documents.
fn unlocated(typed: &serde_json::Error) -> Refusal {
    let fault = Fault {
        pointer: String::new(),
        expected: "a document that follows its schema".to_string(),
        got: typed.to_string(),
        line: None,
    };
    let refusal = Refusal::unusable(vec![fault]);
    Refusal { code: "unusable-form", ..refusal }
}

fn validator(document: Document) -> Option<&'static Validator> {
    static VALIDATORS: [OnceLock<Option<Validator>>; 5] = [const { OnceLock::new() }; 5];
    let (slot, name) = match document {
        Document::Solve => (&VALIDATORS[0], "solve-request"),
        Document::Dynamics => (&VALIDATORS[1], "dynamics-request"),
        Document::Model => (&VALIDATORS[2], "model-request"),
        Document::Batch => (&VALIDATORS[3], "batch-request"),
        Document::Compare => (&VALIDATORS[4], "compare-request"),
    };
    slot.get_or_init(|| jsonschema::validator_for(&schema::value(name)?).ok()).as_ref()
}

/// Adds what one schema error says. Errors that are already there are left out: a member that is
/// unknown may be so under several keywords.
fn add(error: &ValidationError<'_>, faults: &mut Vec<Fault>) {
    let pointer = error.instance_path().as_str().to_string();
    let got = shown(error.instance().as_ref());
    let (pointer, expected, got) = match error.kind() {
        ValidationErrorKind::AdditionalProperties { unexpected } => {
            for name in unexpected {
                let mut member = pointer.clone();
                push_token(&mut member, name);
                push(faults, member, "no member of this name".to_string(), "one".to_string());
            }
            return;
        }
        ValidationErrorKind::Required { property } => {
            let name = property.as_str().unwrap_or_default();
            let mut member = pointer;
            push_token(&mut member, name);
            (member, format!("a member {name:?}"), "nothing".to_string())
        }
        ValidationErrorKind::AnyOf { context } | ValidationErrorKind::OneOfNotValid { context } => {
            return add_closest(context, &pointer, got, faults);
        }
        ValidationErrorKind::Type { kind } => (pointer, types(kind), got),
        ValidationErrorKind::Enum { options } => (pointer, format!("one of {options}"), got),
        ValidationErrorKind::Constant { expected_value } => (pointer, expected_value.to_string(), got),
        ValidationErrorKind::FalseSchema => {
            (pointer, "no such member with this kind".to_string(), "one".to_string())
        }
        ValidationErrorKind::Minimum { limit } => (pointer, format!("{limit} or more"), got),
        ValidationErrorKind::Maximum { limit } => (pointer, format!("{limit} or less"), got),
        ValidationErrorKind::MinItems { limit } => {
            (pointer, format!("at least {limit} elements"), elements(error))
        }
        ValidationErrorKind::MaxItems { limit } => {
            (pointer, format!("at most {limit} elements"), elements(error))
        }
        _ => (pointer, "what the schema says".to_string(), error.to_string()),
    };
    push(faults, pointer, expected, got);
}

/// Of several forms that were possible here, the faults of the one that was meant: the form whose
/// type fits. Where none fits, one fault that names them all.
fn add_closest(
    context: &[Vec<ValidationError<'static>>],
    pointer: &str,
    got: String,
    faults: &mut Vec<Fault>,
) {
    let wrong_type = |error: &ValidationError<'_>| match error.kind() {
        ValidationErrorKind::Type { kind } if error.instance_path().as_str() == pointer => Some(types(kind)),
        _ => None,
    };
    let meant = context.iter().find(|errors| errors.iter().all(|error| wrong_type(error).is_none()));
    if let Some(errors) = meant {
        errors.iter().for_each(|error| add(error, faults));
        return;
    }
    let forms: Vec<String> = context.iter().flatten().filter_map(wrong_type).collect();
    push(faults, pointer.to_string(), forms.join(" or "), got);
}

fn push(faults: &mut Vec<Fault>, pointer: String, expected: String, got: String) {
    let fault = Fault { pointer, expected, got, line: None };
    if !faults.contains(&fault) {
        faults.push(fault);
    }
}

fn types(kind: &TypeKind) -> String {
    let one = |name: String| match name.as_str() {
        "null" => name,
        "array" | "object" | "integer" => format!("an {name}"),
        _ => format!("a {name}"),
    };
    match kind {
        TypeKind::Single(kind) => one(kind.to_string()),
        TypeKind::Multiple(kinds) => {
            kinds.iter().map(|kind| one(kind.to_string())).collect::<Vec<_>>().join(" or ")
        }
    }
}

fn elements(error: &ValidationError<'_>) -> String {
    error.instance().as_array().map_or_else(String::new, |array| array.len().to_string())
}

/// A value in few words.
fn shown(value: &Value) -> String {
    match value {
        Value::Null => "null".to_string(),
        Value::Bool(value) => value.to_string(),
        Value::Number(value) => value.to_string(),
        Value::String(text) => format!("the string {}", quoted(text)),
        Value::Array(elements) => format!("an array of {}", elements.len()),
        Value::Object(_) => "an object".to_string(),
    }
}
