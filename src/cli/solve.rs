//! `underfoot solve`: the document that `POST /v1/solve` answers, byte for byte.

use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::{Outcome, files, report};
use crate::http::{Catalogue, Errand, Work};
use crate::wire::view::Parsed;

/// Arguments of `underfoot solve`.
#[derive(Debug, Args)]
pub struct Solve {
    /// A solve request; `-` reads standard input.
    file: PathBuf,
    /// Print a table to read instead of the JSON document.
    #[arg(long)]
    table: bool,
}

impl Solve {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let body = match files::read_request(&self.file) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        let document = match Catalogue::default().run(Errand::Solve, &body, &never) {
            Ok(document) => document,
            Err(refusal) => return files::refuse(&refusal),
        };
        // From the document, not from the solver: an answer that had to be withheld says so only there.
        let parsed = Parsed::read(&document.body);
        let solved = parsed.is_some_and(|parsed| parsed.view().at("/status").text() == Some("solved"));
        let outcome = if solved { Outcome::Good } else { Outcome::BadNews };
        if self.table {
            files::print(report::answer(&document.body).as_bytes(), outcome)
        } else {
            files::print(&document.body, outcome)
        }
    }
}
