//! `underfoot serve`: the service, until SIGINT or SIGTERM.

use std::future::Future;
use std::io;
use std::net::SocketAddr;
use std::sync::Arc;
use std::time::Duration;

use clap::Args;
use tokio::signal::unix::{SignalKind, signal};
use tracing_subscriber::filter::Targets;

use super::{Outcome, files, log};
use crate::http::background::THREADS_END;
use crate::http::guard::HostName;
use crate::http::settings::{DEFAULT_PORT, DEFAULT_QUEUE, DEFAULT_TIME_LIMIT, GRACE, MOST_WAITING, cores};
use crate::http::{Catalogue, Settings, bind, runtime};

/// Longest time limit that may be asked for (s).
const LONGEST_TIME_LIMIT: f64 = 3600.0;

/// Arguments of `underfoot serve`.
#[derive(Debug, Args)]
pub struct Serve {
    /// Address and port to listen on. Off the loopback anyone who reaches the address can use the service.
    #[arg(long, value_name = "ADDRESS:PORT", default_value_t = SocketAddr::from(([127, 0, 0, 1], DEFAULT_PORT)))]
    listen: SocketAddr,
    /// Port to listen on, instead of the one in --listen; 0 picks a free one.
    #[arg(long)]
    port: Option<u16>,
    /// Host name to answer to besides localhost, 127.0.0.1 and [::1]; may be repeated.
    #[arg(long, value_name = "NAME")]
    allow_host: Vec<HostName>,
    /// Requests worked on at the same time; as many as cores when left out.
    #[arg(long, value_parser = clap::value_parser!(u16).range(1..=MOST_WAITING as i64))]
    workers: Option<u16>,
    /// Requests that may wait before the next is refused with 503.
    #[arg(long, default_value_t = DEFAULT_QUEUE as u16, value_parser = clap::value_parser!(u16).range(0..=MOST_WAITING as i64))]
    queue: u16,
    /// Time for waiting and working on one request (s).
    #[arg(long, value_name = "SECONDS", default_value_t = DEFAULT_TIME_LIMIT.as_secs_f64(), value_parser = seconds)]
    time_limit: f64,
    /// What to log on standard error: a level (error, warn, info, debug, trace) or directives such as `warn,underfoot=debug`.
    #[arg(long, value_name = "FILTER", default_value = "info")]
    log: Targets,
}

fn seconds(text: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(value) if value > 0.0 && value <= LONGEST_TIME_LIMIT => Ok(value),
        _ => Err(format!("expected seconds, more than 0 and at most {LONGEST_TIME_LIMIT}")),
    }
}

impl Serve {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        log::start(self.log.clone());
        let settings = self.settings();
        let served = runtime(&settings).and_then(|runtime| {
            let served = runtime.block_on(serve(settings));
            runtime.shutdown_timeout(THREADS_END);
            served
        });
        match served {
            Ok(()) => Outcome::Good,
            Err(error) => files::fail(&format!("cannot serve on {}: {error}", self.address())),
        }
    }

    fn address(&self) -> SocketAddr {
        let mut address = self.listen;
        if let Some(port) = self.port {
            address.set_port(port);
        }
        address
    }

    fn settings(&self) -> Settings {
        let time_limit = Duration::from_secs_f64(self.time_limit);
        Settings {
            address: self.address(),
            workers: self.workers.map_or_else(cores, usize::from),
            queue: usize::from(self.queue),
            time_limit,
            grace: GRACE.max(time_limit + Duration::from_secs(1)),
            allowed_hosts: self.allow_host.clone(),
            ..Settings::default()
        }
    }
}

async fn serve(settings: Settings) -> io::Result<()> {
    let first = asked_to_stop()?;
    let bound = bind(settings, Arc::new(Catalogue::default())).await?;
    let address = bound.address();
    if !address.ip().is_loopback() {
        files::note(&format!(
            "There is no authentication: whoever reaches {address} can use this service.\n\
             Requests must name a host given with --allow-host, or they are answered 421."
        ));
    }
    files::print(format!("underfoot listens on http://{address}\n").as_bytes(), Outcome::Good);
    bound.run(first).await;
    Ok(())
}

/// Ready at the first SIGINT or SIGTERM. A second one ends the process at once.
fn asked_to_stop() -> io::Result<impl Future<Output = ()>> {
    let mut interrupt = signal(SignalKind::interrupt())?;
    let mut terminate = signal(SignalKind::terminate())?;
    Ok(async move {
        tokio::select! {
            _ = interrupt.recv() => {}
            _ = terminate.recv() => {}
        }
        tracing::info!("asked to stop: finishing what runs; ask again to end at once");
        tokio::spawn(async move {
            tokio::select! {
                _ = interrupt.recv() => {}
                _ = terminate.recv() => {}
            }
            std::process::exit(2);
        });
    })
}
