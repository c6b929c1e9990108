//! The service: who may ask, how much at once, for how long, and what an error looks like.
//!
//! Handlers hold no formulas. A request's bytes pass the browser [`guard`], are read within a size
//! and a time, wait at the [`desk`] for one of as many permits as there are cores, and become a
//! document's bytes in [`documents`], which the command line calls as well.

pub mod background;
pub mod batch;
pub mod body;
pub mod desk;
pub mod documents;
pub mod feed;
pub mod guard;
pub mod handlers;
pub mod lines;
pub mod listen;
pub mod log;
pub mod models;
pub mod problem;
pub mod router;
pub mod settings;
pub mod stream;

pub use background::Running;
pub use documents::{Catalogue, Document, Errand, Work};
pub use lines::{LineDone, LineWork};
pub use listen::{Bound, bind, runtime};
pub use settings::Settings;
