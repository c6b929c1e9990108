//! Limits on the wrench of one sole, in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::common::Whole;
use super::gate::{At, Gate, number};
use super::treatment::{TreatmentBody, treatment};
use crate::problem::question::{Friction, FrictionSet, NormalForce, WrenchRate};

/// The largest friction coefficient; beyond it friction is no limit.
const MAX_COEFFICIENT: f64 = 1000.0;
/// Facets of a friction pyramid.
const FACETS: std::ops::RangeInclusive<u32> = 3..=64;
/// Why decay needs a measured wrench on rigid ground.
const UNKNOWN: &str = "decay needs the present wrench, which on rigid ground only a measured_wrench tells";

/// Friction sets.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum SetBody {
    Vertex,
    Wrench,
}

/// Friction and unilateral contact under one sole. `vertex`: the wrench is a sum of forces at the
/// vertices, each in its friction cone. `wrench`: force cone, centre of pressure in the polygon,
/// bounded yaw moment.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Friction")]
pub(super) struct FrictionBody {
    /// `vertex` or `wrench` (no unit).
    set: SetBody,
    /// Friction coefficient, more than 0 (no unit).
    #[schemars(extend("exclusiveMinimum" = 0.0, "maximum" = MAX_COEFFICIENT))]
    coefficient: f64,
    /// For the set `wrench` on a polygon: largest yaw moment about the polygon's centroid per
    /// normal force, more than 0 (m).
    #[schemars(extend("exclusiveMinimum" = 0.0, "maximum" = MAX_COEFFICIENT))]
    torsion: Option<f64>,
    /// Facets of an inscribed pyramid, 3 to 64 (no unit); exact circular cones when left out.
    #[schemars(extend("minimum" = FACETS.start(), "maximum" = FACETS.end()))]
    facets: Option<Whole>,
    /// How strictly it holds (excess in N); hard when left out.
    treatment: Option<TreatmentBody>,
}

impl FrictionBody {
    /// The friction limit. `known`: whether the present wrench is known.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, point: bool, tick: f64, known: bool) -> Friction {
        let set = match self.set {
            SetBody::Vertex => FrictionSet::Vertex,
            SetBody::Wrench => FrictionSet::Wrench,
        };
        positive(gate, at.name("coefficient"), self.coefficient, MAX_COEFFICIENT, "");
        let here = at.name("torsion");
        match self.torsion {
            None if set == FrictionSet::Wrench && !point => {
                gate.missing(here, "yaw friction (m), for the set is \"wrench\" and the sole a polygon");
            }
            Some(torsion) if set == FrictionSet::Wrench && !point => {
                positive(gate, here, torsion, MAX_COEFFICIENT, "m");
            }
            Some(torsion) => {
                let expected = "no torsion: it goes with the set \"wrench\" on a polygon";
                gate.fault(here, expected, torsion.to_string());
            }
            None => {}
        }
        if let Some(facets) = self.facets
            && !FACETS.contains(&facets.0)
        {
            gate.fault(at.name("facets"), "a whole number from 3 to 64", facets.0.to_string());
        }
        let decay = if known { Ok(()) } else { Err(UNKNOWN) };
        Friction {
            set,
            coefficient: self.coefficient,
            torsion: self.torsion,
            facets: self.facets.map(|facets| facets.0 as usize),
            treatment: treatment(gate, at, self.treatment.as_ref(), tick, decay),
        }
    }
}

/// Range of the normal force at the tick's end.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "NormalForce")]
pub(super) struct NormalForceBody {
    /// Least normal force (N); none when left out.
    least: Option<f64>,
    /// Largest normal force (N); none when left out.
    largest: Option<f64>,
    /// How strictly it holds (excess in N); hard when left out.
    treatment: Option<TreatmentBody>,
}

impl NormalForceBody {
    /// The range. `known`: whether the present wrench is known.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, tick: f64, known: bool) -> NormalForce {
        match (self.least, self.largest) {
            (None, None) => gate.fault(at, "least or largest, or both", "neither"),
            (Some(least), Some(largest)) if least > largest => {
                gate.fault(at.name("largest"), format!("{least} N or more"), largest.to_string());
            }
            _ => {}
        }
        let decay = if known { Ok(()) } else { Err(UNKNOWN) };
        NormalForce {
            least: self.least,
            largest: self.largest,
            treatment: treatment(gate, at, self.treatment.as_ref(), tick, decay),
        }
    }
}

/// Largest rates of change of the wrench over the tick, each component in world axes.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "WrenchRate")]
pub(super) struct WrenchRateBody {
    /// Largest rate of each force component, more than 0 (N/s); none when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    force: Option<f64>,
    /// Largest rate of each moment component, more than 0 (N m/s); none when left out.
    #[schemars(extend("exclusiveMinimum" = 0.0))]
    moment: Option<f64>,
    /// How strictly it holds (excess in N/s, N m/s), `hard` or `soft`; hard when left out.
    treatment: Option<TreatmentBody>,
}

impl WrenchRateBody {
    /// The limit. `known`: whether the present wrench is known.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, point: bool, tick: f64, known: bool) -> WrenchRate {
        if !known {
            let expected = "no limit on the rate: on rigid ground the present wrench is known only from \
                            a measured_wrench";
            gate.fault(at, expected, "one");
        }
        if self.force.is_none() && self.moment.is_none() {
            gate.fault(at, "force or moment, or both", "neither");
        }
        for (name, value, unit) in [("force", self.force, "N/s"), ("moment", self.moment, "N m/s")] {
            if let Some(value) = value {
                positive(gate, at.name(name), value, super::strict::MAX_MAGNITUDE, unit);
            }
        }
        if let (true, Some(moment)) = (point, self.moment) {
            let expected = "no limit on the moment: a point sole carries none";
            gate.fault(at.name("moment"), expected, moment.to_string());
        }
        let decay = Err("a rate has no present violation that could decay");
        WrenchRate {
            force: self.force,
            moment: self.moment,
            treatment: treatment(gate, at, self.treatment.as_ref(), tick, decay),
        }
    }
}

/// Notes a fault unless the value is above zero and not above `most`.
pub(super) fn positive(gate: &mut Gate, at: At<'_>, value: f64, most: f64, unit: &str) {
    if !(value > 0.0 && value <= most) {
        let space = if unit.is_empty() { "" } else { " " };
        let expected = format!("a number above 0 and not above {}{space}{unit}", number(most));
        gate.fault(at, expected, number(value));
    }
}
