//! `underfoot compare`: the document that `POST /v1/compare` answers, byte for byte, or a few lines to read.

use std::fmt::Write as _;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::{Outcome, files};
use crate::http::{Catalogue, Errand, Work};
use crate::wire::view::{Parsed, View};

/// Arguments of `underfoot compare`.
#[derive(Debug, Args)]
pub struct Compare {
    /// A comparison request; `-` reads standard input.
    file: PathBuf,
    /// Print a few lines to read instead of the JSON document.
    #[arg(long)]
    table: bool,
}

impl Compare {
    /// Runs the command: 0 where the terms agree as they stand, 1 where they do not.
    pub fn run(self) -> Outcome {
        let body = match files::read_request(&self.file) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        let document = match Catalogue::default().run(Errand::Compare, &body, &never) {
            Ok(document) => document.body,
            Err(refusal) => return files::refuse(&refusal),
        };
        let Some(parsed) = Parsed::read(&document) else { return files::fail("the document cannot be read back") };
        let agrees = parsed.view().at("/verdict").text() == Some("agrees");
        let outcome = if agrees { Outcome::Good } else { Outcome::BadNews };
        if self.table {
            files::print(lines(parsed.view()).as_bytes(), outcome)
        } else {
            files::print(&document, outcome)
        }
    }
}

/// The comparison in a few lines.
fn lines(answer: View<'_>) -> String {
    let mut text = format!("{}\n", answer.at("/verdict").text().unwrap_or_default());
    for quantity in answer.at("/quantities").items() {
        let (name, frame) = (quantity.at("/quantity").text().unwrap_or_default(), quantity.at("/frame").text());
        let frame = frame.map_or_else(String::new, |frame| format!(" of {frame}"));
        let worst = |member: &str| quantity.at(&format!("/worst/{member}"));
        let _ = writeln!(
            text,
            "  {name}{frame}: {:.1e} relative, worst at {} {}: ours {:.6}, yours {:.6}",
            quantity.at("/relative").number().unwrap_or_default(),
            worst("row").text().unwrap_or_default(),
            worst("column").text().unwrap_or_default(),
            worst("ours").number().unwrap_or_default(),
            worst("yours").number().unwrap_or_default(),
        );
    }
    let explanations = answer.at("/explanations").items().map(|e| ("explained", e));
    let nearest = answer.at("/nearest");
    let nearest = (!nearest.is_nothing()).then_some(("nearest", nearest));
    for (word, explanation) in explanations.chain(nearest) {
        let left = explanation.at("/left").number().unwrap_or_default();
        let _ = writeln!(text, "{word}, {left:.1e} left:");
        for convention in explanation.at("/conventions").items() {
            let _ = writeln!(text, "  {}", convention.at("/text").text().unwrap_or_default());
            let joints: Vec<&str> = convention.at("/joints").items().filter_map(View::text).collect();
            if !joints.is_empty() {
                let _ = writeln!(text, "    {}", joints.join(", "));
            }
        }
    }
    text
}
