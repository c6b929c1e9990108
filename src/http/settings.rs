//! Every bound of the service, with the values it starts from.

use std::net::{IpAddr, Ipv4Addr, SocketAddr};
use std::time::Duration;

use super::guard::HostName;

/// Port of the service unless told otherwise.
pub const DEFAULT_PORT: u16 = 7878;
/// Requests that may wait for a permit before the next is refused.
pub const DEFAULT_QUEUE: usize = 64;
/// Time for waiting and working on one request.
pub const DEFAULT_TIME_LIMIT: Duration = Duration::from_secs(10);
/// Largest request body (bytes).
pub const BODY_LIMIT: usize = 4 << 20;
/// Time for a client to deliver a request body.
pub const BODY_TIME: Duration = Duration::from_secs(10);
/// Longest line of a batch after the first (bytes); the first may be as long as a body.
pub const LINE_LIMIT: usize = 1 << 20;
/// Time without a whole line of a batch, nor an answer to one, after which the batch ends.
pub const LINE_IDLE: Duration = Duration::from_secs(60);
/// Largest log sent as lines (bytes).
pub const LOG_LIMIT: u64 = 4 << 30;
/// Time for reading and working on a log sent as lines.
pub const LOG_TIME: Duration = Duration::from_secs(600);
/// Time for a client to deliver a request head; an idle connection is closed after it too.
pub const HEADER_TIME: Duration = Duration::from_secs(30);
/// Time a client may leave a response unread before the connection is dropped.
pub const STALL_TIME: Duration = Duration::from_secs(20);
/// How long running requests may go on after the service was told to stop.
pub const GRACE: Duration = Duration::from_secs(12);
/// Connections beyond `workers + queue`, so that `/health` is answered while the queue is full.
pub const SPARE_CONNECTIONS: usize = 64;
/// Largest number of workers or of waiting requests that may be asked for.
pub const MOST_WAITING: usize = 4096;
/// Registered models kept; the least recently used goes first.
pub const MODELS_KEPT: usize = 64;

/// What the service is told at its start.
#[derive(Debug, Clone)]
pub struct Settings {
    /// Where to listen; port 0 picks a free one.
    pub address: SocketAddr,
    /// Requests worked on at the same time.
    pub workers: usize,
    /// Requests that may wait.
    pub queue: usize,
    /// Time for waiting and working on one request.
    pub time_limit: Duration,
    /// Largest request body (bytes).
    pub body_limit: usize,
    /// Time for a client to deliver a request body.
    pub body_time: Duration,
    /// Longest line of a batch after the first (bytes).
    pub line_limit: usize,
    /// Time without a whole line of a batch, nor an answer to one, after which the batch ends.
    pub line_idle: Duration,
    /// Largest log sent as lines (bytes).
    pub log_limit: u64,
    /// Time for reading and working on a log sent as lines; between two pieces of it a client may take `body_time`.
    pub log_time: Duration,
    /// Time for a client to deliver a request head.
    pub header_time: Duration,
    /// Time a client may leave a response unread.
    pub stall_time: Duration,
    /// How long running requests may go on after the service was told to stop.
    pub grace: Duration,
    /// Host names accepted besides the loopback ones.
    pub allowed_hosts: Vec<HostName>,
}

impl Default for Settings {
    fn default() -> Self {
        Settings {
            address: SocketAddr::new(IpAddr::V4(Ipv4Addr::LOCALHOST), DEFAULT_PORT),
            workers: cores(),
            queue: DEFAULT_QUEUE,
            time_limit: DEFAULT_TIME_LIMIT,
            body_limit: BODY_LIMIT,
            body_time: BODY_TIME,
            line_limit: LINE_LIMIT,
            line_idle: LINE_IDLE,
            log_limit: LOG_LIMIT,
            log_time: LOG_TIME,
            header_time: HEADER_TIME,
            stall_time: STALL_TIME,
            grace: GRACE,
            allowed_hosts: Vec::new(),
        }
    }
}

impl Settings {
    /// The most connections kept open at the same time.
    pub fn connections(&self) -> usize {
        self.workers.min(MOST_WAITING) + self.queue.min(MOST_WAITING) + SPARE_CONNECTIONS
    }
}

/// Cores this process may use; one where the system does not say.
pub fn cores() -> usize {
    std::thread::available_parallelism().map_or(1, usize::from)
}
