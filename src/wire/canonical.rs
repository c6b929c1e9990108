//! The canonical form of a JSON document (RFC 8785) and the fingerprint that rests on it.
//!
//! Canonical: no white space; members sorted by the UTF-16 code units of their names (section
//! 3.2.3); numbers as ECMAScript prints the double (section 3.2.2.3); strings with the shortest
//! escapes (section 3.2.2.2).

use std::borrow::Cow;
use std::cmp::Ordering;
use std::fmt;
use std::ops::Range;

use serde::de::{Deserialize, DeserializeSeed, Deserializer, Error, MapAccess, SeqAccess, Visitor};
use sha2::{Digest, Sha256};

/// SHA-256 (hexadecimal) of the canonical request and the version of this crate. A body that is no
/// JSON is taken as it stands.
pub fn fingerprint(body: &[u8]) -> String {
    let mut hash = Sha256::new();
    hash.update(env!("CARGO_PKG_VERSION").as_bytes());
    hash.update([0]);
    match canonical(body) {
        Some(text) => hash.update(text.as_bytes()),
        None => hash.update(body),
    }
    hexadecimal(&hash.finalize())
}

/// Two digits a byte.
pub(super) fn hexadecimal(bytes: &[u8]) -> String {
    let mut text = String::with_capacity(2 * bytes.len());
    for byte in bytes {
        for half in [byte >> 4, byte & 15] {
            text.push(char::from_digit(u32::from(half), 16).unwrap_or('0'));
        }
    }
    text
}

/// The canonical form; none where the body is no JSON or a number is beyond a double.
///
/// Written while it is read, without a tree between: only where the members of an object do not stand in order is their text
/// moved.
pub fn canonical(body: &[u8]) -> Option<String> {
    let text = std::str::from_utf8(body).ok()?;
    let mut out = Out { text: String::with_capacity(body.len()), ..Out::default() };
    let mut json = serde_json::Deserializer::from_str(text);
    (&mut out).deserialize(&mut json).ok()?;
    json.end().ok()?;
    Some(out.text)
}

/// The canonical text so far.
#[derive(Default)]
struct Out<'de> {
    text: String,
    /// Members of the objects that are open, the innermost object's last.
    members: Vec<Member<'de>>,
    /// Where the members of an object are put in order.
    sorted: String,
    /// Where strings are written that need escapes.
    escaped: Vec<u8>,
}

/// A member: its name, and where name and value stand in the text.
struct Member<'de> {
    name: Cow<'de, str>,
    place: Range<usize>,
}

impl<'de> Out<'de> {
    fn number<E: Error>(&mut self, value: f64) -> Result<(), E> {
        if !value.is_finite() {
            return Err(E::custom("a number beyond a double"));
        }
        self.text.push_str(ryu_js::Buffer::new().format_finite(value));
        Ok(())
    }

    /// The JSON writer escapes as the canonical form wants it: `\b \t \n \f \r \" \\`, other control
    /// characters as `\u00xx` in lower case, everything else as it is.
    fn string<E: Error>(&mut self, text: &str) -> Result<(), E> {
        if text.bytes().all(|byte| byte >= b' ' && byte != b'"' && byte != b'\\') {
            self.text.push('"');
            self.text.push_str(text);
            self.text.push('"');
            return Ok(());
        }
        self.escaped.clear();
        serde_json::to_writer(&mut self.escaped, text).map_err(E::custom)?;
        self.text.push_str(std::str::from_utf8(&self.escaped).map_err(E::custom)?);
        Ok(())
    }

    /// Puts the members from `first` on, which end the text, in order. Of two of one name the earlier stays first.
    fn order(&mut self, first: usize) {
        let Some(members) = self.members.get_mut(first..) else { return };
        let start = members.first().map_or(self.text.len(), |member| member.place.start);
        if !members.is_sorted_by(|a, b| by_utf16(&a.name, &b.name).is_le()) {
            members.sort_by(|a, b| by_utf16(&a.name, &b.name));
            self.sorted.clear();
            for (i, member) in members.iter().enumerate() {
                if i > 0 {
                    self.sorted.push(',');
                }
                self.sorted.push_str(self.text.get(member.place.clone()).unwrap_or_default());
            }
            self.text.truncate(start);
            self.text.push_str(&self.sorted);
        }
        self.members.truncate(first);
    }
}

impl<'de> DeserializeSeed<'de> for &mut Out<'de> {
    type Value = ();

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<(), D::Error> {
        deserializer.deserialize_any(self)
    }
}

impl<'de> Visitor<'de> for &mut Out<'de> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a JSON value")
    }

    fn visit_unit<E: Error>(self) -> Result<(), E> {
        self.text.push_str("null");
        Ok(())
    }

    fn visit_bool<E: Error>(self, value: bool) -> Result<(), E> {
        self.text.push_str(if value { "true" } else { "false" });
        Ok(())
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<(), E> {
        self.number(value)
    }

    fn visit_u64<E: Error>(self, value: u64) -> Result<(), E> {
        self.number(value as f64)
    }

    fn visit_i64<E: Error>(self, value: i64) -> Result<(), E> {
        self.number(value as f64)
    }

    fn visit_str<E: Error>(self, text: &str) -> Result<(), E> {
        self.string(text)
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<(), A::Error> {
        self.text.push('[');
        let start = self.text.len();
        loop {
            let before = self.text.len();
            if before > start {
                self.text.push(',');
            }
            if elements.next_element_seed(&mut *self)?.is_none() {
                self.text.truncate(before);
                break;
            }
        }
        self.text.push(']');
        Ok(())
    }

    fn visit_map<A: MapAccess<'de>>(self, mut members: A) -> Result<(), A::Error> {
        self.text.push('{');
        let first = self.members.len();
        while let Some(Name(name)) = members.next_key()? {
            if self.members.len() > first {
                self.text.push(',');
            }
            let start = self.text.len();
            self.string(&name)?;
            self.text.push(':');
            members.next_value_seed(&mut *self)?;
            let place = start..self.text.len();
            self.members.push(Member { name, place });
        }
        self.order(first);
        self.text.push('}');
        Ok(())
    }
}

/// The order of UTF-16 code units, which for ASCII is that of the bytes.
fn by_utf16(a: &str, b: &str) -> Ordering {
    if a.is_ascii() && b.is_ascii() { a.cmp(b) } else { a.encode_utf16().cmp(b.encode_utf16()) }
}

/// A name, borrowed from the body where it holds no escapes.
struct Name<'a>(Cow<'a, str>);

impl<'de> Deserialize<'de> for Name<'de> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_str(NameVisitor)
    }
}

struct NameVisitor;

impl<'de> Visitor<'de> for NameVisitor {
    type Value = Name<'de>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a string")
    }

    fn visit_borrowed_str<E: Error>(self, text: &'de str) -> Result<Name<'de>, E> {
        Ok(Name(Cow::Borrowed(text)))
    }

    fn visit_str<E: Error>(self, text: &str) -> Result<Name<'de>, E> {
        Ok(Name(Cow::Owned(text.to_string())))
    }
}
