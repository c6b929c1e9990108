//! A solve request and a dynamics request.

use std::sync::Arc;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::{ModelSource, Request};
use super::aim::Surroundings;
use super::common::{Format, TextOr};
use super::contact::{ContactBody, Scene};
use super::extras::{ExternalBody, LatencyBody, LoadBody, MAX_ENTRIES, loaded};
use super::gate::{At, Gate, quoted};
use super::limit::LimitBody;
use super::model::InlineModel;
use super::refusal::{Fault, Refusal};
use super::spread::SpreadBody;
use super::state::{StateBody, frame_index};
use super::task::TaskBody;
use crate::contact::TickRule;
use crate::model::Model;
use crate::problem::question::{Contact, DynamicsQuestion, Include, Question, Tick};
use crate::spatial::Vec3;

/// Standard gravity (m/s^2).
pub(super) const GRAVITY: [f64; 3] = [0.0, 0.0, -9.80665];
/// Contacts of one request.
const MAX_CONTACTS: usize = 32;
/// Tasks of one request.
const MAX_TASKS: usize = 200;
/// Limits of one request.
const MAX_LIMITS: usize = 200;
/// Frames of one dynamics request.
const MAX_FRAMES: usize = 200;
/// Shortest and longest tick (s).
pub(super) const TICK: (f64, f64) = (1e-6, 1.0);
/// The longest name of a task or limit (characters).
pub(super) const MAX_NAME: usize = 200;

/// Asks for torques and sole wrenches (`POST /v1/solve`).
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "SolveRequest")]
pub(super) struct SolveRequest {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// The robot: the id of a registered model, or the model itself (SI units).
    model: TextOr<InlineModel>,
    /// State of the robot (m, rad, m/s, rad/s).
    state: StateBody,
    /// Gravitational acceleration [x, y, z], world axes (m/s^2); [0, 0, -9.80665] when left out.
    gravity: Option<[f64; 3]>,
    /// The control tick over which the torques are held (s).
    tick: TickBody,
    /// Soles on the ground, at most 32 (N/m^3, N s/m^3, m, N); none when left out.
    #[schemars(extend("maxItems" = MAX_CONTACTS))]
    contacts: Option<Vec<ContactBody>>,
    /// Limits of joints and torques, at most 200 (N m, rad, rad/s); none when left out.
    #[schemars(extend("maxItems" = MAX_LIMITS))]
    limits: Option<Vec<LimitBody>>,
    /// Tasks, at most 200, each in its own unit; none when left out.
    #[schemars(extend("maxItems" = MAX_TASKS))]
    tasks: Option<Vec<TaskBody>>,
    /// Loads from outside other than the ground, at most 200 (N, N m); none when left out.
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    external: Option<Vec<ExternalBody>>,
    /// Masses the robot carries, at most 200 (kg, m, kg m^2); none when left out.
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    loads: Option<Vec<LoadBody>>,
    /// Torques that act until the answer takes effect (s, N m); the state is predicted under them
    /// first. No delay when left out.
    latency: Option<LatencyBody>,
    /// What the answer shall hold besides the answer (no unit): `problem`, the assembled problem;
    /// `dynamics`, mass matrix, bias and Jacobians; `explain`, where nothing is feasible, the least relaxation,
    /// what each limit alone would have to give and the answer at the relaxation; `uniqueness`, the range
    /// of everything the question leaves open; `sensitivity`, derivatives by stiffness, damping and friction.
    include: Option<Vec<IncludeBody>>,
    /// How uncertain stiffness and damping are (no unit): the answer then holds the spread of torques and margins.
    /// None when left out.
    spread: Option<SpreadBody>,
}

/// A control tick.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Tick")]
struct TickBody {
    /// Length T, 1e-6 to 1 (s).
    #[schemars(extend("minimum" = TICK.0, "maximum" = TICK.1))]
    length: f64,
    /// How the wrench over the tick follows from the acceleration (no unit): `held` (the contact motion of all soft soles
    /// solved exactly), `backward_euler`, `trapezoid` or `explicit`; `held` when left out.
    rule: Option<RuleBody>,
}

/// Tick rules.
#[derive(Debug, Clone, Copy, Deserialize, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
pub(super) enum RuleBody {
    BackwardEuler,
    Trapezoid,
    Explicit,
    Held,
}

/// Optional parts of an answer.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum IncludeBody {
    Problem,
    Dynamics,
    Explain,
    Uniqueness,
    Sensitivity,
}

/// Asks for rigid-body terms in one state (`POST /v1/dynamics`).
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "DynamicsRequest")]
pub(super) struct DynamicsRequest {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// The robot: the id of a registered model, or the model itself (SI units).
    model: TextOr<InlineModel>,
    /// State of the robot (m, rad, m/s, rad/s).
    state: StateBody,
    /// Gravitational acceleration [x, y, z], world axes (m/s^2); [0, 0, -9.80665] when left out.
    gravity: Option<[f64; 3]>,
    /// Links whose frames are reported besides the soles, at most 200 (no unit); none when left out.
    #[schemars(extend("maxItems" = MAX_FRAMES))]
    frames: Option<Vec<String>>,
    /// Masses the robot carries, at most 200 (kg, m, kg m^2); none when left out.
    #[schemars(extend("maxItems" = MAX_ENTRIES))]
    loads: Option<Vec<LoadBody>>,
}

impl Request for SolveRequest {
    type Question = Question;

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<Question, Refusal> {
        let Some(question) = self.read_in(&mut gate, At::ROOT, models)? else { return Err(gate.refuse()) };
        gate.finish()?;
        Ok(question)
    }
}

impl SolveRequest {
    /// The question, which may be part of another document; to be used only where the gate found nothing wrong. None where the
    /// robot cannot be used.
    pub(super) fn read_in(self, gate: &mut Gate, at: At<'_>, models: &dyn ModelSource) -> Result<Option<Question>, Refusal> {
        let tick = self.tick.read(gate, at.name("tick"));
        let spread = self.spread.as_ref().map(|spread| spread.read(gate, at.name("spread")));
        let Some(model) = find(gate, at, &self.model, models)? else { return Ok(None) };
        let model = loaded(gate, at.name("loads"), model, self.loads.as_deref());
        let (state, velocity_axes) = self.state.read(gate, at.name("state"), &model);
        let scene = Scene { model: &model, state: &state, tick };
        let bodies = self.contacts.as_deref().unwrap_or_default();
        let contacts = contacts(gate, at.name("contacts"), bodies, &scene);
        let around = Surroundings {
            model: &model,
            tick,
            soles: bodies.iter().map(ContactBody::sole).collect(),
            contacts: &contacts,
            complete: !gate.incomplete(at.name("contacts")),
        };
        let (limits, tasks) = self.aims(gate, at, &around);
        let external = ExternalBody::read_all(gate, at.name("external"), self.external.as_deref(), &model);
        let latency = self.latency.as_ref().map(|latency| latency.read(gate, at.name("latency"), &model));
        let include = Include { spread, ..include(self.include.as_deref().unwrap_or_default()) };
        let contacts = contacts.into_iter().flatten().collect();
        let gravity = Vec3::from(self.gravity.unwrap_or(GRAVITY));
        Ok(Some(Question {
            model, state, velocity_axes, gravity, tick, contacts, limits, tasks, external, latency, include,
        }))
    }

    fn aims(
        &self,
        gate: &mut Gate,
        at: At<'_>,
        around: &Surroundings<'_>,
    ) -> (Vec<crate::problem::question::Limit>, Vec<crate::problem::question::Task>) {
        let (mut limits, mut tasks) = (Vec::new(), Vec::new());
        let mut names = Vec::new();
        let list = at.name("limits");
        let bodies = self.limits.as_deref().unwrap_or_default();
        if gate.at_most(list, bodies.len(), MAX_LIMITS, "limits") {
            for (i, body) in bodies.iter().enumerate() {
                let here = list.index(i);
                unique(gate, here.name("name"), &mut names, body.name());
                limits.push(body.read(gate, here, around.model, around.tick));
            }
        }
        let list = at.name("tasks");
        let bodies = self.tasks.as_deref().unwrap_or_default();
        if gate.at_most(list, bodies.len(), MAX_TASKS, "tasks") {
            for (i, body) in bodies.iter().enumerate() {
                let here = list.index(i);
                unique(gate, here.name("name"), &mut names, &body.name);
                tasks.extend(body.read(gate, here, around));
            }
        }
        (limits, tasks)
    }
}

impl SolveRequest {
    /// The model of the request that stands at `at`; see [`find`].
    pub(super) fn find_model(&self, gate: &mut Gate, at: At<'_>, models: &dyn ModelSource) -> Result<Option<Arc<Model>>, Refusal> {
        find(gate, at, &self.model, models)
    }
}

/// A solve request of which the form counts, and the model.
#[derive(Deserialize)]
#[serde(transparent)]
pub(super) struct SolveForm(SolveRequest);

/// The same of a dynamics request.
#[derive(Deserialize)]
#[serde(transparent)]
pub(super) struct DynamicsForm(DynamicsRequest);

impl Request for SolveForm {
    type Question = Arc<Model>;

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<Arc<Model>, Refusal> {
        find(&mut gate, At::ROOT, &self.0.model, models)?.ok_or_else(|| gate.refuse())
    }
}

impl Request for DynamicsForm {
    type Question = Arc<Model>;

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<Arc<Model>, Refusal> {
        find(&mut gate, At::ROOT, &self.0.model, models)?.ok_or_else(|| gate.refuse())
    }
}

impl Request for DynamicsRequest {
    type Question = DynamicsQuestion;

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<DynamicsQuestion, Refusal> {
        let at = At::ROOT;
        let Some(model) = find(&mut gate, at, &self.model, models)? else { return Err(gate.refuse()) };
        let model = loaded(&mut gate, at.name("loads"), model, self.loads.as_deref());
        let (state, velocity_axes) = self.state.read(&mut gate, at.name("state"), &model);
        let list = at.name("frames");
        let names = self.frames.as_deref().unwrap_or_default();
        let mut frames = Vec::new();
        if gate.at_most(list, names.len(), MAX_FRAMES, "frames") {
            for (i, name) in names.iter().enumerate() {
                let Some(index) = frame_index(&mut gate, list.index(i), &model, name) else { continue };
                if frames.contains(&index) {
                    gate.fault(list.index(i), "each link once", format!("{} again", quoted(name)));
                }
                frames.push(index);
            }
        }
        gate.finish()?;
        let gravity = Vec3::from(self.gravity.unwrap_or(GRAVITY));
        Ok(DynamicsQuestion { model, state, velocity_axes, gravity, frames })
    }
}

impl From<TickRule> for RuleBody {
    fn from(rule: TickRule) -> Self {
        match rule {
            TickRule::BackwardEuler => RuleBody::BackwardEuler,
            TickRule::Trapezoid => RuleBody::Trapezoid,
            TickRule::Explicit => RuleBody::Explicit,
            TickRule::Held => RuleBody::Held,
        }
    }
}

impl TickBody {
    fn read(&self, gate: &mut Gate, at: At<'_>) -> Tick {
        let length = gate.within(at.name("length"), self.length, TICK.0, TICK.1, "s");
        let rule = match self.rule {
            None | Some(RuleBody::Held) => TickRule::Held,
            Some(RuleBody::BackwardEuler) => TickRule::BackwardEuler,
            Some(RuleBody::Trapezoid) => TickRule::Trapezoid,
            Some(RuleBody::Explicit) => TickRule::Explicit,
        };
        // A tick that was refused still has to serve the checks that follow: the shortest makes none of them fail.
        let length = if (TICK.0..=TICK.1).contains(&length) { length } else { TICK.0 };
        Tick { length, rule, chosen: self.rule.is_some() }
    }
}

/// The model: registered earlier, or given here. None where it cannot be used, which the gate then knows; an unknown
/// id is a refusal of its own where nothing else was found wrong with the form of the request.
pub(super) fn find(
    gate: &mut Gate,
    at: At<'_>,
    model: &TextOr<InlineModel>,
    models: &dyn ModelSource,
) -> Result<Option<Arc<Model>>, Refusal> {
    let here = at.name("model");
    let id = match model {
        TextOr::Object(inline) => return Ok(inline.find(gate, here, models)),
        TextOr::Text(id) => id,
    };
    let found = models.find(id);
    if found.is_some() {
        return Ok(found);
    }
    let expected = "the id of a registered model, or the model itself";
    if gate.partial() {
        gate.fault(here, expected, quoted(id));
        return Ok(None);
    }
    Err(Refusal {
        status: 404,
        code: "unknown-model",
        title: "No such model is registered".to_string(),
        detail: "registered models are kept for a while only: send the model again to /v1/models".to_string(),
        faults: vec![Fault {
            pointer: here.pointer(),
            expected: expected.to_string(),
            got: quoted(id),
            line: None,
        }],
    })
}

fn contacts(
    gate: &mut Gate,
    at: At<'_>,
    bodies: &[ContactBody],
    scene: &Scene<'_>,
) -> Vec<Option<Contact>> {
    if !gate.at_most(at, bodies.len(), MAX_CONTACTS, "contacts") {
        return bodies.iter().map(|_| None).collect();
    }
    let mut contacts: Vec<Option<Contact>> = Vec::with_capacity(bodies.len());
    for (i, body) in bodies.iter().enumerate() {
        let here = at.index(i);
        let contact = body.read(gate, here, scene);
        let again = |c: &Contact| contacts.iter().flatten().any(|other| other.sole == c.sole);
        if contact.as_ref().is_some_and(again) {
            gate.fault(here.name("sole"), "each sole once", format!("{} again", quoted(body.sole())));
        }
        contacts.push(contact);
    }
    contacts
}

/// Notes a name that is empty, too long or taken.
fn unique<'a>(gate: &mut Gate, at: At<'_>, names: &mut Vec<&'a str>, name: &'a str) {
    let length = name.chars().count();
    if length == 0 || length > MAX_NAME {
        gate.fault(at, format!("a name of 1 to {MAX_NAME} characters"), format!("{length} characters"));
    }
    if gate.lacks(at) {
        return;
    }
    if names.contains(&name) {
        gate.fault(at, "a name that no other task or limit has", quoted(name));
    }
    names.push(name);
}

fn include(words: &[IncludeBody]) -> Include {
    Include {
        problem: words.contains(&IncludeBody::Problem),
        dynamics: words.contains(&IncludeBody::Dynamics),
        explain: words.contains(&IncludeBody::Explain),
        uniqueness: words.contains(&IncludeBody::Uniqueness),
        sensitivity: words.contains(&IncludeBody::Sensitivity),
        spread: None,
    }
}
