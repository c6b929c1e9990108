//! `underfoot export`: the assembled problem for other solvers.

use std::fs;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::{Outcome, files};
use crate::http::{Catalogue, Errand, Work};
use crate::wire::view::Parsed;

/// Arguments of `underfoot export`.
#[derive(Debug, Args)]
pub struct Export {
    /// A solve request; `-` reads standard input.
    file: PathBuf,
    /// Write the files into this folder, which is made if need be, instead of printing them in one JSON document.
    #[arg(long, value_name = "DIR")]
    matrix_market: Option<PathBuf>,
}

impl Export {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let body = match files::read_request(&self.file) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        let document = match Catalogue::default().run(Errand::Export, &body, &never) {
            Ok(document) => document,
            Err(refusal) => return files::refuse(&refusal),
        };
        match self.matrix_market {
            None => files::print(&document.body, Outcome::Good),
            Some(folder) => match write(&document.body, &folder) {
                Ok(()) => Outcome::Good,
                Err(text) => files::fail(&text),
            },
        }
    }
}

/// Writes every file of the document. Their names are plain, for they are ours.
fn write(document: &[u8], folder: &Path) -> Result<(), String> {
    let said = |path: &Path, error: std::io::Error| format!("{}: {error}", path.display());
    fs::create_dir_all(folder).map_err(|error| said(folder, error))?;
    let parsed = Parsed::read(document).ok_or("the document cannot be read back")?;
    for file in parsed.view().at("/files").items() {
        if let (Some(name), Some(text)) = (file.at("/name").text(), file.at("/text").text()) {
            let path = folder.join(name);
            fs::write(&path, text).map_err(|error| said(&path, error))?;
        }
    }
    Ok(())
}
