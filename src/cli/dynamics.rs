//! `underfoot dynamics`: the document that `POST /v1/dynamics` answers, byte for byte.

use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::{Outcome, files};
use crate::http::{Catalogue, Errand, Work};

/// Arguments of `underfoot dynamics`.
#[derive(Debug, Args)]
pub struct Dynamics {
    /// A dynamics request; `-` reads standard input.
    file: PathBuf,
}

impl Dynamics {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let body = match files::read_request(&self.file) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        match Catalogue::default().run(Errand::Dynamics, &body, &never) {
            Ok(document) => files::print(&document.body, Outcome::Good),
            Err(refusal) => files::refuse(&refusal),
        }
    }
}
