//! The cascade: level after level over what the levels before leave, then what is left free, then the tie-break.

use super::answer::*;
use super::check::check;
use super::dense::largest;
use super::engine::{Ended, EngineAnswer, Program, run};
use super::faces::{ensure_interior, exposed, interior_program, restrict};
use super::free::free_directions;
use super::infeasible::{certify, certify_equality, project_dual};
use super::level::{LevelData, LevelProblem, assemble, assemble_reduced, reduce};
use super::refine::{CONFIRMED, Mode, Point, Refined, classify, optimality, refine};
use super::system::{Contradiction, DEPENDENT, DEPENDENT_FACE, Kind, Reduced, System};
use crate::conic::Hierarchy;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

/// A multiplier below this part of the problem's size exposes nothing; the interior test decides instead.
const EXPOSING: f64 = 1e-10;
/// The same where the point is the engine's own.
const EXPOSING_UNREFINED: f64 = 1e-5;
/// A multiplier this close to the boundary of the dual cone (relative) lies on it.
const ON_BOUNDARY: f64 = 1e-9;
/// The same where the point is the engine's own.
const ON_BOUNDARY_UNREFINED: f64 = 1e-5;
/// Optimality that lets a level do without the engine.
const WARM: f64 = 1e-12;
/// Optimality that the engine's own point needs to be taken for the answer.
const TRUSTED: f64 = 1e-7;
/// A scaled point farther from the origin than this has run off along a direction that nothing bounds.
const FAR: f64 = 1e4;
/// Weight of the pull that holds such a point, of the cost's.
const PULL: f64 = 1e-8;
/// How often the first level is solved anew because its set had no interior.
const MAX_RESTARTS: usize = 4;

/// Why the cascade ended early.
enum Stop {
    Cancelled,
    Infeasible(Option<InfeasibilityCertificate>),
    Failed(SolveError),
}

impl From<SolveError> for Stop {
    fn from(error: SolveError) -> Self {
        Stop::Failed(error)
    }
}

struct Cascade<'a> {
    hierarchy: &'a Hierarchy,
    options: &'a Options,
    cancel: Option<&'a Arc<AtomicBool>>,
    system: System,
    /// Live blocks at `system.x`, where known.
    sets: Option<Reduced>,
    interior_known: bool,
    hard_faces: Vec<FaceDecision>,
    ill_posed: bool,
    inaccurate: bool,
    x_bound: f64,
}

/// A level at its optimum, in the coordinates of the system.
struct Solved {
    problem: LevelProblem,
    point: Point,
    optimality: Optimality,
    refined: bool,
    /// Refined, or at least the engine's own full accuracy.
    trusted: bool,
    bound: f64,
    cost_pivot: f64,
    iterations: u32,
}

/// Solves a hierarchy: lexicographically, each level over everything that leaves the levels before it
/// as good as they can be.
///
/// All numbers scaled near 1. `cancel`, once true, ends the solve with [`Status::Cancelled`] at the next engine
/// iteration or level. Errors: dimensions that do not fit, numbers that are not finite, weights that are
/// not positive. Infeasible hard rows are a status, not an error.
pub fn solve(
    hierarchy: &Hierarchy,
    options: &Options,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<HierarchySolution, SolveError> {
    check(hierarchy)?;
    let (system, hard_rank, consistent) = System::new(hierarchy.columns.len(), &hierarchy.hard);
    let mut answer = HierarchySolution {
        status: Status::Solved,
        x: system.x.clone(),
        levels: Vec::new(),
        tie_break: None,
        hard_rank,
        hard_faces: Vec::new(),
        remaining: LevelSystem::default(),
        free: FreeDirections::default(),
        infeasibility: None,
        bound: f64::INFINITY,
    };
    let mut cascade = Cascade {
        hierarchy,
        options,
        cancel,
        system,
        sets: None,
        interior_known: false,
        hard_faces: Vec::new(),
        ill_posed: false,
        inaccurate: false,
        x_bound: 0.0,
    };
    let outcome = match consistent {
        Ok(()) => cascade.descend(&mut answer),
        Err(contradiction) => Err(cascade.contradicted(contradiction)),
    };
    answer.x = cascade.system.x;
    answer.hard_faces = cascade.hard_faces;
    answer.bound = cascade.x_bound;
    answer.status = match outcome {
        Err(Stop::Failed(error)) => return Err(error),
        Err(Stop::Cancelled) => Status::Cancelled,
        Err(Stop::Infeasible(certificate)) if certificate.is_some() => {
            answer.infeasibility = certificate;
            Status::Infeasible
        }
        Err(Stop::Infeasible(_)) => Status::Inaccurate,
        Ok(()) if cascade.inaccurate => Status::Inaccurate,
        Ok(()) if cascade.ill_posed => Status::IllPosed,
        Ok(()) => Status::Solved,
    };
    Ok(answer)
}

impl Cascade<'_> {
    fn descend(&mut self, answer: &mut HierarchySolution) -> Result<(), Stop> {
        for (index, level) in self.hierarchy.levels.iter().enumerate() {
            let data = LevelData::of(level);
            let solved = self.solve_level(&data)?;
            let mut outcome = self.report(&data, &solved);
            self.freeze(index, &data, &solved, &mut outcome)?;
            answer.levels.push(outcome);
        }
        let data = LevelData::tie_break(&self.hierarchy.tie_break);
        if !self.interior_known {
            // No level before: the hard set's own faces must be known before its freedom is measured.
            self.solve_level(&data)?;
        }
        answer.free = free_directions(&self.system, &self.hierarchy.auxiliary);
        answer.remaining = self.system.snapshot().0;
        let solved = self.solve_level(&data)?;
        answer.tie_break = Some(self.report(&data, &solved));
        self.move_to(&solved);
        Ok(())
    }

    fn cancelled(&self) -> bool {
        self.cancel.is_some_and(|flag| flag.load(Ordering::Relaxed))
    }

    fn contradicted(&self, contradiction: Contradiction) -> Stop {
        let block = self.system.blocks[contradiction.block];
        let hard = &self.hierarchy.hard;
        if block.kind == Kind::Equality {
            return Stop::Infeasible(certify_equality(&self.system, hard, block.first));
        }
        // A slack s fixed outside its cone: minus its projection's error is a separating multiplier.
        let mut z = vec![0.0; self.system.rhs.len()];
        for row in block.first..block.first + block.len {
            z[row] = self.system.matrix.row_dot(row, &self.system.x) - self.system.rhs[row];
        }
        project_dual(block.kind, &mut z[block.first..block.first + block.len]);
        Stop::Infeasible(certify(&self.system, hard, z))
    }

    /// Solves one level over the system as it stands.
    fn solve_level(&mut self, data: &LevelData) -> Result<Solved, Stop> {
        for _ in 0..MAX_RESTARTS {
            if self.cancelled() {
                return Err(Stop::Cancelled);
            }
            let sets = match self.sets.take() {
                Some(sets) => sets,
                None => {
                    let (sets, outcome) = self.system.reduce();
                    outcome.map_err(|contradiction| self.contradicted(contradiction))?;
                    sets
                }
            };
            let problem = reduce(&self.system, sets, data);
            let solved = match self.without_engine(&problem) {
                Some(point) => Solved { problem, ..point },
                None => match self.with_engine(data, problem)? {
                    Some(solved) => solved,
                    None => continue,
                },
            };
            if self.interior_known {
                self.inaccurate |= !solved.trusted;
                return Ok(solved);
            }
            let before = self.system.x.clone();
            self.move_to(&solved);
            let interior = ensure_interior(&mut self.system, self.options, self.cancel)?;
            if interior.cancelled {
                return Err(Stop::Cancelled);
            }
            if let Some(contradiction) = interior.contradiction {
                return Err(self.contradicted(contradiction));
            }
            if interior.negative {
                return Err(Stop::Infeasible(self.phase_one()?.0));
            }
            self.ill_posed |= interior.ill_posed;
            self.interior_known = true;
            if interior.faces.is_empty() {
                self.inaccurate |= !solved.trusted;
                self.system.x = before;
                return Ok(solved);
            }
            self.hard_faces.extend(interior.faces);
            self.sets = Some(interior.sets);
        }
        self.inaccurate = true;
        Err(Stop::Infeasible(None))
    }

    /// Newton steps from the point of the level before, or from the shortest point where nothing is unequal.
    fn without_engine(&self, problem: &LevelProblem) -> Option<Solved> {
        let unconstrained = problem.sets.blocks.is_empty();
        if !unconstrained && !(self.options.warm && self.interior_known) {
            return None;
        }
        let d = problem.sets.d;
        let start = Point {
            u: vec![0.0; d],
            z: vec![0.0; problem.sets.at.len()],
            modes: vec![Mode::Off; problem.sets.blocks.len()],
        };
        let refined = refine(problem, start);
        ((refined.confirmed && refined.optimality.worst() <= WARM) || unconstrained).then(|| Solved {
            problem: LevelProblem::default(),
            point: refined.point,
            optimality: refined.optimality,
            refined: refined.confirmed,
            trusted: refined.confirmed,
            bound: refined.bound,
            cost_pivot: refined.cost_pivot,
            iterations: 0,
        })
    }

    /// The engine, then Newton steps on what it identified. `None` where it saw no feasible point though there is one: the
    /// system then stands at a better point to start from.
    fn with_engine(&mut self, data: &LevelData, problem: LevelProblem) -> Result<Option<Solved>, Stop> {
        let mut iterations = 0;
        let mut trusted = false;
        let (mut u, mut z) = (vec![0.0; problem.sets.d], vec![0.0; problem.sets.at.len()]);
        for pull in [0.0, PULL] {
            // The first level is sparse; later ones have little freedom left and frozen rows that fill the matrix.
            let reduced = self.interior_known;
            let assembled =
                if reduced { assemble_reduced(&problem, pull) } else { assemble(&self.system, data, &problem, pull) };
            let answer = self.run(&assembled.program)?;
            iterations += answer.iterations;
            if answer.ended == Ended::Infeasible {
                if self.interior_known {
                    break;
                }
                return self.infeasible(&problem, &assembled.first, &answer).map(|()| None);
            }
            u = if reduced {
                answer.x[..problem.sets.d].to_vec()
            } else {
                self.system.space.reduce(&answer.x[..self.system.x.len()])
            };
            for (block, &from) in problem.sets.blocks.iter().zip(&assembled.first) {
                let part = &mut z[block.first..block.first + block.len];
                part.copy_from_slice(&answer.z[from..from + block.len]);
                part.iter_mut().for_each(|v| *v *= problem.size);
                project_dual(block.kind, part);
            }
            trusted = answer.ended == Ended::Solved;
            // Along directions that nothing bounds an interior point runs far off; a slight pull holds it.
            if largest(&u) <= FAR {
                break;
            }
        }
        let engine = optimality(&problem, &u, &z);
        let refined = refine(&problem, classify(&problem, u.clone(), z.clone()));
        if refined.confirmed && refined.optimality.worst() <= engine.worst() {
            let Refined { point, optimality, bound, cost_pivot, .. } = refined;
            return Ok(Some(Solved { problem, point, optimality, refined: true, trusted: true, bound, cost_pivot, iterations }));
        }
        trusted &= engine.worst() <= TRUSTED;
        // Strong convexity in the weighted residuals: |M (u - u*)|^2 is at most the gap.
        let bound = (engine.worst() * problem.size * (1.0 + largest(&z) / problem.size)).sqrt();
        let modes = vec![Mode::Off; problem.sets.blocks.len()];
        let point = Point { u, z, modes };
        Ok(Some(Solved { problem, point, optimality: engine, refined: false, trusted, bound, cost_pivot: 1.0, iterations }))
    }

    fn run(&self, program: &Program) -> Result<EngineAnswer, Stop> {
        let answer = run(program, self.options.engine_tolerance, self.options.engine_iterations, self.cancel)?;
        if answer.ended == Ended::Cancelled { Err(Stop::Cancelled) } else { Ok(answer) }
    }

    /// The engine says infeasible. Its multipliers are one certificate of many; the interior test's is the one with
    /// the most negative value for its size, so it is preferred. Where neither proves anything and the interior test has
    /// found a point, the system is moved there.
    fn infeasible(&mut self, problem: &LevelProblem, first: &[usize], answer: &EngineAnswer) -> Result<(), Stop> {
        let (certificate, point) = self.phase_one()?;
        if certificate.is_some() {
            return Err(Stop::Infeasible(certificate));
        }
        let mut z = vec![0.0; self.system.rhs.len()];
        for (block, &from) in problem.sets.blocks.iter().zip(first).filter(|(b, _)| b.soft.is_none()) {
            let at = self.system.blocks[block.block].first;
            z[at..at + block.len].copy_from_slice(&answer.z[from..from + block.len]);
        }
        let certificate = certify(&self.system, &self.hierarchy.hard, z);
        match point {
            Some(u) if certificate.is_none() => {
                self.system.space.add_expanded(&u, &mut self.system.x);
                self.sets = None;
                Ok(())
            }
            _ => Err(Stop::Infeasible(certificate)),
        }
    }

    /// `maximise t, s - t e in K` over the equalities: the dual of a negative optimum is a certificate; otherwise its
    /// point satisfies the rows.
    fn phase_one(&self) -> Result<(Option<InfeasibilityCertificate>, Option<Vec<f64>>), Stop> {
        let (sets, _) = self.system.clone().reduce();
        let answer = self.run(&interior_program(&sets, &sets.blocks, false))?;
        let mut z = vec![0.0; self.system.rhs.len()];
        for block in &sets.blocks {
            let at = self.system.blocks[block.block].first;
            z[at..at + block.len].copy_from_slice(&answer.z[block.first..block.first + block.len]);
        }
        let certificate = certify(&self.system, &self.hierarchy.hard, z);
        let mut u = answer.x;
        let t = u.pop().unwrap_or(f64::NEG_INFINITY);
        let usable = answer.ended != Ended::Infeasible && t > -CONFIRMED.sqrt() && largest(&u) <= FAR;
        Ok((certificate, usable.then_some(u)))
    }

    fn move_to(&mut self, solved: &Solved) {
        self.system.space.add_expanded(&solved.point.u, &mut self.system.x);
        self.system.return_to_equalities();
        self.sets = None;
    }

    /// What the answer says about a level, before it is frozen.
    fn report(&mut self, data: &LevelData, solved: &Solved) -> LevelOutcome {
        let system = &self.system;
        let mut x = system.x.clone();
        system.space.add_expanded(&solved.point.u, &mut x);
        let residuals = data.residuals;
        let residual: Vec<f64> = (0..residuals.rhs.len()).map(|i| residuals.matrix.row_dot(i, &x) - residuals.rhs[i]).collect();
        let mut gradient = vec![0.0; x.len()];
        let pull: Vec<f64> = residual.iter().zip(&residuals.weight).map(|(r, w)| 2.0 * w * r).collect();
        residuals.matrix.add_transpose_times(&pull, &mut gradient);
        let mut cost: f64 = residual.iter().zip(&residuals.weight).map(|(r, w)| w * r * r).sum();
        let mut by_row = vec![0.0; system.rhs.len()];
        let soft_rows = data.soft.map_or(0, |(rows, _)| rows.rhs.len());
        let (mut soft_slack, mut soft_multipliers) = (Vec::new(), vec![0.0; soft_rows]);
        for block in &solved.problem.sets.blocks {
            let z = &solved.point.z[block.first..block.first + block.len];
            if let (Some(weight), Some((soft, _))) = (block.soft, data.soft) {
                let first = solved.problem.soft_first[block.block];
                soft_multipliers[first..first + block.len].copy_from_slice(z);
                let t = z[0] / (2.0 * weight);
                cost += weight * t * t;
                soft_slack.push(t);
                for (k, row) in (first..first + block.len).enumerate() {
                    soft.matrix.row(row).for_each(|(j, v)| gradient[j] += v * z[k]);
                }
            } else {
                let first = system.blocks[block.block].first;
                by_row[first..first + block.len].copy_from_slice(z);
                for (k, row) in (first..first + block.len).enumerate() {
                    system.matrix.row(row).for_each(|(j, v)| gradient[j] += v * z[k]);
                }
            }
        }
        for (&row, y) in system.pivots.iter().zip(system.space.multipliers(&gradient)) {
            by_row[row] = -y;
        }
        self.x_bound += solved.bound / solved.cost_pivot.max(f64::MIN_POSITIVE);
        let (shown, origin) = system.snapshot();
        LevelOutcome {
            priority: data.priority,
            x,
            system: shown,
            multipliers: origin.iter().map(|&row| by_row[row]).collect(),
            soft_slack,
            soft_multipliers,
            cost: cost + 0.0,
            residual,
            rank: Vec::new(),
            faces: Vec::new(),
            refined: solved.refined,
            bound: solved.bound,
            optimality: solved.optimality,
            iterations: solved.iterations,
        }
    }

    /// Fixes what a level decided: its residuals, its slacks, the faces its multipliers expose.
    fn freeze(&mut self, index: usize, data: &LevelData, solved: &Solved, outcome: &mut LevelOutcome) -> Result<(), Stop> {
        self.move_to(solved);
        let mut rows = Vec::new();
        for row in 0..data.residuals.rhs.len() {
            let entries: Vec<(usize, f64)> = data.residuals.matrix.row(row).collect();
            let value = data.residuals.matrix.row_dot(row, &self.system.x);
            rows.push((entries, value, RowSource::Frozen { level: index, row }));
        }
        outcome.rank.push(self.fix_independent(rows, "residuals of the level"));
        let faces = self.expose(index, data, solved);
        let fixed: Vec<usize> = faces.iter().flat_map(|(block, face)| restrict(&mut self.system, *block, &face.kind)).collect();
        if !fixed.is_empty() {
            outcome.rank.push(self.system.fix(&fixed, DEPENDENT_FACE, "faces of the level"));
        }
        outcome.faces.extend(faces.into_iter().map(|(_, face)| face));
        self.system.return_to_equalities();
        let interior = ensure_interior(&mut self.system, self.options, self.cancel)?;
        if interior.cancelled {
            return Err(Stop::Cancelled);
        }
        self.ill_posed |= interior.ill_posed;
        self.inaccurate |= interior.negative;
        outcome.faces.extend(interior.faces);
        outcome.rank.extend(interior.rank);
        self.sets = Some(interior.sets);
        Ok(())
    }

    /// Appends the independent ones of some equality rows.
    fn fix_independent(&mut self, rows: Vec<(Vec<(usize, f64)>, f64, RowSource)>, what: &'static str) -> RankDecision {
        let entries: Vec<_> = rows.iter().map(|(row, _, _)| row.iter().copied()).collect();
        let (kept, decision) = self.system.space.append(&entries, DEPENDENT, what);
        for index in kept {
            let (row, value, source) = &rows[index];
            self.system.push_row(row.iter().copied(), *value, *source);
            self.system.close_block(1, Kind::Equality);
            self.system.pivots.push(self.system.rhs.len() - 1);
        }
        decision
    }

    /// Appends the soft limits relaxed by their slacks, and lists the faces the level's multipliers expose.
    fn expose(&mut self, index: usize, data: &LevelData, solved: &Solved) -> Vec<(usize, FaceDecision)> {
        let (tolerance, boundary) = if solved.refined {
            (EXPOSING.max(1e3 * solved.optimality.worst()) * solved.problem.size, ON_BOUNDARY)
        } else {
            (EXPOSING_UNREFINED * solved.problem.size, ON_BOUNDARY_UNREFINED)
        };
        let mut faces = Vec::new();
        for block in &solved.problem.sets.blocks {
            let z = &solved.point.z[block.first..block.first + block.len];
            let at = match (block.soft, data.soft) {
                (Some(weight), Some((soft, _))) => {
                    let first = solved.problem.soft_first[block.block];
                    for (k, row) in (first..first + block.len).enumerate() {
                        let relaxed = soft.rhs[row] + if k == 0 { z[0] / (2.0 * weight) } else { 0.0 };
                        self.system.push_row(soft.matrix.row(row), relaxed, RowSource::Soft { level: index, row });
                    }
                    self.system.close_block(block.len, block.kind)
                }
                _ => block.block,
            };
            if let Some(kind) = exposed(block.kind, z, tolerance, boundary) {
                let source = self.system.source[self.system.blocks[at].first];
                faces.push((at, FaceDecision { source, kind, exposed: Exposed::ByMultiplier, multiplier: z.to_vec() }));
            }
        }
        faces
    }
}
