//! `underfoot identify`: the document that `POST /v1/identify` answers.

use std::io::{self, BufRead, BufReader, IsTerminal, Write};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::{Args, ValueEnum};

use super::{Outcome, files};
use crate::http::{Catalogue, Errand, Work};
use crate::wire::LogForm;
use crate::wire::view::Parsed;

/// Buffer in front of the line reader (bytes).
const BUFFER: usize = 256 << 10;

/// Arguments of `underfoot identify`.
#[derive(Debug, Args)]
pub struct Identify {
    /// The log; `-` reads standard input. A `.json` file holds settings and samples together.
    log: PathBuf,
    /// Settings, a JSON document without samples. When left out they are the first line of the log.
    #[arg(long, value_name = "FILE")]
    settings: Option<PathBuf>,
    /// Form of the log, where its name does not end in .csv, .ndjson, .jsonl or .json.
    #[arg(long, value_enum)]
    form: Option<Form>,
}

/// Forms of a log.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
enum Form {
    /// A header, then rows.
    Csv,
    /// A JSON object a line.
    Ndjson,
    /// One JSON document with settings and samples.
    Json,
}

impl Identify {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let Some(form) = self.form.or_else(|| by_name(&self.log)) else {
            return files::fail("say with --form whether the log is csv, ndjson or json");
        };
        let settings = match self.settings.as_deref().map(files::read_request).transpose() {
            Ok(settings) => settings,
            Err(text) => return files::fail(&text),
        };
        let form = match form {
            Form::Csv => LogForm::Csv,
            Form::Ndjson => LogForm::Ndjson,
            Form::Json if settings.is_some() => {
                return files::fail("a JSON log holds its settings itself: leave --settings out");
            }
            Form::Json => return self.whole(),
        };
        let mut log: Box<dyn BufRead> = if self.log.as_os_str() == "-" {
            Box::new(BufReader::with_capacity(BUFFER, io::stdin()))
        } else {
            match std::fs::File::open(&self.log) {
                Ok(file) => Box::new(BufReader::with_capacity(BUFFER, file)),
                Err(error) => return files::fail(&format!("{}: {error}", self.log.display())),
            }
        };
        let never = Arc::new(AtomicBool::new(false));
        let shown = io::stderr().is_terminal();
        let mut progress = |rows: u64| {
            if shown {
                let _ = write!(io::stderr().lock(), "\r{rows} rows");
            }
        };
        let answer = Catalogue::default().log(settings.as_deref(), &mut *log, form, &never, &mut progress);
        if shown {
            let _ = write!(io::stderr().lock(), "\r\u{1b}[K");
        }
        match answer {
            Ok(document) => finish(&document.body),
            Err(refusal) => files::refuse(&refusal),
        }
    }

    fn whole(&self) -> Outcome {
        let body = match files::read_request(&self.log) {
            Ok(body) => body,
            Err(text) => return files::fail(&text),
        };
        let never = Arc::new(AtomicBool::new(false));
        match Catalogue::default().run(Errand::Identify, &body, &never) {
            Ok(document) => finish(&document.body),
            Err(refusal) => files::refuse(&refusal),
        }
    }
}

/// Good where every sole's ground came out well.
fn finish(body: &[u8]) -> Outcome {
    let parsed = Parsed::read(body);
    let well = parsed.is_some_and(|parsed| parsed.view().at("/status").text() == Some("identified"));
    files::print(body, if well { Outcome::Good } else { Outcome::BadNews })
}

fn by_name(path: &Path) -> Option<Form> {
    match path.extension()?.to_str()?.to_ascii_lowercase().as_str() {
        "csv" => Some(Form::Csv),
        "ndjson" | "jsonl" => Some(Form::Ndjson),
        "json" => Some(Form::Json),
        _ => None,
    }
}
