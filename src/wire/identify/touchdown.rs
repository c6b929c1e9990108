//! How touchdowns are told, in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::settings::positive;
use crate::identify::setup::{SoleSetup, Touchdown};
use crate::wire::gate::{At, Gate, listed, quoted};
use crate::wire::kinds::{KindRule, KindTable, given};

/// Stances given.
const MAX_STANCES: usize = 200;
/// Default thresholds over the weight, and without one (N).
const ON_SHARE: f64 = 0.1;
const ON_USUAL: f64 = 30.0;
/// Lift-off over touchdown threshold, where it is not given.
const OFF_OVER_ON: f64 = 0.5;

#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum TouchdownWord {
    Force,
    Logged,
    Given,
}

/// Which members go with which kind of touchdown.
pub(in crate::wire) const TOUCHDOWN_KINDS: KindTable = KindTable {
    definition: "Touchdown",
    rules: &[
        KindRule { kind: "force", needs: &[], may: &["on", "off"] },
        KindRule { kind: "logged", needs: &[], may: &[] },
        KindRule { kind: "given", needs: &["stances"], may: &[] },
    ],
};

/// How touchdowns are told. `force`: by the normal force, with hysteresis. `logged`: samples say `stands`. `given`: stances are
/// listed.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Touchdown")]
pub(super) struct TouchdownBody {
    /// `force`, `logged` or `given` (no unit).
    kind: TouchdownWord,
    /// For `force`: a stance begins above this normal force, more than 0 (N); a tenth of the weight when left out, 30 N where
    /// that is unknown.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    on: Option<f64>,
    /// For `force`: it ends below this one, not above `on` (N); half of `on` when left out.
    off: Option<f64>,
    /// For `given`: stances in order of time, at most 200 (s).
    #[schemars(extend("maxItems" = MAX_STANCES))]
    stances: Option<Vec<GivenBody>>,
}

/// A stance.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "GivenStance")]
struct GivenBody {
    /// Name of the sole (no unit).
    sole: String,
    /// Time of the touchdown (s).
    begin: f64,
    /// Last time of the stance (s), not before its begin.
    end: f64,
}

/// As the domain has it; by the normal force where nothing is said.
pub(super) fn read(
    body: Option<&TouchdownBody>,
    gate: &mut Gate,
    at: At<'_>,
    weight: Option<f64>,
    soles: &[SoleSetup],
) -> Touchdown {
    let usual = weight.map_or(ON_USUAL, |weight| weight * ON_SHARE);
    let Some(body) = body else {
        return Touchdown::Force { on: usual, off: usual * OFF_OVER_ON };
    };
    let kind = match body.kind {
        TouchdownWord::Force => "force",
        TouchdownWord::Logged => "logged",
        TouchdownWord::Given => "given",
    };
    TOUCHDOWN_KINDS.check(gate, at, kind, &given!(body, on, off, stances));
    match body.kind {
        TouchdownWord::Logged => Touchdown::Logged,
        TouchdownWord::Force => {
            let on = body.on.map_or(usual, |on| positive(gate, at.name("on"), on, "N"));
            let off = body.off.unwrap_or(on * OFF_OVER_ON);
            Touchdown::Force { on, off: gate.within(at.name("off"), off, -on.abs(), on, "N") }
        }
        TouchdownWord::Given => {
            let stances = body.stances.as_deref().unwrap_or_default();
            Touchdown::Given(given_stances(gate, at.name("stances"), stances, soles))
        }
    }
}

/// Stances per sole, in order and apart.
fn given_stances(gate: &mut Gate, at: At<'_>, bodies: &[GivenBody], soles: &[SoleSetup]) -> Vec<Vec<(f64, f64)>> {
    let mut out: Vec<Vec<(f64, f64)>> = vec![Vec::new(); soles.len()];
    if !gate.at_most(at, bodies.len(), MAX_STANCES, "stances") {
        return out;
    }
    for (i, body) in bodies.iter().enumerate() {
        let here = at.index(i);
        let Some(sole) = soles.iter().position(|sole| sole.name == body.sole) else {
            let known = listed(soles.iter().map(|sole| sole.name.as_str()));
            gate.fault(here.name("sole"), format!("the name of a sole: {known}"), quoted(&body.sole));
            continue;
        };
        if body.end < body.begin {
            gate.fault(here.name("end"), "a time not before the begin", body.end.to_string());
        }
        if out[sole].last().is_some_and(|last| body.begin <= last.1) {
            gate.fault(here.name("begin"), "a time after the stance before", body.begin.to_string());
        }
        out[sole].push((body.begin, body.end));
    }
    out
}
