//! The JSON documents and their conversion into domain types: the only gate for bad input, and
//! the only module that knows serde.

mod refusal;

use std::sync::Arc;

use crate::model::Model;
use crate::problem::question::{DynamicsQuestion, Question};
use crate::reference::answer::{Answer, DynamicsReport};

pub use refusal::{Fault, Refusal};

/// Where models registered earlier are kept.
pub trait ModelSource {
    /// The model with this id, if it is still kept.
    fn find(&self, id: &str) -> Option<Arc<Model>>;
}

/// Reads the body of `POST /v1/models`.
pub fn read_model(_body: &[u8]) -> Result<Model, Refusal> {
    Err(Refusal::new(503, "unavailable", "Not available", "models cannot be read yet"))
}

/// Reads the body of `POST /v1/solve`.
pub fn read_solve(_body: &[u8], _models: &dyn ModelSource) -> Result<Question, Refusal> {
    Err(Refusal::new(503, "unavailable", "Not available", "questions cannot be read yet"))
}

/// Reads the body of `POST /v1/dynamics`.
pub fn read_dynamics(_body: &[u8], _models: &dyn ModelSource) -> Result<DynamicsQuestion, Refusal> {
    Err(Refusal::new(503, "unavailable", "Not available", "questions cannot be read yet"))
}

/// The document that describes a model.
pub fn write_model(_model: &Model) -> Vec<u8> {
    b"{}".to_vec()
}

/// The answer to a solve request.
pub fn write_answer(_question: &Question, _answer: &Answer, _fingerprint: &str) -> Vec<u8> {
    b"{}".to_vec()
}

/// The answer to a dynamics request.
pub fn write_dynamics(_question: &DynamicsQuestion, _report: &DynamicsReport, _fingerprint: &str) -> Vec<u8> {
    b"{}".to_vec()
}

/// The problem document (RFC 9457, `application/problem+json`) of a refusal; `instance` is the
/// path of the request.
pub fn write_refusal(refusal: &Refusal, instance: &str) -> Vec<u8> {
    let document = serde_json::json!({
        "title": refusal.title, "status": refusal.status, "detail": refusal.detail,
        "instance": instance, "code": refusal.code,
    });
    document.to_string().into_bytes()
}

/// SHA-256 (hexadecimal) of the canonical request (RFC 8785) and the version of this crate.
pub fn fingerprint(_body: &[u8]) -> String {
    String::new()
}

/// The JSON Schema (draft 2020-12) of this name.
pub fn schema(_name: &str) -> Option<String> {
    None
}

/// Names that [`schema`] knows.
pub fn schema_names() -> &'static [&'static str] {
    &[]
}

/// The OpenAPI 3.1 description of the service.
pub fn openapi() -> String {
    String::new()
}
