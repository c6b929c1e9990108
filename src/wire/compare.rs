//! The user's own rigid-body terms, and what the comparison with ours says.

use std::sync::Arc;

use nalgebra::{DMatrix, DVector, Vector6};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::{ModelSource, Request};
use super::common::{Format, TextOr};
use super::extras::{LoadBody, loaded};
use super::gate::{At, Gate, quoted};
use super::model::InlineModel;
use super::number::Number;
use super::refusal::Refusal;
use super::solve::{GRAVITY, find};
use super::state::{StateBody, frame_index};
use crate::compare::table::{Block, Quantity, Table};
use crate::compare::{Assumption, Comparison, Explanation, Given, GivenFrame, Verdict};
use crate::model::Model;
use crate::problem::question::DynamicsQuestion;
use crate::spatial::Vec3;

/// Frames of one comparison.
const MAX_FRAMES: usize = 50;
/// Relative error that counts as rounding, unless told otherwise.
const TOLERANCE: f64 = 1e-6;
/// Least and largest tolerance.
const TOLERANCES: (f64, f64) = (1e-12, 1e-2);

/// Asks how the user's own terms differ from ours, and which convention explains it (`POST /v1/compare`).
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "CompareRequest")]
pub(super) struct CompareRequest {
    /// Document format (no unit).
    #[serde(rename = "format")]
    _format: Format,
    /// The robot: the id of a registered model, or the model itself (SI units).
    model: TextOr<InlineModel>,
    /// The state in which the terms were computed (m, rad, m/s, rad/s), in this service's conventions. One with a tilted base and every
    /// velocity different tells most.
    state: StateBody,
    /// Gravitational acceleration [x, y, z], world axes (m/s^2); [0, 0, -9.80665] when left out.
    gravity: Option<[f64; 3]>,
    /// Masses the robot carries, at most 200 (kg, m, kg m^2); none when left out.
    loads: Option<Vec<LoadBody>>,
    /// Your terms (SI units), in your conventions.
    yours: YoursBody,
    /// Relative error that counts as rounding, 1e-12 to 0.01 (no unit); 1e-6 when left out.
    tolerance: Option<f64>,
}

/// Terms in the user's conventions, each optional.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Yours")]
struct YoursBody {
    /// Mass matrix, rows (kg, kg m, kg m^2).
    mass_matrix: Option<Vec<Vec<f64>>>,
    /// Coriolis, centrifugal and gravity terms (N, N m).
    bias: Option<Vec<f64>>,
    /// Momentum, six numbers, angular about the centre of mass (kg m/s, kg m^2/s).
    momentum: Option<[f64; 6]>,
    /// Terms of soles and links, at most 50 (no unit, m, m/s^2, rad/s^2).
    frames: Option<Vec<YourFrameBody>>,
}

/// Terms of one frame in the user's conventions.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "YourFrame")]
struct YourFrameBody {
    /// Name of the sole or link (no unit); a sole where both have it.
    name: String,
    /// Jacobian, six rows (no unit, m).
    jacobian: Option<Vec<Vec<f64>>>,
    /// `J_dot nu`, six numbers (m/s^2, rad/s^2).
    bias_acceleration: Option<[f64; 6]>,
}

/// A comparison that can be made.
#[derive(Debug, Clone)]
pub struct CompareQuestion {
    /// The state.
    pub question: DynamicsQuestion,
    /// The user's terms.
    pub given: Given,
    /// Relative error that counts as rounding.
    pub tolerance: f64,
}

impl Request for CompareRequest {
    type Question = CompareQuestion;

    fn read(self, mut gate: Gate, models: &dyn ModelSource) -> Result<CompareQuestion, Refusal> {
        let at = At::ROOT;
        let Some(model) = find(&mut gate, at, &self.model, models)? else { return Err(gate.refuse()) };
        let model = loaded(&mut gate, at.name("loads"), model, self.loads.as_deref());
        let (state, velocity_axes) = self.state.read(&mut gate, at.name("state"), &model);
        let mut frames = Vec::new();
        let given = self.yours.read(&mut gate, at.name("yours"), &model, &mut frames);
        let tolerance = gate.within(at.name("tolerance"), self.tolerance.unwrap_or(TOLERANCE), TOLERANCES.0, TOLERANCES.1, "");
        gate.finish()?;
        let gravity = Vec3::from(self.gravity.unwrap_or(GRAVITY));
        Ok(CompareQuestion { question: DynamicsQuestion { model, state, velocity_axes, gravity, frames }, given, tolerance })
    }
}

impl YoursBody {
    fn read(&self, gate: &mut Gate, at: At<'_>, model: &Arc<Model>, links: &mut Vec<usize>) -> Given {
        let n = model.velocities();
        let mut given = Given::default();
        if let Some(rows) = &self.mass_matrix {
            given.mass_matrix = matrix(gate, at.name("mass_matrix"), rows, n, n);
        }
        if let Some(bias) = &self.bias {
            if bias.len() != n {
                gate.fault(at.name("bias"), format!("{n} numbers, one per generalised velocity"), bias.len().to_string());
            }
            given.bias = Some(DVector::from_vec(bias.clone()));
        }
        given.momentum = self.momentum.map(Vector6::from);
        let list = at.name("frames");
        let bodies = self.frames.as_deref().unwrap_or_default();
        if !gate.at_most(list, bodies.len(), MAX_FRAMES, "frames") {
            return given;
        }
        for (i, body) in bodies.iter().enumerate() {
            let here = list.index(i);
            let index = match model.sole(&body.name) {
                Some(sole) => sole,
                None => {
                    let Some(link) = frame_index(gate, here.name("name"), model, &body.name) else { continue };
                    let place = links.iter().position(|known| *known == link).unwrap_or_else(|| {
                        links.push(link);
                        links.len() - 1
                    });
                    model.soles.len() + place
                }
            };
            if given.frames.iter().any(|frame| frame.index == index) {
                gate.fault(here.name("name"), "each frame once", format!("{} again", quoted(&body.name)));
            }
            let jacobian = body.jacobian.as_ref().and_then(|rows| matrix(gate, here.name("jacobian"), rows, 6, n));
            given.frames.push(GivenFrame { index, jacobian, bias_acceleration: body.bias_acceleration.map(Vector6::from) });
        }
        let nothing = given.frames.iter().all(|frame| frame.jacobian.is_none() && frame.bias_acceleration.is_none());
        if given.mass_matrix.is_none() && given.bias.is_none() && given.momentum.is_none() && nothing && gate.clean() {
            gate.missing(at, "at least one of mass_matrix, bias, momentum and frames");
        }
        given
    }
}

fn matrix(gate: &mut Gate, at: At<'_>, rows: &[Vec<f64>], height: usize, width: usize) -> Option<DMatrix<f64>> {
    let odd = rows.iter().find(|row| row.len() != width);
    if rows.len() != height || odd.is_some() {
        let got = odd.map_or_else(|| format!("{} rows", rows.len()), |row| format!("{} rows, one of {} numbers", rows.len(), row.len()));
        gate.fault(at, format!("{height} rows of {width} numbers"), got);
        return None;
    }
    Some(DMatrix::from_fn(height, width, |i, j| rows[i][j]))
}

/// How a comparison ended.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum VerdictOut {
    Agrees,
    Explained,
    Unexplained,
}

/// The answer to a comparison.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "CompareAnswer")]
pub(super) struct CompareOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Version of the service that answered (no unit).
    version: &'static str,
    /// SHA-256 of the canonical request and the version: same fingerprint, same question (no unit).
    fingerprint: &'a str,
    /// Id of the model, carried loads included (no unit).
    model: &'a str,
    /// How it ended (no unit). `agrees`: to the tolerance, as it stands. `explained`: under a convention or a pair of them.
    /// `unexplained`: not so; see the worst entries.
    verdict: VerdictOut,
    /// Relative error that counts as rounding (no unit).
    tolerance: Number,
    /// What explains the difference, single conventions, or pairs where no single one does (no unit). More than one entry means
    /// that this state does not tell them apart.
    explanations: Vec<ExplanationOut<'a>>,
    /// Where nothing explains it: the conventions that come nearest (no unit); null where none helps.
    nearest: Option<ExplanationOut<'a>>,
    /// Every quantity that was given, as it stands (relative errors, no unit).
    quantities: Vec<QuantityOut<'a>>,
    /// The same under the first explanation or the nearest conventions (relative errors, no unit); empty without one.
    after: Vec<QuantityOut<'a>>,
    /// Largest relative error of each generalised velocity's rows and columns, as it stands (no unit).
    velocities: Vec<VelocityOut<'a>>,
    /// Conventions that make no difference in this state, for what was given (no unit).
    unseen: Vec<ConventionOut<'a>>,
}

/// Conventions that explain a difference.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Explanation")]
struct ExplanationOut<'a> {
    /// One or two (no unit).
    conventions: Vec<ConventionOut<'a>>,
    /// Largest relative error that is left under them (no unit).
    left: Number,
}

/// A convention.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Convention")]
struct ConventionOut<'a> {
    /// Stable short code (no unit).
    code: &'static str,
    /// What yours do and ours do not, in a sentence (no unit).
    text: String,
    /// Joint names in your order, for conventions about it (no unit).
    #[serde(skip_serializing_if = "Vec::is_empty")]
    joints: Vec<&'a str>,
}

/// Which quantity.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum QuantityWord {
    MassMatrix,
    Bias,
    Momentum,
    Jacobian,
    BiasAcceleration,
}

/// One quantity beside ours. Relative errors: of the mass matrix by `sqrt(M_ii M_jj)`, of the others by the largest of ours among entries of
/// the same unit, 1e-3 at least.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ComparedQuantity")]
struct QuantityOut<'a> {
    /// Which one (no unit).
    quantity: QuantityWord,
    /// The frame, for `jacobian` and `bias_acceleration` (no unit); null otherwise.
    frame: Option<&'a str>,
    /// Largest relative error (no unit).
    relative: Number,
    /// Where it is (no unit).
    worst: WorstOut<'a>,
    /// Largest relative error by block (no unit).
    blocks: Vec<BlockOut>,
}

/// The entry that differs most.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "WorstEntry")]
struct WorstOut<'a> {
    /// Row, named in our order (no unit).
    row: &'a str,
    /// Column, named in our order (no unit); empty for vectors.
    column: &'a str,
    /// Our value (unit of the quantity: kg, kg m, kg m^2, N, N m, m/s^2 and so on).
    ours: Number,
    /// Your value (unit of the quantity).
    yours: Number,
}

/// Largest error of a block.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "BlockError")]
struct BlockOut {
    /// Rows of the block (no unit): `base linear`, `base angular`, `joints`, `linear` or `angular`.
    rows: &'static str,
    /// Columns of the block (no unit); empty for vectors.
    columns: &'static str,
    /// Largest relative error (no unit).
    relative: Number,
}

/// Largest error of a generalised velocity.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "VelocityError")]
struct VelocityOut<'a> {
    /// Its name (no unit).
    name: &'a str,
    /// Largest relative error of its rows and columns (no unit).
    relative: Number,
}

/// The document.
pub(super) fn write(asked: &CompareQuestion, found: &Comparison, fingerprint: &str) -> Vec<u8> {
    let model = &*asked.question.model;
    let document = CompareOut {
        format: Format::One,
        version: env!("CARGO_PKG_VERSION"),
        fingerprint,
        model: &model.id,
        verdict: match found.verdict {
            Verdict::Agrees => VerdictOut::Agrees,
            Verdict::Explained => VerdictOut::Explained,
            Verdict::Unexplained => VerdictOut::Unexplained,
        },
        tolerance: Number(asked.tolerance),
        explanations: found.explanations.iter().map(|e| ExplanationOut::of(model, e)).collect(),
        nearest: found.nearest.as_ref().map(|e| ExplanationOut::of(model, e)),
        quantities: found.tables.iter().map(QuantityOut::of).collect(),
        after: found.after.iter().map(QuantityOut::of).collect(),
        velocities: found.velocities.iter().map(|(name, error)| VelocityOut { name, relative: finite(*error) }).collect(),
        unseen: found.unseen.iter().map(|assumption| ConventionOut::of(model, assumption)).collect(),
    };
    serde_json::to_vec(&document).unwrap_or_default()
}

/// An error beyond all numbers counts as the largest.
fn finite(value: f64) -> Number {
    Number(if value.is_finite() { value } else { f64::MAX })
}

impl<'a> ExplanationOut<'a> {
    fn of(model: &'a Model, explanation: &Explanation) -> Self {
        let conventions = explanation.assumptions.iter().map(|assumption| ConventionOut::of(model, assumption)).collect();
        ExplanationOut { conventions, left: finite(explanation.left) }
    }
}

impl<'a> ConventionOut<'a> {
    fn of(model: &'a Model, assumption: &Assumption) -> Self {
        ConventionOut { code: assumption.code(), text: assumption.text(), joints: assumption.joints(model) }
    }
}

impl<'a> QuantityOut<'a> {
    fn of(table: &'a Table) -> Self {
        let (i, j, error) = table.worst();
        let name = |labels: &'a [crate::compare::table::Label], at: usize| labels.get(at).map_or("", |label| label.name.as_str());
        QuantityOut {
            quantity: match table.quantity {
                Quantity::MassMatrix => QuantityWord::MassMatrix,
                Quantity::Bias => QuantityWord::Bias,
                Quantity::Momentum => QuantityWord::Momentum,
                Quantity::Jacobian => QuantityWord::Jacobian,
                Quantity::BiasAcceleration => QuantityWord::BiasAcceleration,
            },
            frame: table.frame.as_deref(),
            relative: finite(error),
            worst: WorstOut {
                row: name(&table.rows, i),
                column: name(&table.columns, j),
                ours: finite(table.ours[(i, j)]),
                yours: finite(table.theirs[(i, j)]),
            },
            blocks: table.blocks().into_iter().map(|Block { rows, columns, relative }| BlockOut { rows, columns, relative: finite(relative) }).collect(),
        }
    }
}
