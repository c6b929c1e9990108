//! `underfoot record`: pins a request with an answer as a case, and renews pinned cases.

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::Args;

use super::table::{Side, Table, number};
use super::{Outcome, case_files, cases, files};
use crate::audit;
use crate::audit::tolerances::DEFAULT_RELATIVE;
use crate::cases::changes::{Change, changes};
use crate::cases::finding::Word;
use crate::http::{Catalogue, Errand, Work};
use crate::wire::view::Parsed;
use crate::wire::{Case, Whose, read_case};

/// Arguments of `underfoot record`.
#[derive(Debug, Args)]
pub struct Record {
    /// The solve request to pin, model included; `-` reads standard input.
    #[arg(required_unless_present = "update", conflicts_with = "update")]
    request: Option<PathBuf>,
    /// The controller's answer to it: as audits take it, or the document that answers a solve request. Without one the reference's
    /// answer is pinned, if it is `solved`.
    #[arg(long, value_name = "FILE", requires = "request")]
    answer: Option<PathBuf>,
    /// The case file to write; it must not exist yet.
    #[arg(long, value_name = "CASE", required_unless_present = "update", conflicts_with = "update")]
    out: Option<PathBuf>,
    /// What the case is called in reports; the file's name when left out.
    #[arg(long, requires = "request")]
    name: Option<String>,
    /// `tolerances.relative` of the case: the share of natural sizes that counts as no difference.
    #[arg(long, value_name = "SHARE", default_value_t = DEFAULT_RELATIVE)]
    relative: f64,
    /// Solve the pinned requests in these files and folders again, say what changed and write the new answers. Cases with a
    /// controller's answer are left alone.
    #[arg(long, value_name = "DIR", num_args = 1..)]
    update: Vec<PathBuf>,
}

impl Record {
    /// Runs the command.
    pub fn run(self) -> Outcome {
        match (&self.request, &self.out) {
            (Some(request), Some(out)) => self.pin(request, out).unwrap_or_else(|outcome| outcome),
            _ => update(&self.update),
        }
    }

    /// Writes a case unless the request cannot be used, or the reference's own answer would not do.
    fn pin(&self, request: &Path, out: &Path) -> Result<Outcome, Outcome> {
        if out.exists() {
            return Err(files::fail(&format!("{}: exists already; --update renews cases", out.display())));
        }
        let catalogue = Catalogue::default();
        let request = files::read_request(request).map_err(|text| files::fail(&text))?;
        let (answer, whose) = match &self.answer {
            Some(file) => (files::read_request(file).map_err(|text| files::fail(&text))?, Whose::Controller),
            None => (solved(&catalogue, &request)?, Whose::Reference),
        };
        let case = Case::of(&request, &answer, whose, self.name.as_deref(), self.relative).map_err(|refusal| files::refuse(&refusal))?;
        let text = case.text();
        let audit = catalogue.run(Errand::Audit, &text, &never()).map_err(|refusal| files::refuse(&refusal))?;
        let finding = cases::read(out, &audit.body);
        let outcome = if finding.word == Word::Pass { Outcome::Good } else { Outcome::BadNews };
        if whose == Whose::Reference && outcome != Outcome::Good {
            files::note(&format!("underfoot: nothing was pinned: the reference's own answer does not pass\n{}", finding.line()));
            return Err(outcome);
        }
        files::write_whole(out, &text).map_err(|text| files::fail(&text))?;
        Ok(files::print(format!("pinned; {}\n", finding.line()).as_bytes(), outcome))
    }
}

fn never() -> Arc<AtomicBool> {
    Arc::new(AtomicBool::new(false))
}

/// The reference's answer, if it is `solved`.
fn solved(catalogue: &Catalogue, request: &[u8]) -> Result<Vec<u8>, Outcome> {
    let document = catalogue.run(Errand::Solve, request, &never()).map_err(|refusal| files::refuse(&refusal))?;
    let status = status(&document.body);
    if status != "solved" {
        files::note(&format!("underfoot: nothing was pinned: the reference's answer is {status}"));
        return Err(Outcome::BadNews);
    }
    Ok(document.body)
}

fn status(document: &[u8]) -> String {
    Parsed::read(document).and_then(|parsed| parsed.view().at("/status").text().map(str::to_owned)).unwrap_or_default()
}

/// What became of a case that was to be renewed.
enum Renewal {
    /// Nothing is beyond tolerance; the file stays as it is, whatever version wrote it.
    Same,
    /// The answer is a controller's.
    Foreign,
    /// The reference has no such answer any more.
    Lost(String),
    /// The file holds the new answer.
    Changed(Vec<Change>),
}

/// Renews every case under `paths`: 2 if one cannot be read or written, 1 if one is not `solved` any more.
fn update(paths: &[PathBuf]) -> Outcome {
    let found = match case_files::find(paths) {
        Ok(found) => found,
        Err(text) => return files::fail(&text),
    };
    let catalogue = Catalogue::default();
    let progress = files::Progress::new();
    let (mut changed, mut same, mut foreign, mut lost, mut unusable) = (0, 0, 0, 0, 0);
    for (done, one) in found.iter().enumerate() {
        progress.say(&format!("{done} of {} cases", found.len()));
        let renewal = one.as_ref().map_err(|lost| lost.why.clone()).and_then(|path| renew(path, &catalogue));
        progress.say("");
        let file = one.as_ref().unwrap_or_else(|lost| &lost.folder).display();
        let text = match renewal {
            Ok(Renewal::Same) => {
                same += 1;
                format!("unchanged   {file}\n")
            }
            Ok(Renewal::Foreign) => {
                foreign += 1;
                format!("left alone  {file}: the answer is a controller's\n")
            }
            Ok(Renewal::Lost(status)) => {
                lost += 1;
                format!("not solved  {file}: now {status}; left as it is\n")
            }
            Ok(Renewal::Changed(changes)) => {
                changed += 1;
                format!("changed     {file}: {} values beyond tolerance\n{}", changes.len(), table(&changes))
            }
            Err(why) => {
                unusable += 1;
                format!("unusable    {file}: {why}\n")
            }
        };
        if files::print(text.as_bytes(), Outcome::Good) != Outcome::Good {
            return Outcome::Unusable;
        }
    }
    let outcome = if unusable > 0 {
        Outcome::Unusable
    } else if lost > 0 {
        Outcome::BadNews
    } else {
        Outcome::Good
    };
    let noun = if found.len() == 1 { "case" } else { "cases" };
    let last = format!(
        "{} {noun}: {changed} changed, {same} unchanged, {foreign} left alone, {lost} not solved, {unusable} unusable\n", found.len()
    );
    files::print(last.as_bytes(), outcome)
}

fn renew(path: &Path, catalogue: &Catalogue) -> Result<Renewal, String> {
    let file = files::read_request(path)?;
    let mut case = Case::read(&file).map_err(|refusal| files::told(&refusal))?;
    match case.whose() {
        Some(Whose::Reference) => {}
        Some(Whose::Controller) => return Ok(Renewal::Foreign),
        // Not pinned by `record`: the answer is somebody's, if there is one.
        None => return read_case(&file).map(|_| Renewal::Foreign).map_err(|refusal| files::told(&refusal)),
    }
    let document = catalogue.run(Errand::Solve, &case.request(), &never()).map_err(|mut refusal| {
        refusal.faults.iter_mut().for_each(|fault| fault.pointer.insert_str(0, "/request"));
        files::told(&refusal)
    })?;
    let status = status(&document.body);
    if status != "solved" {
        return Ok(Renewal::Lost(status));
    }
    let before = case.amounts();
    case.renew(&document.body).map_err(|refusal| files::told(&refusal))?;
    let now = case.amounts();
    let text = case.text();
    let (question, _, tolerances) = read_case(&text).map_err(|refusal| files::told(&refusal))?;
    let allowances = audit::allowances(&question, &tolerances, &never()).map_err(|trouble| trouble.to_string())?;
    let changes = changes(&before, &now, &allowances);
    if changes.is_empty() {
        return Ok(Renewal::Same);
    }
    files::write_whole(path, &text)?;
    Ok(Renewal::Changed(changes))
}

fn table(changes: &[Change]) -> String {
    use Side::{Left, Right};
    let mut table = Table::new(&[("value", Left), ("was", Right), ("is", Right), ("change", Right), ("tolerance", Right), ("unit", Left)]);
    for change in changes {
        let cell = |value: Option<f64>| value.map_or_else(|| "-".to_owned(), |value| number(value, 4));
        let difference = change.before.zip(change.now).map(|(before, now)| now - before);
        let unit = change.unit.unwrap_or("-").to_owned();
        table.row([change.name.clone(), cell(change.before), cell(change.now), cell(difference), cell(change.tolerance), unit]);
    }
    let mut out = String::new();
    table.write(&mut out);
    out
}
