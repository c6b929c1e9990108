//! The cascade: level after level over what the levels before leave, then what is left free, then the tie-break.

use super::answer::*;
use super::check::check;
use super::dense::largest;
use super::engine::{Ended, EngineAnswer, Program, run, run_careful};
use super::faces::{ensure_interior, interior_program};
use super::free::free_directions;
use super::infeasible::{certify, certify_equality, project_dual};
use super::level::{Assembled, LevelData, LevelProblem, assemble, assemble_reduced, reduce};
use super::proximal::approach;
use super::refine::{CONFIRMED, Mode, Point, Refined, accept, classify, optimality, refine};
use super::system::{Contradiction, Kind, Part, Reduced, System, inside};
use crate::conic::Hierarchy;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

/// Rounds of taking rows into the active set and out of it, from the engine's point.
const ROUNDS: usize = 8;
/// The same without the engine: beyond a few, the engine is quicker.
const WARM_ROUNDS: usize = 5;
/// Optimality that lets a level do without the engine.
const WARM: f64 = 1e-12;
/// Optimality that the engine's own point needs to be taken for the answer.
const TRUSTED: f64 = 1e-7;
/// A multiplier of the engine's own below this part of the problem's size may be rounding.
const EXPOSING_UNREFINED: f64 = 1e-5;
/// Newton's own point is taken at this optimality even where the engine's figures are smaller.
const SHARP: f64 = 1e-14;
/// A scaled point farther from the origin than this has run off along a direction that nothing bounds.
const FAR: f64 = 1e4;
/// Weight of the pull that holds such a point, of the cost's.
const PULL: f64 = 1e-8;
/// Tolerance of the engine's second run, which it need not reach.
const CLOSEST: f64 = 1e-14;
/// What holds at the final point must hold this well (scaled, per unit of row length and value) for the answer to count as solved.
const HELD: f64 = 1e-8;
/// How often the first level is solved anew because its set had no interior.
const MAX_RESTARTS: usize = 4;

/// Why the cascade ended early.
pub(super) enum Stop {
    Cancelled,
    Infeasible(Option<InfeasibilityCertificate>),
    Failed(SolveError),
}

impl From<SolveError> for Stop {
    fn from(error: SolveError) -> Self {
        Stop::Failed(error)
    }
}

/// The state of the descent.
pub(super) struct Cascade<'a> {
    pub(super) hierarchy: &'a Hierarchy,
    pub(super) options: &'a Options,
    pub(super) cancel: Option<&'a Arc<AtomicBool>>,
    pub(super) system: System,
    /// Live blocks at `system.x`, where known.
    pub(super) sets: Option<Reduced>,
    pub(super) interior_known: bool,
    pub(super) hard_faces: Vec<FaceDecision>,
    pub(super) ill_posed: bool,
    pub(super) inaccurate: bool,
    pub(super) x_bound: f64,
}

/// A level at its optimum, in the coordinates of the system.
pub(super) struct Solved {
    pub(super) problem: LevelProblem,
    pub(super) point: Point,
    pub(super) optimality: Optimality,
    pub(super) refined: bool,
    /// Refined, or at least the engine's own full accuracy.
    pub(super) trusted: bool,
    pub(super) bound: f64,
    pub(super) cost_pivot: f64,
    /// A multiplier below this may be rounding: it exposes nothing, and the interior test decides instead.
    pub(super) noise: f64,
    pub(super) iterations: u32,
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
    let moved = outcome.is_ok() && cascade.moved(&answer.levels);
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
        Ok(()) if cascade.inaccurate || moved => Status::Inaccurate,
        Ok(()) if cascade.ill_posed => Status::IllPosed,
        Ok(()) => Status::Solved,
    };
    Ok(answer)
}

/// Coordinates and multipliers of an interior point.
type Near = (Vec<f64>, Vec<f64>);

/// Newton steps on the active set read off an interior point; where they do not settle, the proximal method.
fn sharpen(problem: &LevelProblem, near: (&[f64], &[f64]), engine: &Optimality, cancelled: &dyn Fn() -> bool) -> Refined {
    let (u, z) = near;
    let identified = classify(problem, u.to_vec(), z.to_vec());
    let plain = refine(problem, identified, ROUNDS);
    if plain.confirmed && plain.optimality.worst() <= engine.worst().max(SHARP) {
        return plain;
    }
    match approach(problem, u, z, cancelled) {
        Some(near) => accept(problem, near),
        None => plain,
    }
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

    /// Whether the final point breaks a row or has lost what a level reached: faces read off a point that refinement did not
    /// sharpen may be off by enough, over rows that nearly depend on each other, to carry it away.
    fn moved(&self, levels: &[LevelOutcome]) -> bool {
        let system = &self.system;
        let broken = system.blocks.iter().filter(|block| block.part != Part::Retired).any(|block| {
            let rows = block.first..block.first + block.len;
            let s: Vec<f64> = rows.clone().map(|i| system.rhs[i] - system.matrix.row_dot(i, &system.x)).collect();
            let length = rows.map(|i| system.row_length(i) + system.rhs[i].abs()).fold(1.0, f64::max);
            inside(block.kind, &s) < -HELD * length
        });
        let lost = self.hierarchy.levels.iter().zip(levels).any(|(level, outcome)| {
            let rows = &level.residuals;
            outcome.residual.iter().enumerate().any(|(i, reached)| {
                let length = rows.matrix.row(i).fold(1.0 + rows.rhs[i].abs(), |sum, (_, v)| sum + v.abs());
                (rows.matrix.row_dot(i, &system.x) - rows.rhs[i] - reached).abs() > HELD * length
            })
        });
        broken || lost
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

    /// Newton steps from the point of the level before, or from the shortest point that meets the equalities. The optimality
    /// conditions prove the optimum whether or not the set has an interior, so this needs no engine where few rows are active.
    fn without_engine(&self, problem: &LevelProblem) -> Option<Solved> {
        let unconstrained = problem.sets.blocks.is_empty();
        if !(unconstrained || self.options.warm) {
            return None;
        }
        let d = problem.sets.d;
        let start = Point {
            u: vec![0.0; d],
            z: vec![0.0; problem.sets.at.len()],
            modes: vec![Mode::Off; problem.sets.blocks.len()],
        };
        let refined = refine(problem, start, if unconstrained { 1 } else { WARM_ROUNDS });
        ((refined.confirmed && refined.optimality.worst() <= WARM) || unconstrained).then(|| Solved {
            problem: LevelProblem::default(),
            point: refined.point,
            optimality: refined.optimality,
            refined: refined.confirmed,
            trusted: refined.confirmed,
            bound: refined.bound,
            cost_pivot: refined.cost_pivot,
            noise: refined.noise,
            iterations: 0,
        })
    }

    /// The engine, then Newton steps on what it identified. `None` where it saw no feasible point though there is one: the
    /// system then stands at a better point to start from.
    fn with_engine(&mut self, data: &LevelData, mut problem: LevelProblem) -> Result<Option<Solved>, Stop> {
        let mut iterations = 0;
        let mut trusted = false;
        let (mut u, mut z) = (vec![0.0; problem.sets.d], vec![0.0; problem.sets.at.len()]);
        for pull in [0.0, PULL] {
            let assembled = self.state(data, &problem, pull);
            let answer = self.run(&assembled.program)?;
            iterations += answer.iterations;
            if answer.ended == Ended::Infeasible {
                if self.interior_known {
                    continue;
                }
                return self.infeasible(&problem, &assembled.first, &answer).map(|()| None);
            }
            (u, z) = self.read_off(&problem, &assembled.first, &answer);
            trusted = answer.ended == Ended::Solved;
            // Along directions that nothing bounds an interior point runs far off; a slight pull holds it.
            if largest(&u) <= FAR {
                break;
            }
        }
        let mut engine = optimality(&problem, &u, &z);
        let mut refined = sharpen(&problem, (&u, &z), &engine, &|| self.cancelled());
        if !refined.confirmed && trusted {
            // Where rows bind that nearly depend on each other, the active set only shows closer to the optimum. And what is
            // left of the cost may be far smaller than its rows: seen by its own size, the multipliers stand out from the slacks.
            let left = largest(&z);
            if left > 0.0 && left < problem.scale {
                problem.scale = left;
            }
            if let Some((near_u, near_z)) = self.closer(data, &problem, &mut iterations)? {
                let closer = optimality(&problem, &near_u, &near_z);
                let again = sharpen(&problem, (&near_u, &near_z), &closer, &|| self.cancelled());
                if again.confirmed {
                    refined = again;
                }
                if closer.worst() < engine.worst() {
                    (u, z, engine) = (near_u, near_z, closer);
                }
            }
        }
        if refined.confirmed {
            let Refined { point, optimality, bound, cost_pivot, noise, .. } = refined;
            return Ok(Some(Solved { problem, point, optimality, refined: true, trusted: true, bound, cost_pivot, noise, iterations }));
        }
        trusted &= engine.worst() <= TRUSTED;
        // Strong convexity in the weighted residuals: |M (u - u*)|^2 is at most the gap.
        let bound = (engine.worst() * problem.size * (1.0 + largest(&z) / problem.size)).sqrt();
        let noise = EXPOSING_UNREFINED * problem.size;
        let modes = vec![Mode::Off; problem.sets.blocks.len()];
        let point = Point { u, z, modes };
        Ok(Some(Solved { problem, point, optimality: engine, refined: false, trusted, bound, cost_pivot: 1.0, noise, iterations }))
    }

    /// The engine once more, as close as it gets, with its own iterative refinement: point and multipliers.
    fn closer(&self, data: &LevelData, problem: &LevelProblem, iterations: &mut u32) -> Result<Option<Near>, Stop> {
        let assembled = self.state(data, problem, 0.0);
        let answer = run_careful(&assembled.program, CLOSEST, self.options.engine_iterations, self.cancel)?;
        *iterations += answer.iterations;
        match answer.ended {
            Ended::Cancelled => return Err(Stop::Cancelled),
            Ended::Infeasible => return Ok(None),
            Ended::Solved | Ended::Inexact => {}
        }
        let (u, z) = self.read_off(problem, &assembled.first, &answer);
        Ok((largest(&u) <= FAR).then_some((u, z)))
    }

    /// The level as the engine gets it. The first is sparse; later ones have little freedom left and frozen rows that fill the matrix.
    fn state(&self, data: &LevelData, problem: &LevelProblem, pull: f64) -> Assembled {
        if self.interior_known { assemble_reduced(problem, pull) } else { assemble(&self.system, data, problem, pull) }
    }

    /// Point and multipliers from what the engine returned for [`Self::state`], multipliers in their dual cones.
    fn read_off(&self, problem: &LevelProblem, first: &[usize], answer: &EngineAnswer) -> Near {
        let u = if self.interior_known {
            answer.x[..problem.sets.d].to_vec()
        } else {
            self.system.space.reduce(&answer.x[..self.system.x.len()])
        };
        let mut z = vec![0.0; problem.sets.at.len()];
        for (block, &from) in problem.sets.blocks.iter().zip(first) {
            let part = &mut z[block.first..block.first + block.len];
            part.copy_from_slice(&answer.z[from..from + block.len]);
            part.iter_mut().for_each(|v| *v *= problem.scale);
            project_dual(block.kind, part);
        }
        (u, z)
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
        let mut program = interior_program(&sets, &sets.blocks, false);
        for pull in [0.0, PULL] {
            program.diagonal[..sets.d].fill(pull);
            let answer = self.run(&program)?;
            let mut z = vec![0.0; self.system.rhs.len()];
            for block in &sets.blocks {
                let at = self.system.blocks[block.block].first;
                z[at..at + block.len].copy_from_slice(&answer.z[block.first..block.first + block.len]);
            }
            let certificate = certify(&self.system, &self.hierarchy.hard, z);
            if certificate.is_some() {
                return Ok((certificate, None));
            }
            let mut u = answer.x;
            let t = u.pop().unwrap_or(f64::NEG_INFINITY);
            if answer.ended != Ended::Infeasible && t > -CONFIRMED.sqrt() && largest(&u) <= FAR {
                return Ok((None, Some(u)));
            }
        }
        Ok((None, None))
    }
}
