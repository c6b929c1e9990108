//! The JSON documents and their conversion into domain types: the only gate for bad input, and
//! the only module that knows serde.

mod aim;
mod answer;
mod batch;
mod canonical;
mod common;
mod compare;
mod contact;
mod dynamics;
mod explained;
mod export;
mod extras;
mod friction;
mod gate;
mod kinds;
mod limit;
mod market;
mod model;
mod number;
mod openapi;
mod problem;
mod raw;
mod refusal;
mod report;
mod robot;
mod schema;
mod second;
mod sensitivity;
mod solve;
mod spread;
mod state;
mod strict;
mod task;
mod treatment;
mod uniqueness;
pub mod view;

use std::sync::Arc;

use crate::compare::Comparison;
use crate::model::Model;
use crate::problem::question::{DynamicsQuestion, Question};
use crate::reference::answer::{Answer, DynamicsReport};
use crate::reference::program::Program;

pub use batch::{Batch, Entry, Operation, batch_problem, batch_summary, line_too_long, merge_patch};
pub use canonical::{canonical, fingerprint};
pub use compare::CompareQuestion;
pub use openapi::openapi;
pub use refusal::{Fault, Refusal};
pub use schema::{schema, schema_names};
use second::Document;

/// Where models registered earlier are kept.
pub trait ModelSource {
    /// The model with this id, if it is still kept.
    fn find(&self, id: &str) -> Option<Arc<Model>>;
}

/// The largest request body (bytes).
pub const MAX_BODY: usize = 4 * 1024 * 1024;

/// Reads the body of `POST /v1/models`.
///
/// # Errors
/// [`Refusal`] with every fault that was found.
pub fn read_model(body: &[u8]) -> Result<Model, Refusal> {
    typed::<model::ModelRequest>(body, Document::Model)?.read()
}

/// Reads the body of `POST /v1/solve`.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_solve(body: &[u8], models: &dyn ModelSource) -> Result<Question, Refusal> {
    typed::<solve::SolveRequest>(body, Document::Solve)?.read(models)
}

/// Reads the body of `POST /v1/dynamics`.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_dynamics(body: &[u8], models: &dyn ModelSource) -> Result<DynamicsQuestion, Refusal> {
    typed::<solve::DynamicsRequest>(body, Document::Dynamics)?.read(models)
}

/// Reads the body of `POST /v1/compare`.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_compare(body: &[u8], models: &dyn ModelSource) -> Result<CompareQuestion, Refusal> {
    typed::<compare::CompareRequest>(body, Document::Compare)?.read(models)
}

/// The answer to a comparison.
pub fn write_compare(asked: &CompareQuestion, found: &Comparison, fingerprint: &str) -> Vec<u8> {
    compare::write(asked, found, fingerprint)
}

/// Typed straight from the bytes; only a body that fails is gone through a second time, for the
/// sake of every fault's pointer.
fn typed<T: serde::de::DeserializeOwned>(body: &[u8], document: Document) -> Result<T, Refusal> {
    if body.len() > MAX_BODY {
        let detail = format!("a request may have {MAX_BODY} bytes, this one has {}", body.len());
        return Err(Refusal::new(413, "body-too-large", "The request is too large", detail));
    }
    strict::read(body).map_err(|error| second::refusal(document, body, &error))
}

/// The document that describes a model.
pub fn write_model(model: &Model) -> Vec<u8> {
    robot::write(model)
}

/// The answer to a solve request.
pub fn write_answer(question: &Question, answer: &Answer, fingerprint: &str) -> Vec<u8> {
    answer::write(question, answer, fingerprint)
}

/// The answer to an export request, which is a solve request.
pub fn write_export(question: &Question, program: &Program, fingerprint: &str) -> Vec<u8> {
    market::write(question, program, fingerprint)
}

/// The answer to a dynamics request.
pub fn write_dynamics(question: &DynamicsQuestion, report: &DynamicsReport, fingerprint: &str) -> Vec<u8> {
    dynamics::write(question, report, fingerprint)
}

/// The problem document (RFC 9457, `application/problem+json`) of a refusal; `instance` is the
/// path of the request.
pub fn write_refusal(refusal: &Refusal, instance: &str) -> Vec<u8> {
    problem::write(refusal, instance)
}
