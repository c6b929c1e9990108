//! Work at the desk: as many jobs as permits, a bounded queue behind them, a time limit, and a
//! flag that tells a job to stop once nobody waits for its answer.

use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

use axum::http::StatusCode;
use tokio::sync::Semaphore;

use super::problem::{Problem, internal, panic_text};
use super::settings::{MOST_WAITING, Settings};

/// Permits, seats and the time limit.
#[derive(Debug)]
pub struct Desk {
    permits: Arc<Semaphore>,
    seats: Arc<Semaphore>,
    time_limit: Duration,
}

/// Raises the flag when the request's future goes away: answered, timed out or hung up.
struct CancelOnDrop(Arc<AtomicBool>);

impl Drop for CancelOnDrop {
    fn drop(&mut self) {
        self.0.store(true, Ordering::Relaxed);
    }
}

impl Desk {
    /// A desk with the bounds of `settings`.
    pub fn new(settings: &Settings) -> Self {
        let workers = settings.workers.clamp(1, MOST_WAITING);
        Desk {
            permits: Arc::new(Semaphore::new(workers)),
            seats: Arc::new(Semaphore::new(workers + settings.queue.min(MOST_WAITING))),
            time_limit: settings.time_limit,
        }
    }

    /// Runs `job` on a thread of its own, off the asynchronous runtime, and says how long it waited.
    ///
    /// The job keeps its permit and its seat until it returns, even after its client has gone: so
    /// never more than `workers` jobs run, whatever the clients do.
    ///
    /// # Errors
    /// 503 when every seat is taken, 504 past the time limit, 500 when the job panics.
    pub async fn run<T, J>(&self, job: J) -> Result<(T, Duration), Problem>
    where
        T: Send + 'static,
        J: FnOnce(&Arc<AtomicBool>) -> T + Send + 'static,
    {
        self.run_within(self.time_limit, job).await
    }

    /// The same with a time limit of its own.
    ///
    /// # Errors
    /// As [`Desk::run`].
    pub async fn run_within<T, J>(&self, time_limit: Duration, job: J) -> Result<(T, Duration), Problem>
    where
        T: Send + 'static,
        J: FnOnce(&Arc<AtomicBool>) -> T + Send + 'static,
    {
        let seat = Arc::clone(&self.seats).try_acquire_owned().map_err(|_| busy())?;
        let flag = Arc::new(AtomicBool::new(false));
        let _cancel = CancelOnDrop(Arc::clone(&flag));
        let arrived = Instant::now();
        let permits = Arc::clone(&self.permits);
        let work = async move {
            let permit = permits.acquire_owned().await.map_err(|_| internal())?;
            let waited = arrived.elapsed();
            let running = tokio::task::spawn_blocking(move || {
                let _held = (seat, permit);
                job(&flag)
            });
            match running.await {
                Ok(result) => Ok((result, waited)),
                Err(failure) => Err(after_failure(failure)),
            }
        };
        match tokio::time::timeout(time_limit, work).await {
            Ok(result) => result,
            Err(_) => Err(too_late(time_limit)),
        }
    }

    /// Runs the job of one line of a batch: it waits for a permit as long as it must, in one queue with all other
    /// requests, and takes no seat, for a batch has few lines under way. The time limit counts from the permit on:
    /// past it the flag is raised, and past it once more the line is given up.
    ///
    /// # Errors
    /// 504 where the job does not heed the flag, 500 when it panics.
    pub async fn run_line<T, J>(&self, job: J) -> Result<T, Problem>
    where
        T: Send + 'static,
        J: FnOnce(&Arc<AtomicBool>) -> T + Send + 'static,
    {
        let flag = Arc::new(AtomicBool::new(false));
        let _cancel = CancelOnDrop(Arc::clone(&flag));
        let permit = Arc::clone(&self.permits).acquire_owned().await.map_err(|_| internal())?;
        let raised = Arc::clone(&flag);
        let mut running = tokio::task::spawn_blocking(move || {
            let _held = permit;
            job(&flag)
        });
        let mut outcome = tokio::time::timeout(self.time_limit, &mut running).await;
        if outcome.is_err() {
            // A job that heeds the flag says itself that it was called off, and whose line it was.
            raised.store(true, Ordering::Relaxed);
            outcome = tokio::time::timeout(self.time_limit, &mut running).await;
        }
        match outcome {
            Ok(Ok(result)) => Ok(result),
            Ok(Err(failure)) => Err(after_failure(failure)),
            Err(_) => Err(too_late(self.time_limit)),
        }
    }
}

fn too_late(time_limit: Duration) -> Problem {
    Problem::new(
        StatusCode::GATEWAY_TIMEOUT,
        "time-limit",
        "Time limit reached",
        format!("no answer within {} s; the work was called off", time_limit.as_secs_f64()),
    )
}

fn busy() -> Problem {
    Problem::new(
        StatusCode::SERVICE_UNAVAILABLE,
        "busy",
        "All workers busy and the queue is full",
        "ask again after the time that Retry-After gives",
    )
}

fn after_failure(failure: tokio::task::JoinError) -> Problem {
    match failure.try_into_panic() {
        Ok(panic) => tracing::error!(panic = panic_text(panic.as_ref()), "a job panicked"),
        Err(failure) => tracing::error!(%failure, "a job did not finish"),
    }
    internal()
}
