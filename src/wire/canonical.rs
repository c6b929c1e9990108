//! The canonical form of a JSON document (RFC 8785) and the fingerprint that rests on it.
//!
//! Canonical: no white space; members sorted by the UTF-16 code units of their names (section
//! 3.2.3); numbers as ECMAScript prints the double (section 3.2.2.3); strings with the shortest
//! escapes (section 3.2.2.2).

use std::borrow::Cow;
use std::cmp::Ordering;
use std::fmt;

use serde::de::{Deserialize, Deserializer, Error, MapAccess, SeqAccess, Visitor};
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
    let digest = hash.finalize();
    let mut text = String::with_capacity(2 * digest.len());
    for byte in digest {
        for half in [byte >> 4, byte & 15] {
            text.push(char::from_digit(u32::from(half), 16).unwrap_or('0'));
        }
    }
    text
}

/// The canonical form; none where the body is no JSON or a number is beyond a double.
pub fn canonical(body: &[u8]) -> Option<String> {
    let node: Node<'_> = serde_json::from_slice(body).ok()?;
    let mut out = String::with_capacity(body.len());
    node.write(&mut out)?;
    Some(out)
}

enum Node<'a> {
    Null,
    Bool(bool),
    Number(f64),
    Text(Cow<'a, str>),
    Array(Vec<Node<'a>>),
    Object(Vec<(Cow<'a, str>, Node<'a>)>),
}

impl Node<'_> {
    fn write(mut self, out: &mut String) -> Option<()> {
        match &mut self {
            Node::Null => out.push_str("null"),
            Node::Bool(value) => out.push_str(if *value { "true" } else { "false" }),
            Node::Number(value) if value.is_finite() => {
                out.push_str(ryu_js::Buffer::new().format_finite(*value));
            }
            Node::Number(_) => return None,
            Node::Text(text) => write_text(text, out)?,
            Node::Array(elements) => {
                out.push('[');
                for (i, element) in elements.drain(..).enumerate() {
                    if i > 0 {
                        out.push(',');
                    }
                    element.write(out)?;
                }
                out.push(']');
            }
            Node::Object(members) => {
                members.sort_by(|a, b| by_utf16(&a.0, &b.0));
                out.push('{');
                for (i, (name, value)) in members.drain(..).enumerate() {
                    if i > 0 {
                        out.push(',');
                    }
                    write_text(&name, out)?;
                    out.push(':');
                    value.write(out)?;
                }
                out.push('}');
            }
        }
        Some(())
    }
}

/// The order of UTF-16 code units, which for ASCII is that of the bytes.
fn by_utf16(a: &str, b: &str) -> Ordering {
    if a.is_ascii() && b.is_ascii() { a.cmp(b) } else { a.encode_utf16().cmp(b.encode_utf16()) }
}

/// The JSON writer escapes as the canonical form wants it: `\b \t \n \f \r \" \\`, other control
/// characters as `\u00xx` in lower case, everything else as it is.
fn write_text(text: &str, out: &mut String) -> Option<()> {
    if text.bytes().all(|byte| byte >= b' ' && byte != b'"' && byte != b'\\') {
        out.push('"');
        out.push_str(text);
        out.push('"');
        return Some(());
    }
    out.push_str(&serde_json::to_string(text).ok()?);
    Some(())
}

impl<'de> Deserialize<'de> for Node<'de> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(NodeVisitor)
    }
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

struct NodeVisitor;

impl<'de> Visitor<'de> for NodeVisitor {
    type Value = Node<'de>;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a JSON value")
    }

    fn visit_unit<E: Error>(self) -> Result<Node<'de>, E> {
        Ok(Node::Null)
    }

    fn visit_bool<E: Error>(self, value: bool) -> Result<Node<'de>, E> {
        Ok(Node::Bool(value))
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<Node<'de>, E> {
        Ok(Node::Number(value))
    }

    fn visit_u64<E: Error>(self, value: u64) -> Result<Node<'de>, E> {
        Ok(Node::Number(value as f64))
    }

    fn visit_i64<E: Error>(self, value: i64) -> Result<Node<'de>, E> {
        Ok(Node::Number(value as f64))
    }

    fn visit_borrowed_str<E: Error>(self, text: &'de str) -> Result<Node<'de>, E> {
        Ok(Node::Text(Cow::Borrowed(text)))
    }

    fn visit_str<E: Error>(self, text: &str) -> Result<Node<'de>, E> {
        Ok(Node::Text(Cow::Owned(text.to_string())))
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<Node<'de>, A::Error> {
        let mut array = Vec::new();
        while let Some(element) = elements.next_element()? {
            array.push(element);
        }
        Ok(Node::Array(array))
    }

    fn visit_map<A: MapAccess<'de>>(self, mut members: A) -> Result<Node<'de>, A::Error> {
        let mut object = Vec::new();
        while let Some((Name(name), value)) = members.next_entry::<Name<'de>, Node<'de>>()? {
            object.push((name, value));
        }
        Ok(Node::Object(object))
    }
}
