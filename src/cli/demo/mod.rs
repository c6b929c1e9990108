//! `underfoot demo`: the whole path on a built-in scenario, through a real service.

mod client;

use clap::Args;

use super::Outcome;

/// Arguments of `underfoot demo`.
#[derive(Debug, Args)]
pub struct Demo {
    /// Keep the service up afterwards, until Ctrl-C.
    #[arg(long)]
    stay: bool,
    /// Port of the service; 0 picks a free one.
    #[arg(long, default_value_t = 0)]
    port: u16,
}

impl Demo {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let _ = (self.stay, self.port, client::post);
        Outcome::Unusable
    }
}
