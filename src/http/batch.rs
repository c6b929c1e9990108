//! `POST /v1/batch`: lines in, lines out, in order, while both are under way.
//!
//! Memory is bounded for any length: at most as many lines as there are workers are looked at ahead of the one
//! whose answer is due, and where the client does not read, nothing more is read from it. Every line takes a permit
//! of its own, in one queue with all other requests, so that a batch of any length delays another request by a few
//! lines at most. When the client hangs up, what runs is called off.

use std::collections::VecDeque;
use std::sync::Arc;

use axum::body::{Body, Bytes};
use axum::extract::{Request, State};
use axum::http::{HeaderValue, StatusCode, header};
use axum::response::Response;
use tokio::sync::mpsc;
use tokio::task::JoinHandle;

use super::body::check_type;
use super::feed::{Feed, Lines, Next};
use super::lines::{LineDone, LineWork};
use super::problem::{Problem, internal};
use super::router::Shared;
use super::settings::MOST_WAITING;
use crate::cases::lines::Line;
use crate::cases::tally::{End, Fate, Tally};
use crate::wire;

/// Media type of lines of JSON.
const NDJSON: &str = "application/x-ndjson";
/// Answers that are ready and not yet written.
const MOST_READY: usize = 4;

/// `POST /v1/batch`. Refused with a problem document if its first line is; later lines are refused one by one.
pub async fn batch(State(shared): State<Arc<Shared>>, request: Request) -> Result<Response, Problem> {
    check_type(request.headers(), NDJSON)?;
    let settings = &shared.settings;
    let mut lines = Lines::new(request.into_body(), settings.body_limit, settings.line_idle);
    let head = head(&mut lines).await?;
    let work = Arc::clone(&shared.work);
    let (opened, _) = shared.desk.run(move |_| work.open(&head)).await?;
    let work = opened?;
    lines.set_limit(settings.line_limit);
    let (out, ready) = mpsc::channel(MOST_READY);
    tokio::spawn(pump(shared, lines, work, out));
    let mut response = Response::new(Body::new(Feed(ready)));
    response.headers_mut().insert(header::CONTENT_TYPE, HeaderValue::from_static(NDJSON));
    Ok(response)
}

async fn head(lines: &mut Lines) -> Result<Vec<u8>, Problem> {
    match lines.next().await {
        Next::Line(Line::Text { bytes, .. }) => Ok(bytes),
        Next::Line(Line::TooLong { .. }) => Err(Problem::from(wire::line_too_long(lines.limit()))),
        Next::End(End::Idle) => {
            Err(Problem::new(StatusCode::REQUEST_TIMEOUT, "slow-body", "Body came too slowly", "no whole line came in time"))
        }
        Next::End(End::Complete | End::Broken) => Err(Problem::new(
            StatusCode::BAD_REQUEST,
            "no-first-line",
            "The batch has no first line",
            "the first line holds what all others share",
        )),
    }
}

/// A line under way, called off when nobody waits for it any more.
struct Flight {
    number: u64,
    job: JoinHandle<LineDone>,
}

impl Drop for Flight {
    fn drop(&mut self) {
        self.job.abort();
    }
}

/// Reads lines and writes answers until the lines end or the client is gone.
async fn pump(shared: Arc<Shared>, mut lines: Lines, work: Arc<dyn LineWork>, out: mpsc::Sender<Bytes>) {
    let window = shared.settings.workers.clamp(1, MOST_WAITING);
    let mut flights: VecDeque<Flight> = VecDeque::with_capacity(window);
    let mut tally = Tally::default();
    let mut ended = None;
    let end = loop {
        if let (Some(end), true) = (ended, flights.is_empty()) {
            break end;
        }
        let room = flights.len() < window;
        tokio::select! {
            () = out.closed() => return,
            done = first(&mut flights), if !flights.is_empty() => {
                flights.pop_front();
                tally.count(done.fate);
                if out.send(Bytes::from(done.text)).await.is_err() {
                    return;
                }
                lines.restart();
            }
            next = lines.next_if(room), if ended.is_none() => match next {
                Next::Line(line) => flights.push_back(start(&shared, &work, line, lines.limit())),
                // Nobody is there to read the rest.
                Next::End(End::Broken) => return,
                Next::End(end) => ended = Some(end),
            },
        }
    };
    // A client that is gone does not miss it.
    let _ = out.send(Bytes::from(wire::batch_summary(&tally, end))).await;
}

/// The answer that is due.
async fn first(flights: &mut VecDeque<Flight>) -> LineDone {
    let Some(flight) = flights.front_mut() else { return std::future::pending().await };
    match (&mut flight.job).await {
        Ok(done) => done,
        Err(_) => refused(flight.number, &internal()),
    }
}

fn start(shared: &Arc<Shared>, work: &Arc<dyn LineWork>, line: Line, limit: usize) -> Flight {
    let (shared, work) = (Arc::clone(shared), Arc::clone(work));
    match line {
        Line::TooLong { number } => {
            let done = refused(number, &Problem::from(wire::line_too_long(limit)));
            Flight { number, job: tokio::spawn(async move { done }) }
        }
        Line::Text { number, bytes } => {
            let job = tokio::spawn(async move {
                match shared.desk.run_line(move |cancel| work.line(number, &bytes, cancel)).await {
                    Ok(done) => done,
                    Err(problem) => refused(number, &problem),
                }
            });
            Flight { number, job }
        }
    }
}

fn refused(number: u64, problem: &Problem) -> LineDone {
    LineDone { text: wire::batch_problem(number, &problem.0), fate: Fate::Refused }
}
