//! `underfoot batch`: the lines that `POST /v1/batch` answers, byte for byte, from a file or as they come.

use std::fs::File;
use std::io::{self, BufRead, BufReader, ErrorKind, Read, Write};
use std::path::{Path, PathBuf};
use std::sync::atomic::AtomicBool;
use std::sync::mpsc::{Receiver, SyncSender, sync_channel};
use std::sync::{Arc, Mutex, PoisonError};

use clap::Args;

use super::{Outcome, files};
use crate::cases::lines::{Line, Splitter};
use crate::cases::tally::{End, Fate, Tally};
use crate::http::settings::{BODY_LIMIT, LINE_LIMIT, cores};
use crate::http::{Catalogue, LineDone, LineWork, Work};
use crate::wire;

/// Lines handed out ahead of the one whose answer is due, for each core.
const AHEAD: usize = 2;
/// The status of a good answer to a solve, the verdict of a good audit, and the status of every answer to what has none.
const GOOD: [&str; 3] = ["solved", "pass", "answered"];

/// Arguments of `underfoot batch`.
#[derive(Debug, Args)]
pub struct Batch {
    /// Lines of JSON: the first holds what all others share; `-` reads standard input, line by line.
    file: PathBuf,
}

/// A line to answer, and where its answer goes.
type Job = (Line, SyncSender<LineDone>);

impl Batch {
    /// Runs the command: 2 if a line was refused, 1 if an answer is bad news.
    pub fn run(self) -> Outcome {
        let mut text = match open(&self.file) {
            Ok(text) => Text { text, splitter: Splitter::new(BODY_LIMIT), ended: false },
            Err(error) => return files::fail(&format!("{}: {error}", self.file.display())),
        };
        let work = match text.next() {
            Ok(Some(Line::Text { bytes, .. })) => match Catalogue::default().open(&bytes) {
                Ok(work) => work,
                Err(refusal) => return files::refuse(&refusal),
            },
            Ok(Some(Line::TooLong { .. })) => return files::refuse(&wire::line_too_long(BODY_LIMIT)),
            Ok(None) => return files::fail("the batch has no first line: it holds what all others share"),
            Err(error) => return files::fail(&format!("{}: {error}", self.file.display())),
        };
        text.splitter.set_limit(LINE_LIMIT);
        answer(text, &*work)
    }
}

/// A reader thread hands lines to as many workers as cores; this thread writes the answers in order.
fn answer(text: Text, work: &dyn LineWork) -> Outcome {
    let ahead = AHEAD * cores();
    let (jobs, waiting) = sync_channel::<Job>(ahead);
    let (due, answers) = sync_channel::<Receiver<LineDone>>(ahead);
    let waiting = Mutex::new(waiting);
    std::thread::scope(|scope| {
        for _ in 0..cores() {
            scope.spawn(|| worker(&waiting, work));
        }
        let reader = scope.spawn(move || read(text, &jobs, &due));
        let mut tally = Tally::default();
        for answer in &answers {
            let Ok(done) = answer.recv() else { break };
            tally.count(done.fate);
            if let Err(outcome) = write(&done.text) {
                // Nobody reads: the channels close, and the threads come to their end at the next line.
                return outcome;
            }
        }
        drop(answers);
        let end = match reader.join() {
            Ok(Ok(())) => End::Complete,
            Ok(Err(error)) => {
                files::note(&format!("underfoot: the lines broke off: {error}"));
                End::Broken
            }
            Err(_) => End::Broken,
        };
        let outcome = verdict(&tally, end);
        write(&wire::batch_summary(&tally, end)).map_or_else(|bad| bad, |()| outcome)
    })
}

fn verdict(tally: &Tally, end: End) -> Outcome {
    if tally.refused > 0 || end != End::Complete {
        Outcome::Unusable
    } else if tally.statuses.iter().all(|(status, _)| GOOD.contains(&status.as_str())) {
        Outcome::Good
    } else {
        Outcome::BadNews
    }
}

/// Hands out lines until there are no more or nobody wants them.
fn read(mut text: Text, jobs: &SyncSender<Job>, due: &SyncSender<Receiver<LineDone>>) -> io::Result<()> {
    while let Some(line) = text.next()? {
        let (done, answer) = sync_channel(1);
        if due.send(answer).is_err() || jobs.send((line, done)).is_err() {
            break;
        }
    }
    Ok(())
}

fn worker(waiting: &Mutex<Receiver<Job>>, work: &dyn LineWork) {
    let never = Arc::new(AtomicBool::new(false));
    loop {
        let job = waiting.lock().unwrap_or_else(PoisonError::into_inner).recv();
        let Ok((line, done)) = job else { return };
        let answer = match line {
            Line::Text { number, bytes } => work.line(number, &bytes, &never),
            Line::TooLong { number } => LineDone {
                text: wire::batch_problem(number, &wire::line_too_long(LINE_LIMIT)),
                fate: Fate::Refused,
            },
        };
        // Nobody waits once the output is closed.
        let _ = done.send(answer);
    }
}

/// Writes one line and passes it on at once, for whoever waits for it before the next.
fn write(bytes: &[u8]) -> Result<(), Outcome> {
    let mut out = io::stdout().lock();
    match out.write_all(bytes).and_then(|()| out.flush()) {
        Ok(()) => Ok(()),
        Err(error) if error.kind() == ErrorKind::BrokenPipe => Err(Outcome::Good),
        Err(error) => Err(files::fail(&format!("standard output: {error}"))),
    }
}

/// Lines of a file or of standard input.
struct Text {
    text: Box<dyn BufRead + Send>,
    splitter: Splitter,
    ended: bool,
}

impl Text {
    fn next(&mut self) -> io::Result<Option<Line>> {
        loop {
            if let Some(line) = self.splitter.next_line() {
                return Ok(Some(line));
            }
            if self.ended {
                return Ok(self.splitter.last_line());
            }
            let piece = self.text.fill_buf()?;
            let length = piece.len();
            self.ended = length == 0;
            self.splitter.push(piece);
            self.text.consume(length);
        }
    }
}

fn open(path: &Path) -> io::Result<Box<dyn BufRead + Send>> {
    let source: Box<dyn Read + Send> = if path.as_os_str() == "-" { Box::new(io::stdin()) } else { Box::new(File::open(path)?) };
    Ok(Box::new(BufReader::new(source)))
}
