//! `underfoot demo`: the whole path on a built-in scenario, through a real service.

mod client;
mod compare;

use std::net::SocketAddr;
use std::sync::Arc;

use clap::Args;
use tracing_subscriber::filter::{LevelFilter, Targets};

use super::table::{push_line, push_text};
use super::{Outcome, files, log, report};
use crate::http::{Catalogue, Running, Settings};
use crate::wire::view::{Parsed, rigid_twin};

/// The scenario, invented: a fictional biped on a soft floor, about to shift its centre of mass.
const REQUEST: &str = include_str!("request.json");

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
        log::start(Targets::new().with_default(LevelFilter::WARN));
        let address = SocketAddr::from(([127, 0, 0, 1], self.port));
        let settings = Settings { address, ..Settings::default() };
        let mut service = match Running::start(settings, Arc::new(Catalogue::default())) {
            Ok(service) => service,
            Err(error) => return files::fail(&format!("cannot serve on {address}: {error}")),
        };
        let (text, outcome) = match show(service.address()) {
            Ok(shown) => shown,
            Err(text) => return files::fail(&text),
        };
        let outcome = files::print(text.as_bytes(), outcome);
        if self.stay {
            let up = format!("\nThe service stays up on http://{}; Ctrl-C ends it.\n", service.address());
            files::print(up.as_bytes(), outcome);
            service.wait();
        }
        outcome
    }
}

/// Asks the service and puts everything into words.
fn show(address: SocketAddr) -> Result<(String, Outcome), String> {
    let mut out = String::new();
    push_line(&mut out, "UNDERFOOT DEMO");
    push_text(
        &mut out,
        "",
        "A fictional biped of 39 kg and 19 joints stands on a soft floor (4 MN/m^3, about 2.4 mm of sink), its arms \
         swinging, and wants its centre of mass 5 mm further forward. Which torques and which sole wrenches are \
         right for the next 5 ms? The request goes to a service started just now, over a TCP socket, as yours would.",
    );
    push_line(&mut out, "");
    let (compliant, timing) = ask(address, REQUEST.as_bytes())?;
    push_line(&mut out, &format!("POST http://{address}/v1/solve ({} bytes) -> 200, {} bytes", REQUEST.len(), compliant.len()));
    push_line(&mut out, &format!("Server-Timing (ms): {timing}"));
    out.push_str(&report::answer(&compliant));
    let parsed = Parsed::read(&compliant).ok_or("the answer is no JSON document")?;
    let solved = parsed.view().at("/status").text() == Some("solved");
    let twin = rigid_twin(REQUEST.as_bytes()).ok_or("the scenario has no rigid counterpart")?;
    let (rigid, _) = ask(address, &twin)?;
    compare::write(&mut out, parsed.view(), &rigid)?;
    closing(&mut out, address);
    Ok((out, if solved { Outcome::Good } else { Outcome::BadNews }))
}

/// A solve request over the socket: the document and the timings.
fn ask(address: SocketAddr, request: &[u8]) -> Result<(Vec<u8>, String), String> {
    let response = client::post(address, "/v1/solve", request).map_err(|error| format!("asking {address}: {error}"))?;
    if response.status == 200 {
        return Ok((response.body, response.timing.unwrap_or_default()));
    }
    Err(format!("the service answered {}: {}", response.status, String::from_utf8_lossy(&response.body)))
}

fn closing(out: &mut String, address: SocketAddr) {
    push_line(out, "");
    push_line(out, "Your own robot");
    push_text(
        out,
        "  ",
        "schemas/example-solve.json is a complete request with every unit in schemas/; put your URDF, state and tasks \
         in its place, and send it:",
    );
    push_line(out, "    underfoot serve");
    push_line(out, "    curl -s http://127.0.0.1:7878/v1/solve -H 'Content-Type: application/json' \\");
    push_line(out, "         --data-binary @schemas/example-solve.json");
    push_line(out, "  or without a service: underfoot solve schemas/example-solve.json --table");
    push_line(out, &format!("  (with --stay this demo keeps its service on http://{address})"));
    push_line(out, "");
    push_line(out, "Caution");
    push_text(
        out,
        "  ",
        "This is a simulation on a model. It has no safety function: never wire its torques to actuators. Tests on \
         machines belong behind guarding, with an emergency stop and a qualified person; local codes and the robot \
         maker's limits come first.",
    );
}
