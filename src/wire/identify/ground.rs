//! The ground under a sole as a solve request takes it: the estimate with its covariance.

use schemars::JsonSchema;
use serde::Serialize;

use crate::identify::excitation::Excitation;
use crate::identify::parameters::Parameter;
use crate::identify::report::{SoleReport, Stance};
use crate::wire::number::Number;

/// Ready to paste into a solve request: `law` into a contact, `spread` beside the contacts.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedGround")]
pub(super) struct GroundOut {
    /// For `contacts[].law` of a solve request (N/m^3, N s/m^3; N/m, N s/m per sole).
    law: LawOut,
    /// For `spread` of a solve request (no unit).
    spread: GroundSpreadOut,
}

/// A bonded law.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedLaw")]
struct LawOut {
    /// `bonded` (no unit).
    kind: &'static str,
    /// Stiffness (N/m^3 per area, N/m per sole).
    stiffness: DirectionsOut,
    /// Damping (N s/m^3 per area, N s/m per sole).
    damping: DirectionsOut,
    /// `area`, or `sole` for a point (no unit).
    per: &'static str,
}

/// Along the normal and in the plane.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedDirections")]
struct DirectionsOut {
    /// Along the ground normal (N/m^3, N s/m^3; N/m, N s/m).
    normal: Number,
    /// In the plane of the ground (N/m^3, N s/m^3; N/m, N s/m).
    tangential: Number,
}

/// Uncertainty of stiffness and damping.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedSpread")]
struct GroundSpreadOut {
    /// Covariance of the relative errors of stiffness and damping, normal ones where they are told apart (no unit).
    covariance: [[Number; 2]; 2],
    /// Whether all soles share the error (no unit): false, for each sole has an estimate of its own.
    shared: bool,
}

/// The block, or why there is none.
pub(super) fn block(sole: &SoleReport) -> Result<GroundOut, String> {
    let stance = sole.stances.last().ok_or("the sole never stood")?;
    if let Some(first) = stance.unphysical.first() {
        return Err(first.clone());
    }
    let lost = |value: &&crate::identify::report::Value| {
        value.parameter.of_material() && value.excitation == Excitation::NotIdentifiable
    };
    if let Some(value) = stance.values.iter().find(lost) {
        let name = super::answer::name(value.parameter);
        return Err(format!("{name} is not identifiable from this log: {}", value.advice.as_deref().unwrap_or_default()));
    }
    let find = |wanted: &[Parameter]| stance.values.iter().position(|value| wanted.contains(&value.parameter));
    let k = find(&[Parameter::Stiffness, Parameter::NormalStiffness]).ok_or("no stiffness")?;
    let b = find(&[Parameter::Damping, Parameter::NormalDamping]).ok_or("no damping")?;
    let tangential = |parameter, normal: usize| find(&[parameter]).unwrap_or(normal);
    let at = |place: usize| Number(stance.values[place].value);
    Ok(GroundOut {
        law: LawOut {
            kind: "bonded",
            stiffness: DirectionsOut { normal: at(k), tangential: at(tangential(Parameter::TangentialStiffness, k)) },
            damping: DirectionsOut { normal: at(b), tangential: at(tangential(Parameter::TangentialDamping, b)) },
            per: if sole.area.is_some() { "area" } else { "sole" },
        },
        spread: GroundSpreadOut { covariance: relative(stance, k, b), shared: false },
    })
}

fn relative(stance: &Stance, k: usize, b: usize) -> [[Number; 2]; 2] {
    let places = [k, b];
    places.map(|i| {
        places.map(|j| Number(stance.covariance[(i, j)] / (stance.values[i].value * stance.values[j].value)))
    })
}
