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

/// The lines of a request body. Holds one line and two frames at most.
#[derive(Debug)]
pub struct Lines {
    body: Body,
    splitter: Splitter,
    idle: Duration,
    deadline: Instant,
    read: bool,
    /// A frame read while no line was wanted.
    ahead: Option<Bytes>,
}

impl Lines {
    /// Lines of at most `limit` bytes; `idle` is the time a whole line may take to come.
    pub fn new(body: Body, limit: usize, idle: Duration) -> Self {
        Lines { body, splitter: Splitter::new(limit), idle, deadline: Instant::now() + idle, read: false, ahead: None }
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
            if let Some(data) = self.ahead.take() {
                self.splitter.push(&data);
                continue;
            }
            if self.read {
                return self.splitter.last_line().map_or(Next::End(End::Complete), Next::Line);
            }
            match timeout_at(self.deadline, self.frame()).await {
                Err(_) => return Next::End(End::Idle),
                Ok(Err(end)) => return Next::End(end),
                Ok(Ok(())) => {}
            }
        }
    }

    /// The next line where one is `wanted`; otherwise ready only once the client is gone. One frame at most is read ahead
    /// of what is wanted, for the end of a connection shows only to those who read.
    pub async fn next_if(&mut self, wanted: bool) -> Next {
        if wanted {
            return self.next().await;
        }
        while self.ahead.is_none() && !self.read {
            if let Err(end) = self.frame().await {
                return Next::End(end);
            }
        }
        std::future::pending().await
    }

    /// Takes one frame into `ahead`, or notes the end.
    async fn frame(&mut self) -> Result<(), End> {
        match poll_fn(|context| Pin::new(&mut self.body).poll_frame(context)).await {
            None => self.read = true,
            Some(Err(_)) => return Err(End::Broken),
            Some(Ok(frame)) => self.ahead = frame.into_data().ok(),
        }
        Ok(())
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
