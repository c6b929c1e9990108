//! Small pieces that several request documents share.

use std::borrow::Cow;
use std::fmt;

use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use serde::de::value::MapAccessDeserializer;
use serde::de::{Deserialize, Deserializer, Error, MapAccess, Unexpected, Visitor};

use super::gate::{At, Gate};
use crate::spatial::{Pose, Vec3, Wrench};

/// The format of every document.
#[derive(Debug, Clone, Copy, serde::Deserialize, serde::Serialize, JsonSchema)]
#[schemars(inline)]
pub(super) enum Format {
    #[serde(rename = "underfoot/1")]
    One,
}

/// A whole number, written with or without a decimal point (`3` or `3.0`).
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Whole(pub(super) u32);

impl<'de> Deserialize<'de> for Whole {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let value = f64::deserialize(deserializer)?;
        if value.fract() == 0.0 && (0.0..=f64::from(u32::MAX)).contains(&value) {
            return Ok(Whole(value as u32));
        }
        Err(D::Error::invalid_value(Unexpected::Float(value), &"a whole number, 0 or more"))
    }
}

impl JsonSchema for Whole {
    fn inline_schema() -> bool {
        true
    }

    fn schema_name() -> Cow<'static, str> {
        "Whole".into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        json_schema!({ "type": "integer", "minimum": 0, "maximum": u32::MAX })
    }
}

/// A force and a moment about the sole origin or the point of application.
#[derive(Debug, Clone, Copy, serde::Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Wrench")]
pub(super) struct WrenchBody {
    /// Force [x, y, z] (N).
    pub(super) force: [f64; 3],
    /// Moment [x, y, z] (N m); zero when left out. A point sole carries no moment.
    pub(super) moment: Option<[f64; 3]>,
}

impl WrenchBody {
    /// As the domain has it; `point` forbids a moment.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, point: bool) -> Wrench {
        let moment = self.moment.unwrap_or_default();
        if point && moment != [0.0; 3] {
            gate.fault(at.name("moment"), "no moment: a point sole carries none", format!("{moment:?}"));
        }
        Wrench { force: Vec3::from(self.force), moment: Vec3::from(moment) }
    }
}

/// Position and orientation of one frame in another.
pub(super) fn pose(
    gate: &mut Gate,
    at: At<'_>,
    position: Option<[f64; 3]>,
    orientation: Option<[f64; 4]>,
) -> Pose {
    let rotation = gate.rotation(at.name("orientation"), &orientation.unwrap_or([0.0, 0.0, 0.0, 1.0]));
    Pose { rotation, translation: Vec3::from(position.unwrap_or_default()) }
}

/// Two vectors, linear and angular.
#[derive(Debug, Clone, Copy, Default, serde::Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "LinearAngular")]
pub(super) struct LinearAngularBody {
    /// Linear part [x, y, z], in the linear unit of the member this stands in (m/s, N, N/s or kg m/s);
    /// zero when left out.
    pub(super) linear: Option<[f64; 3]>,
    /// Angular part [x, y, z], in the angular unit of the member this stands in (rad/s, N m, N m/s
    /// or kg m^2/s); zero when left out.
    pub(super) angular: Option<[f64; 3]>,
}

impl LinearAngularBody {
    /// Linear part first.
    pub(super) fn vectors(&self) -> [Vec3; 2] {
        [Vec3::from(self.linear.unwrap_or_default()), Vec3::from(self.angular.unwrap_or_default())]
    }
}

/// Two gains, linear and angular.
#[derive(Debug, Clone, Copy, Default, serde::Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "LinearAngularGain")]
pub(super) struct LinearAngularGainBody {
    /// Gain of the linear part, 0 or more, in the unit of the member this stands in (1/s or 1/s^2);
    /// zero when left out.
    #[schemars(extend("minimum" = 0.0))]
    pub(super) linear: Option<f64>,
    /// Gain of the angular part, 0 or more, in the unit of the member this stands in (1/s or 1/s^2);
    /// zero when left out.
    #[schemars(extend("minimum" = 0.0))]
    pub(super) angular: Option<f64>,
}

/// Either one or the other.
#[derive(Debug, Clone)]
pub(super) enum NumberOr<T> {
    /// A number.
    Number(f64),
    /// An object.
    Object(T),
}

/// Either one or the other.
#[derive(Debug, Clone)]
pub(super) enum TextOr<T> {
    /// A string.
    Text(String),
    /// An object.
    Object(T),
}

struct NumberOrVisitor<T>(std::marker::PhantomData<T>);

impl<'de, T: Deserialize<'de>> Visitor<'de> for NumberOrVisitor<T> {
    type Value = NumberOr<T>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a number or an object")
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<Self::Value, E> {
        Ok(NumberOr::Number(value))
    }

    fn visit_u64<E: Error>(self, value: u64) -> Result<Self::Value, E> {
        Ok(NumberOr::Number(value as f64))
    }

    fn visit_i64<E: Error>(self, value: i64) -> Result<Self::Value, E> {
        Ok(NumberOr::Number(value as f64))
    }

    fn visit_map<A: MapAccess<'de>>(self, members: A) -> Result<Self::Value, A::Error> {
        T::deserialize(MapAccessDeserializer::new(members)).map(NumberOr::Object)
    }
}

impl<'de, T: Deserialize<'de>> Deserialize<'de> for NumberOr<T> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(NumberOrVisitor(std::marker::PhantomData))
    }
}

struct TextOrVisitor<T>(std::marker::PhantomData<T>);

impl<'de, T: Deserialize<'de>> Visitor<'de> for TextOrVisitor<T> {
    type Value = TextOr<T>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a string or an object")
    }

    fn visit_str<E: Error>(self, value: &str) -> Result<Self::Value, E> {
        Ok(TextOr::Text(value.to_string()))
    }

    fn visit_map<A: MapAccess<'de>>(self, members: A) -> Result<Self::Value, A::Error> {
        T::deserialize(MapAccessDeserializer::new(members)).map(TextOr::Object)
    }
}

impl<'de, T: Deserialize<'de>> Deserialize<'de> for TextOr<T> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(TextOrVisitor(std::marker::PhantomData))
    }
}

macro_rules! one_of_schema {
    ($union:ident, $simple:literal) => {
        impl<T: JsonSchema> JsonSchema for $union<T> {
            fn inline_schema() -> bool {
                true
            }

            fn schema_name() -> Cow<'static, str> {
                format!(concat!(stringify!($union), "_{}"), T::schema_name()).into()
            }

            fn json_schema(generator: &mut SchemaGenerator) -> Schema {
                let object = generator.subschema_for::<T>();
                json_schema!({ "anyOf": [{ "type": $simple }, object] })
            }
        }
    };
}

one_of_schema!(NumberOr, "number");
one_of_schema!(TextOr, "string");
