//! Reading requests and writing documents, for every command.

use std::io::{self, ErrorKind, IsTerminal, Read, Write};
use std::path::Path;

use super::Outcome;
use crate::http::settings::BODY_LIMIT;
use crate::wire::Refusal;

/// Reads a request from a file, or from standard input where the path is `-`. At most as long as
/// the service would take.
///
/// # Errors
/// A sentence for the user.
pub fn read_request(path: &Path) -> Result<Vec<u8>, String> {
    let mut bytes = Vec::new();
    let most = BODY_LIMIT as u64 + 1;
    let read = if path.as_os_str() == "-" {
        io::stdin().lock().take(most).read_to_end(&mut bytes)
    } else {
        std::fs::File::open(path).and_then(|file| file.take(most).read_to_end(&mut bytes))
    };
    read.map_err(|error| format!("{}: {error}", path.display()))?;
    if bytes.len() > BODY_LIMIT {
        return Err(format!("{}: longer than {BODY_LIMIT} bytes", path.display()));
    }
    Ok(bytes)
}

/// Writes to standard output and gives `outcome`. A reader that has seen enough and closed the pipe
/// changes nothing; any other failure makes the outcome unusable.
pub fn print(bytes: &[u8], outcome: Outcome) -> Outcome {
    let mut out = io::stdout().lock();
    match out.write_all(bytes).and_then(|()| out.flush()) {
        Err(error) if error.kind() != ErrorKind::BrokenPipe => fail(&format!("standard output: {error}")),
        _ => outcome,
    }
}

/// Writes a file as a whole: whoever reads it meanwhile, or after a crash, finds the old one or the new one.
///
/// # Errors
/// A sentence for the user.
pub fn write_whole(path: &Path, bytes: &[u8]) -> Result<(), String> {
    let mut name = path.file_name().map(ToOwned::to_owned).ok_or_else(|| format!("{}: no file name", path.display()))?;
    name.push(format!(".{}.part", std::process::id()));
    let part = path.with_file_name(name);
    let written = std::fs::write(&part, bytes).and_then(|()| std::fs::rename(&part, path));
    written.map_err(|error| {
        let _ = std::fs::remove_file(&part);
        format!("{}: {error}", path.display())
    })
}

/// Progress on standard error where that is a terminal, nothing where it is not.
#[derive(Debug)]
pub struct Progress {
    shown: bool,
}

impl Progress {
    /// Shown on a terminal alone.
    pub fn new() -> Progress {
        Progress { shown: io::stderr().is_terminal() }
    }

    /// Says how far the work is, on the line that was said before.
    pub fn say(&self, text: &str) {
        if self.shown {
            let _ = write!(io::stderr().lock(), "\r\u{1b}[K{text}");
        }
    }
}

/// Says on standard error why nothing could be done.
pub fn fail(text: &str) -> Outcome {
    note(&format!("underfoot: {text}"));
    Outcome::Unusable
}

/// A line on standard error; if nobody can read it, it is lost.
pub fn note(text: &str) {
    let _ = writeln!(io::stderr().lock(), "{text}");
}

/// Says on standard error why a request was turned away, with every offending member.
pub fn refuse(refusal: &Refusal) -> Outcome {
    fail(&told(refusal))
}

/// Why a request was turned away, a line per offending member.
pub fn told(refusal: &Refusal) -> String {
    let mut text = format!("{}: {}", refusal.title, refusal.detail);
    for fault in &refusal.faults {
        let pointer = if fault.pointer.is_empty() { "(the document)" } else { &fault.pointer };
        text.push_str(&format!("\n  {pointer}: expected {}, got {}", fault.expected, fault.got));
        if let Some(line) = fault.line {
            text.push_str(&format!(" (line {line})"));
        }
    }
    text
}
