//! Where a value stands in a request, and the collector of everything that is wrong with it.

use super::gaps::Gaps;
use super::refusal::{Fault, Refusal};
use crate::spatial::{Mat3, Vec3, rotation_from_quaternion};

/// The most faults one refusal lists.
pub(super) const MAX_FAULTS: usize = 50;
/// How far a quaternion's or a normal's length may be from 1; nearer ones are normalised.
const UNIT_TOLERANCE: f64 = 1e-6;
/// The longest piece of a request that a fault repeats (characters).
const QUOTED_LENGTH: usize = 80;

/// A place in the request. Written out only when something is wrong there.
#[derive(Debug, Clone, Copy)]
pub(super) struct At<'a> {
    parent: Option<&'a At<'a>>,
    step: Step<'a>,
}

#[derive(Debug, Clone, Copy)]
enum Step<'a> {
    Root,
    Name(&'a str),
    Index(usize),
}

impl<'a> At<'a> {
    /// The whole document.
    pub(super) const ROOT: At<'static> = At { parent: None, step: Step::Root };

    /// A member of the object that stands here.
    pub(super) fn name(&'a self, name: &'a str) -> At<'a> {
        At { parent: Some(self), step: Step::Name(name) }
    }

    /// An element of the array that stands here.
    pub(super) fn index(&'a self, index: usize) -> At<'a> {
        At { parent: Some(self), step: Step::Index(index) }
    }

    /// The JSON pointer.
    pub(super) fn pointer(&self) -> String {
        let mut text = self.parent.map(At::pointer).unwrap_or_default();
        match self.step {
            Step::Root => {}
            Step::Name(name) => push_token(&mut text, name),
            Step::Index(index) => push_token(&mut text, &index.to_string()),
        }
        text
    }
}

/// Appends one reference token, escaped as RFC 6901 section 3 says.
pub(super) fn push_token(pointer: &mut String, token: &str) {
    pointer.push('/');
    pointer.push_str(&token.replace('~', "~0").replace('/', "~1"));
}

/// Collects faults while a request is converted.
#[derive(Debug, Default)]
pub(super) struct Gate {
    faults: Vec<Fault>,
    gaps: Gaps,
    /// Things found wrong, kept among the faults or not.
    seen: usize,
    /// Code, title and detail of a refused robot.
    robot: Option<(&'static str, &'static str, String)>,
}

impl Gate {
    /// For a request of which parts were left out.
    pub(super) fn with(gaps: Gaps) -> Self {
        Gate { gaps, ..Gate::default() }
    }

    /// Notes that something is wrong here; unless a part that was left out may be why.
    pub(super) fn fault(&mut self, at: At<'_>, expected: impl Into<String>, got: impl Into<String>) {
        self.note(Fault { pointer: at.pointer(), expected: expected.into(), got: got.into(), line: None });
    }

    fn note(&mut self, fault: Fault) {
        self.seen += 1;
        let pointer = self.gaps.original(&fault.pointer);
        if self.faults.len() < MAX_FAULTS && !self.gaps.touch(&pointer) {
            self.faults.push(Fault { pointer, ..fault });
        }
    }

    /// Notes why a robot cannot be used.
    pub(super) fn robot(&mut self, fault: Fault, code: &'static str, title: &'static str, detail: String) {
        self.robot = Some((code, title, detail));
        self.note(fault);
    }

    /// Faults kept so far.
    pub(super) fn kept(&self) -> usize {
        self.faults.len()
    }

    /// Lets the faults kept since `before` point here: what is wrong comes from elsewhere, as `whence` says.
    pub(super) fn gather(&mut self, before: usize, at: At<'_>, whence: &str) {
        for fault in self.faults.iter_mut().skip(before) {
            fault.pointer = self.gaps.original(&at.pointer());
            fault.got = format!("{} {whence}", fault.got);
        }
    }

    /// True where parts of the request were left out.
    pub(super) fn partial(&self) -> bool {
        !self.gaps.is_empty()
    }

    /// True where this member, or something in it, was left out.
    pub(super) fn lacks(&self, at: At<'_>) -> bool {
        self.partial() && self.gaps.within(&self.gaps.original(&at.pointer()))
    }

    /// True where this list, or an element of it, was left out.
    pub(super) fn incomplete(&self, at: At<'_>) -> bool {
        self.partial() && self.gaps.shortened(&self.gaps.original(&at.pointer()))
    }

    /// Notes that a member is missing.
    pub(super) fn missing(&mut self, at: At<'_>, expected: impl Into<String>) {
        self.fault(at, expected, "nothing");
    }

    /// The value, noted as a fault unless it lies in the range.
    pub(super) fn within(&mut self, at: At<'_>, value: f64, least: f64, largest: f64, unit: &str) -> f64 {
        // Written so that NaN is refused as well.
        if !(least..=largest).contains(&value) {
            let space = if unit.is_empty() { "" } else { " " };
            let expected = format!("a number from {} to {}{space}{unit}", number(least), number(largest));
            self.fault(at, expected, number(value));
        }
        value
    }

    /// An array that is not too long.
    pub(super) fn at_most(&mut self, at: At<'_>, length: usize, most: usize, what: &str) -> bool {
        if length > most {
            self.fault(at, format!("at most {most} {what}"), format!("{length}"));
        }
        length <= most
    }

    /// Rotation of a quaternion `[x, y, z, w]` of unit length.
    pub(super) fn rotation(&mut self, at: At<'_>, q: &[f64; 4]) -> Mat3 {
        let norm = q.iter().map(|c| c * c).sum::<f64>().sqrt();
        if (norm - 1.0).abs() <= UNIT_TOLERANCE {
            return rotation_from_quaternion(&q.map(|c| c / norm));
        }
        self.fault(
            at,
            "a unit quaternion [x, y, z, w] (length 1 within 1e-6)",
            format!("length {norm}"),
        );
        Mat3::identity()
    }

    /// A direction of unit length.
    pub(super) fn direction(&mut self, at: At<'_>, v: &[f64; 3]) -> Vec3 {
        let v = Vec3::from(*v);
        let norm = v.norm();
        if (norm - 1.0).abs() <= UNIT_TOLERANCE {
            return v / norm;
        }
        self.fault(at, "a unit vector (length 1 within 1e-6)", format!("length {norm}"));
        Vec3::z()
    }

    /// True once no more faults are kept.
    pub(super) fn is_full(&self) -> bool {
        self.faults.len() >= MAX_FAULTS
    }

    /// True while nothing was wrong.
    pub(super) fn clean(&self) -> bool {
        self.seen == 0
    }

    /// How many things were wrong so far, said or not.
    pub(super) fn seen(&self) -> usize {
        self.seen
    }

    /// The refusal, if anything was wrong.
    pub(super) fn finish(self) -> Result<(), Refusal> {
        if self.clean() { Ok(()) } else { Err(self.refuse()) }
    }

    /// The refusal, with what was found so far.
    pub(super) fn refuse(self) -> Refusal {
        let refusal = Refusal::unusable(self.faults);
        match self.robot {
            Some((code, title, detail)) if refusal.faults.len() == 1 => {
                Refusal { code, title: title.to_string(), detail, ..refusal }
            }
            _ => refusal,
        }
    }
}

/// A number in few digits, with an exponent where it is far from 1.
pub(super) fn number(value: f64) -> String {
    let plain = value == 0.0 || (1e-4..1e7).contains(&value.abs()) || !value.is_finite();
    if plain { value.to_string() } else { format!("{value:e}") }
}

/// A foreign text in quotation marks, cut to a length fit for a message.
pub(super) fn quoted(text: &str) -> String {
    match text.char_indices().nth(QUOTED_LENGTH) {
        Some((end, _)) => format!("{:?}...", text.get(..end).unwrap_or_default()),
        None => format!("{text:?}"),
    }
}

/// Names as a readable list, the first few of them.
pub(super) fn listed<'a>(names: impl Iterator<Item = &'a str>) -> String {
    const SHOWN: usize = 12;
    let mut text = String::new();
    for (i, name) in names.enumerate() {
        if i == SHOWN {
            text.push_str(", ...");
            break;
        }
        if i > 0 {
            text.push_str(", ");
        }
        text.push_str(&quoted(name));
    }
    text
}
