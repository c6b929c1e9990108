//! From a request's bytes to a document's bytes: the one path that service and command line share.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;
use std::time::Duration;

use super::stand_in::Refusal;
use crate::reference::answer::Status;

/// What is asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Errand {
    /// Keep a model.
    Register,
    /// Rigid-body terms of a state.
    Dynamics,
    /// Torques and wrenches.
    Solve,
}

/// A document, and what the transport needs to know of it.
#[derive(Debug, Clone, PartialEq)]
pub struct Document {
    /// The JSON text.
    pub body: Vec<u8>,
    /// How a solve ended; none for other documents.
    pub status: Option<Status>,
    /// Id of the model that was registered.
    pub model: Option<String>,
    /// Where the time went. Never part of the body, which is the same every time.
    pub timings: Vec<(&'static str, Duration)>,
}

/// Turns requests into documents. The service holds one; tests put their own in its place.
pub trait Work: Send + Sync + 'static {
    /// Does the errand; stops soon after `cancel` is raised.
    ///
    /// # Errors
    /// A refusal names what is wrong with the request.
    fn run(&self, errand: Errand, body: &[u8], cancel: &Arc<AtomicBool>) -> Result<Document, Refusal>;

    /// The document of a registered model.
    fn model(&self, id: &str) -> Option<Vec<u8>>;
}

/// The real work, with the models registered so far.
#[derive(Debug, Default)]
pub struct Catalogue {}

impl Work for Catalogue {
    fn run(&self, _: Errand, _: &[u8], _: &Arc<AtomicBool>) -> Result<Document, Refusal> {
        Err(Refusal {
            status: 501,
            code: "not-merged",
            title: "not merged".into(),
            detail: String::new(),
            faults: Vec::new(),
        })
    }

    fn model(&self, _: &str) -> Option<Vec<u8>> {
        None
    }
}
