//! The two ends of a batch's connection: lines as they come, and answers as they are ready.

use std::convert::Infallible;
use std::future::poll_fn;
use std::pin::Pin;
use std::task::{Context, Poll};
use std::time::Duration;

use axum::body::{Body, Bytes, HttpBody};
use hyper::body::Frame;
use tokio::sync::mpsc;
use tokio::time::{Instant, timeout_at};

use crate::cases::lines::{Line, Splitter};
use crate::cases::tally::End;

/// What comes next.
#[derive(Debug)]
pub enum Next {
    /// A line.
    Line(Line),
    /// No more lines.
    End(End),
}

/// The lines of a request body. Holds one line and one frame at most.
#[derive(Debug)]
pub struct Lines {
    body: Body,
    splitter: Splitter,
    idle: Duration,
    deadline: Instant,
    read: bool,
}

impl Lines {
    /// Lines of at most `limit` bytes; `idle` is the time a whole line may take to come.
    pub fn new(body: Body, limit: usize, idle: Duration) -> Self {
        Lines { body, splitter: Splitter::new(limit), idle, deadline: Instant::now() + idle, read: false }
    }

    /// Changes the limit for the lines to come.
    pub fn set_limit(&mut self, limit: usize) {
        self.splitter.set_limit(limit);
    }

    /// The limit in force (bytes).
    pub fn limit(&self) -> usize {
        self.splitter.limit()
    }

    /// Starts the idle clock anew.
    pub fn restart(&mut self) {
        self.deadline = Instant::now() + self.idle;
    }

    /// The next line that is not blank. Dropping the future loses nothing.
    pub async fn next(&mut self) -> Next {
        loop {
            if let Some(line) = self.splitter.next_line() {
                self.restart();
                return Next::Line(line);
            }
            if self.read {
                return self.splitter.last_line().map_or(Next::End(End::Complete), Next::Line);
            }
            let frame = poll_fn(|context| Pin::new(&mut self.body).poll_frame(context));
            match timeout_at(self.deadline, frame).await {
                Err(_) => return Next::End(End::Idle),
                Ok(Some(Err(_))) => return Next::End(End::Broken),
                Ok(None) => self.read = true,
                Ok(Some(Ok(frame))) => {
                    if let Ok(data) = frame.into_data() {
                        self.splitter.push(&data);
                    }
                }
            }
        }
    }
}

/// A response body that is written as its lines are ready.
#[derive(Debug)]
pub struct Feed(pub mpsc::Receiver<Bytes>);

impl HttpBody for Feed {
    type Data = Bytes;
    type Error = Infallible;

    fn poll_frame(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<Option<Result<Frame<Bytes>, Infallible>>> {
        self.0.poll_recv(context).map(|line| line.map(|line| Ok(Frame::data(line))))
    }
}
