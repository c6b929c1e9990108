//! `underfoot schemas`: what a request and an answer look like.

use clap::Args;

use super::{Outcome, files};
use crate::wire;

/// Name under which the description of the whole service is printed.
const OPENAPI: &str = "openapi";

/// Arguments of `underfoot schemas`.
#[derive(Debug, Args)]
pub struct Schemas {
    /// The schema to print, or `openapi` for the description of the service; lists the names when left out.
    name: Option<String>,
}

impl Schemas {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        let Some(name) = self.name else {
            let mut text = String::new();
            for name in wire::schema_names().iter().copied().chain([OPENAPI]) {
                text.push_str(name);
                text.push('\n');
            }
            return files::print(text.as_bytes(), Outcome::Good);
        };
        let text = if name == OPENAPI { Some(wire::openapi()) } else { wire::schema(&name) };
        match text {
            Some(text) => files::print(text.as_bytes(), Outcome::Good),
            None => files::fail(&format!("there is no schema {name:?}; `underfoot schemas` lists the names")),
        }
    }
}
