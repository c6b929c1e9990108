//! Stand-ins with the signatures of `wire`, until that branch is merged.

/// One offending member.
#[derive(Debug, Clone, PartialEq)]
pub struct Fault {
    /// JSON pointer.
    pub pointer: String,
    /// What was expected.
    pub expected: String,
    /// What came.
    pub got: String,
    /// Line of the description, where there is one.
    pub line: Option<u32>,
}

/// A request that cannot be served.
#[derive(Debug, Clone, PartialEq)]
pub struct Refusal {
    /// HTTP status.
    pub status: u16,
    /// Stable short code.
    pub code: &'static str,
    /// Title.
    pub title: String,
    /// Detail.
    pub detail: String,
    /// Offending members.
    pub faults: Vec<Fault>,
}

/// Writes a refusal.
pub fn write_refusal(refusal: &Refusal, instance: &str) -> Vec<u8> {
    format!(
        "{{\"type\":\"about:blank\",\"title\":{:?},\"status\":{},\"detail\":{:?},\"instance\":{:?},\"code\":{:?}}}",
        refusal.title, refusal.status, refusal.detail, instance, refusal.code
    )
    .into_bytes()
}
