//! From a line of a batch to the line that answers it: the one path that service and command line share.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::documents;
use crate::cases::tally::Fate;
use crate::wire::{Batch, Operation};

/// What a line came to.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LineDone {
    /// The line that answers it, line feed included.
    pub text: Vec<u8>,
    /// How it counts.
    pub fate: Fate,
}

/// Answers the lines of one batch. Tests put their own in its place.
pub trait LineWork: Send + Sync + 'static {
    /// Answers line `number`; stops soon after `cancel` is raised. What is wrong with the line is an answer too.
    fn line(&self, number: u64, line: &[u8], cancel: &Arc<AtomicBool>) -> LineDone;
}

impl LineWork for Batch {
    fn line(&self, number: u64, line: &[u8], cancel: &Arc<AtomicBool>) -> LineDone {
        let entry = self.entry(line);
        let outcome = match &entry.request {
            Err(refusal) => Err(refusal.clone()),
            Ok(request) => match self.operation() {
                Operation::Solve => documents::solve(request, self, cancel),
                Operation::Audit => documents::audit(request, self, cancel),
                Operation::Dynamics => documents::dynamics(request, self),
            },
        };
        match outcome {
            Ok(document) => {
                let (text, status) = entry.answer(number, &document.body);
                LineDone { text, fate: Fate::Answered(status) }
            }
            Err(refusal) => LineDone { text: entry.problem(number, refusal), fate: Fate::Refused },
        }
    }
}
