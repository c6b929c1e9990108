//! The `underfoot` command: it only dispatches to `underfoot::cli`.

use std::process::ExitCode;

fn main() -> ExitCode {
    underfoot::cli::main()
}
