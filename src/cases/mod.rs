//! Many questions one after the other: the lines of a batch, and what became of them.
//!
//! Plain text and counts only; what a line says is for `wire` to read.

pub mod lines;
pub mod tally;
