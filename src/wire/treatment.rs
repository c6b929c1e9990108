//! How strictly a limit holds, in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::common::Whole;
use super::gate::{At, Gate};
use super::kinds::{KindRule, KindTable, given};
use crate::problem::question::Treatment;

/// The largest priority number.
pub(super) const MAX_PRIORITY: u32 = 100;
/// The smallest weight or scale.
pub(super) const MIN_RATIO: f64 = 1e-9;
/// The largest weight or scale.
pub(super) const MAX_RATIO: f64 = 1e9;

/// Kinds of treatment.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
pub(super) enum TreatmentKind {
    Hard,
    Soft,
    Decay,
}

/// Which members go with which kind.
pub(super) const TREATMENT_KINDS: KindTable = KindTable {
    definition: "Treatment",
    rules: &[
        KindRule { kind: "hard", needs: &[], may: &[] },
        KindRule { kind: "soft", needs: &["priority"], may: &["weight", "scale"] },
        KindRule { kind: "decay", needs: &["rate"], may: &[] },
    ],
};

/// How strictly a limit holds. `hard`: always. `soft`: it may be exceeded, at a cost of
/// `weight * (excess / scale)^2` at its priority. `decay`: a present violation must shrink,
/// `violation at the tick's end <= (1 - rate * tick length) * violation now`.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Treatment")]
pub(super) struct TreatmentBody {
    /// `hard`, `soft` or `decay` (no unit). `decay` is for friction and normal force only.
    kind: TreatmentKind,
    /// For `soft`: priority at which the excess costs, 1 to 100, 1 first (no unit).
    #[schemars(extend("minimum" = 1, "maximum" = MAX_PRIORITY))]
    priority: Option<Whole>,
    /// For `soft`: weight, more than 0 (no unit); 1 when left out.
    #[schemars(extend("minimum" = MIN_RATIO, "maximum" = MAX_RATIO))]
    weight: Option<f64>,
    /// For `soft`: the excess that costs `weight`, more than 0, in the unit of the limit (N, N m,
    /// N/s, rad or rad/s; m or m/s for sliding joints); 1 when left out.
    #[schemars(extend("minimum" = MIN_RATIO, "maximum" = MAX_RATIO))]
    scale: Option<f64>,
    /// For `decay`: rate (1/s), 0 or more; rate times tick length must not exceed 1.
    #[schemars(extend("minimum" = 0.0))]
    rate: Option<f64>,
}

/// The treatment asked for; hard when left out. `decay` says whether decay makes sense here, and
/// why not.
pub(super) fn treatment(
    gate: &mut Gate,
    at: At<'_>,
    body: Option<&TreatmentBody>,
    tick: f64,
    decay: Result<(), &str>,
) -> Treatment {
    let Some(body) = body else { return Treatment::Hard };
    let here = at.name("treatment");
    let kind = match body.kind {
        TreatmentKind::Hard => "hard",
        TreatmentKind::Soft => "soft",
        TreatmentKind::Decay => "decay",
    };
    TREATMENT_KINDS.check(gate, here, kind, &given!(body, priority, weight, scale, rate));
    match body.kind {
        TreatmentKind::Hard => Treatment::Hard,
        TreatmentKind::Soft => Treatment::Soft {
            priority: priority(gate, here.name("priority"), body.priority.unwrap_or(Whole(1))),
            weight: ratio(gate, here.name("weight"), body.weight),
            scale: ratio(gate, here.name("scale"), body.scale),
        },
        TreatmentKind::Decay => {
            if let Err(why) = decay {
                gate.fault(here.name("kind"), format!("\"hard\" or \"soft\": {why}"), "\"decay\"");
            }
            let rate = body.rate.unwrap_or(0.0);
            let largest = 1.0 / tick;
            if !(rate >= 0.0 && rate * tick <= 1.0 + 1e-12) {
                let expected = format!("a rate from 0 to 1/tick = {largest} 1/s");
                gate.fault(here.name("rate"), expected, rate.to_string());
            }
            Treatment::Decay { rate }
        }
    }
}

/// A priority, 1 to [`MAX_PRIORITY`].
pub(super) fn priority(gate: &mut Gate, at: At<'_>, value: Whole) -> u32 {
    if !(1..=MAX_PRIORITY).contains(&value.0) {
        let expected = format!("a whole number from 1 to {MAX_PRIORITY}");
        gate.fault(at, expected, value.0.to_string());
    }
    value.0
}

/// A weight or scale: positive, 1 when left out.
pub(super) fn ratio(gate: &mut Gate, at: At<'_>, value: Option<f64>) -> f64 {
    gate.within(at, value.unwrap_or(1.0), MIN_RATIO, MAX_RATIO, "")
}
