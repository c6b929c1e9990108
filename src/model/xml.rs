//! XML below the URDF reader: bounds on hostile text, places in the text, attributes and numbers.

use super::error::{Fault, ModelError, Subject, shortened};
use crate::spatial::Vec3;
use roxmltree::{Document, Node, ParsingOptions};
use std::collections::BTreeMap;

/// Largest description (bytes).
pub const MAX_URDF_BYTES: usize = 4 << 20;
/// Most XML nodes: elements, texts, comments.
pub const MAX_NODES: usize = 200_000;
/// Deepest nesting of elements.
pub const MAX_DEPTH: usize = 64;
/// Most attributes on one element. The parser compares each with all others.
pub const MAX_ATTRIBUTES: usize = 64;
/// Most namespace declarations. The parser copies those in scope at each new one.
pub const MAX_NAMESPACES: usize = 64;
/// Largest length, mass, inertia and angle (SI): far beyond any robot, and its square is finite.
pub const MAX_MAGNITUDE: f64 = 1e9;

/// Bytes between two entries of the character index.
const BLOCK: usize = 1024;

/// Index of a text, to find line and column of a byte without walking the text: descriptions come
/// on one line of megabytes too.
pub(super) struct Lines<'a> {
    text: &'a str,
    /// Byte at which each line starts.
    starts: Vec<usize>,
    /// Characters before each block of bytes.
    characters: Vec<usize>,
}

/// Characters that start in these bytes of UTF-8: all bytes but continuation bytes.
fn count_characters(bytes: &[u8]) -> usize {
    bytes.iter().filter(|byte| **byte & 0xC0 != 0x80).count()
}

impl<'a> Lines<'a> {
    pub(super) fn new(text: &'a str) -> Self {
        let newlines = text.bytes().enumerate().filter(|(_, b)| *b == b'\n').map(|(i, _)| i + 1);
        let starts = std::iter::once(0).chain(newlines).collect();
        let (mut characters, mut total) = (vec![0], 0);
        for block in text.as_bytes().chunks(BLOCK) {
            total += count_characters(block);
            characters.push(total);
        }
        Lines { text, starts, characters }
    }

    /// Characters before this byte.
    fn characters_before(&self, byte: usize) -> usize {
        let block = byte / BLOCK;
        let rest = self.text.as_bytes().get(block * BLOCK..byte).map_or(0, count_characters);
        self.characters.get(block).copied().unwrap_or(0) + rest
    }

    /// Line and column, from 1, of the character at this byte.
    pub(super) fn at(&self, byte: usize) -> Subject {
        let line = self.starts.partition_point(|start| *start <= byte).max(1);
        let start = self.starts.get(line - 1).copied().unwrap_or(0);
        let before = self.characters_before(byte).saturating_sub(self.characters_before(start));
        Subject::Urdf { line, column: before + 1 }
    }
}

/// An error about the document as a whole.
fn document_error(fault: Fault, subject: Subject) -> ModelError {
    ModelError { fault, element: "robot description".to_string(), subject }
}

/// Parses after checking the bounds above; a document type definition is refused.
pub(super) fn parse<'a>(text: &'a str, lines: &Lines<'a>) -> Result<Document<'a>, ModelError> {
    check_shape(text).map_err(|(fault, byte)| document_error(fault, lines.at(byte)))?;
    let options = ParsingOptions {
        allow_dtd: false,
        nodes_limit: MAX_NODES as u32,
        ..ParsingOptions::default()
    };
    Document::parse_with_options(text, options).map_err(|error| {
        let place = error.pos();
        let subject = match error {
            roxmltree::Error::UnexpectedEndOfStream | roxmltree::Error::UnclosedRootNode => {
                lines.at(text.trim_end().len())
            }
            roxmltree::Error::DtdDetected => lines.at(text.find("<!DOCTYPE").unwrap_or(0)),
            _ => Subject::Urdf { line: place.row as usize, column: place.col as usize },
        };
        let fault = match error {
            roxmltree::Error::DtdDetected => Fault::DocumentType,
            roxmltree::Error::NodesLimitReached => {
                Fault::TooLarge { what: "XML nodes", limit: MAX_NODES }
            }
            other => Fault::Xml(shortened(&other.to_string())),
        };
        document_error(fault, subject)
    })
}

/// One pass over the bytes that bounds size, nesting, attributes and namespaces before the parser
/// sees them. Text it misjudges because it is not well-formed is refused by the parser anyway.
fn check_shape(text: &str) -> Result<(), (Fault, usize)> {
    let too_large = |what, limit, byte| Err((Fault::TooLarge { what, limit }, byte));
    if text.len() > MAX_URDF_BYTES {
        return too_large("bytes", MAX_URDF_BYTES, 0);
    }
    let bytes = text.as_bytes();
    let (mut depth, mut namespaces, mut at) = (0usize, 0usize, 0usize);
    while let Some(open) = text.get(at..).and_then(|rest| rest.find('<')).map(|i| at + i) {
        let rest = text.get(open..).unwrap_or("");
        let skip = |end: &str| rest.find(end).map_or(text.len(), |i| open + i + end.len());
        if rest.starts_with("<!--") {
            at = skip("-->");
        } else if rest.starts_with("<![CDATA[") {
            at = skip("]]>");
        } else if rest.starts_with("<?") {
            at = skip("?>");
        } else {
            let tag = scan_tag(bytes, open);
            namespaces += rest.get(..tag.end - open).map_or(0, |t| t.matches("xmlns").count());
            if tag.attributes > MAX_ATTRIBUTES {
                return too_large("attributes of one element", MAX_ATTRIBUTES, open);
            }
            if namespaces > MAX_NAMESPACES {
                return too_large("namespace declarations", MAX_NAMESPACES, open);
            }
            match (rest.starts_with("</"), tag.empty) {
                (true, _) => depth = depth.saturating_sub(1),
                (false, true) => {}
                (false, false) => depth += 1,
            }
            if depth > MAX_DEPTH {
                return too_large("levels of nesting", MAX_DEPTH, open);
            }
            at = tag.end;
        }
    }
    Ok(())
}

/// What the pre-scan learns of one tag.
struct Tag {
    /// Byte after its `>`.
    end: usize,
    /// Number of `=` outside quotes.
    attributes: usize,
    /// Ends with `/>`.
    empty: bool,
}

fn scan_tag(bytes: &[u8], open: usize) -> Tag {
    let (mut quote, mut attributes) = (None, 0);
    for (i, byte) in bytes.iter().enumerate().skip(open) {
        match (quote, *byte) {
            (Some(q), b) if q == b => quote = None,
            (Some(_), _) => {}
            (None, b'"' | b'\'') => quote = Some(*byte),
            (None, b'=') => attributes += 1,
            (None, b'>') => {
                let empty = i > open && bytes.get(i - 1) == Some(&b'/');
                return Tag { end: i + 1, attributes, empty };
            }
            _ => {}
        }
    }
    Tag { end: bytes.len(), attributes, empty: false }
}

/// The document being read: places, and a tally of what is passed over.
pub(super) struct Reader<'a> {
    pub(super) lines: Lines<'a>,
    /// How often each kind of element or attribute was ignored.
    pub(super) ignored: BTreeMap<String, usize>,
}

/// An element being read, with the name errors give it.
#[derive(Clone)]
pub(super) struct Element<'a, 'i> {
    pub(super) node: Node<'a, 'i>,
    /// For example `joint "left_knee"`.
    pub(super) label: String,
}

impl Reader<'_> {
    /// Place of an element in the text.
    pub(super) fn place(&self, node: Node<'_, '_>) -> Subject {
        self.lines.at(node.range().start)
    }

    /// An error at this node, in the name of the link or joint it belongs to.
    pub(super) fn error(&self, element: &Element<'_, '_>, node: Node<'_, '_>, fault: Fault) -> ModelError {
        ModelError { fault, element: element.label.clone(), subject: self.place(node) }
    }

    /// Sorts the child elements of `node` into the wanted ones, one slot a name, and tallies the rest.
    pub(super) fn children<'a, 'i, const N: usize>(
        &mut self,
        element: &Element<'a, 'i>,
        node: Node<'a, 'i>,
        wanted: [&'static str; N],
    ) -> Result<[Option<Node<'a, 'i>>; N], ModelError> {
        let mut found = [None; N];
        for child in node.children().filter(Node::is_element) {
            match wanted.iter().position(|name| is_named(child, name)) {
                Some(slot) => {
                    if found[slot].replace(child).is_some() {
                        return Err(self.error(element, child, Fault::RepeatedElement(wanted[slot])));
                    }
                }
                None => self.ignore(format!("<{}>", shortened(child.tag_name().name()))),
            }
        }
        Ok(found)
    }

    /// Tallies something that is passed over.
    pub(super) fn ignore(&mut self, what: String) {
        let full = self.ignored.len() >= MAX_IGNORED_KINDS && !self.ignored.contains_key(&what);
        let kind = if full { "elements and attributes of further kinds".to_string() } else { what };
        *self.ignored.entry(kind).or_insert(0) += 1;
    }

    /// Tallies attributes other than the known ones, so that a misspelled one does not go unseen.
    pub(super) fn known_attributes(&mut self, node: Node<'_, '_>, known: &[&str]) {
        for attribute in node.attributes().filter(|a| !known.contains(&a.name())) {
            let (name, tag) = (shortened(attribute.name()), node.tag_name().name());
            self.ignore(format!("attribute {name:?} of <{tag}>"));
        }
    }

    /// A required, non-empty text attribute.
    pub(super) fn text<'a>(
        &self,
        element: &Element<'a, '_>,
        node: Node<'a, '_>,
        attribute: &'static str,
    ) -> Result<&'a str, ModelError> {
        let Some(value) = node.attribute(attribute) else {
            let tag = node.tag_name().name().to_string();
            return Err(self.error(element, node, Fault::MissingAttribute { tag, attribute }));
        };
        if value.trim().is_empty() || value.len() > MAX_NAME_BYTES {
            let fault = bad(node, attribute, "a text of 1 to 256 bytes", value);
            return Err(self.error(element, node, fault));
        }
        Ok(value)
    }

    /// An optional list of exactly N finite numbers.
    pub(super) fn numbers<const N: usize>(
        &self,
        element: &Element<'_, '_>,
        node: Node<'_, '_>,
        attribute: &'static str,
    ) -> Result<Option<[f64; N]>, ModelError> {
        let Some(text) = node.attribute(attribute) else { return Ok(None) };
        let expected = if N == 1 { "one finite number" } else { "three finite numbers" };
        let wrong = || self.error(element, node, bad(node, attribute, expected, text));
        let mut values = [0.0; N];
        let mut words = text.split_ascii_whitespace();
        for value in &mut values {
            let parsed: f64 = words.next().and_then(|w| w.parse().ok()).ok_or_else(wrong)?;
            if !parsed.is_finite() {
                return Err(wrong());
            }
            // Adding zero turns -0 into 0, which must not tell two equal robots apart.
            *value = parsed + 0.0;
        }
        if words.next().is_some() { Err(wrong()) } else { Ok(Some(values)) }
    }

    /// A required finite number.
    pub(super) fn number(
        &self,
        element: &Element<'_, '_>,
        node: Node<'_, '_>,
        attribute: &'static str,
    ) -> Result<f64, ModelError> {
        match self.numbers::<1>(element, node, attribute)? {
            Some([value]) => Ok(value),
            None => {
                let tag = node.tag_name().name().to_string();
                Err(self.error(element, node, Fault::MissingAttribute { tag, attribute }))
            }
        }
    }

    /// An optional vector whose components stay below [`MAX_MAGNITUDE`].
    pub(super) fn vector(
        &self,
        element: &Element<'_, '_>,
        node: Node<'_, '_>,
        attribute: &'static str,
    ) -> Result<Option<Vec3>, ModelError> {
        let Some(values) = self.numbers::<3>(element, node, attribute)? else { return Ok(None) };
        if values.iter().any(|v| v.abs() > MAX_MAGNITUDE) {
            let got = node.attribute(attribute).unwrap_or("");
            let fault = bad(node, attribute, "three numbers of at most 1e9", got);
            return Err(self.error(element, node, fault));
        }
        Ok(Some(Vec3::from(values)))
    }
}

/// Most kinds of ignored things that are told apart.
const MAX_IGNORED_KINDS: usize = 64;

/// Longest name (bytes).
pub(super) const MAX_NAME_BYTES: usize = 256;

/// True for an element of this name in no namespace, or in the namespace of the outermost element.
pub(super) fn is_named(node: Node<'_, '_>, name: &str) -> bool {
    let tag = node.tag_name();
    tag.name() == name
        && (tag.namespace().is_none()
            || tag.namespace() == node.document().root_element().tag_name().namespace())
}

/// The fault of a value that cannot be used.
pub(super) fn bad(node: Node<'_, '_>, attribute: &str, expected: &'static str, got: &str) -> Fault {
    Fault::BadValue {
        what: format!("{attribute} of <{}>", shortened(node.tag_name().name())),
        expected,
        got: format!("{:?}", shortened(got)),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    // Derived: counting characters line by line, the plain way.
    #[test]
    fn places_agree_with_plain_counting() {
        let text = "r\u{e9}sum\u{e9} \u{1f9b6}\n".repeat(300) + &"\u{e9}<a/>".repeat(900);
        let lines = Lines::new(&text);
        for (byte, _) in text.char_indices() {
            let before = &text[..byte];
            let line = before.matches('\n').count() + 1;
            let column = before.rsplit('\n').next().unwrap_or("").chars().count() + 1;
            assert_eq!(lines.at(byte), Subject::Urdf { line, column });
        }
    }
}
