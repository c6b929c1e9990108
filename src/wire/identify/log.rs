//! A log that comes as lines: settings, then NDJSON or CSV, one line at a time.

use std::io::{BufRead, Read};

use sha2::{Digest, Sha256};

use super::csv::Table;
use super::samples::{SampleBody, shortened};
use super::settings::{Head, Settings};
use crate::identify::{Row, Session};
use crate::wire::refusal::Refusal;
use crate::wire::second::Document;
use crate::wire::{MAX_BODY, ModelSource, canonical, hexadecimal, read, strict};

/// Longest line of a log (bytes).
pub const MAX_LINE: usize = 256 * 1024;

/// Form of a log's lines.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LogForm {
    /// A JSON object a line (`application/x-ndjson`).
    Ndjson,
    /// A header, then rows (`text/csv`).
    Csv,
}

/// Reads a log line by line. Memory does not grow with the log.
pub struct LogReader<R> {
    lines: R,
    settings: Settings,
    table: Option<Table>,
    line: u64,
    buffer: Vec<u8>,
    hash: Sha256,
}

impl<R: BufRead> LogReader<R> {
    /// Reads the settings: from `settings`, or from the first line of the log.
    ///
    /// # Errors
    /// [`Refusal`] with every fault of the settings or the header.
    pub fn new(settings: Option<&[u8]>, mut lines: R, form: LogForm, models: &dyn ModelSource) -> Result<(Self, Session), Refusal> {
        let mut buffer = Vec::new();
        let mut line = 0;
        let settings = match settings {
            Some(text) => text,
            None => {
                line = 1;
                fetch(&mut lines, &mut buffer, MAX_BODY, line)?;
                &buffer
            }
        };
        let text = settings;
        let settings = read::<Head>(text, Document::Identify, models)?;
        let mut hash = Sha256::new();
        hash.update(env!("CARGO_PKG_VERSION").as_bytes());
        hash.update([0]);
        hash.update(canonical(text).unwrap_or_default().as_bytes());
        hash.update([0]);
        let mut session = Session::new(settings.setup.clone());
        let mut reader = LogReader { lines, settings, table: None, line, buffer: Vec::new(), hash };
        if form == LogForm::Csv {
            let header = reader.line()?.map(str::to_owned).unwrap_or_default();
            reader.table = Some(Table::new(&header, reader.line, &reader.settings, &mut session.remarks)?);
        }
        Ok((reader, session))
    }

    /// Hands the next line's row to the session; false at the end of the log.
    ///
    /// # Errors
    /// The log breaks off, or a line is longer than [`MAX_LINE`].
    pub fn feed(&mut self, session: &mut Session) -> Result<bool, Refusal> {
        if !self.fetch()? {
            return Ok(false);
        }
        let line = self.line;
        let Ok(text) = std::str::from_utf8(&self.buffer) else {
            session.remarks.note("unreadable-line", line, 1, || format!("line {line}: not UTF-8; left out"));
            session.skip_row();
            return Ok(true);
        };
        if text.trim().is_empty() {
            session.remarks.note("empty-line", line, 0, || format!("line {line} is empty"));
            return Ok(true);
        }
        let row = match &mut self.table {
            Some(table) => {
                let figures = table.read(text, line, &mut session.remarks);
                if figures.is_none() {
                    session.remarks.note("no-time", line, 1, || format!("line {line}: no time; the row is left out"));
                }
                figures
            }
            None => match strict::read::<SampleBody>(text.as_bytes()) {
                Ok(sample) => Some(sample.figures(&self.settings, line, &mut session.remarks)),
                Err(error) => {
                    session.remarks.note("unreadable-line", line, 1, || {
                        format!("line {line}: {}; left out", shortened(&error.to_string()))
                    });
                    None
                }
            },
        };
        take(row.and_then(|figures| figures.row(&self.settings, line, &mut session.remarks)), session);
        Ok(true)
    }

    fn line(&mut self) -> Result<Option<&str>, Refusal> {
        if !self.fetch()? {
            return Ok(None);
        }
        let line = self.line;
        std::str::from_utf8(&self.buffer).map(Some).map_err(|_| {
            Refusal::new(400, "unreadable-line", "A line cannot be read", format!("line {line} is not UTF-8"))
        })
    }

    fn fetch(&mut self) -> Result<bool, Refusal> {
        self.line += 1;
        let there = fetch(&mut self.lines, &mut self.buffer, MAX_LINE, self.line)?;
        self.hash.update(&self.buffer);
        self.hash.update(b"\n");
        Ok(there)
    }

    /// SHA-256 of version, canonical settings and every line read: same fingerprint, same question.
    pub fn fingerprint(self) -> String {
        hexadecimal(&self.hash.finalize())
    }
}

/// Hands a row on; one that could not be read counts as left out.
pub(super) fn take(row: Option<Row>, session: &mut Session) {
    match row {
        Some(row) => session.push(&row),
        None => session.skip_row(),
    }
}

/// One line without its end; false at the end of the log.
fn fetch(lines: &mut impl BufRead, buffer: &mut Vec<u8>, most: usize, line: u64) -> Result<bool, Refusal> {
    buffer.clear();
    let read = lines.by_ref().take(most as u64 + 2).read_until(b'\n', buffer);
    let read = read.map_err(|error| {
        Refusal::new(400, "broken-body", "Log broke off", format!("the log could not be read past line {line}: {error}"))
    })?;
    for end in [b'\n', b'\r'] {
        if buffer.last() == Some(&end) {
            buffer.pop();
        }
    }
    if buffer.len() > most {
        let detail = format!("line {line} is longer than {most} bytes");
        return Err(Refusal::new(413, "line-too-long", "A line is too long", detail));
    }
    Ok(read > 0)
}
