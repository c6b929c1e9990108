//! The fast pass over a request: typed straight from the bytes, stricter than serde by itself.
//!
//! A derived struct would also accept a JSON array of its members in order, an enum an object with
//! one member, an optional member a null; numbers could be as large as a double can be. None of
//! this is meant by a request, so the deserializer here refuses all of it, at every depth.

use std::fmt;

use serde::de::value::StrDeserializer;
use serde::de::{
    DeserializeOwned, DeserializeSeed, Deserializer, Error, IntoDeserializer, MapAccess, SeqAccess,
    Unexpected, Visitor,
};
use serde::forward_to_deserialize_any;

/// The largest magnitude of a number in a request, in whatever unit. It keeps squares and
/// products of what a user sends far from overflow.
pub(super) const MAX_MAGNITUDE: f64 = 1e15;

/// Reads a whole document.
pub(super) fn read<T: DeserializeOwned>(body: &[u8]) -> Result<T, serde_json::Error> {
    // Once for the whole text, and no string in it has to be looked at again.
    let text = std::str::from_utf8(body).map_err(serde_json::Error::custom)?;
    let mut json = serde_json::Deserializer::from_str(text);
    let value = T::deserialize(Strict(&mut json))?;
    json.end()?;
    Ok(value)
}

struct Strict<D>(D);

impl<'de, D: Deserializer<'de>> Deserializer<'de> for Strict<D> {
    type Error = D::Error;

    fn deserialize_any<V: Visitor<'de>>(self, visitor: V) -> Result<V::Value, D::Error> {
        self.0.deserialize_any(Guard { visitor, accepts: Accepts::Anything })
    }

    fn deserialize_struct<V: Visitor<'de>>(
        self,
        _name: &'static str,
        _fields: &'static [&'static str],
        visitor: V,
    ) -> Result<V::Value, D::Error> {
        self.0.deserialize_any(Guard { visitor, accepts: Accepts::Object })
    }

    fn deserialize_enum<V: Visitor<'de>>(
        self,
        _name: &'static str,
        _variants: &'static [&'static str],
        visitor: V,
    ) -> Result<V::Value, D::Error> {
        self.0.deserialize_any(Guard { visitor, accepts: Accepts::Word })
    }

    fn deserialize_option<V: Visitor<'de>>(self, visitor: V) -> Result<V::Value, D::Error> {
        visitor.visit_some(self)
    }

    fn deserialize_newtype_struct<V: Visitor<'de>>(
        self,
        _name: &'static str,
        visitor: V,
    ) -> Result<V::Value, D::Error> {
        visitor.visit_newtype_struct(self)
    }

    forward_to_deserialize_any! {
        bool i8 i16 i32 i64 i128 u8 u16 u32 u64 u128 f32 f64 char str string bytes byte_buf unit
        unit_struct seq tuple tuple_struct map identifier ignored_any
    }
}

#[derive(PartialEq)]
enum Accepts {
    Anything,
    Object,
    Word,
}

struct Guard<V> {
    visitor: V,
    accepts: Accepts,
}

impl<V> Guard<V> {
    fn refuse<'de, E: Error>(&self, came: Unexpected<'_>) -> Result<(), E>
    where
        V: Visitor<'de>,
    {
        match self.accepts {
            Accepts::Anything => Ok(()),
            Accepts::Object => Err(E::invalid_type(came, &"an object")),
            Accepts::Word => Err(E::invalid_type(came, &"a string")),
        }
    }
}

impl<'de, V: Visitor<'de>> Visitor<'de> for Guard<V> {
    type Value = V::Value;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        self.visitor.expecting(f)
    }

    fn visit_bool<E: Error>(self, value: bool) -> Result<V::Value, E> {
        self.refuse(Unexpected::Bool(value))?;
        self.visitor.visit_bool(value)
    }

    fn visit_i64<E: Error>(self, value: i64) -> Result<V::Value, E> {
        self.refuse(Unexpected::Signed(value))?;
        magnitude(value as f64)?;
        self.visitor.visit_i64(value)
    }

    fn visit_u64<E: Error>(self, value: u64) -> Result<V::Value, E> {
        self.refuse(Unexpected::Unsigned(value))?;
        magnitude(value as f64)?;
        self.visitor.visit_u64(value)
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<V::Value, E> {
        self.refuse(Unexpected::Float(value))?;
        magnitude(value)?;
        self.visitor.visit_f64(value)
    }

    fn visit_str<E: Error>(self, value: &str) -> Result<V::Value, E> {
        if self.accepts == Accepts::Word {
            let word: StrDeserializer<'_, E> = value.into_deserializer();
            return self.visitor.visit_enum(word);
        }
        self.refuse(Unexpected::Str(value))?;
        self.visitor.visit_str(value)
    }

    fn visit_unit<E: Error>(self) -> Result<V::Value, E> {
        self.refuse(Unexpected::Unit)?;
        self.visitor.visit_unit()
    }

    fn visit_seq<A: SeqAccess<'de>>(self, elements: A) -> Result<V::Value, A::Error> {
        self.refuse(Unexpected::Seq)?;
        self.visitor.visit_seq(Inner(elements))
    }

    fn visit_map<A: MapAccess<'de>>(self, members: A) -> Result<V::Value, A::Error> {
        if self.accepts == Accepts::Word {
            self.refuse(Unexpected::Map)?;
        }
        self.visitor.visit_map(Inner(members))
    }
}

fn magnitude<E: Error>(value: f64) -> Result<(), E> {
    if value.abs() <= MAX_MAGNITUDE {
        return Ok(());
    }
    Err(E::invalid_value(Unexpected::Float(value), &"a number of magnitude 1e15 at most"))
}

/// Elements or members, each read strictly.
struct Inner<A>(A);

struct Seed<S>(S);

impl<'de, S: DeserializeSeed<'de>> DeserializeSeed<'de> for Seed<S> {
    type Value = S::Value;

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<S::Value, D::Error> {
        self.0.deserialize(Strict(deserializer))
    }
}

impl<'de, A: SeqAccess<'de>> SeqAccess<'de> for Inner<A> {
    type Error = A::Error;

    fn next_element_seed<S: DeserializeSeed<'de>>(
        &mut self,
        seed: S,
    ) -> Result<Option<S::Value>, A::Error> {
        self.0.next_element_seed(Seed(seed))
    }

    fn size_hint(&self) -> Option<usize> {
        self.0.size_hint()
    }
}

impl<'de, A: MapAccess<'de>> MapAccess<'de> for Inner<A> {
    type Error = A::Error;

    fn next_key_seed<S: DeserializeSeed<'de>>(&mut self, seed: S) -> Result<Option<S::Value>, A::Error> {
        self.0.next_key_seed(seed)
    }

    fn next_value_seed<S: DeserializeSeed<'de>>(&mut self, seed: S) -> Result<S::Value, A::Error> {
        self.0.next_value_seed(Seed(seed))
    }
}
