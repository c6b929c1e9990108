//! Many questions one after the other: the lines of a batch and what became of them; pinned cases, what was found in them, and what
//! changed since they were pinned.
//!
//! Plain text, numbers and counts only; what a line or a case says is for `wire` to read.

pub mod changes;
pub mod finding;
pub mod junit;
pub mod lines;
pub mod tally;
