//! Thin handlers: bytes in, bytes out.

use std::fmt::Write as _;
use std::sync::{Arc, LazyLock};
use std::time::Duration;

use axum::body::Body;
use axum::extract::{FromRequest, Path, Request, State};
use axum::http::{HeaderName, HeaderValue, StatusCode, header};
use axum::response::Response;

use super::body::{JsonBytes, media_type};
use super::documents::{Document, Errand};
use super::log;
use super::problem::Problem;
use super::router::Shared;
use crate::wire;

const JSON: HeaderValue = HeaderValue::from_static("application/json");
const SCHEMA_JSON: HeaderValue = HeaderValue::from_static("application/schema+json");
const SERVER_TIMING: HeaderName = HeaderName::from_static("server-timing");

/// `GET /health`.
pub async fn health() -> Response {
    json(StatusCode::OK, concat!("{\"status\":\"ok\",\"version\":\"", env!("CARGO_PKG_VERSION"), "\"}\n"))
}

/// `POST /v1/models`.
pub async fn register(State(shared): State<Arc<Shared>>, JsonBytes(body): JsonBytes) -> Result<Response, Problem> {
    run(shared, Errand::Register, body).await
}

/// `POST /v1/dynamics`.
pub async fn dynamics(State(shared): State<Arc<Shared>>, JsonBytes(body): JsonBytes) -> Result<Response, Problem> {
    run(shared, Errand::Dynamics, body).await
}

/// `POST /v1/solve`.
pub async fn solve(State(shared): State<Arc<Shared>>, JsonBytes(body): JsonBytes) -> Result<Response, Problem> {
    run(shared, Errand::Solve, body).await
}

/// `POST /v1/compare`.
pub async fn compare(State(shared): State<Arc<Shared>>, JsonBytes(body): JsonBytes) -> Result<Response, Problem> {
    run(shared, Errand::Compare, body).await
}

/// `POST /v1/export`.
pub async fn export(State(shared): State<Arc<Shared>>, JsonBytes(body): JsonBytes) -> Result<Response, Problem> {
    run(shared, Errand::Export, body).await
}

/// `POST /v1/identify`: one JSON document, or settings and samples as lines.
pub async fn identify(State(shared): State<Arc<Shared>>, request: Request) -> Result<Response, Problem> {
    let Some(form) = log::form(request.headers()) else {
        if media_type(request.headers()).is_none_or(|media| !media.to_ascii_lowercase().starts_with("application/json")) {
            return Err(log::unsupported());
        }
        let JsonBytes(body) = JsonBytes::from_request(request, &shared).await?;
        return run(shared, Errand::Identify, body).await;
    };
    let (head, body) = request.into_parts();
    let (result, waited) = log::work(&shared, &head.headers, body, form).await?;
    Ok(respond(result?, waited))
}

/// `POST /v1/audit`.
pub async fn audit(State(shared): State<Arc<Shared>>, JsonBytes(body): JsonBytes) -> Result<Response, Problem> {
    run(shared, Errand::Audit, body).await
}

/// `GET /v1/models/{id}`.
pub async fn show_model(State(shared): State<Arc<Shared>>, Path(id): Path<String>) -> Result<Response, Problem> {
    match shared.work.model(&id) {
        Some(document) => Ok(json(StatusCode::OK, document)),
        None => Err(Problem::new(
            StatusCode::NOT_FOUND,
            "unknown-model",
            "No such model",
            "no model with this id is kept here; send it again to /v1/models",
        )),
    }
}

/// `GET /schemas`.
pub async fn schemas() -> Response {
    let names: Vec<String> = wire::schema_names().iter().map(|name| format!("\"{name}\"")).collect();
    json(StatusCode::OK, format!("{{\"schemas\":[{}]}}\n", names.join(",")))
}

/// `GET /schemas/{name}`.
pub async fn schema(Path(name): Path<String>) -> Result<Response, Problem> {
    let text = wire::schema(&name).ok_or_else(|| {
        Problem::new(StatusCode::NOT_FOUND, "unknown-schema", "No such schema", "/schemas lists every name")
    })?;
    let mut response = json(StatusCode::OK, text);
    response.headers_mut().insert(header::CONTENT_TYPE, SCHEMA_JSON);
    Ok(response)
}

/// `GET /openapi.json`.
pub async fn openapi() -> Response {
    static TEXT: LazyLock<String> = LazyLock::new(wire::openapi);
    json(StatusCode::OK, TEXT.as_str())
}

async fn run(shared: Arc<Shared>, errand: Errand, body: axum::body::Bytes) -> Result<Response, Problem> {
    let work = Arc::clone(&shared.work);
    let (result, waited) = shared.desk.run(move |cancel| work.run(errand, &body, cancel)).await?;
    Ok(respond(result?, waited))
}

fn respond(document: Document, waited: Duration) -> Response {
    let timing = server_timing(waited, &document.timings);
    let location = document.model.as_ref().and_then(|id| HeaderValue::try_from(format!("/v1/models/{id}")).ok());
    let Document { body, .. } = document;
    let mut response = json(StatusCode::OK, body);
    if let Ok(value) = HeaderValue::try_from(timing) {
        response.headers_mut().insert(SERVER_TIMING, value);
    }
    if let Some(location) = location {
        response.headers_mut().insert(header::LOCATION, location);
    }
    response
}

/// The Server-Timing header: milliseconds by name.
fn server_timing(waited: Duration, timings: &[(&'static str, Duration)]) -> String {
    let mut text = format!("wait;dur={:.3}", waited.as_secs_f64() * 1e3);
    for (name, time) in timings {
        // Writing to a String cannot fail.
        let _ = write!(text, ", {name};dur={:.3}", time.as_secs_f64() * 1e3);
    }
    text
}

fn json(status: StatusCode, body: impl Into<Body>) -> Response {
    let mut response = Response::new(body.into());
    *response.status_mut() = status;
    response.headers_mut().insert(header::CONTENT_TYPE, JSON);
    response
}
