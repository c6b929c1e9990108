//! Spread of the answer under uncertain ground: asked for in a request, told in an answer.

use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use serde::{Deserialize, Serialize};

use super::common::Whole;
use super::gate::{At, Gate};
use super::number::Number;
use crate::explain::spread::{MOST_SAMPLES, Moments, Spread};
use crate::model::Model;
use crate::problem::question::SpreadAim;
use crate::reference::answer::{Answer, Margin};

/// The largest variance of a relative error: a deviation of 100 %.
const MAX_VARIANCE: f64 = 1.0;
/// How far apart, relative to the larger variance, the two off-diagonal elements may be, and how far the determinant below
/// zero relative to the product of the variances: rounding of whoever worked the covariance out.
const ROUNDING: f64 = 1e-12;

/// How uncertain stiffness and damping of the soft soles are.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "SpreadAim")]
pub(super) struct SpreadBody {
    /// Covariance of the relative errors of stiffness and of damping, two rows (no unit): symmetric and positive
    /// semidefinite, variances at most 1. [[0.04, 0], [0, 0.01]] is 20 % on stiffness and 10 % on damping. Normal and
    /// tangential values move together.
    #[schemars(schema_with = "covariance_schema")]
    covariance: [[f64; 2]; 2],
    /// True: the same error under every sole. False: every sole has its own, independent of the others (no unit).
    shared: bool,
    /// Seeded samples besides the sigma points, 0 to 2000 (no unit); 0 when left out.
    #[schemars(extend("maximum" = MOST_SAMPLES))]
    samples: Option<Whole>,
    /// Seed of the samples, 0 to 4294967295 (no unit); 0 when left out.
    seed: Option<Whole>,
}

/// Variances on the diagonal, anything beside it.
fn covariance_schema(_: &mut SchemaGenerator) -> Schema {
    let variance = || json_schema!({ "type": "number", "minimum": 0.0, "maximum": MAX_VARIANCE });
    let other = || json_schema!({ "type": "number" });
    let row = |a: Schema, b: Schema| json_schema!({ "type": "array", "prefixItems": [a, b], "minItems": 2, "maxItems": 2 });
    json_schema!({
        "type": "array",
        "prefixItems": [row(variance(), other()), row(other(), variance())],
        "minItems": 2,
        "maxItems": 2,
    })
}

impl SpreadBody {
    /// As the domain has it.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>) -> SpreadAim {
        let samples = self.samples.map_or(0, |samples| samples.0) as usize;
        if samples > MOST_SAMPLES {
            let expected = format!("a whole number from 0 to {MOST_SAMPLES}");
            gate.fault(at.name("samples"), expected, samples.to_string());
        }
        SpreadAim {
            covariance: covariance(gate, at.name("covariance"), &self.covariance),
            shared: self.shared,
            samples,
            seed: u64::from(self.seed.map_or(0, |seed| seed.0)),
        }
    }
}

/// The covariance, exactly symmetric.
fn covariance(gate: &mut Gate, at: At<'_>, rows: &[[f64; 2]; 2]) -> [[f64; 2]; 2] {
    let [[k, kb], [bk, b]] = *rows;
    let rows = [at.index(0), at.index(1)];
    let mut usable = true;
    for (place, variance) in [(rows[0].index(0), k), (rows[1].index(1), b)] {
        gate.within(place, variance, 0.0, MAX_VARIANCE, "");
        usable &= (0.0..=MAX_VARIANCE).contains(&variance);
    }
    if (kb - bk).abs() > ROUNDING * k.abs().max(b.abs()) {
        gate.fault(rows[1].index(0), format!("{kb}, as in the first row: a covariance is symmetric"), bk.to_string());
        usable = false;
    }
    let cross = 0.5 * (kb + bk);
    if usable && cross * cross > k * b * (1.0 + ROUNDING) {
        let largest = (k * b).sqrt();
        let expected = format!("a positive semidefinite matrix (off the diagonal at most {largest} in size)");
        gate.fault(at, expected, format!("{cross} off the diagonal"));
    }
    [[k, cross], [cross, b]]
}

/// Spread of torques and margins under the uncertain ground that the request described.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Spread")]
pub(super) struct SpreadOut<'a> {
    /// Seed of the samples (no unit).
    seed: u64,
    /// Moments by sigma points, where a margin is taken for normally distributed (N m, N, unit of each margin).
    sigma_points: MomentsOut<'a>,
    /// Moments by seeded samples (N m, N, unit of each margin); null where no samples were asked for.
    samples: Option<MomentsOut<'a>>,
}

/// Mean and spread by one of the two ways.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Moments")]
struct MomentsOut<'a> {
    /// Variations of the ground that have a certified answer (no unit).
    answered: usize,
    /// Variations without one; they count as margins lost (no unit).
    failed: usize,
    /// Draws of stiffness or damping cut off at 0.05 of the stated value (no unit).
    cut: usize,
    /// Torque of each joint (N m, or N for a sliding joint); empty where no variation has an answer.
    joints: Vec<TorqueSpreadOut<'a>>,
    /// Each margin of the answer, in its own unit; empty where no variation has an answer.
    margins: Vec<MarginSpreadOut<'a>>,
}

/// Mean and spread of one torque.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "TorqueSpread")]
struct TorqueSpreadOut<'a> {
    /// Joint name as in the URDF (no unit).
    name: &'a str,
    /// Mean torque (N m, or N for a sliding joint).
    mean: Number,
    /// Standard deviation of the torque (N m, or N for a sliding joint).
    deviation: Number,
}

/// Mean and spread of one margin.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "MarginSpread")]
struct MarginSpreadOut<'a> {
    /// The limit (no unit).
    limit: &'a str,
    /// The row within it (no unit).
    part: &'a str,
    /// Mean margin (in `unit`).
    mean: Number,
    /// Standard deviation of the margin (in `unit`).
    deviation: Number,
    /// Probability that the margin is not negative, 0 to 1; variations without an answer count as margins lost (no unit).
    positive: Number,
    /// Unit of the margin (no unit).
    unit: &'a str,
}

impl<'a> SpreadOut<'a> {
    /// From the answer.
    pub(super) fn of(model: &'a Model, answer: &'a Answer, spread: &'a Spread) -> Self {
        SpreadOut {
            seed: spread.seed,
            sigma_points: moments(model, &answer.margins, &spread.sigma_points),
            samples: spread.samples.as_ref().map(|samples| moments(model, &answer.margins, samples)),
        }
    }
}

fn moments<'a>(model: &'a Model, margins: &'a [Margin], moments: &'a Moments) -> MomentsOut<'a> {
    let torques = moments.torque_mean.iter().zip(&moments.torque_deviation);
    let joints = model.joints.iter().zip(torques);
    let rooms = moments.margin_mean.iter().zip(&moments.margin_deviation).zip(&moments.margin_positive);
    MomentsOut {
        answered: moments.answered,
        failed: moments.failed,
        cut: moments.cut,
        joints: joints
            .map(|(joint, (mean, deviation))| TorqueSpreadOut {
                name: &joint.name,
                mean: Number(*mean),
                deviation: Number(*deviation),
            })
            .collect(),
        margins: margins
            .iter()
            .zip(rooms)
            .map(|(margin, ((mean, deviation), positive))| MarginSpreadOut {
                limit: &margin.limit,
                part: &margin.part,
                mean: Number(*mean),
                deviation: Number(*deviation),
                positive: Number(*positive),
                unit: margin.unit,
            })
            .collect(),
    }
}
