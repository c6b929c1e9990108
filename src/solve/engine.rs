//! The interior-point engine: the only file that names it.
//!
//! `minimise 1/2 x' diag(p) x + q'x subject to A x + s = b, s in K`. The data arrive scaled, so
//! the engine's own equilibration is off; the linear solver is pinned, so that the same input
//! gives the same bits.

use super::answer::SolveError;
use crate::conic::{Cone, SparseRows};
use clarabel::algebra::CscMatrix;
use clarabel::solver::{
    DefaultInfo, DefaultSettings, DefaultSettingsBuilder, DefaultSolver, IPSolver, SolverStatus, SupportedConeT,
};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

/// Regularisation of the engine's linear systems. It is not undone by the engine's own iterative
/// refinement on the first run, so it must stay well under the accuracy that the active set needs.
const REGULARISATION: f64 = 1e-10;

/// A conic program with a diagonal quadratic cost.
#[derive(Debug, Clone, Default)]
pub(super) struct Program {
    pub diagonal: Vec<f64>,
    pub linear: Vec<f64>,
    pub rows: SparseRows,
    pub rhs: Vec<f64>,
    pub cones: Vec<Cone>,
}

/// How the engine ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Ended {
    Solved,
    /// Stopped early or at reduced accuracy; the point is its best.
    Inexact,
    /// `z` is a candidate certificate that no point satisfies the rows.
    Infeasible,
    Cancelled,
}

/// What the engine returned.
#[derive(Debug, Clone)]
pub(super) struct EngineAnswer {
    pub ended: Ended,
    pub x: Vec<f64>,
    pub z: Vec<f64>,
    pub iterations: u32,
}

/// Runs the engine once with the settings found fastest; where that does not end in a solution or a
/// certificate, once more with its own iterative refinement.
pub(super) fn run(
    program: &Program,
    tolerance: f64,
    iterations: u32,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<EngineAnswer, SolveError> {
    let first = run_once(program, tolerance, iterations, false, cancel)?;
    if first.ended != Ended::Inexact {
        return Ok(first);
    }
    let mut second = run_once(program, tolerance, iterations, true, cancel)?;
    second.iterations += first.iterations;
    Ok(second)
}

/// Runs the engine with its own iterative refinement from the start: slower, and closer to the optimum.
pub(super) fn run_careful(
    program: &Program,
    tolerance: f64,
    iterations: u32,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<EngineAnswer, SolveError> {
    run_once(program, tolerance, iterations, true, cancel)
}

fn settings(tolerance: f64, iterations: u32, careful: bool) -> Result<DefaultSettings<f64>, SolveError> {
    DefaultSettingsBuilder::default()
        .verbose(false)
        .max_iter(iterations)
        .max_threads(1)
        .direct_solve_method("qdldl".to_string())
        .equilibrate_enable(false)
        .presolve_enable(false)
        .iterative_refinement_enable(careful)
        .static_regularization_constant(if careful { 1e-8 } else { REGULARISATION })
        .tol_gap_abs(tolerance)
        .tol_gap_rel(tolerance)
        .tol_feas(tolerance)
        .build()
        .map_err(|error| SolveError::Engine { detail: error.to_string() })
}

fn run_once(
    program: &Program,
    tolerance: f64,
    iterations: u32,
    careful: bool,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<EngineAnswer, SolveError> {
    let cost = diagonal_matrix(&program.diagonal);
    let constraint = compressed_columns(&program.rows);
    let cones: Vec<SupportedConeT<f64>> = program
        .cones
        .iter()
        .map(|cone| match *cone {
            Cone::Zero(n) => SupportedConeT::ZeroConeT(n),
            Cone::Nonnegative(n) => SupportedConeT::NonnegativeConeT(n),
            Cone::SecondOrder(n) => SupportedConeT::SecondOrderConeT(n),
        })
        .collect();
    let chosen = settings(tolerance, iterations, careful)?;
    let mut solver = DefaultSolver::new(&cost, &program.linear, &constraint, &program.rhs, &cones, chosen)
        .map_err(|error| SolveError::Engine { detail: error.to_string() })?;
    if let Some(flag) = cancel {
        let flag = Arc::clone(flag);
        solver.set_termination_callback(move |_: &DefaultInfo<f64>| flag.load(Ordering::Relaxed));
    }
    solver.solve();
    let ended = match solver.solution.status {
        SolverStatus::Solved => Ended::Solved,
        SolverStatus::PrimalInfeasible | SolverStatus::AlmostPrimalInfeasible => Ended::Infeasible,
        SolverStatus::CallbackTerminated => Ended::Cancelled,
        _ => Ended::Inexact,
    };
    let solution = &mut solver.solution;
    Ok(EngineAnswer {
        ended,
        x: std::mem::take(&mut solution.x),
        z: std::mem::take(&mut solution.z),
        iterations: solution.iterations,
    })
}

fn diagonal_matrix(diagonal: &[f64]) -> CscMatrix<f64> {
    let n = diagonal.len();
    let mut start = vec![0; n + 1];
    let (mut index, mut value) = (Vec::with_capacity(n), Vec::with_capacity(n));
    for (j, &entry) in diagonal.iter().enumerate() {
        if entry != 0.0 {
            index.push(j);
            value.push(entry);
        }
        start[j + 1] = index.len();
    }
    CscMatrix::new(n, n, start, index, value)
}

fn compressed_columns(rows: &SparseRows) -> CscMatrix<f64> {
    let n = rows.columns;
    let mut start = vec![0usize; n + 1];
    for &j in &rows.index {
        start[j + 1] += 1;
    }
    for j in 0..n {
        start[j + 1] += start[j];
    }
    let mut next = start.clone();
    let mut index = vec![0; rows.index.len()];
    let mut value = vec![0.0; rows.index.len()];
    for i in 0..rows.rows() {
        for (j, v) in rows.row(i) {
            index[next[j]] = i;
            value[next[j]] = v;
            next[j] += 1;
        }
    }
    CscMatrix::new(rows.rows(), n, start, index, value)
}
