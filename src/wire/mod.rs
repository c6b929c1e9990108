//! The JSON documents and their conversion into domain types: the only gate for bad input, and
//! the only module that knows serde.

mod aim;
mod answer;
mod audit;
mod audit_answer;
mod batch;
mod canonical;
mod case;
mod common;
mod compare;
mod contact;
mod dynamics;
mod explained;
mod export;
mod extras;
mod friction;
mod gaps;
mod gate;
mod identify;
mod joints;
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
mod withheld;

use std::sync::Arc;

use crate::audit::report::AuditReport;
use crate::audit::{Claim, Tolerances};
use crate::compare::Comparison;
use crate::model::Model;
use crate::problem::question::{DynamicsQuestion, Question};
use crate::reference::answer::{Answer, DynamicsReport};
use crate::reference::program::Program;

use canonical::hexadecimal;
pub use batch::{Batch, Entry, Operation, batch_problem, batch_summary, line_too_long, merge_patch};
pub use canonical::{canonical, fingerprint};
pub use case::{Case, Whose};
pub use compare::CompareQuestion;
pub use identify::{LogForm, LogReader, MAX_LINE, read_identify, write_identify};
pub use openapi::openapi;
pub use refusal::{Fault, Refusal};
pub use schema::{schema, schema_names};
use gate::Gate;
use second::Document;

/// Where models registered earlier are kept.
pub trait ModelSource {
    /// The model with this id, if it is still kept.
    fn find(&self, id: &str) -> Option<Arc<Model>>;

    /// The model that a request describes itself: the one made from the same description before, or else what `make`
    /// makes of it. `key`: a hash of the description.
    fn described(&self, key: &[u8; 32], make: &mut dyn FnMut() -> Option<Arc<Model>>) -> Option<Arc<Model>> {
        let _ = key;
        make()
    }
}

/// The largest request body (bytes).
pub const MAX_BODY: usize = 4 * 1024 * 1024;

/// Reads the body of `POST /v1/models`.
///
/// # Errors
/// [`Refusal`] with every fault that was found.
pub fn read_model(body: &[u8]) -> Result<Model, Refusal> {
    read::<model::ModelRequest>(body, Document::Model, &NoModels)
}

/// Reads the body of `POST /v1/solve`.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_solve(body: &[u8], models: &dyn ModelSource) -> Result<Question, Refusal> {
    read::<solve::SolveRequest>(body, Document::Solve, models)
}

/// Reads the body of `POST /v1/audit`: the question, the controller's answer, the tolerances.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_audit(body: &[u8], models: &dyn ModelSource) -> Result<(Question, Claim, Tolerances), Refusal> {
    read::<audit::AuditRequest>(body, Document::Audit, models)
}

/// Reads a case file: an audit request that holds its model itself.
///
/// # Errors
/// [`Refusal`] with every fault that was found.
pub fn read_case(file: &[u8]) -> Result<(Question, Claim, Tolerances), Refusal> {
    read_audit(file, &NoModels)
}

/// Reads the body of `POST /v1/dynamics`.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_dynamics(body: &[u8], models: &dyn ModelSource) -> Result<DynamicsQuestion, Refusal> {
    read::<solve::DynamicsRequest>(body, Document::Dynamics, models)
}

/// No models are kept.
struct NoModels;

impl ModelSource for NoModels {
    fn find(&self, _: &str) -> Option<Arc<Model>> {
        None
    }
}

/// A request document that becomes something the domain understands.
trait Request: serde::de::DeserializeOwned {
    /// What it becomes.
    type Question;

    /// Checks and converts it.
    fn read(self, gate: Gate, models: &dyn ModelSource) -> Result<Self::Question, Refusal>;
}

/// Reads the body of `POST /v1/compare`.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_compare(body: &[u8], models: &dyn ModelSource) -> Result<CompareQuestion, Refusal> {
    read::<compare::CompareRequest>(body, Document::Compare, models)
}

/// The answer to a comparison.
pub fn write_compare(asked: &CompareQuestion, found: &Comparison, fingerprint: &str) -> Vec<u8> {
    compare::write(asked, found, fingerprint)
}

/// Typed straight from the bytes; only a body that fails is gone through a second time, for the
/// sake of every fault's pointer.
fn read<T: Request>(body: &[u8], document: Document, models: &dyn ModelSource) -> Result<T::Question, Refusal> {
    if body.len() > MAX_BODY {
        let detail = format!("a request may have {MAX_BODY} bytes, this one has {}", body.len());
        return Err(Refusal::new(413, "body-too-large", "The request is too large", detail));
    }
    match strict::read::<T>(body) {
        Ok(request) => {
            request.read(Gate::default(), models).map_err(|refusal| second::completed(document, body, refusal))
        }
        Err(error) => Err(second::refusal(document, body, &error, |rest, gaps| {
            strict::read::<T>(rest).ok()?.read(Gate::with(gaps), models).err()
        })),
    }
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

/// The answer to an audit request.
pub fn write_audit(question: &Question, report: &AuditReport, fingerprint: &str) -> Vec<u8> {
    audit_answer::write(question, report, fingerprint)
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
