//! The OpenAPI 3.1 description of the service, around the schemas of the documents.

use serde_json::{Map, Value, json};

use super::schema;

/// The OpenAPI 3.1 description of the service, as text.
pub fn openapi() -> String {
    let document = json!({
        "openapi": "3.1.0",
        "info": {
            "title": "Underfoot",
            "version": env!("CARGO_PKG_VERSION"),
            "summary": "Reference solver for legged robots on ground that gives.",
            "description": "Simulation on a model, no safety function: never wire the torques to actuators. SI \
                            units; quaternions [x, y, z, w]; linear before angular.",
            "license": { "name": "Apache-2.0", "identifier": "Apache-2.0" },
        },
        "jsonSchemaDialect": "https://json-schema.org/draft/2020-12/schema",
        "paths": paths(),
        "components": { "schemas": components() },
    });
    let mut text = serde_json::to_string_pretty(&document).unwrap_or_default();
    text.push('\n');
    text
}

fn paths() -> Value {
    json!({
        "/v1/models": { "post": post(
            "registerModel", "Registers a robot", "ModelRequest", "Model",
            "The model and its id; sending it again changes nothing."
        ) },
        "/v1/models/{id}": { "get": get(
            "getModel", "Describes a registered robot", Some("id"), "application/json",
            reference("Model"), &[404]
        ) },
        "/v1/dynamics": { "post": post(
            "dynamics", "Rigid-body terms in one state", "DynamicsRequest", "DynamicsAnswer", "The terms."
        ) },
        "/v1/solve": { "post": post(
            "solve", "Torques and sole wrenches", "SolveRequest", "SolveAnswer",
            "The answer; `infeasible`, `not_reachable`, `ill_posed`, `inaccurate` and `cancelled` are \
             answers too, see `status`. Timings travel in the Server-Timing header."
        ) },
        "/v1/audit": { "post": post(
            "audit", "Judges a controller's own answer", "AuditRequest", "AuditAnswer",
            "What the torques lead to, every limit, what is lost against the reference and what may have gone wrong; \
             `pass`, `fail` and `undecided` are all answers, see `verdict`."
        ) },
        "/v1/compare": { "post": post(
            "compare", "Your rigid-body terms beside ours, and the convention that explains the difference", "CompareRequest",
            "CompareAnswer", "The comparison; see `verdict`."
        ) },
        "/v1/export": { "post": post(
            "export", "The assembled problem as Matrix Market files", "SolveRequest", "ExportAnswer", "The files."
        ) },
        "/v1/batch": { "post": batch() },
        "/v1/identify": { "post": identify() },
        "/health": { "get": get(
            "health", "Says that the service runs", None, "application/json", json!({ "type": "object" }), &[]
        ) },
        "/schemas": { "get": get(
            "listSchemas", "Names of all schemas", None, "application/json",
            json!({
                "type": "object", "required": ["schemas"],
                "properties": { "schemas": { "type": "array", "items": { "type": "string" } } },
            }),
            &[]
        ) },
        "/schemas/{name}": { "get": get(
            "getSchema", "JSON Schema of a document", Some("name"), "application/schema+json",
            json!({ "type": "object" }), &[404]
        ) },
        "/openapi.json": { "get": get(
            "openapi", "This description", None, "application/json", json!({ "type": "object" }), &[]
        ) },
    })
}

fn post(id: &str, summary: &str, request: &str, answer: &str, good: &str) -> Value {
    let statuses: &[u16] = match request {
        "ModelRequest" => &[400, 403, 405, 408, 413, 415, 421, 422, 503, 504],
        _ => &[400, 403, 404, 405, 408, 413, 415, 421, 422, 503, 504],
    };
    json!({
        "operationId": id,
        "summary": summary,
        "requestBody": {
            "required": true,
            "content": { "application/json": { "schema": reference(request) } },
        },
        "responses": responses(good, "application/json", reference(answer), statuses),
    })
}

/// Lines of JSON both ways.
fn batch() -> Value {
    let mut operation = post(
        "batch", "Many states, one line each", "BatchRequest", "BatchAnswer",
        "One line for each line after the first, in order, while more may be sent, then a summary. A line that cannot \
         be used is answered with a problem on its own line; only a first line that cannot be used refuses the whole."
    );
    let lines = |schema: &str| json!({ "application/x-ndjson": { "schema": reference(schema) } });
    operation["requestBody"]["content"] = lines("BatchRequest");
    operation["requestBody"]["description"] = json!(
        "Lines of JSON: a BatchRequest, then a BatchLine for every question. Each line has a limit, the whole has none; the \
         batch ends where no whole line comes for a while."
    );
    operation["responses"]["200"]["content"] = lines("BatchAnswer");
    operation
}

/// Besides one JSON document, lines are read: settings on the first, samples after it.
fn identify() -> Value {
    let mut operation = post(
        "identify", "Stiffness and damping of the ground from samples", "IdentifyRequest", "IdentifyAnswer",
        "The estimates with error bars; `partly` and `not_identified` are answers too, see `status`. As application/x-ndjson the \
         first line holds the settings (an IdentifyRequest without samples) and each further line a Sample; as text/csv the first \
         line holds the settings, the second a header of cells `name [unit]`, each further line a row.",
    );
    let text = json!({ "schema": { "type": "string" } });
    if let Some(Value::Object(content)) = operation.pointer_mut("/requestBody/content") {
        content.insert("application/x-ndjson".to_string(), text.clone());
        content.insert("text/csv".to_string(), text);
    }
    operation
}

fn get(
    id: &str,
    summary: &str,
    parameter: Option<&str>,
    media: &str,
    schema: Value,
    statuses: &[u16],
) -> Value {
    let mut all = vec![400, 403, 405, 421];
    all.extend(statuses);
    all.sort_unstable();
    let mut operation = json!({
        "operationId": id,
        "summary": summary,
        "responses": responses("As the summary says.", media, schema, &all),
    });
    if let Some(name) = parameter {
        operation["parameters"] =
            json!([{ "name": name, "in": "path", "required": true, "schema": { "type": "string" } }]);
    }
    operation
}

fn responses(good: &str, media: &str, schema: Value, statuses: &[u16]) -> Value {
    let mut responses = Map::new();
    responses.insert(
        "200".to_string(),
        json!({ "description": good, "content": { media: { "schema": schema } } }),
    );
    for status in statuses {
        let mut response = json!({
            "description": meaning(*status),
            "content": { "application/problem+json": { "schema": reference("Problem") } },
        });
        if *status == 503 {
            response["headers"] = json!({
                "Retry-After": { "description": "Seconds to wait (s).", "schema": { "type": "integer" } },
            });
        }
        responses.insert(status.to_string(), response);
    }
    Value::Object(responses)
}

fn meaning(status: u16) -> &'static str {
    match status {
        400 => "Not JSON, a member named twice, nested too deep, or a number beyond a double; or a malformed Host header.",
        403 => "The request comes from a page of another origin.",
        404 => "No such model or schema; send the model again.",
        405 => "The path exists, but not with this method.",
        408 => "The body came too slowly.",
        413 => "The body is too large.",
        415 => "The body is not declared as application/json, or for a batch as application/x-ndjson.",
        421 => "The Host header names another host.",
        422 => "Well-formed, but some members do not hold what they must; each is pointed at.",
        503 => "Too much work is waiting; try again later.",
        _ => "The work took too long and was called off.",
    }
}

fn reference(name: &str) -> Value {
    json!({ "$ref": format!("#/components/schemas/{name}") })
}

/// Every document and every part of one, each under its title. Parts that documents share are the
/// same in all of them.
fn components() -> Value {
    let mut components = Map::new();
    for name in schema::schema_names() {
        let Some(Value::Object(mut document)) = schema::value(name) else { continue };
        document.remove("$schema");
        if let Some(Value::Object(parts)) = document.remove("$defs") {
            for (part, mut schema) in parts {
                redirect(&mut schema);
                components.entry(part).or_insert(schema);
            }
        }
        let title = document.get("title").and_then(Value::as_str).unwrap_or(name).to_string();
        let mut schema = Value::Object(document);
        redirect(&mut schema);
        components.insert(title, schema);
    }
    Value::Object(components)
}

/// References within a schema document, as references within this one.
fn redirect(schema: &mut Value) {
    match schema {
        Value::Array(elements) => elements.iter_mut().for_each(redirect),
        Value::Object(members) => {
            if let Some(Value::String(target)) = members.get_mut("$ref") {
                *target = target.replace("#/$defs/", "#/components/schemas/");
            }
            members.values_mut().for_each(redirect);
        }
        _ => {}
    }
}
