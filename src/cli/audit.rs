//! `underfoot audit`: the document that `POST /v1/audit` answers, byte for byte, or a table; and many cases at once.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::cases::Form;
use super::{Outcome, audit_table, cases, files};
use crate::cases::finding::Finding;
use crate::cases::junit;
use crate::http::{Catalogue, Errand, Work};
use crate::wire::Case;
use crate::wire::view::Parsed;

/// Arguments of `underfoot audit`.
#[derive(Debug, Args)]
pub struct Audit {
    /// Audit requests and folders of them, which are searched for *.json; `-` reads standard input. One file alone is answered by its
    /// whole document, more by a line each.
    #[arg(required = true, value_name = "PATH")]
    paths: Vec<PathBuf>,
    /// Print tables to read: of the one file, or of every case that does not pass.
    #[arg(long)]
    table: bool,
    /// With more than one case: print a JSON document per line, a summary last.
    #[arg(long, conflicts_with = "table")]
    json: bool,
    /// Write the verdicts into this file as JUnit XML, for build servers.
    #[arg(long, value_name = "FILE")]
    junit: Option<PathBuf>,
}

impl Audit {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        match self.paths.as_slice() {
            [one] if !one.is_dir() => self.one(one),
            many => {
                let form = match (self.json, self.table) {
                    (true, _) => Form::Json,
                    (_, true) => Form::Tables,
                    _ => Form::Lines,
                };
                cases::run(many, form, self.junit.as_deref())
            }
        }
    }

    fn one(&self, file: &Path) -> Outcome {
        let body = match files::read_request(file) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        let document = match Catalogue::default().run(Errand::Audit, &body, &never) {
            Ok(document) => document,
            Err(refusal) => {
                let outcome = files::refuse(&refusal);
                return self.report(cases::unusable(file, &refusal)).unwrap_or(outcome);
            }
        };
        let mut finding = cases::read(file, &document.body);
        finding.name = Case::read(&body).ok().and_then(|case| case.name().map(str::to_owned));
        finding.seconds = document.timings.iter().map(|(_, lap)| lap.as_secs_f64()).sum();
        if let Some(bad) = self.report(finding) {
            return bad;
        }
        let parsed = Parsed::read(&document.body);
        let passed = parsed.is_some_and(|parsed| parsed.view().at("/verdict").text() == Some("pass"));
        let outcome = if passed { Outcome::Good } else { Outcome::BadNews };
        if self.table {
            files::print(audit_table::audit(&document.body).as_bytes(), outcome)
        } else {
            files::print(&document.body, outcome)
        }
    }

    /// Writes the one finding where a JUnit file is wanted; the outcome where that fails.
    fn report(&self, finding: Finding) -> Option<Outcome> {
        let written = files::write_whole(self.junit.as_deref()?, junit::write(&[finding]).as_bytes());
        written.err().map(|text| files::fail(&text))
    }
}
