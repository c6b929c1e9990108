//! stub
use super::ExplainError;
use crate::problem::Assembly;
use crate::problem::question::Question;
use crate::solve::HierarchySolution;
/// Stub.
#[derive(Debug, Clone, PartialEq)]
pub struct Sensitivity {}
/// Stub.
pub struct Base<'a> {
    /// a
    pub assembly: &'a Assembly,
    /// s
    pub solution: &'a HierarchySolution,
}
/// Stub.
pub fn differentiate<E: From<ExplainError>>(_: &Question, _: &Base, _: &mut dyn FnMut(&Question) -> Result<Assembly, E>) -> Result<Sensitivity, E> {
    Ok(Sensitivity {})
}
