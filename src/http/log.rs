//! Logs sent as lines: read piece by piece while the work goes on, so that memory does not grow with them.

use std::future::poll_fn;
use std::io::{self, BufReader, Read};
use std::pin::{Pin, pin};
use std::sync::Arc;
use std::time::Duration;

use axum::body::{Body, Bytes, HttpBody};
use axum::http::{HeaderMap, StatusCode};
use tokio::sync::mpsc::{Receiver, Sender, channel};

use super::body::{broken, check_encoding, check_length, is, media_type, too_large, too_slow};
use super::documents::Document;
use super::problem::Problem;
use super::router::Shared;
use crate::wire::{LogForm, Refusal};

/// Pieces of a body that wait for the work.
const PIECES: usize = 8;
/// Buffer in front of the line reader (bytes).
const BUFFER: usize = 64 << 10;

/// The form of the log, from the Content-Type header; none where it is another type.
pub fn form(headers: &HeaderMap) -> Option<LogForm> {
    let media = media_type(headers)?;
    if is(media, "text/csv") {
        Some(LogForm::Csv)
    } else if is(media, "application/x-ndjson") || is(media, "application/jsonl") {
        Some(LogForm::Ndjson)
    } else {
        None
    }
}

/// Works on a log while it arrives.
///
/// # Errors
/// As for any request; 408 where the client pauses for longer than a body may take, 413 past the limit.
pub async fn work(
    shared: &Arc<Shared>,
    headers: &HeaderMap,
    body: Body,
    form: LogForm,
) -> Result<(Result<Document, Refusal>, Duration), Problem> {
    check_encoding(headers)?;
    check_length(headers, shared.settings.log_limit)?;
    let (give, take) = channel(PIECES);
    let work = Arc::clone(&shared.work);
    let job = shared.desk.run_within(shared.settings.log_time, move |cancel| {
        let mut lines = BufReader::with_capacity(BUFFER, Pieces { take, piece: Bytes::new() });
        work.log(None, &mut lines, form, cancel, &mut |_| ())
    });
    let pump = pump(body, give, shared.settings.log_limit, shared.settings.body_time);
    let (mut job, pump) = (pin!(job), pin!(pump));
    // Work that ends early, for instance on settings that cannot be used, does not wait for the rest of the body. A body that
    // goes wrong explains what goes wrong with the work, which is then called off.
    tokio::select! {
        biased;
        done = job.as_mut() => done,
        sent = pump => match sent {
            Ok(()) => job.await,
            Err(problem) => Err(problem),
        },
    }
}

/// Hands the body on, piece by piece, until it ends or nobody reads on.
async fn pump(mut body: Body, give: Sender<io::Result<Bytes>>, limit: u64, pause: Duration) -> Result<(), Problem> {
    let mut room = limit;
    loop {
        let frame = tokio::time::timeout(pause, poll_fn(|context| Pin::new(&mut body).poll_frame(context))).await;
        let trouble = match frame {
            Ok(None) => return Ok(()),
            Ok(Some(Ok(frame))) => {
                let Ok(data) = frame.into_data() else { continue };
                match room.checked_sub(data.len() as u64) {
                    Some(left) => {
                        room = left;
                        if give.send(Ok(data)).await.is_err() {
                            return Ok(());
                        }
                        continue;
                    }
                    None => too_large(limit),
                }
            }
            Ok(Some(Err(_))) => broken(),
            Err(_) => too_slow("the next piece of the body", pause),
        };
        // The work must not take a broken log for a whole one.
        let _ = give.send(Err(io::Error::from(io::ErrorKind::UnexpectedEof))).await;
        return Err(trouble);
    }
}

/// The pieces as one stream of bytes, on a thread that may wait.
struct Pieces {
    take: Receiver<io::Result<Bytes>>,
    piece: Bytes,
}

impl Read for Pieces {
    fn read(&mut self, out: &mut [u8]) -> io::Result<usize> {
        while self.piece.is_empty() {
            match self.take.blocking_recv() {
                None => return Ok(0),
                Some(piece) => self.piece = piece?,
            }
        }
        let count = out.len().min(self.piece.len());
        out[..count].copy_from_slice(&self.piece.split_to(count));
        Ok(count)
    }
}

/// Neither JSON nor lines.
pub fn unsupported() -> Problem {
    Problem::new(
        StatusCode::UNSUPPORTED_MEDIA_TYPE,
        "not-a-log",
        "Content-Type is none that is read here",
        "send one Content-Type header: application/json, application/x-ndjson or text/csv",
    )
}
