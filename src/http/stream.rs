//! A TCP stream that gives up on clients that do not read, and closes without losing the answer.

use std::future::Future;
use std::io;
use std::pin::Pin;
use std::task::{Context, Poll, ready};
use std::time::Duration;

use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio::net::TcpStream;
use tokio::time::{Instant, Sleep, sleep_until};

/// After the last answer, wait so long for a client that is still sending.
const LINGER_QUIET: Duration = Duration::from_millis(250);
/// In all, so long.
const LINGER_TIME: Duration = Duration::from_secs(2);
/// And discard at most so many bytes.
const LINGER_BYTES: usize = 512 << 20;

/// The stream.
#[derive(Debug)]
pub struct PatientStream {
    inner: TcpStream,
    stall: Duration,
    /// Runs while a write cannot go on.
    stalled: Option<Pin<Box<Sleep>>>,
    linger: Option<Linger>,
}

#[derive(Debug)]
struct Linger {
    timer: Pin<Box<Sleep>>,
    end: Instant,
    last: Instant,
    discarded: usize,
}

impl PatientStream {
    /// Wraps a stream; a write that makes no progress for `stall` fails.
    pub fn new(inner: TcpStream, stall: Duration) -> Self {
        PatientStream { inner, stall, stalled: None, linger: None }
    }

    /// Passes on what a write said, and turns waiting too long into an error.
    fn watch<T>(&mut self, context: &mut Context<'_>, wrote: Poll<io::Result<T>>) -> Poll<io::Result<T>> {
        if wrote.is_ready() {
            self.stalled = None;
            return wrote;
        }
        let stall = self.stall;
        let timer = self.stalled.get_or_insert_with(|| Box::pin(sleep_until(Instant::now() + stall)));
        ready!(timer.as_mut().poll(context));
        Poll::Ready(Err(io::Error::new(io::ErrorKind::TimedOut, "the client does not read its answer")))
    }
}

impl AsyncRead for PatientStream {
    fn poll_read(mut self: Pin<&mut Self>, context: &mut Context<'_>, buffer: &mut ReadBuf<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.inner).poll_read(context, buffer)
    }
}

impl AsyncWrite for PatientStream {
    fn poll_write(mut self: Pin<&mut Self>, context: &mut Context<'_>, bytes: &[u8]) -> Poll<io::Result<usize>> {
        let wrote = Pin::new(&mut self.inner).poll_write(context, bytes);
        self.watch(context, wrote)
    }

    fn poll_write_vectored(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        bytes: &[io::IoSlice<'_>],
    ) -> Poll<io::Result<usize>> {
        let wrote = Pin::new(&mut self.inner).poll_write_vectored(context, bytes);
        self.watch(context, wrote)
    }

    fn is_write_vectored(&self) -> bool {
        self.inner.is_write_vectored()
    }

    fn poll_flush(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        let wrote = Pin::new(&mut self.inner).poll_flush(context);
        self.watch(context, wrote)
    }

    /// Closing while the client still sends makes the system reset the connection, and the client
    /// may lose the answer it was sent (RFC 9112, 9.6). So the writing side closes first, and what
    /// still comes is thrown away for a while.
    fn poll_shutdown(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        let this = &mut *self;
        if this.linger.is_none() {
            ready!(Pin::new(&mut this.inner).poll_shutdown(context))?;
        }
        let now = Instant::now();
        let linger = this.linger.get_or_insert_with(|| Linger {
            timer: Box::pin(sleep_until(now + LINGER_QUIET)),
            end: now + LINGER_TIME,
            last: now,
            discarded: 0,
        });
        let mut space = [0u8; 16 << 10];
        while linger.discarded < LINGER_BYTES && Instant::now() < linger.end {
            let mut buffer = ReadBuf::new(&mut space);
            match Pin::new(&mut this.inner).poll_read(context, &mut buffer) {
                Poll::Ready(Ok(())) if !buffer.filled().is_empty() => {
                    linger.discarded += buffer.filled().len();
                    linger.last = Instant::now();
                }
                Poll::Ready(_) => return Poll::Ready(Ok(())),
                Poll::Pending => return linger.wait(context),
            }
        }
        Poll::Ready(Ok(()))
    }
}

impl Linger {
    /// Ready once nothing has come for a while.
    fn wait(&mut self, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        let until = self.end.min(self.last + LINGER_QUIET);
        self.timer.as_mut().reset(until);
        ready!(self.timer.as_mut().poll(context));
        Poll::Ready(Ok(()))
    }
}
