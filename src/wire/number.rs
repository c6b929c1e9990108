//! Numbers on their way out. JSON has no word for infinity or NaN, and a JSON writer left to itself
//! would write null without a sound: here a number that is not finite stops the writing instead.

use std::borrow::Cow;

use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use serde::ser::{Error, Serialize, SerializeSeq, Serializer};

use crate::spatial::{Vec3, Wrench};

/// A finite number.
#[derive(Debug, Clone, Copy)]
pub(super) struct Number(pub(super) f64);

impl Serialize for Number {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        if self.0.is_finite() {
            serializer.serialize_f64(self.0)
        } else {
            Err(S::Error::custom(format_args!("a number is {}", self.0)))
        }
    }
}

/// An array of finite numbers.
#[derive(Debug, Clone, Copy)]
pub(super) struct Numbers<'a>(pub(super) &'a [f64]);

impl Serialize for Numbers<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_seq(self.0.iter().map(|x| Number(*x)))
    }
}

/// A matrix as an array of rows.
#[derive(Debug, Clone, Copy)]
pub(super) struct Rows<'a>(pub(super) &'a [Vec<f64>]);

impl Serialize for Rows<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_seq(self.0.iter().map(|row| Numbers(row)))
    }
}

/// A fixed number of finite numbers.
#[derive(Debug, Clone, Copy)]
pub(super) struct Tuple<const N: usize>(pub(super) [f64; N]);

impl<const N: usize> Serialize for Tuple<N> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut elements = serializer.serialize_seq(Some(N))?;
        for x in self.0 {
            elements.serialize_element(&Number(x))?;
        }
        elements.end()
    }
}

impl From<Vec3> for Tuple<3> {
    fn from(v: Vec3) -> Self {
        Tuple([v.x, v.y, v.z])
    }
}

macro_rules! schema {
    ([$($generics:tt)*] $name:ty, $title:literal, $schema:expr) => {
        impl<$($generics)*> JsonSchema for $name {
            fn inline_schema() -> bool {
                true
            }

            fn schema_name() -> Cow<'static, str> {
                $title.into()
            }

            fn json_schema(_: &mut SchemaGenerator) -> Schema {
                $schema
            }
        }
    };
}

schema!([] Number, "Number", json_schema!({ "type": "number" }));
schema!(['a] Numbers<'a>, "Numbers", json_schema!({ "type": "array", "items": { "type": "number" } }));
schema!(['a] Rows<'a>, "Rows", json_schema!({
    "type": "array", "items": { "type": "array", "items": { "type": "number" } }
}));
schema!([const N: usize] Tuple<N>, "Tuple", json_schema!({
    "type": "array", "items": { "type": "number" }, "minItems": N, "maxItems": N
}));

/// A force and a moment.
#[derive(Debug, Clone, Copy, serde::Serialize, JsonSchema)]
#[schemars(rename = "WrenchAnswer")]
pub(super) struct WrenchOut {
    /// Force [x, y, z] (N).
    force: Tuple<3>,
    /// Moment about the sole origin [x, y, z] (N m).
    moment: Tuple<3>,
}

impl From<Wrench> for WrenchOut {
    fn from(wrench: Wrench) -> Self {
        WrenchOut { force: wrench.force.into(), moment: wrench.moment.into() }
    }
}

/// A linear and an angular vector.
#[derive(Debug, Clone, Copy, serde::Serialize, JsonSchema)]
#[schemars(rename = "LinearAngularAnswer")]
pub(super) struct LinearAngularOut {
    /// Linear part [x, y, z], in the linear unit of the member this stands in (m/s, m/s^2, kg m/s or N).
    linear: Tuple<3>,
    /// Angular part [x, y, z], in the angular unit of the member this stands in (rad/s, rad/s^2,
    /// kg m^2/s or N m).
    angular: Tuple<3>,
}

impl From<[Vec3; 2]> for LinearAngularOut {
    fn from(parts: [Vec3; 2]) -> Self {
        LinearAngularOut { linear: parts[0].into(), angular: parts[1].into() }
    }
}
