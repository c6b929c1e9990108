//! A batch as lines of JSON: what stays the same once, then one line per question, and one line back for each.
//!
//! The first line holds a request without what changes (the template). Every other line is put over it as a merge
//! patch (RFC 7396: members replace members, objects are merged, arrays are replaced, null removes), with one
//! addition: entries of `contacts`, `tasks` and `limits` are merged by name, entries of a new name are added, and
//! `without` leaves some out. What comes out is an ordinary request, and it is answered as such.

use std::sync::Arc;

use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use serde::{Deserialize, Serialize};
use serde_json::{Map, Value, json};

use super::common::Format;
use super::gate::{Gate, push_token, quoted};
use super::refusal::{Fault, Refusal};
use super::second::Document;
use super::{ModelSource, Request, audit, raw, read, solve};
use crate::cases::tally::{End, Tally};
use crate::model::Model;

/// Path that problem documents of a batch name.
const INSTANCE: &str = "/v1/batch";
/// The longest `id` of a line (bytes).
const MAX_ID: usize = 200;
/// Members of an audit beside its question.
const AUDIT_MEMBERS: [&str; 5] = ["answer", "tolerances", "causes", "name", "recorded"];
/// The most names in `members`.
const MAX_MEMBERS: usize = 50;
/// Lists whose entries are merged by name, and the member that names them.
const NAMED: [(&str, &str); 3] = [("contacts", "sole"), ("tasks", "name"), ("limits", "name")];

/// What is done with every line.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
pub enum Operation {
    /// As `/v1/solve`.
    Solve,
    /// As `/v1/dynamics`.
    Dynamics,
    /// As `/v1/audit`.
    Audit,
}

impl Operation {
    /// Reads a request of this kind for its form alone, and finds its model.
    fn check(self, request: &[u8], models: &dyn ModelSource) -> Result<Arc<Model>, Refusal> {
        match self {
            Operation::Solve => read::<solve::SolveForm>(request, Document::Solve, models),
            Operation::Dynamics => read::<solve::DynamicsForm>(request, Document::Dynamics, models),
            Operation::Audit => read::<audit::AuditForm>(request, Document::Audit, models),
        }
    }

    /// The part of a request that `name` of a line belongs to: the question, unless an audit itself has a member of this name.
    fn belongs<'r>(self, request: &'r mut Map<String, Value>, name: &str) -> Option<&'r mut Map<String, Value>> {
        if AUDIT_MEMBERS.contains(&name) { Some(request) } else { self.question(request) }
    }

    /// The question within a request; none where it is no object, which the form of a template rules out.
    fn question(self, request: &mut Map<String, Value>) -> Option<&mut Map<String, Value>> {
        match self {
            Operation::Solve | Operation::Dynamics => Some(request),
            Operation::Audit => request.get_mut("request").and_then(Value::as_object_mut),
        }
    }

    /// Where the question stands in a request: a JSON pointer.
    fn prefix(self) -> &'static str {
        if self == Operation::Audit { "/request" } else { "" }
    }

    /// Member of the answer by which lines are counted; none where every answer is a good one.
    fn status_member(self) -> Option<&'static str> {
        match self {
            Operation::Solve => Some("status"),
            Operation::Dynamics => None,
            Operation::Audit => Some("verdict"),
        }
    }
}

/// The first line of a batch (`POST /v1/batch`).
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "BatchRequest")]
pub(super) struct HeadBody {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// What is done with every line (no unit): `solve` (default), `dynamics` or `audit`, as the path of that name does it.
    operation: Option<Operation>,
    /// A request of that kind, model included (units as there); `state`, and the `answer` of an audit, may be left out. Every further
    /// line is put over it; for audits, over its `request`, but for `answer`, `tolerances`, `causes`,
    /// `name` and `recorded`.
    template: AnyObject,
    /// Members of the answer that are sent back (no unit), e.g. `["status", "joints"]`; all when left out.
    members: Option<Vec<String>>,
}

impl Request for HeadBody {
    type Question = HeadBody;

    fn read(self, gate: Gate, _: &dyn ModelSource) -> Result<HeadBody, Refusal> {
        gate.finish().map(|()| self)
    }
}

/// An object that other schemas describe.
#[derive(Debug, Clone, Deserialize, Serialize)]
#[serde(transparent)]
struct AnyObject(Map<String, Value>);

impl JsonSchema for AnyObject {
    fn inline_schema() -> bool {
        true
    }

    fn schema_name() -> std::borrow::Cow<'static, str> {
        "AnyObject".into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        json_schema!({ "type": "object" })
    }
}

/// A further line of a batch: members that are put over the template (RFC 7396; contacts, tasks and limits by name).
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[schemars(rename = "BatchLine")]
#[allow(dead_code, reason = "read member by member; the type is for the schema")]
pub(super) struct LineBody {
    /// What the answer to this line is to be found by (no unit): a string of at most 200 bytes or a number.
    id: Option<Value>,
    /// Names of contacts, tasks and limits of the template that this line does without (no unit).
    without: Option<WithoutBody>,
    /// Any member of the request but `model` and `format`; usually `state` (m, rad, m/s, rad/s).
    #[serde(flatten)]
    over: Map<String, Value>,
}

/// What a line does without.
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Without")]
#[allow(dead_code, reason = "read member by member; the type is for the schema")]
struct WithoutBody {
    /// Names of soles (no unit).
    contacts: Option<Vec<String>>,
    /// Names of tasks (no unit).
    tasks: Option<Vec<String>>,
    /// Names of limits (no unit).
    limits: Option<Vec<String>>,
}

/// One line of what comes back: an answer, a problem, or at the end the summary.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[serde(untagged)]
#[schemars(rename = "BatchAnswer")]
#[allow(dead_code, reason = "written member by member, for answers are bytes already; the type is for the schema")]
pub(super) enum LineOut<'a> {
    Answered(AnsweredOut),
    Refused(RefusedOut),
    Last(LastOut<'a>),
}

/// A line that was answered.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "BatchAnswered")]
pub(super) struct AnsweredOut {
    /// Number of the line in what was sent, from 1 (no unit).
    line: u64,
    /// Its `id` (no unit); null where it has none.
    id: Option<Value>,
    /// The document that answers the line (units as there), or the members of it that were asked for.
    answer: AnyObject,
}

/// A line that was refused.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "BatchRefused")]
pub(super) struct RefusedOut {
    /// Number of the line in what was sent, from 1 (no unit).
    line: u64,
    /// Its `id` (no unit); null where it has none or could not be read.
    id: Option<Value>,
    /// A problem document (RFC 9457): why (no unit). Pointers lead into the line; those that begin with `/template`
    /// into the first.
    problem: AnyObject,
}

/// The last line of a batch.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "BatchEnd")]
pub(super) struct LastOut<'a> {
    /// What became of the other lines (no unit).
    summary: SummaryOut<'a>,
}

/// What became of the lines.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "BatchSummary")]
struct SummaryOut<'a> {
    /// Why the batch ended (no unit): `complete`, every line was read; `idle`, no whole line came for too long; `broken`,
    /// what was sent broke off.
    ended: &'static str,
    /// Lines after the first that were answered or refused; blank ones do not count (no unit).
    lines: u64,
    /// Lines with an answer, whatever its status (no unit).
    answered: u64,
    /// Lines that were refused (no unit).
    bad: u64,
    /// Answers by status (no unit).
    statuses: Vec<CountOut<'a>>,
}

/// Answers of one status.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "BatchCount")]
struct CountOut<'a> {
    /// The status (no unit).
    status: &'a str,
    /// How many (no unit).
    count: u64,
}

/// What the lines of a batch share. It keeps its model, whatever becomes of the registered ones.
#[derive(Debug)]
pub struct Batch {
    operation: Operation,
    template: Map<String, Value>,
    model: Arc<Model>,
    members: Option<Vec<String>>,
}

impl ModelSource for Batch {
    fn find(&self, id: &str) -> Option<Arc<Model>> {
        (id == self.model.id).then(|| Arc::clone(&self.model))
    }
}

impl Batch {
    /// Reads the first line.
    ///
    /// # Errors
    /// [`Refusal`] with every fault of form that was found in it or in its template; 404 where the model is not known.
    pub fn open(head: &[u8], models: &dyn ModelSource) -> Result<Batch, Refusal> {
        object(head)?;
        let body = read::<HeadBody>(head, Document::Batch, models)?;
        let operation = body.operation.unwrap_or(Operation::Solve);
        let AnyObject(mut template) = body.template;
        template.entry("format").or_insert_with(|| json!("underfoot/1"));
        // The form of a request can be judged without a state, and that of an audit without an answer; empty ones stand in.
        if let Some(question) = operation.question(&mut template) {
            question.entry("format").or_insert_with(|| json!("underfoot/1"));
        }
        let mut probe = template.clone();
        if let Some(question) = operation.question(&mut probe) {
            question.entry("state").or_insert_with(|| json!({}));
        }
        if operation == Operation::Audit {
            probe.entry("answer").or_insert_with(|| json!({ "joints": [] }));
        }
        let model = operation.check(&bytes(&Value::Object(probe)), models).map_err(|refusal| {
            moved(refusal, |pointer| format!("/template{pointer}"))
        })?;
        if let Some(members) = &body.members
            && members.len() > MAX_MEMBERS
        {
            return Err(fault("/members", format!("at most {MAX_MEMBERS} names"), members.len().to_string()));
        }
        if let Some(question) = operation.question(&mut template) {
            question.insert("model".to_string(), Value::String(model.id.clone()));
        }
        Ok(Batch { operation, template, model, members: body.members })
    }

    /// What is done with every line.
    pub fn operation(&self) -> Operation {
        self.operation
    }

    /// The request of a line.
    pub fn entry(&self, line: &[u8]) -> Entry<'_> {
        let mut entry = Entry { batch: self, id: Value::Null, given: Map::new(), origins: Vec::new(), request: Ok(Vec::new()) };
        let outcome = object(line).and_then(|given| {
            entry.given = given;
            entry.merge()
        });
        entry.request = outcome.map(|request| bytes(&Value::Object(request)));
        entry
    }
}

/// Where an element of a merged list comes from: index in the line, index in the template.
type Origin = (Option<usize>, Option<usize>);

/// One line, merged.
#[derive(Debug)]
pub struct Entry<'b> {
    batch: &'b Batch,
    id: Value,
    given: Map<String, Value>,
    origins: Vec<(&'static str, Vec<Origin>)>,
    /// The request it stands for.
    pub request: Result<Vec<u8>, Refusal>,
}

impl Entry<'_> {
    fn merge(&mut self) -> Result<Map<String, Value>, Refusal> {
        self.id = id(self.given.get("id"))?;
        for name in ["model", "format"] {
            if self.given.contains_key(name) {
                return Err(fault(&format!("/{name}"), format!("no {name}: the first line gives it"), "one"));
            }
        }
        let operation = self.batch.operation;
        let mut request = self.batch.template.clone();
        for (name, over) in &self.given {
            let Some(part) = operation.belongs(&mut request, name) else { continue };
            let named = NAMED.iter().find(|(list, _)| list == name);
            match (name.as_str(), named, over) {
                ("id" | "without", _, _) => {}
                (_, Some((list, key)), Value::Array(over)) => {
                    let under = part.remove(*list).unwrap_or_else(|| json!([]));
                    let (merged, origins) = by_name(under, over, key);
                    part.insert((*list).to_string(), merged);
                    self.origins.push((list, origins));
                }
                (_, _, Value::Null) => drop(part.remove(name)),
                _ => merge_patch(part.entry(name.clone()).or_insert(Value::Null), over),
            }
        }
        if let Some(without) = self.given.get("without") {
            let origins = &mut self.origins;
            if let Some(question) = operation.question(&mut request) {
                leave_out(question, without, origins)?;
            }
        }
        Ok(request)
    }

    /// The line that brings the document of this one, and its status.
    pub fn answer(&self, number: u64, document: &[u8]) -> (Vec<u8>, String) {
        let operation = self.batch.operation;
        let status = match operation.status_member() {
            None => "answered".to_string(),
            Some(member) => word(document, member).unwrap_or_else(|| "unknown".to_string()),
        };
        let mut text = opening(number, &self.id, "answer");
        match self.batch.members.as_deref().and_then(|members| chosen(document, members)) {
            Some(part) => text.extend_from_slice(&part),
            None => text.extend_from_slice(document),
        }
        text.extend_from_slice(b"}\n");
        (text, status)
    }

    /// The line that says why this one is refused. Pointers of `refusal` lead into the merged request.
    pub fn problem(&self, number: u64, refusal: Refusal) -> Vec<u8> {
        let refusal = if self.request.is_ok() { moved(refusal, |pointer| self.place(pointer)) } else { refusal };
        problem(number, &self.id, &refusal)
    }

    /// Where the user finds what stands at `pointer` of the merged request.
    fn place(&self, pointer: &str) -> String {
        // The members of a question stand in the line itself, whatever the request that they make.
        let prefix = self.batch.operation.prefix();
        let inner = pointer.strip_prefix(prefix).unwrap_or(pointer);
        let (mut here, mut there) = (inner.to_string(), format!("/template{pointer}"));
        for (list, origins) in &self.origins {
            let Some(rest) = inner.strip_prefix(&format!("/{list}/")) else { continue };
            let (index, rest) = rest.split_at(rest.find('/').unwrap_or(rest.len()));
            let Some((line, template)) = index.parse::<usize>().ok().and_then(|i| origins.get(i)) else { continue };
            let at = |prefix: &str, index: &Option<usize>| {
                index.map_or_else(String::new, |index| format!("{prefix}/{list}/{index}{rest}"))
            };
            (here, there) = (at("", line), at(&format!("/template{prefix}"), template));
        }
        let given = resolves(&self.given, &here);
        let in_template = there.strip_prefix("/template").is_some_and(|p| resolves(&self.batch.template, p));
        let first = here.trim_start_matches('/').split('/').next().unwrap_or_default();
        if here.is_empty() || (!given && (in_template || !self.given.contains_key(first)) && !there.is_empty()) {
            return if pointer.is_empty() { String::new() } else { there };
        }
        here
    }
}

/// The line that says why a line without a known `id` is refused.
pub fn batch_problem(number: u64, refusal: &Refusal) -> Vec<u8> {
    problem(number, &Value::Null, refusal)
}

/// The refusal of a line that is longer than `limit` bytes.
pub fn line_too_long(limit: usize) -> Refusal {
    Refusal::new(413, "line-too-long", "Line too long", format!("a line may have at most {limit} bytes"))
}

/// The last line of a batch.
pub fn batch_summary(tally: &Tally, end: End) -> Vec<u8> {
    let summary = SummaryOut {
        ended: match end {
            End::Complete => "complete",
            End::Idle => "idle",
            End::Broken => "broken",
        },
        lines: tally.answered() + tally.refused,
        answered: tally.answered(),
        bad: tally.refused,
        statuses: tally.statuses.iter().map(|(status, count)| CountOut { status, count: *count }).collect(),
    };
    let mut text = serde_json::to_vec(&LastOut { summary }).unwrap_or_default();
    text.push(b'\n');
    text
}

fn problem(number: u64, id: &Value, refusal: &Refusal) -> Vec<u8> {
    let mut text = opening(number, id, "problem");
    text.extend(super::write_refusal(refusal, INSTANCE));
    text.extend_from_slice(b"}\n");
    text
}

fn opening(number: u64, id: &Value, member: &str) -> Vec<u8> {
    format!("{{\"line\":{number},\"id\":{id},\"{member}\":").into_bytes()
}

fn bytes(value: &Value) -> Vec<u8> {
    serde_json::to_vec(value).unwrap_or_default()
}

fn fault(pointer: &str, expected: impl Into<String>, got: impl Into<String>) -> Refusal {
    Refusal::unusable(vec![Fault { pointer: pointer.to_string(), expected: expected.into(), got: got.into(), line: None }])
}

/// A line as an object.
fn object(line: &[u8]) -> Result<Map<String, Value>, Refusal> {
    match raw::parse(line) {
        Ok(Value::Object(members)) => Ok(members),
        Ok(_) => Err(fault("", "an object", "something else")),
        Err(raw::Failure::Refused(refusal)) => Err(refusal),
        Err(raw::Failure::TooManyValues) => Err(fault("", "JSON (RFC 8259) of a size fit for one line", "more, with a fault in it")),
    }
}

fn id(given: Option<&Value>) -> Result<Value, Refusal> {
    match given {
        None => Ok(Value::Null),
        Some(id @ Value::Number(_)) => Ok(id.clone()),
        Some(id @ Value::String(text)) if text.len() <= MAX_ID => Ok(id.clone()),
        Some(_) => Err(fault("/id", format!("a string of at most {MAX_ID} bytes or a number"), "something else")),
    }
}

/// What RFC 7396, section 2, makes of `target` under the patch `over`.
pub fn merge_patch(target: &mut Value, over: &Value) {
    let Value::Object(over) = over else {
        *target = over.clone();
        return;
    };
    if !target.is_object() {
        *target = json!({});
    }
    let Value::Object(members) = target else { return };
    for (name, value) in over {
        if value.is_null() {
            members.remove(name);
        } else {
            merge_patch(members.entry(name.clone()).or_insert(Value::Null), value);
        }
    }
}

/// Entries of `over` merged into those of the same name, new ones added.
fn by_name(under: Value, over: &[Value], key: &str) -> (Value, Vec<Origin>) {
    let Value::Array(mut merged) = under else { return (Value::Array(over.to_vec()), Vec::new()) };
    let mut origins: Vec<Origin> = (0..merged.len()).map(|i| (None, Some(i))).collect();
    let known = merged.len();
    for (i, value) in over.iter().enumerate() {
        let name = value.get(key).filter(|name| name.is_string());
        let twin = merged.iter().take(known).position(|entry| name.is_some() && entry.get(key) == name);
        // A second entry of the same name is added as it stands, and refused with the request.
        match twin.filter(|at| origins.get(*at).is_some_and(|origin| origin.0.is_none())) {
            Some(at) => {
                if let (Some(entry), Some(origin)) = (merged.get_mut(at), origins.get_mut(at)) {
                    merge_patch(entry, value);
                    origin.0 = Some(i);
                }
            }
            None => {
                let mut entry = Value::Null;
                merge_patch(&mut entry, value);
                merged.push(entry);
                origins.push((Some(i), None));
            }
        }
    }
    (Value::Array(merged), origins)
}

/// Takes the named entries out of the request's lists.
fn leave_out(request: &mut Map<String, Value>, without: &Value, origins: &mut Vec<(&'static str, Vec<Origin>)>) -> Result<(), Refusal> {
    let Value::Object(without) = without else {
        return Err(fault("/without", "an object with names of contacts, tasks and limits", "something else"));
    };
    for (list, names) in without {
        let mut at = "/without".to_string();
        push_token(&mut at, list);
        let Some((list, key)) = NAMED.iter().find(|(known, _)| known == list) else {
            return Err(fault(&at, "no member of this name", "one"));
        };
        let Value::Array(names) = names else { return Err(fault(&at, "an array of names", "something else")) };
        for (i, name) in names.iter().enumerate() {
            let entries = request.get_mut(*list).and_then(Value::as_array_mut);
            let place = entries.as_ref().and_then(|entries| entries.iter().position(|entry| entry.get(key) == Some(name)));
            let (Some(entries), Some(place)) = (entries, place) else {
                let got = name.as_str().map_or_else(|| "something else".to_string(), quoted);
                return Err(fault(&format!("{at}/{i}"), format!("a name among the {list}"), got));
            };
            let count = entries.len();
            entries.remove(place);
            if !origins.iter().any(|(known, _)| known == list) {
                origins.push((list, (0..count).map(|i| (None, Some(i))).collect()));
            }
            if let Some((_, origins)) = origins.iter_mut().find(|(known, _)| known == list)
                && place < origins.len()
            {
                origins.remove(place);
            }
        }
    }
    Ok(())
}

/// The same refusal with its pointers moved.
fn moved(refusal: Refusal, place: impl Fn(&str) -> String) -> Refusal {
    let faults: Vec<Fault> =
        refusal.faults.into_iter().map(|fault| Fault { pointer: place(&fault.pointer), ..fault }).collect();
    let detail = match faults.as_slice() {
        [_, ..] if refusal.status == 422 => Refusal::unusable(faults.clone()).detail,
        _ => refusal.detail,
    };
    Refusal { faults, detail, ..refusal }
}

fn resolves(members: &Map<String, Value>, pointer: &str) -> bool {
    let Some(rest) = pointer.strip_prefix('/') else { return false };
    let (first, rest) = rest.split_at(rest.find('/').unwrap_or(rest.len()));
    let first = first.replace("~1", "/").replace("~0", "~");
    members.get(&first).is_some_and(|value| value.pointer(rest).is_some())
}

/// The text of a top-level member; the rest of the document is passed over.
fn word(document: &[u8], member: &str) -> Option<String> {
    #[derive(Deserialize)]
    struct Status {
        status: String,
    }
    match member {
        "status" => serde_json::from_slice::<Status>(document).ok().map(|found| found.status),
        _ => serde_json::from_slice::<Value>(document).ok()?.get(member)?.as_str().map(str::to_string),
    }
}

/// The named members of a document, in its order.
fn chosen(document: &[u8], members: &[String]) -> Option<Vec<u8>> {
    let mut found: Map<String, Value> = serde_json::from_slice(document).ok()?;
    found.retain(|name, _| members.contains(name));
    serde_json::to_vec(&found).ok()
}
