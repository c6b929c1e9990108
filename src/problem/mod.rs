//! From a question to a hierarchy of conic levels: column layout, scaling, one file per kind of
//! task and limit, assembly.

pub mod question;
