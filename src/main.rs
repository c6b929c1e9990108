//! The `underfoot` command: it only dispatches to `underfoot::cli`.

fn main() {}
