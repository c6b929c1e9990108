//! The user's own rigid-body terms against ours: how far apart, where, and which convention explains it.
//!
//! Every convention of a documented list ([`assumption`]) says what our terms would look like to somebody who works by it.
//! Where the user's terms do not agree as they stand, each convention is tried alone, then all pairs; those that bring the error to
//! rounding explain it. What no state like this one could tell apart is listed as unseen.

pub mod assumption;
mod order;
pub mod table;
mod terms;

use nalgebra::{DMatrix, DVector, Vector6};

pub use assumption::Assumption;
pub use table::Table;

use crate::problem::layout::velocity_names;
use crate::problem::question::DynamicsQuestion;
use terms::Scenario;

/// Explanations reported at most.
const MOST_EXPLANATIONS: usize = 20;
/// A convention counts as unseen where it moves nothing by this share of the tolerance.
const UNSEEN: f64 = 0.1;

/// What the user computed, in the user's own conventions. Everything is optional; sizes fit the model by construction.
#[derive(Debug, Clone, Default)]
pub struct Given {
    /// Mass matrix (n x n).
    pub mass_matrix: Option<DMatrix<f64>>,
    /// Coriolis, centrifugal and gravity terms (n).
    pub bias: Option<DVector<f64>>,
    /// Momentum (kg m/s; kg m^2/s).
    pub momentum: Option<Vector6<f64>>,
    /// Terms of single frames.
    pub frames: Vec<GivenFrame>,
}

/// What the user computed for one frame.
#[derive(Debug, Clone)]
pub struct GivenFrame {
    /// Index in the report's frames: the model's soles, then the frames of the question.
    pub index: usize,
    /// Jacobian (6 x n).
    pub jacobian: Option<DMatrix<f64>>,
    /// `J_dot nu`.
    pub bias_acceleration: Option<Vector6<f64>>,
}

/// Conventions that together bring the user's terms and ours together, or as near as any do.
#[derive(Debug, Clone, PartialEq)]
pub struct Explanation {
    /// One or two conventions.
    pub assumptions: Vec<Assumption>,
    /// Largest relative error that is left.
    pub left: f64,
}

/// How it ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verdict {
    /// The terms agree as they stand.
    Agrees,
    /// They agree under a convention or a pair of them.
    Explained,
    /// They do not.
    Unexplained,
}

/// The comparison.
#[derive(Debug, Clone)]
pub struct Comparison {
    /// How it ended.
    pub verdict: Verdict,
    /// Every quantity that was given beside ours, as it stands.
    pub tables: Vec<Table>,
    /// The same under the first explanation or, without one, under the nearest conventions.
    pub after: Vec<Table>,
    /// Largest relative error of each generalised velocity's rows and columns, as it stands: name, error.
    pub velocities: Vec<(String, f64)>,
    /// What explains the difference, all of the same number of conventions.
    pub explanations: Vec<Explanation>,
    /// Where nothing explains it: what comes nearest, if it comes nearer at all.
    pub nearest: Option<Explanation>,
    /// Conventions that make no difference here: neither for them nor against them is anything shown.
    pub unseen: Vec<Assumption>,
}

/// Compares `given` with our terms of `question`; `tolerance` is the relative error that counts as rounding.
pub fn compare(question: &DynamicsQuestion, given: &Given, tolerance: f64) -> Comparison {
    let base = Scenario::new(question);
    let ours = base.terms();
    let tables = table::tables(question, given, &ours);
    let error = table::largest(&tables);
    let (mut unseen, mut seen) = (Vec::new(), Vec::new());
    for assumption in assumption::all(question) {
        let terms = base.with(&assumption).terms();
        if terms::difference(question, given, &ours, &terms) <= UNSEEN * tolerance {
            unseen.push(assumption);
        } else {
            seen.push(assumption);
        }
    }
    let mut search = Search { question, given, tolerance, found: Vec::new(), nearest: None };
    if error > tolerance {
        search.singles(&base, &seen);
        if search.found.is_empty() {
            search.pairs(&base, &seen);
        }
    }
    search.found.truncate(MOST_EXPLANATIONS);
    let verdict = match (error <= tolerance, search.found.is_empty()) {
        (true, _) => Verdict::Agrees,
        (false, false) => Verdict::Explained,
        (false, true) => Verdict::Unexplained,
    };
    let nearest = search.nearest.filter(|nearest| verdict == Verdict::Unexplained && nearest.left < error);
    let best = search.found.first().or(nearest.as_ref());
    let after = best.map_or_else(Vec::new, |best| {
        let scenario = best.assumptions.iter().fold(base.clone(), |scenario, assumption| scenario.with(assumption));
        table::tables(question, given, &scenario.terms())
    });
    let names = velocity_names(&question.model);
    let velocities = names.iter().map(|name| (name.clone(), table::of_velocity(&tables, name))).collect();
    Comparison { verdict, tables, after, velocities, explanations: search.found, nearest, unseen }
}

struct Search<'a> {
    question: &'a DynamicsQuestion,
    given: &'a Given,
    tolerance: f64,
    found: Vec<Explanation>,
    nearest: Option<Explanation>,
}

impl Search<'_> {
    /// Each convention alone, then the joint order that the numbers themselves suggest.
    fn singles(&mut self, base: &Scenario, seen: &[Assumption]) {
        for assumption in seen {
            self.try_out(base, vec![assumption.clone()]);
        }
        self.try_suggested(base, &[]);
    }

    fn pairs(&mut self, base: &Scenario, seen: &[Assumption]) {
        for (i, one) in seen.iter().enumerate() {
            for other in &seen[i + 1..] {
                if one.group() != other.group() {
                    self.try_out(base, vec![one.clone(), other.clone()]);
                }
            }
            if !one.orders_joints() {
                self.try_suggested(base, std::slice::from_ref(one));
            }
        }
    }

    fn try_suggested(&mut self, base: &Scenario, others: &[Assumption]) {
        let scenario = others.iter().fold(base.clone(), |scenario, assumption| scenario.with(assumption));
        if let Some(order) = order::suggested(self.question, self.given, &scenario.terms()) {
            let mut assumptions = others.to_vec();
            assumptions.push(Assumption::JointOrder { name: "as the numbers suggest", order });
            self.try_out(base, assumptions);
        }
    }

    fn try_out(&mut self, base: &Scenario, assumptions: Vec<Assumption>) {
        let scenario = assumptions.iter().fold(base.clone(), |scenario, assumption| scenario.with(assumption));
        let left = table::largest(&table::tables(self.question, self.given, &scenario.terms()));
        let explanation = Explanation { assumptions, left };
        if left <= self.tolerance {
            let same = |known: &Explanation| known.assumptions.iter().zip(&explanation.assumptions).all(|(a, b)| a.same(b));
            if !self.found.iter().any(same) {
                self.found.push(explanation);
            }
        } else if self.nearest.as_ref().is_none_or(|nearest| left < nearest.left) {
            self.nearest = Some(explanation);
        }
    }
}
