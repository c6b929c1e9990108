//! The second pass over a request that was refused: every fault, each with its pointer. What the schema sees comes first,
//! then what the gate makes of the parts that have the right form.

use std::sync::OnceLock;

use jsonschema::error::{TypeKind, ValidationErrorKind};
use jsonschema::{ValidationError, Validator};
use serde_json::{Value, json};

use super::gaps::{Gaps, Misfit};
use super::gate::{MAX_FAULTS, push_token, quoted};
use super::raw;
use super::refusal::{Fault, Refusal};
use super::schema;

/// Schema errors of one request that are looked at.
const MAX_ERRORS: usize = 200;

/// Request documents.
#[derive(Debug, Clone, Copy)]
pub(super) enum Document {
    Solve,
    Audit,
    Dynamics,
    Model,
    Batch,
    Compare,
    Identify,
}

impl Document {
    const COUNT: usize = 7;

    /// Name of its schema.
    fn name(self) -> &'static str {
        match self {
            Document::Solve => "solve-request",
            Document::Audit => "audit-request",
            Document::Dynamics => "dynamics-request",
            Document::Model => "model-request",
            Document::Batch => "batch-request",
            Document::Compare => "compare-request",
            Document::Identify => "identify-request",
        }
    }

    /// What stands in for members that the rest cannot be read without. The tick is the shortest there is, which no
    /// other member is too large or too small for.
    fn stand_ins(self) -> Vec<(&'static str, Value)> {
        let (format, text) = (("/format", json!("underfoot/1")), json!(""));
        match self {
            Document::Model => vec![format, ("/urdf", text)],
            Document::Batch => vec![format, ("/template", json!({}))],
            Document::Compare => vec![
                format,
                ("/model/urdf", text.clone()),
                ("/model", text),
                ("/state", json!({})),
                ("/yours", json!({})),
            ],
            Document::Identify => vec![format, ("/soles", json!([]))],
            Document::Audit => vec![
                format,
                ("/request", json!({})),
                ("/request/format", json!("underfoot/1")),
                ("/request/model/urdf", text.clone()),
                ("/request/model", text),
                ("/request/state", json!({})),
                ("/request/tick", json!({ "length": 1e-6 })),
                ("/answer", json!({})),
                ("/answer/joints", json!([])),
            ],
            Document::Solve | Document::Dynamics => vec![
                format,
                ("/model/urdf", text.clone()),
                ("/model", text),
                ("/state", json!({})),
                ("/tick", json!({ "length": 1e-6 })),
            ],
        }
    }
}

/// Why a body is refused that the typed pass could not read, given what that pass said. `rest` reads what is left of the
/// body once the parts without the right form are out.
pub(super) fn refusal(
    document: Document,
    body: &[u8],
    typed: &serde_json::Error,
    rest: impl FnOnce(&[u8], Gaps) -> Option<Refusal>,
) -> Refusal {
    let mut value = match raw::parse(body) {
        Ok(value) => value,
        Err(raw::Failure::Refused(refusal)) => return refusal,
        Err(raw::Failure::TooManyValues) => return unlocated(typed),
    };
    let mut faults = by_schema(document, &value);
    if faults.is_empty() {
        return unlocated(typed);
    }
    let read_rest = || {
        let form = validator(document, Pass::Form)?;
        let gaps = Gaps::make(&mut value, &document.stand_ins(), |value| misfits(form, value))?;
        rest(&serde_json::to_vec(&value).ok()?, gaps)
    };
    if let Some(refusal) = read_rest() {
        join(&mut faults, refusal.faults);
    }
    Refusal::unusable(faults)
}

/// A refusal of the gate, with what the schema sees besides: parts that the gate could not look at, for something they
/// hang on is wrong.
pub(super) fn completed(document: Document, body: &[u8], refusal: Refusal) -> Refusal {
    let Ok(value) = raw::parse(body) else { return refusal };
    let mut faults = refusal.faults.clone();
    join(&mut faults, by_schema(document, &value));
    if refusal.status != 422 || faults.len() == refusal.faults.len() { refusal } else { Refusal::unusable(faults) }
}

/// Adds the faults whose place has none yet.
fn join(faults: &mut Vec<Fault>, more: Vec<Fault>) {
    for fault in more {
        if faults.len() < MAX_FAULTS && faults.iter().all(|known| known.pointer != fault.pointer) {
            faults.push(fault);
        }
    }
}

/// What the published schema finds wrong.
fn by_schema(document: Document, value: &Value) -> Vec<Fault> {
    let mut faults = Vec::new();
    let errors = validator(document, Pass::Published).into_iter().flat_map(|v| v.iter_errors(value));
    for error in errors.take(MAX_ERRORS) {
        add(&error, &mut faults);
        if faults.len() >= MAX_FAULTS {
            faults.truncate(MAX_FAULTS);
            break;
        }
    }
    faults
}

/// What does not have the form that the typed pass asks for.
fn misfits(form: &Validator, value: &Value) -> Vec<Misfit> {
    let mut misfits = Vec::new();
    for error in form.iter_errors(value).take(MAX_ERRORS) {
        let unknown = matches!(error.kind(), ValidationErrorKind::AdditionalProperties { .. });
        let mut faults = Vec::new();
        add(&error, &mut faults);
        misfits.extend(faults.into_iter().map(|fault| Misfit { pointer: fault.pointer, unknown }));
    }
    misfits
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

/// Which schema: the published one, or the form that the typed pass asks for.
#[derive(Debug, Clone, Copy)]
enum Pass {
    Published,
    Form,
}

fn validator(document: Document, pass: Pass) -> Option<&'static Validator> {
    static VALIDATORS: [[OnceLock<Option<Validator>>; Document::COUNT]; 2] =
        [const { [const { OnceLock::new() }; Document::COUNT] }; 2];
    let make = || {
        let schema = match pass {
            Pass::Published => schema::value(document.name())?,
            Pass::Form => schema::form(document.name())?,
        };
        jsonschema::validator_for(&schema).ok()
    };
    VALIDATORS.get(pass as usize)?.get(document as usize)?.get_or_init(make).as_ref()
}

/// Adds what one schema error says: the first at each place, which may be wrong under several keywords.
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
        ValidationErrorKind::Enum { options } => {
            // It says more than that the type is wrong, which may have been noted as well.
            faults.retain(|fault| fault.pointer != pointer);
            (pointer, format!("one of {options}"), got)
        }
        ValidationErrorKind::Constant { expected_value } => (pointer, expected_value.to_string(), got),
        ValidationErrorKind::FalseSchema => {
            (pointer, "no such member with this kind".to_string(), "one".to_string())
        }
        ValidationErrorKind::Minimum { limit } => (pointer, format!("{limit} or more"), got),
        ValidationErrorKind::Maximum { limit } => (pointer, format!("{limit} or less"), got),
        ValidationErrorKind::ExclusiveMinimum { limit } => (pointer, format!("more than {limit}"), got),
        ValidationErrorKind::MinLength { limit } => (pointer, format!("at least {limit} characters"), got),
        ValidationErrorKind::MaxLength { limit } => (pointer, format!("at most {limit} characters"), got),
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
    if faults.iter().all(|known| known.pointer != fault.pointer) {
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
