//! What the question leaves open, in an answer.

use schemars::JsonSchema;
use serde::Serialize;

use super::number::Number;
use crate::explain::uniqueness::{Range, Uniqueness};

/// What the question leaves open before the least-effort tie-break.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Uniqueness")]
pub(super) struct UniquenessOut<'a> {
    /// Independent directions that move a torque, acceleration or wrench (no unit); 0: the answer is unique without the
    /// tie-break.
    directions: usize,
    /// The unknowns they move, each in its own unit; all others are determined by the question.
    ranges: Vec<OpenRangeOut<'a>>,
    /// Solves this took (no unit).
    solves: usize,
    /// False where more than 120 unknowns move, so that the ranges of the rest are missing (no unit).
    complete: bool,
}

/// The range of one unknown among equally good answers.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "OpenRange")]
struct OpenRangeOut<'a> {
    /// Name of the unknown (no unit).
    name: &'a str,
    /// Its value in the answer, chosen by the tie-break (in `unit`).
    value: Number,
    /// Least value among equally good answers (in `unit`); null where there is no end to it.
    least: Option<Number>,
    /// Largest value among equally good answers (in `unit`); null where there is no end to it.
    largest: Option<Number>,
    /// False where the solver could not confirm an end of the range to rounding (no unit).
    exact: bool,
    /// Unit of the values (no unit).
    unit: &'a str,
}

impl<'a> UniquenessOut<'a> {
    /// From the answer.
    pub(super) fn of(found: &'a Uniqueness) -> Self {
        let range = |range: &'a Range| OpenRangeOut {
            name: &range.name,
            value: Number(range.value),
            least: range.least.map(Number),
            largest: range.largest.map(Number),
            exact: range.exact,
            unit: range.unit,
        };
        UniquenessOut {
            directions: found.directions,
            ranges: found.ranges.iter().map(range).collect(),
            solves: found.solves,
            complete: found.complete,
        }
    }
}
