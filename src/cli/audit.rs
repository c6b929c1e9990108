//! `underfoot audit`: the document that `POST /v1/audit` answers, byte for byte, or a table.

use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::{Outcome, audit_table, files};
use crate::http::{Catalogue, Errand, Work};
use crate::wire::view::Parsed;

/// Arguments of `underfoot audit`.
#[derive(Debug, Args)]
pub struct Audit {
    /// An audit request; `-` reads standard input.
    file: PathBuf,
    /// Print a table to read instead of the JSON document.
    #[arg(long)]
    table: bool,
}

impl Audit {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let body = match files::read_request(&self.file) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        let document = match Catalogue::default().run(Errand::Audit, &body, &never) {
            Ok(document) => document,
            Err(refusal) => return files::refuse(&refusal),
        };
        let parsed = Parsed::read(&document.body);
        let passed = parsed.is_some_and(|parsed| parsed.view().at("/verdict").text() == Some("pass"));
        let outcome = if passed { Outcome::Good } else { Outcome::BadNews };
        if self.table {
            files::print(audit_table::audit(&document.body).as_bytes(), outcome)
        } else {
            files::print(&document.body, outcome)
        }
    }
}
