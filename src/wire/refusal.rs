//! Why a request was turned away: everything a problem document (RFC 9457) says.

/// A request turned away.
#[derive(Debug, Clone, PartialEq)]
pub struct Refusal {
    /// HTTP status.
    pub status: u16,
    /// Stable short code, kebab-case.
    pub code: &'static str,
    /// The kind of problem in a few words; the same for every occurrence of `code`.
    pub title: String,
    /// This occurrence in a sentence.
    pub detail: String,
    /// Every offending member that was found.
    pub faults: Vec<Fault>,
}

/// One offending member.
#[derive(Debug, Clone, PartialEq)]
pub struct Fault {
    /// Where it stands in the request: a JSON pointer (RFC 6901); empty for the whole document.
    pub pointer: String,
    /// What would have been good.
    pub expected: String,
    /// What came.
    pub got: String,
    /// Line in the text the pointer leads to, from 1, where that text is a URDF.
    pub line: Option<u32>,
}

impl Refusal {
    /// A refusal without single faults.
    pub fn new(status: u16, code: &'static str, title: &str, detail: impl Into<String>) -> Self {
        Refusal { status, code, title: title.to_string(), detail: detail.into(), faults: Vec::new() }
    }

    /// 422: the document is well-formed, but some members do not hold what they must.
    pub fn unusable(faults: Vec<Fault>) -> Self {
        let detail = match faults.as_slice() {
            [one] => format!("{}: expected {}, got {}", shown(&one.pointer), one.expected, one.got),
            many => format!("{} members cannot be used; see faults", many.len()),
        };
        Refusal {
            status: 422,
            code: "unusable-request",
            title: "The request cannot be used".to_string(),
            detail,
            faults,
        }
    }
}

fn shown(pointer: &str) -> &str {
    if pointer.is_empty() { "the document" } else { pointer }
}
