//! From a request's bytes to a document's bytes: the one path that service and command line share.

use std::io::BufRead;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

use super::lines::LineWork;
use super::models::Models;
use super::settings::MODELS_KEPT;
use crate::audit::{self, AuditError};
use crate::compare;
use crate::explain::ExplainError;
use crate::identify::Session;
use crate::problem::question::Question;
use crate::reference::answer::Status;
use crate::reference::{self, Trouble};
use crate::solve::SolveError;
use crate::wire::{self, Fault, LogForm, LogReader, ModelSource, Refusal};

/// Rows of a log between two looks at whether anybody still waits.
pub const ROWS_BETWEEN: u64 = 10_000;

/// What is asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Errand {
    /// Keep a model.
    Register,
    /// Rigid-body terms of a state.
    Dynamics,
    /// Torques and wrenches.
    Solve,
    /// The assembled problem as files.
    Export,
    /// The user's terms beside ours.
    Compare,
    /// The ground from samples within the request.
    Identify,
    /// A controller's own answer, judged.
    Audit,
}

/// A document, and what the transport needs to know of it.
#[derive(Debug, Clone, PartialEq)]
pub struct Document {
    /// The JSON text.
    pub body: Vec<u8>,
    /// Id of the model that was registered.
    pub model: Option<String>,
    /// Where the time went. Never part of the body, which is the same every time.
    pub timings: Vec<(&'static str, Duration)>,
}

/// Turns requests into documents. The service holds one; tests put their own in its place.
pub trait Work: Send + Sync + 'static {
    /// Does the errand; stops soon after `cancel` is raised.
    ///
    /// # Errors
    /// A refusal names what is wrong with the request.
    fn run(&self, errand: Errand, body: &[u8], cancel: &Arc<AtomicBool>) -> Result<Document, Refusal>;

    /// Opens a batch by its first line.
    ///
    /// # Errors
    /// A refusal names what is wrong with the line.
    fn open(&self, head: &[u8]) -> Result<Arc<dyn LineWork>, Refusal>;

    /// Identifies the ground from a log of lines; the settings are its first line, or stand in `settings`. After every
    /// [`ROWS_BETWEEN`] rows `progress` hears how many there were.
    ///
    /// # Errors
    /// A refusal names what is wrong with the settings or the log.
    fn log(
        &self,
        settings: Option<&[u8]>,
        log: &mut dyn BufRead,
        form: LogForm,
        cancel: &Arc<AtomicBool>,
        progress: &mut dyn FnMut(u64),
    ) -> Result<Document, Refusal>;

    /// The document of a registered model.
    fn model(&self, id: &str) -> Option<Vec<u8>>;
}

/// The real work, with the models registered so far.
#[derive(Debug)]
pub struct Catalogue {
    models: Models,
}

impl Default for Catalogue {
    fn default() -> Self {
        Catalogue { models: Models::new(MODELS_KEPT) }
    }
}

impl Work for Catalogue {
    fn run(&self, errand: Errand, body: &[u8], cancel: &Arc<AtomicBool>) -> Result<Document, Refusal> {
        match errand {
            Errand::Register => self.register(body),
            Errand::Dynamics => dynamics(body, &self.models),
            Errand::Solve => solve(body, &self.models, cancel),
            Errand::Compare => compare(body, &self.models),
            Errand::Export => export(body, &self.models, cancel),
            Errand::Identify => identify(body, &self.models),
            Errand::Audit => audit(body, &self.models, cancel),
        }
    }

    fn open(&self, head: &[u8]) -> Result<Arc<dyn LineWork>, Refusal> {
        Ok(Arc::new(wire::Batch::open(head, &self.models)?))
    }

    fn log(
        &self,
        settings: Option<&[u8]>,
        log: &mut dyn BufRead,
        form: LogForm,
        cancel: &Arc<AtomicBool>,
        progress: &mut dyn FnMut(u64),
    ) -> Result<Document, Refusal> {
        let mut clock = Clock::start();
        let (mut reader, mut session) = LogReader::new(settings, log, form, &self.models)?;
        let mut lines = 0;
        while reader.feed(&mut session)? {
            lines += 1;
            if lines % ROWS_BETWEEN == 0 {
                progress(lines);
                if cancel.load(Ordering::Relaxed) {
                    return Err(Refusal::new(504, "time-limit", "Time limit reached", "the work was called off"));
                }
            }
        }
        clock.lap("identify");
        finished(session, &reader.fingerprint(), clock)
    }

    fn model(&self, id: &str) -> Option<Vec<u8>> {
        self.models.find(id).map(|model| wire::write_model(&model))
    }
}

impl Catalogue {
    fn register(&self, body: &[u8]) -> Result<Document, Refusal> {
        let mut clock = Clock::start();
        let model = Arc::new(wire::read_model(body)?);
        clock.lap("read");
        self.models.keep(Arc::clone(&model));
        let body = wire::write_model(&model);
        clock.lap("write");
        Ok(Document { body, model: Some(model.id.clone()), timings: clock.laps })
    }
}

/// The document of a dynamics request.
///
/// # Errors
/// A refusal names what is wrong with the request.
pub(super) fn dynamics(body: &[u8], models: &dyn ModelSource) -> Result<Document, Refusal> {
    let mut clock = Clock::start();
    let question = wire::read_dynamics(body, models)?;
    clock.lap("read");
    let report = reference::dynamics(&question);
    clock.lap("dynamics");
    let body = wire::write_dynamics(&question, &report, &wire::fingerprint(body));
    clock.lap("write");
    Ok(Document { body, model: None, timings: clock.laps })
}

/// The document of a solve request; stops soon after `cancel` is raised.
///
/// # Errors
/// A refusal names what is wrong with the request.
pub(super) fn solve(body: &[u8], models: &dyn ModelSource, cancel: &Arc<AtomicBool>) -> Result<Document, Refusal> {
    let mut clock = Clock::start();
    let question = wire::read_solve(body, models)?;
    clock.lap("read");
    let answer = reference::solve(&question, cancel).map_err(|trouble| refusal(&trouble))?;
    if answer.status == Status::Cancelled {
        return Err(Refusal::new(504, "time-limit", "Time limit reached", "the work was called off"));
    }
    clock.lap("solve");
    let body = wire::write_answer(&question, &answer, &wire::fingerprint(body));
    clock.lap("write");
    Ok(Document { body, model: None, timings: clock.laps })
}

fn export(body: &[u8], models: &dyn ModelSource, cancel: &Arc<AtomicBool>) -> Result<Document, Refusal> {
    let mut clock = Clock::start();
    let question = wire::read_solve(body, models)?;
    clock.lap("read");
    let program = reference::export(&question, cancel).map_err(|trouble| refusal(&trouble))?;
    clock.lap("assemble");
    let body = wire::write_export(&question, &program, &wire::fingerprint(body));
    clock.lap("write");
    Ok(Document { body, model: None, timings: clock.laps })
}

fn compare(body: &[u8], models: &dyn ModelSource) -> Result<Document, Refusal> {
    let mut clock = Clock::start();
    let asked = wire::read_compare(body, models)?;
    clock.lap("read");
    let found = compare::compare(&asked.question, &asked.given, asked.tolerance);
    clock.lap("compare");
    let body = wire::write_compare(&asked, &found, &wire::fingerprint(body));
    clock.lap("write");
    Ok(Document { body, model: None, timings: clock.laps })
}

fn identify(body: &[u8], models: &dyn ModelSource) -> Result<Document, Refusal> {
    let mut clock = Clock::start();
    let session = wire::read_identify(body, models)?;
    clock.lap("identify");
    finished(session, &wire::fingerprint(body), clock)
}

/// The document of a log that was read to its end.
fn finished(session: Session, fingerprint: &str, mut clock: Clock) -> Result<Document, Refusal> {
    let setup = session.setup().clone();
    let body = wire::write_identify(&setup, &session.finish(), fingerprint)?;
    clock.lap("write");
    Ok(Document { body, model: None, timings: clock.laps })
}

/// The document of an audit request; stops soon after `cancel` is raised.
///
/// # Errors
/// A refusal names what is wrong with the request.
pub(super) fn audit(body: &[u8], models: &dyn ModelSource, cancel: &Arc<AtomicBool>) -> Result<Document, Refusal> {
    let mut clock = Clock::start();
    let (question, claim, tolerances) = wire::read_audit(body, models)?;
    clock.lap("read");
    let report = audit::audit(&question, &claim, &tolerances, cancel).map_err(|error| audit_refusal(&question, error))?;
    clock.lap("audit");
    let body = wire::write_audit(&question, &report, &wire::fingerprint(body));
    clock.lap("write");
    Ok(Document { body, model: None, timings: clock.laps })
}

/// The same of an audit, whose question stands in the member `request`.
fn audit_refusal(question: &Question, error: AuditError) -> Refusal {
    match error {
        AuditError::Trouble(trouble) => {
            let mut refusal = refusal(&trouble);
            refusal.faults.iter_mut().for_each(|fault| fault.pointer.insert_str(0, "/request"));
            refusal
        }
        AuditError::Targets { task, expected, found } => Refusal::unusable(vec![Fault {
            pointer: "/answer/tasks".to_owned(),
            expected: format!("{expected} desired values for the task {:?}, one per row", question.tasks[task].name),
            got: found.to_string(),
            line: None,
        }]),
        AuditError::Shape => Refusal::new(500, "defect", "A defect of this service", error.to_string()),
    }
}

/// A question that passed the gate and yet leads nowhere: the member at fault is named where there is one.
fn refusal(trouble: &Trouble) -> Refusal {
    let pointer = match (trouble, trouble.contact_index()) {
        (_, Some(contact)) => format!("/contacts/{contact}"),
        (Trouble::Latency, None) => "/latency".to_owned(),
        (Trouble::Scene(_), None) => String::new(),
        (Trouble::Explain(ExplainError::Cancelled), None) => {
            return Refusal::new(504, "time-limit", "Time limit reached", "the work was called off");
        }
        // Finite numbers, each within its bounds, can still add up to a problem that overflows.
        (Trouble::Solver(error) | Trouble::Explain(ExplainError::Solver(error)), None)
            if !matches!(error, SolveError::Dimension { .. }) =>
        {
            return Refusal::unusable(vec![Fault {
                pointer: String::new(),
                expected: "numbers of sizes that can be computed with together".to_owned(),
                got: trouble.to_string(),
                line: None,
            }]);
        }
        (Trouble::Solver(_) | Trouble::Explain(_), None) => {
            tracing::error!(error = %trouble, "the assembled problem was refused");
            return Refusal::new(500, "defect", "A defect of this service", trouble.to_string());
        }
    };
    Refusal::unusable(vec![Fault {
        pointer,
        expected: "a state and ground from which an answer can be computed".to_owned(),
        got: trouble.to_string(),
        line: None,
    }])
}

/// Named laps of one request.
struct Clock {
    last: Instant,
    laps: Vec<(&'static str, Duration)>,
}

impl Clock {
    fn start() -> Self {
        Clock { last: Instant::now(), laps: Vec::new() }
    }

    fn lap(&mut self, name: &'static str) {
        let now = Instant::now();
        self.laps.push((name, now - self.last));
        self.last = now;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Finite numbers, each within its bounds, that overflow on the way into the solver were once answered 500.
    #[test]
    fn numbers_that_overflow_together_are_the_requests_fault() {
        let overflow =
            SolveError::Number { what: "hard rows".to_owned(), index: 532, value: f64::INFINITY, expected: "finite" };
        let refusal = refusal(&Trouble::Solver(overflow));
        assert_eq!((refusal.status, refusal.code, refusal.faults.len()), (422, "unusable-request", 1));
        let unfit = SolveError::Dimension { what: "columns".to_owned(), expected: 3, found: 4 };
        assert_eq!(super::refusal(&Trouble::Solver(unfit)).status, 500);
    }
}
