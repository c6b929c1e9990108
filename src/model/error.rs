//! Why a description was refused: what is wrong, at which element, and where it stands.

use std::fmt;

/// Where the offending text or option stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Subject {
    /// In the URDF text.
    Urdf {
        /// Line, from 1.
        line: usize,
        /// Column in characters, from 1.
        column: usize,
    },
    /// An entry of `ModelOptions::soles`.
    Sole(usize),
    /// An entry of `ModelOptions::joints`.
    Joint(usize),
}

impl fmt::Display for Subject {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Subject::Urdf { line, column } => write!(f, "URDF line {line}, column {column}"),
            Subject::Sole(index) => write!(f, "sole option {index}"),
            Subject::Joint(index) => write!(f, "joint option {index}"),
        }
    }
}

/// A refused description.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("{subject}: {element}: {fault}")]
pub struct ModelError {
    /// What is wrong.
    pub fault: Fault,
    /// The offending element, for example `joint "left_knee"`.
    pub element: String,
    /// Where it stands.
    pub subject: Subject,
}

impl ModelError {
    /// A stable short word for the kind of fault.
    pub fn code(&self) -> &'static str {
        self.fault.code()
    }

    /// The member of the option at fault, in the names of [`SoleSpec`](super::SoleSpec) and
    /// [`JointSpec`](super::JointSpec), a dot before a member of a member. None if the option is at
    /// fault as a whole, or the URDF is.
    pub fn member(&self) -> Option<&str> {
        match (self.subject, &self.fault) {
            (Subject::Urdf { .. }, _) => None,
            (_, Fault::BadValue { what, .. }) => Some(what),
            (_, Fault::DuplicateName(_)) => Some("name"),
            (Subject::Sole(_), Fault::Unknown { .. }) => Some("link"),
            (Subject::Joint(_), Fault::Unknown { .. }) => Some("name"),
            _ => None,
        }
    }
}

/// What is wrong with a description. Texts hold what was expected and what came.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum Fault {
    /// Larger, deeper or more crowded than any robot description needs to be.
    #[error("too large: {what} may be at most {limit}")]
    TooLarge {
        /// What is counted.
        what: &'static str,
        /// The most there may be.
        limit: usize,
    },
    /// Not well-formed XML.
    #[error("not well-formed XML: {0}")]
    Xml(String),
    /// A document type definition: it can hide other text, so it is refused.
    #[error("a document type definition (<!DOCTYPE ...>) is not accepted")]
    DocumentType,
    /// The outermost element is not `robot`.
    #[error("expected the outermost element <robot>, got <{0}>")]
    NotARobot(String),
    /// A required attribute is missing.
    #[error("attribute {attribute:?} of <{tag}> is missing")]
    MissingAttribute {
        /// Element that lacks it.
        tag: String,
        /// Its name.
        attribute: &'static str,
    },
    /// A required child element is missing.
    #[error("element <{0}> is missing")]
    MissingElement(&'static str),
    /// A child element that may stand once stands twice.
    #[error("element <{0}> stands more than once")]
    RepeatedElement(&'static str),
    /// An attribute or option has a value that cannot be used.
    #[error("{what}: expected {expected}, got {got}")]
    BadValue {
        /// Attribute or option.
        what: String,
        /// What would have been good.
        expected: &'static str,
        /// What came.
        got: String,
    },
    /// An unknown joint type.
    #[error("unknown joint type {0:?}; known are revolute, continuous, prismatic, fixed and floating")]
    UnknownJointType(String),
    /// Two links, joints, soles or joint options share a name.
    #[error("the name is already taken by {0}")]
    DuplicateName(String),
    /// A name that nothing carries.
    #[error("there is no {what} named {name:?}")]
    Unknown {
        /// Kind of thing: link or joint.
        what: &'static str,
        /// The name.
        name: String,
    },
    /// No links.
    #[error("the robot has no links")]
    NoLinks,
    /// More than one link has no parent.
    #[error("the robot has more than one root: this link and link {0:?} both have no parent joint")]
    SeveralRoots(String),
    /// A kinematic loop.
    #[error("this joint closes a loop: {0}; lock one joint of the loop to cut it there")]
    Loop(String),
    /// A mimic joint that is not locked.
    #[error("a mimic joint (it follows joint {0:?}) must be locked: coupled joints are not modelled")]
    Mimic(String),
    /// A planar joint.
    #[error("planar joints are not modelled; lock it at 0 or use joints with one axis")]
    Planar,
    /// A floating joint other than one that joins a massless root.
    #[error("a floating joint may only be the single joint of a massless root link: {0}")]
    Floating(String),
    /// Mass properties no body can have.
    #[error("non-physical inertia: {0}")]
    Inertia(String),
    /// A moving joint, or the floating base, that nothing resists.
    #[error("singular inertia: {0}")]
    Singular(String),
    /// An option that needs a moving joint names one that does not move.
    #[error("the joint does not move: its type is {0}")]
    DoesNotMove(&'static str),
    /// Fixed base and no moving joint.
    #[error("nothing moves: the base is fixed and there is no moving joint")]
    NothingMoves,
}

impl Fault {
    /// A stable short word for the kind.
    pub fn code(&self) -> &'static str {
        match self {
            Fault::TooLarge { .. } => "model-too-large",
            Fault::Xml(_) => "urdf-not-well-formed",
            Fault::DocumentType => "urdf-document-type",
            Fault::NotARobot(_) => "urdf-not-a-robot",
            Fault::MissingAttribute { .. } => "urdf-missing-attribute",
            Fault::MissingElement(_) => "urdf-missing-element",
            Fault::RepeatedElement(_) => "urdf-repeated-element",
            Fault::BadValue { .. } => "model-bad-value",
            Fault::UnknownJointType(_) => "unknown-joint-type",
            Fault::DuplicateName(_) => "duplicate-name",
            Fault::Unknown { .. } => "unknown-name",
            Fault::NoLinks => "no-links",
            Fault::SeveralRoots(_) => "several-roots",
            Fault::Loop(_) => "kinematic-loop",
            Fault::Mimic(_) => "mimic-not-locked",
            Fault::Planar => "planar-joint",
            Fault::Floating(_) => "floating-joint",
            Fault::Inertia(_) => "non-physical-inertia",
            Fault::Singular(_) => "singular-inertia",
            Fault::DoesNotMove(_) => "joint-does-not-move",
            Fault::NothingMoves => "nothing-moves",
        }
    }
}

/// The longest piece of foreign text that an error repeats (characters).
const QUOTED_LENGTH: usize = 80;

/// Foreign text cut to a length fit for a message.
pub(super) fn shortened(text: &str) -> String {
    match text.char_indices().nth(QUOTED_LENGTH) {
        Some((end, _)) => format!("{}...", &text[..end]),
        None => text.to_string(),
    }
}
