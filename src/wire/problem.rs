//! A refusal as a problem document (RFC 9457).

use schemars::JsonSchema;
use serde::Serialize;

use super::refusal::{Fault, Refusal};

/// A problem document (RFC 9457, `application/problem+json`).
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Problem")]
pub(super) struct ProblemOut<'a> {
    /// Kind of problem as a URI reference (no unit).
    #[serde(rename = "type")]
    kind: String,
    /// The kind in a few words (no unit).
    title: &'a str,
    /// HTTP status (no unit).
    status: u16,
    /// This occurrence in a sentence (no unit).
    detail: &'a str,
    /// Path of the request (no unit).
    instance: &'a str,
    /// Stable short code of the kind (no unit).
    code: &'a str,
    /// Offending members, at most 50 of them (no unit).
    faults: Vec<FaultOut<'a>>,
}

/// One offending member.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Fault")]
struct FaultOut<'a> {
    /// Where it stands in the request: JSON pointer, RFC 6901 (no unit); empty for the whole document.
    pointer: &'a str,
    /// What would have been good (unit in the text).
    expected: &'a str,
    /// What came (unit in the text).
    got: &'a str,
    /// Line in the text the pointer leads to, from 1, where that text is a URDF (no unit).
    #[serde(skip_serializing_if = "Option::is_none")]
    line: Option<u32>,
}

impl<'a> FaultOut<'a> {
    fn of(fault: &'a Fault) -> Self {
        let Fault { pointer, expected, got, line } = fault;
        FaultOut { pointer, expected, got, line: *line }
    }
}

/// The document; `instance` is the path of the request.
pub(super) fn write(refusal: &Refusal, instance: &str) -> Vec<u8> {
    let document = ProblemOut {
        kind: format!("/schemas/problem#{}", refusal.code),
        title: &refusal.title,
        status: refusal.status,
        detail: &refusal.detail,
        instance,
        code: refusal.code,
        faults: refusal.faults.iter().map(FaultOut::of).collect(),
    };
    serde_json::to_vec(&document).unwrap_or_default()
}
