//! One function: from a question to its answer.

pub mod answer;
