//! The JSON Schemas (draft 2020-12), made from the types that read and write the documents.

use schemars::generate::SchemaSettings;
use serde_json::{Map, Value, json};

use super::kinds::KindTable;
use super::strict::MAX_MAGNITUDE;
use super::{
    answer, audit, audit_answer, batch, compare, contact, dynamics, identify, limit, market, model, problem, robot, solve, task, treatment,
};

/// Objects whose members depend on a `kind`.
const TABLES: [&KindTable; 6] = [
    &treatment::TREATMENT_KINDS,
    &contact::LAW_KINDS,
    &contact::REST_KINDS,
    &limit::LIMIT_KINDS,
    &task::TASK_KINDS,
    &identify::TOUCHDOWN_KINDS,
];

/// Names of the documents.
const NAMES: &[&str] = &[
    "model-request", "model", "dynamics-request", "dynamics-answer", "solve-request", "solve-answer", "problem",
    "batch-request", "batch-line", "batch-answer", "export-answer",
    "compare-request", "compare-answer",
    "identify-request", "identify-answer",
    "audit-request", "audit-answer",
];

/// Names that [`schema`] knows.
pub fn schema_names() -> &'static [&'static str] {
    NAMES
}

/// The JSON Schema (draft 2020-12) of this name, as text.
pub fn schema(name: &str) -> Option<String> {
    let mut text = serde_json::to_string_pretty(&value(name)?).ok()?;
    text.push('\n');
    Some(text)
}

/// The JSON Schema (draft 2020-12) of this name.
pub(super) fn value(name: &str) -> Option<Value> {
    let (mut schema, request) = plain(name)?;
    if request {
        tighten(&mut schema);
        add_kinds(&mut schema);
    }
    Some(schema)
}

/// What the typed pass asks of a request, and no more: types, members, words and the size of numbers; neither ranges nor which
/// members go with which kind.
pub(super) fn form(name: &str) -> Option<Value> {
    let (mut schema, _) = plain(name)?;
    loosen(&mut schema);
    tighten(&mut schema);
    Some(schema)
}

/// The schema as the types give it, and whether it is that of a request.
fn plain(name: &str) -> Option<(Value, bool)> {
    let reading = || SchemaSettings::draft2020_12().for_deserialize().into_generator();
    let writing = || SchemaSettings::draft2020_12().for_serialize().into_generator();
    let (schema, request) = match name {
        "model-request" => (reading().into_root_schema_for::<model::ModelRequest>(), true),
        "dynamics-request" => (reading().into_root_schema_for::<solve::DynamicsRequest>(), true),
        "solve-request" => (reading().into_root_schema_for::<solve::SolveRequest>(), true),
        "batch-request" => (reading().into_root_schema_for::<batch::HeadBody>(), true),
        "batch-line" => (reading().into_root_schema_for::<batch::LineBody>(), true),
        "batch-answer" => (writing().into_root_schema_for::<batch::LineOut<'_>>(), false),
        "export-answer" => (writing().into_root_schema_for::<market::ExportOut<'_>>(), false),
        "compare-request" => (reading().into_root_schema_for::<compare::CompareRequest>(), true),
        "compare-answer" => (writing().into_root_schema_for::<compare::CompareOut<'_>>(), false),
        "identify-request" => (reading().into_root_schema_for::<identify::IdentifyRequest>(), true),
        "identify-answer" => (writing().into_root_schema_for::<identify::IdentifyAnswerOut<'_>>(), false),
        "audit-request" => (reading().into_root_schema_for::<audit::AuditRequest>(), true),
        "audit-answer" => (writing().into_root_schema_for::<audit_answer::AuditOut<'_>>(), false),
        "model" => (writing().into_root_schema_for::<robot::ModelOut<'_>>(), false),
        "dynamics-answer" => (writing().into_root_schema_for::<dynamics::DynamicsAnswerOut<'_>>(), false),
        "solve-answer" => (writing().into_root_schema_for::<answer::AnswerOut<'_>>(), false),
        "problem" => (writing().into_root_schema_for::<problem::ProblemOut<'_>>(), false),
        _ => return None,
    };
    Some((Value::from(schema), request))
}

/// Requests know no null: what is optional is left out. And their numbers are bounded.
fn tighten(schema: &mut Value) {
    match schema {
        Value::Array(elements) => elements.iter_mut().for_each(tighten),
        Value::Object(members) => {
            without_null(members);
            if members.get("type") == Some(&json!("number")) {
                if !members.contains_key("exclusiveMinimum") {
                    members.entry("minimum").or_insert(json!(-MAX_MAGNITUDE));
                }
                members.entry("maximum").or_insert(json!(MAX_MAGNITUDE));
            }
            members.values_mut().for_each(tighten);
        }
        _ => {}
    }
}

/// Takes ranges away: of numbers, of the length of names, of the length of arrays that are not of one fixed length.
fn loosen(schema: &mut Value) {
    match schema {
        Value::Array(elements) => elements.iter_mut().for_each(loosen),
        Value::Object(members) => {
            let whole = members.get("type").is_some_and(|kind| kind.to_string().contains("integer"));
            for name in ["minimum", "maximum", "exclusiveMinimum", "minLength", "maxLength"] {
                members.shift_remove(name);
            }
            if whole {
                members.insert("minimum".to_string(), json!(0));
                members.insert("maximum".to_string(), json!(u32::MAX));
            }
            if members.get("minItems") != members.get("maxItems") {
                members.shift_remove("minItems");
                members.shift_remove("maxItems");
            }
            members.values_mut().for_each(loosen);
        }
        _ => {}
    }
}

fn without_null(members: &mut Map<String, Value>) {
    let null = json!({ "type": "null" });
    if let Some(Value::Array(types)) = members.get_mut("type") {
        types.retain(|kind| kind != "null");
        if let [one] = types.as_slice() {
            let one = one.clone();
            members.insert("type".to_string(), one);
        }
    }
    if let Some(Value::Array(words)) = members.get_mut("enum") {
        words.retain(|word| !word.is_null());
    }
    let Some(Value::Array(forms)) = members.get_mut("anyOf") else { return };
    forms.retain(|form| *form != null);
    if let [Value::Object(only)] = forms.as_slice() {
        let only = only.clone();
        members.remove("anyOf");
        for (name, value) in only {
            members.entry(name).or_insert(value);
        }
    }
}

/// Says which members go with which kind.
fn add_kinds(schema: &mut Value) {
    for table in TABLES {
        let Some(Value::Object(definition)) = schema.pointer_mut(&format!("/$defs/{}", table.definition))
        else {
            continue;
        };
        let rules = table.rules.iter().map(|rule| {
            let foreign = table.foreign(rule).into_iter();
            let none: Map<String, Value> = foreign.map(|name| (name.to_string(), json!(false))).collect();
            let mut then = Map::new();
            if !rule.needs.is_empty() {
                then.insert("required".to_string(), json!(rule.needs));
            }
            if !none.is_empty() {
                then.insert("properties".to_string(), Value::Object(none));
            }
            json!({
                "if": { "properties": { "kind": { "const": rule.kind } }, "required": ["kind"] },
                "then": then,
            })
        });
        let rules: Vec<Value> = rules.collect();
        definition.insert("allOf".to_string(), Value::Array(rules));
    }
}
