//! Every error becomes a problem document (RFC 9457), whoever raised it.
//!
//! A refusal travels through the layers as an extension of the response; the outermost layer
//! writes the document, because only there is the path known for certain.

use std::any::Any;
use std::sync::Arc;

use axum::body::Body;
use axum::extract::Request;
use axum::http::{HeaderName, HeaderValue, Method, StatusCode, Uri, header};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};

use crate::wire::{Refusal, write_refusal};

/// Seconds after which a refused client may well try again.
const RETRY_AFTER_SECONDS: u64 = 1;
/// Media type of every error.
const PROBLEM_JSON: HeaderValue = HeaderValue::from_static("application/problem+json");
/// Longest path repeated in an answer (bytes).
const PATH_SHOWN: usize = 512;

/// A refusal on its way out.
#[derive(Debug, Clone)]
pub struct Problem(pub Arc<Refusal>);

impl From<Refusal> for Problem {
    fn from(refusal: Refusal) -> Self {
        Problem(Arc::new(refusal))
    }
}

impl Problem {
    /// A problem without offending members.
    pub fn new(status: StatusCode, code: &'static str, title: &str, detail: impl Into<String>) -> Self {
        Problem::from(Refusal::new(status.as_u16(), code, title, detail))
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response {
        let mut response = Response::new(Body::empty());
        *response.status_mut() =
            StatusCode::from_u16(self.0.status).unwrap_or(StatusCode::INTERNAL_SERVER_ERROR);
        response.extensions_mut().insert(self);
        response
    }
}

/// Outermost layer but the log: writes the document of every error, and the headers all responses share.
pub async fn write_out(request: Request, next: Next) -> Response {
    let path = shown_path(request.uri());
    let mut response = next.run(request).await;
    let status = response.status();
    let raised = response.extensions_mut().remove::<Problem>();
    if raised.is_some() || status.is_client_error() || status.is_server_error() {
        let problem = raised.unwrap_or_else(|| unnamed(status));
        let headers = response.headers_mut();
        headers.remove(header::CONTENT_LENGTH);
        headers.insert(header::CONTENT_TYPE, PROBLEM_JSON);
        if status == StatusCode::SERVICE_UNAVAILABLE {
            headers.insert(header::RETRY_AFTER, HeaderValue::from(RETRY_AFTER_SECONDS));
        }
        *response.body_mut() = Body::from(write_refusal(&problem.0, &path));
    }
    response
        .headers_mut()
        .insert(HeaderName::from_static("x-content-type-options"), HeaderValue::from_static("nosniff"));
    response
}

fn shown_path(uri: &Uri) -> String {
    uri.path().chars().take(PATH_SHOWN).collect()
}

/// For errors that a library raised with a body of its own.
fn unnamed(status: StatusCode) -> Problem {
    let title = status.canonical_reason().unwrap_or("Request refused");
    Problem::new(status, "refused", title, "the request cannot be served as it stands")
}

/// No such path.
pub async fn unknown_path(uri: Uri) -> Problem {
    Problem::new(
        StatusCode::NOT_FOUND,
        "unknown-path",
        "No such path",
        format!("nothing is served at {}; /openapi.json lists every path", shown_path(&uri)),
    )
}

/// The path exists, the method does not; the router adds `Allow`.
pub async fn wrong_method(method: Method, uri: Uri) -> Problem {
    let method: String = method.as_str().chars().take(32).collect();
    Problem::new(
        StatusCode::METHOD_NOT_ALLOWED,
        "wrong-method",
        "Method not allowed",
        format!("{} does not answer {method}; the Allow header lists what it does answer", shown_path(&uri)),
    )
}

/// A panic that reached a handler: logged, and answered without its text.
pub fn after_panic(panic: Box<dyn Any + Send + 'static>) -> Response {
    tracing::error!(panic = panic_text(panic.as_ref()), "a handler panicked");
    internal().into_response()
}

/// The answer to a defect of ours.
pub fn internal() -> Problem {
    Problem::new(
        StatusCode::INTERNAL_SERVER_ERROR,
        "defect",
        "A defect of this service",
        "the request ran into a defect; the service's log holds the details",
    )
}

/// The message of a panic, where it is text.
pub fn panic_text(panic: &(dyn Any + Send)) -> &str {
    panic
        .downcast_ref::<&'static str>()
        .copied()
        .or_else(|| panic.downcast_ref::<String>().map(String::as_str))
        .unwrap_or("no message")
}
