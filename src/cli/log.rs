//! The log: lines on standard error.

use std::io;

use tracing_subscriber::filter::Targets;
use tracing_subscriber::fmt;
use tracing_subscriber::layer::SubscriberExt;
use tracing_subscriber::util::SubscriberInitExt;

/// Sends log lines that pass `filter` to standard error, without colours.
pub fn start(filter: Targets) {
    let lines = fmt::layer().with_writer(io::stderr).with_ansi(false).with_target(false);
    // A second start in the same process changes nothing.
    let _ = tracing_subscriber::registry().with(filter).with(lines).try_init();
}
