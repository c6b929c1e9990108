//! Identification of the ground, as documents: settings and samples in, estimates out.

mod answer;
mod csv;
mod ground;
mod log;
mod samples;
mod sensor;
mod settings;
mod touchdown;

pub(super) use answer::IdentifyAnswerOut;
pub use answer::write as write_identify;
pub use log::{LogForm, LogReader, MAX_LINE};
pub(super) use settings::IdentifyRequest;
pub(super) use touchdown::TOUCHDOWN_KINDS;

use super::gate::Gate;
use super::refusal::Refusal;
use super::second::Document;
use super::{ModelSource, Request, read};
use crate::identify::Session;

/// Reads the body of `POST /v1/identify` where it is one JSON document, and takes its samples in; what counts as a line in
/// remarks is the place of the sample, from 1.
///
/// # Errors
/// [`Refusal`] with every fault that was found; 404 where the model's id is not known.
pub fn read_identify(body: &[u8], models: &dyn ModelSource) -> Result<Session, Refusal> {
    read::<IdentifyRequest>(body, Document::Identify, models)
}

impl Request for IdentifyRequest {
    type Question = Session;

    fn read(mut self, gate: Gate, models: &dyn ModelSource) -> Result<Session, Refusal> {
        let settings = self.settings(gate, models, false)?;
        let mut session = Session::new(settings.setup.clone());
        for (i, sample) in self.samples.take().unwrap_or_default().into_iter().enumerate() {
            let line = i as u64 + 1;
            let figures = sample.figures(&settings, line, &mut session.remarks);
            let row = figures.row(&settings, line, &mut session.remarks);
            log::take(row, &mut session);
        }
        Ok(session)
    }
}
