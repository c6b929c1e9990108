//! Many cases for `underfoot audit`: judged side by side, told in order.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;
use std::time::Instant;

use serde_json::json;

use super::case_files::{self, Found};
use super::{Outcome, audit_table, files};
use crate::cases::finding::{Count, Finding, Word};
use crate::cases::junit;
use crate::http::settings::cores;
use crate::http::{Catalogue, Errand, Work};
use crate::wire::view::{Parsed, View};
use crate::wire::{Case, Refusal, write_refusal};

/// What is printed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Form {
    /// A line per case.
    Lines,
    /// The same, with the tables of every case that does not pass.
    Tables,
    /// A JSON document per line, a summary last.
    Json,
}

/// One case, judged.
struct Judged {
    finding: Finding,
    /// The audit's document, or the problem document of a case that cannot be read.
    document: Vec<u8>,
}

/// Judges every case under `paths`: 2 if one cannot be read, 1 if one does not pass.
pub fn run(paths: &[PathBuf], form: Form, junit_file: Option<&Path>) -> Outcome {
    let cases = match case_files::find(paths) {
        Ok(cases) => cases,
        Err(text) => return files::fail(&text),
    };
    let catalogue = Catalogue::default();
    let progress = files::Progress::new();
    let mut findings = Vec::new();
    let mut count = Count::default();
    for some in cases.chunks(cores().max(1)) {
        progress.say(&format!("{} of {} cases", findings.len(), cases.len()));
        let judged = side_by_side(some, &catalogue);
        progress.say("");
        for one in judged {
            count.add(one.finding.word);
            if files::print(told(&one, form).as_bytes(), Outcome::Good) != Outcome::Good {
                return Outcome::Unusable;
            }
            findings.push(one.finding);
        }
    }
    let last = match form {
        Form::Lines | Form::Tables => count.line(),
        Form::Json => json!({ "summary": {
            "cases": count.all(), "pass": count.pass, "fail": count.fail, "undecided": count.undecided, "unusable": count.unusable,
        } })
        .to_string(),
    };
    if let Some(path) = junit_file
        && let Err(text) = files::write_whole(path, junit::write(&findings).as_bytes())
    {
        return files::fail(&text);
    }
    files::print(format!("{last}\n").as_bytes(), outcome(count))
}

fn outcome(count: Count) -> Outcome {
    if count.unusable > 0 {
        Outcome::Unusable
    } else if count.pass < count.all() {
        Outcome::BadNews
    } else {
        Outcome::Good
    }
}

fn side_by_side(found: &[Found], catalogue: &Catalogue) -> Vec<Judged> {
    std::thread::scope(|scope| {
        let judge = |found: &Found| match found {
            Ok(path) => judge(path, catalogue),
            Err(lost) => refused(&lost.folder, &unreadable(&lost.why)),
        };
        let running: Vec<_> = found.iter().map(|one| (one, scope.spawn(move || judge(one)))).collect();
        let done = running.into_iter().map(|(one, thread)| {
            thread.join().unwrap_or_else(|_| {
                let path = one.as_ref().unwrap_or_else(|lost| &lost.folder);
                refused(path, &Refusal::new(500, "defect", "A defect of this program", "the audit broke off"))
            })
        });
        done.collect()
    })
}

fn unreadable(why: &str) -> Refusal {
    Refusal::new(400, "unreadable-file", "The file cannot be read", why)
}

fn judge(path: &Path, catalogue: &Catalogue) -> Judged {
    let start = Instant::now();
    let body = match files::read_request(path) {
        Ok(body) => body,
        Err(text) => return refused(path, &unreadable(&text)),
    };
    let name = Case::read(&body).ok().and_then(|case| case.name().map(str::to_owned));
    match catalogue.run(Errand::Audit, &body, &Arc::new(AtomicBool::new(false))) {
        Ok(document) => {
            let finding = Finding { name, seconds: start.elapsed().as_secs_f64(), ..read(path, &document.body) };
            Judged { finding, document: document.body }
        }
        Err(refusal) => refused(path, &refusal),
    }
}

/// What an audit's document says of the case in `path`, as far as reports need it.
pub fn read(path: &Path, document: &[u8]) -> Finding {
    let parsed = Parsed::read(document);
    let audit = parsed.as_ref().map(Parsed::view);
    let at = |pointer: &str| audit.map(|audit| audit.at(pointer));
    let text = |view: View<'_>, member: &str| view.at(member).text().unwrap_or_default().to_owned();
    let word = match at("/verdict").and_then(View::text) {
        Some("pass") => Word::Pass,
        Some("fail") => Word::Fail,
        _ => Word::Undecided,
    };
    let mut reasons: Vec<View<'_>> = at("/judgements/0/reasons").into_iter().flat_map(View::items).collect();
    // What proves the verdict comes before what is merely open; the order is kept otherwise.
    reasons.sort_by_key(|reason| reason.at("/fails").truth() != Some(true));
    let first = reasons.first().copied();
    Finding {
        file: path.display().to_string(),
        name: None,
        word,
        kind: first.map(|reason| text(reason, "/kind")).unwrap_or_default(),
        first: first.map(|reason| text(reason, "/text")).unwrap_or_default(),
        cause: at("/causes").map(|causes| text(causes, "/text")).unwrap_or_default(),
        others: reasons.iter().skip(1).map(|reason| text(*reason, "/text")).collect(),
        seconds: 0.0,
    }
}

fn refused(path: &Path, refusal: &Refusal) -> Judged {
    let finding = unusable(path, refusal);
    let document = write_refusal(refusal, &finding.file);
    Judged { finding, document }
}

/// What reports say of the case in `path` that was turned away.
pub fn unusable(path: &Path, refusal: &Refusal) -> Finding {
    let mut finding = Finding::unusable(path.display().to_string(), refusal.code, refusal.detail.clone());
    // A single fault stands in the detail already.
    if refusal.faults.len() > 1 {
        let faults = refusal.faults.iter().map(|fault| format!("{}: expected {}, got {}", fault.pointer, fault.expected, fault.got));
        finding.others = faults.collect();
    }
    if let Some(fault) = finding.others.first() {
        finding.first.push_str(&format!("; first {fault}"));
    }
    finding
}

/// A case as it is printed, line feed included.
fn told(one: &Judged, form: Form) -> String {
    let finding = &one.finding;
    match form {
        Form::Lines => format!("{}\n", finding.line()),
        Form::Tables if matches!(finding.word, Word::Pass | Word::Unusable) => format!("{}\n", finding.line()),
        Form::Tables => format!("{}\n{}\n", finding.line(), audit_table::audit(&one.document)),
        Form::Json => {
            let member = if finding.word == Word::Unusable { "problem" } else { "audit" };
            let document = String::from_utf8_lossy(&one.document);
            format!(
                "{{\"case\":{},\"name\":{},\"verdict\":{},\"{member}\":{}}}\n",
                json!(finding.file), json!(finding.name), json!(finding.word.text()), document.trim_end()
            )
        }
    }
}
