//! The command line: one file per command.
//!
//! Exit codes, the same for every command: 0 good, 1 the answer is bad news, 2 unusable input.

mod audit;
mod audit_table;
mod batch;
mod case_files;
mod cases;
mod compare;
mod demo;
mod dynamics;
mod export;
mod files;
mod identify;
mod log;
mod record;
mod report;
mod schemas;
mod serve;
mod solve;
mod table;

use std::process::ExitCode;

use clap::{Parser, Subcommand};

/// A reference solver for legged robots on ground that gives.
///
/// A robot's state and prioritised tasks go in, certified joint torques and sole wrenches come out.
/// Exit codes: 0 good, 1 the answer is bad news, 2 unusable input.
#[derive(Debug, Parser)]
#[command(name = "underfoot", version)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Serve over HTTP, on the loopback unless told otherwise.
    Serve(Box<serve::Serve>),
    /// Answer a solve request from a file; prints what POST /v1/solve answers.
    Solve(solve::Solve),
    /// Judge a controller's own answer from a file, printing what POST /v1/audit answers, or many cases from files and folders.
    Audit(audit::Audit),
    /// Pin a request with an answer as a case for `audit`, or renew pinned cases and say what changed.
    Record(record::Record),
    /// Rigid-body terms of a state from a file; prints what POST /v1/dynamics answers.
    Dynamics(dynamics::Dynamics),
    /// Answer many states, one JSON line each; prints what POST /v1/batch answers.
    Batch(batch::Batch),
    /// Compare your own mass matrix, bias, Jacobians and momentum with ours; prints what POST /v1/compare answers.
    Compare(compare::Compare),
    /// The assembled problem as Matrix Market files; prints what POST /v1/export answers, or writes the files.
    Export(export::Export),
    /// Stiffness and damping of the ground from a log; prints what POST /v1/identify answers.
    Identify(identify::Identify),
    /// List the JSON Schemas, or print one.
    Schemas(schemas::Schemas),
    /// Show the whole path on a built-in scenario, through a real service.
    Demo(demo::Demo),
}

/// How a command ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Outcome {
    /// Everything went well.
    Good,
    /// There is an answer, and it is bad news.
    BadNews,
    /// The input is unusable, or the system would not let the command do its work.
    Unusable,
}

impl From<Outcome> for ExitCode {
    fn from(outcome: Outcome) -> ExitCode {
        ExitCode::from(match outcome {
            Outcome::Good => 0,
            Outcome::BadNews => 1,
            Outcome::Unusable => 2,
        })
    }
}

/// Reads the arguments and runs the command they name.
pub fn main() -> ExitCode {
    match Arguments::parse().command {
        Command::Serve(command) => command.run(),
        Command::Solve(command) => command.run(),
        Command::Audit(command) => command.run(),
        Command::Record(command) => command.run(),
        Command::Dynamics(command) => command.run(),
        Command::Batch(command) => command.run(),
        Command::Export(command) => command.run(),
        Command::Compare(command) => command.run(),
        Command::Identify(command) => command.run(),
        Command::Schemas(command) => command.run(),
        Command::Demo(command) => command.run(),
    }
    .into()
}
