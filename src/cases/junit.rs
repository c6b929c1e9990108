//! Findings as JUnit XML, the form in which build servers take test results: one `testcase` per case; a verdict that is not `pass` is
//! a `failure`, a case that cannot be read an `error`.
//!
//! The form has no standard of its own; this is the common core: `testsuites`, `testsuite` with counts and seconds, `testcase` with
//! name, class name, file and seconds.

use super::finding::{Count, Finding, Word};

/// Name of the only suite, and class name of every case.
const SUITE: &str = "underfoot.cases";

/// The document.
pub fn write(findings: &[Finding]) -> String {
    let mut count = Count::default();
    findings.iter().for_each(|finding| count.add(finding.word));
    let seconds: f64 = findings.iter().map(|finding| finding.seconds).sum();
    let counts = format!(
        "name=\"{SUITE}\" tests=\"{}\" failures=\"{}\" errors=\"{}\" skipped=\"0\" time=\"{seconds:.3}\"",
        count.all(), count.fail + count.undecided, count.unusable
    );
    let mut out = format!("<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n<testsuites {counts}>\n  <testsuite {counts}>\n");
    findings.iter().for_each(|finding| case(&mut out, finding));
    out.push_str("  </testsuite>\n</testsuites>\n");
    out
}

fn case(out: &mut String, finding: &Finding) {
    let file = escaped(&finding.file);
    let head = format!(
        "    <testcase name=\"{}\" classname=\"{SUITE}\" file=\"{file}\" time=\"{:.3}\"",
        escaped(&finding.title()), finding.seconds
    );
    out.push_str(&head);
    let element = match finding.word {
        Word::Pass => return out.push_str("/>\n"),
        Word::Fail | Word::Undecided => "failure",
        Word::Unusable => "error",
    };
    let mut text = format!("{}: {}", finding.word.text(), finding.first);
    finding.others.iter().for_each(|other| text.push_str(&format!("\n{other}")));
    if !finding.cause.is_empty() {
        text.push_str(&format!("\ncause (hypothesis): {}", finding.cause));
    }
    let message = if finding.cause.is_empty() { finding.first.clone() } else { format!("{}; cause: {}", finding.first, finding.cause) };
    let (message, kind, text) = (escaped(&message), escaped(&finding.kind), escaped(&text));
    out.push_str(&format!(">\n      <{element} message=\"{message}\" type=\"{kind}\">{text}</{element}>\n    </testcase>\n"));
}

/// Text fit for an attribute or an element (XML 1.0, sections 2.2 and 2.4): what marks up is escaped, line breaks and tabs are
/// kept as references, characters that XML does not know become U+FFFD.
fn escaped(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&apos;"),
            '\t' | '\n' | '\r' => out.push_str(&format!("&#{};", u32::from(c))),
            '\u{0}'..='\u{1f}' | '\u{fffe}' | '\u{ffff}' => out.push('\u{fffd}'),
            _ => out.push(c),
        }
    }
    out
}
