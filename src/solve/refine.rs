//! Newton's method on the active set of one level, in reduced coordinates.
//!
//! With the active set known the level is `minimise f(u)` subject to equations:
//! - an active nonnegative row, or each row of a second-order block at its apex: `s_i = 0`;
//! - an active second-order block off its apex: `g(u) = |s_bar| - s_0 = 0`, multiplier mu, so that
//!   `z = mu (1, -s_bar/|s_bar|)` and the Lagrangian has the curvature `mu G_bar'(I - w w')G_bar/|s_bar|`,
//!   `w = s_bar/|s_bar|`;
//! - a violated soft row or block costs `v t^2` with `t = -s`, or `t = g(u)`.
//!
//! One Newton step is the least-squares problem `minimise |M du + r|^2 + |C du|^2, B du = c` (M the cost rows,
//! C a root of the curvature, B the equations). Where it leaves directions open, the shortest step is taken.
//!
//! Where the optimum is not unique, or rows bind whose multipliers are lost beside the rest, the steps do not settle; `proximal`
//! then carries on.

use super::answer::Optimality;
use super::dense::{axpy, dot, largest, norm};
use super::level::LevelProblem;
use super::proximal::Approached;
use super::rank::{Factor, least_squares, reference_lengths};
use super::system::{Kind, ReducedBlock, inside};

/// Newton steps per round.
const MAX_STEPS: usize = 12;
/// An equation counts as dependent below this relative length.
const DEPENDENT_EQUATION: f64 = 1e-9;
/// A cost row counts as dependent below this relative length.
const DEPENDENT_COST: f64 = 1e-9;
/// Slack below minus this takes a row into the active set.
const VIOLATED: f64 = 1e-11;
/// Multiplier below minus this part of the problem's size takes a row out.
const NEGATIVE: f64 = 1e-14;
/// Nothing is gained below this.
const ROUNDING: f64 = 4e-16;
/// A second-order block this close to its apex has no usable direction.
const APEX: f64 = 1e-9;
/// Optimality that counts as confirmed.
pub(super) const CONFIRMED: f64 = 1e-10;

/// A multiplier this close to the boundary of the dual cone (relative) lies on it.
pub(super) const ON_BOUNDARY: f64 = 1e-9;
/// A multiplier below this part of the largest exposes nothing; the interior test decides instead.
const EXPOSING: f64 = 1e-10;
/// Slacks longer than this show their direction plainly.
const PLAIN: f64 = 1e-6;
/// Residual of the proximal method, in its own units, that counts as settled.
const SETTLED: f64 = 1e-10;

/// How a block takes part.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Mode {
    /// Inside its cone.
    Off,
    /// Every row an equation (hard), or the apex of a soft block.
    Flat,
    /// On the smooth boundary of a second-order cone.
    Smooth,
}

/// A point with multipliers for every row of the reduced blocks.
#[derive(Debug, Clone)]
pub(super) struct Point {
    pub u: Vec<f64>,
    pub z: Vec<f64>,
    pub modes: Vec<Mode>,
}

/// What refinement came to.
#[derive(Debug, Clone)]
pub(super) struct Refined {
    pub point: Point,
    pub optimality: Optimality,
    /// Estimated error of the weighted residuals.
    pub bound: f64,
    /// Smallest pivot of the weighted residuals over the directions the active set leaves.
    pub cost_pivot: f64,
    /// Whether the active set settled and the optimality conditions hold.
    pub confirmed: bool,
    /// A multiplier below this may be rounding.
    pub noise: f64,
}

/// The equations and cost rows at one iterate.
struct Linear {
    /// B by rows, and c.
    equations: Vec<f64>,
    target: Vec<f64>,
    /// Reference lengths of the equations.
    lengths: Vec<f64>,
    /// First equation of each block (blocks without: the next one's).
    first: Vec<usize>,
    /// Soft cost rows and values.
    soft: Vec<f64>,
    soft_at: Vec<f64>,
    soft_length: Vec<f64>,
    /// C by rows.
    curvature: Vec<f64>,
    curvature_length: Vec<f64>,
}

/// Reads the active set off an interior point: whichever of slack and multiplier is the larger.
pub(super) fn classify(problem: &LevelProblem, u: Vec<f64>, z: Vec<f64>) -> Point {
    let slack = problem.sets.slack(&u);
    let modes = problem.sets.blocks.iter().map(|block| {
        let range = block.first..block.first + block.len;
        let multiplier = &z[range.clone()];
        let head = block.soft.map_or(0.0, |weight| multiplier[0] / (2.0 * weight));
        let size = problem.scale;
        let s0 = slack[range.start] + head;
        let s_bar = norm(&slack[range.start + 1..range.end]);
        let (z0, z_bar) = (multiplier[0] / size, norm(&multiplier[1..]) / size);
        match block.kind {
            Kind::SecondOrder if s0 - s_bar > z0 + z_bar => Mode::Off,
            Kind::SecondOrder if z0 - z_bar > s0 + s_bar => Mode::Flat,
            Kind::SecondOrder => Mode::Smooth,
            _ if z0 > s0 => Mode::Flat,
            _ => Mode::Off,
        }
    });
    let modes = modes.collect();
    Point { u, z, modes }
}

/// How well the optimality conditions hold at a point with the multipliers it carries.
pub(super) fn optimality(problem: &LevelProblem, u: &[f64], z: &[f64]) -> Optimality {
    let mut gradient = cost_gradient(problem, u);
    let slack = problem.sets.slack(u);
    let size = problem.size.max(largest(&gradient)).max(largest(z));
    let mut found = Optimality::default();
    for block in &problem.sets.blocks {
        let range = block.first..block.first + block.len;
        let mut s = slack[range.clone()].to_vec();
        let multiplier = &z[range.clone()];
        if let Some(weight) = block.soft {
            s[0] += multiplier[0] / (2.0 * weight);
        }
        found.violation = found.violation.max(-inside(block.kind, &s));
        found.violation = found.violation.max(-inside(block.kind, multiplier) / size);
        found.complementarity = found.complementarity.max(dot(&s, multiplier).abs() / size);
        for (k, i) in range.enumerate() {
            axpy(multiplier[k], problem.sets.row(i), &mut gradient);
        }
    }
    found.stationarity = largest(&gradient) / size;
    found
}

fn cost_gradient(problem: &LevelProblem, u: &[f64]) -> Vec<f64> {
    let mut gradient = vec![0.0; problem.sets.d];
    for (i, at) in problem.residual_at.iter().enumerate() {
        let row = problem.residual_row(i);
        axpy(at + dot(row, u), row, &mut gradient);
    }
    gradient
}

/// Refines a point in at most so many rounds of changing the active set; `confirmed` tells whether the result may be used.
pub(super) fn refine(problem: &LevelProblem, mut point: Point, rounds: usize) -> Refined {
    for _ in 0..rounds {
        let Some((held, pivots)) = newton(problem, &mut point) else { break };
        match revise(problem, &mut point) {
            Revision::Settled => {
                let optimality = optimality(problem, &point.u, &point.z);
                let bound = held.stationarity.max(ROUNDING) * problem.size / pivots.cost
                    + problem.size.sqrt() * held.violation.max(ROUNDING) / pivots.equation;
                let confirmed = optimality.worst() <= CONFIRMED;
                let rounding = 1e1 * optimality.worst().max(ROUNDING) * problem.size / pivots.equation;
                let noise = rounding.max(EXPOSING * largest(&point.z));
                return Refined { point, optimality, bound, cost_pivot: pivots.cost, confirmed, noise };
            }
            Revision::Changed => {}
            Revision::Lost => break,
        }
    }
    let optimality = optimality(problem, &point.u, &point.z);
    Refined { point, optimality, bound: f64::INFINITY, cost_pivot: 1.0, confirmed: false, noise: f64::INFINITY }
}

/// A point that the proximal method has brought to the optimum, with the active set that its multipliers show.
pub(super) fn accept(problem: &LevelProblem, near: Approached) -> Refined {
    let Approached { u, mut z, residual, bound } = near;
    let slack = problem.sets.slack(&u);
    let modes = problem.sets.blocks.iter().map(|block| {
        let range = block.first..block.first + block.len;
        let (s, z) = (&slack[range.clone()], &mut z[range]);
        let length = norm(&z[1..]);
        match block.kind {
            _ if z[0] <= 0.0 => Mode::Off,
            Kind::SecondOrder if length >= z[0] * (1.0 - ON_BOUNDARY) => {
                // The slack shows the ray better than a multiplier that may be tiny.
                let radius = norm(&s[1..]);
                if block.soft.is_none() && radius > PLAIN {
                    for k in 1..s.len() {
                        z[k] = -length * s[k] / radius;
                    }
                }
                z[0] = length;
                Mode::Smooth
            }
            _ => Mode::Flat,
        }
    });
    let modes = modes.collect();
    let optimality = optimality(problem, &u, &z);
    let point = Point { u, z, modes };
    let cost_pivot = linearise(problem, &point).map_or(1.0, |linear| {
        let factor = factor_equations(problem.sets.d, &linear);
        step(problem, &point, &linear, &factor).cost_pivot
    });
    let confirmed = residual <= SETTLED && optimality.worst() <= CONFIRMED;
    // The method's projections leave exact zeros where nothing binds, and its residual is in units of its largest multipliers.
    let noise = EXPOSING.max(1e3 * residual) * largest(&point.z);
    Refined { point, optimality, bound, cost_pivot, confirmed, noise }
}

/// Smallest pivots that the last step divided by.
struct Pivots {
    cost: f64,
    equation: f64,
}

/// Newton steps with the active set held; leaves the best iterate in `point`. `None` where a block has lost its direction.
fn newton(problem: &LevelProblem, point: &mut Point) -> Option<(Optimality, Pivots)> {
    let curved = point.modes.contains(&Mode::Smooth);
    let mut best: Option<(f64, Optimality, Point)> = None;
    let mut pivots = Pivots { cost: 1.0, equation: 1.0 };
    let mut cached: Option<Factor> = None;
    for count in 0..=MAX_STEPS {
        let Some(linear) = linearise(problem, point) else { break };
        let factor = match cached.take() {
            Some(factor) if !curved => factor,
            _ => factor_equations(problem.sets.d, &linear),
        };
        update_multipliers(problem, point, &linear, &factor);
        let found = held_optimality(problem, point, &linear);
        let worst = found.worst();
        let previous = best.as_ref().map_or(f64::INFINITY, |b| b.0);
        if worst < previous {
            best = Some((worst, found, point.clone()));
        }
        if count > 0 && (worst <= ROUNDING || worst > 0.5 * previous) {
            break;
        }
        let step = step(problem, point, &linear, &factor);
        pivots = Pivots { cost: step.cost_pivot, equation: factor.decision.smallest_kept };
        axpy(1.0, &step.du, &mut point.u);
        cached = Some(factor);
    }
    let (_, found, at) = best?;
    *point = at;
    Some((found, pivots))
}

/// Optimality as far as the held active set is concerned: other blocks may still be violated.
fn held_optimality(problem: &LevelProblem, point: &Point, linear: &Linear) -> Optimality {
    let mut gradient = cost_gradient(problem, &point.u);
    let size = problem.size.max(largest(&gradient)).max(largest(&point.z));
    for (block, mode) in problem.sets.blocks.iter().zip(&point.modes) {
        if *mode != Mode::Off {
            for i in block.first..block.first + block.len {
                axpy(point.z[i], problem.sets.row(i), &mut gradient);
            }
        }
    }
    Optimality { stationarity: largest(&gradient) / size, violation: largest(&linear.target), complementarity: 0.0 }
}

fn linearise(problem: &LevelProblem, point: &Point) -> Option<Linear> {
    let sets = &problem.sets;
    let slack = sets.slack(&point.u);
    let mut linear = Linear {
        equations: Vec::new(),
        target: Vec::new(),
        lengths: Vec::new(),
        first: Vec::with_capacity(sets.blocks.len()),
        soft: Vec::new(),
        soft_at: Vec::new(),
        soft_length: Vec::new(),
        curvature: Vec::new(),
        curvature_length: Vec::new(),
    };
    for (block, mode) in sets.blocks.iter().zip(&point.modes) {
        linear.first.push(linear.target.len());
        match (mode, block.soft) {
            (Mode::Off, _) => {}
            (Mode::Flat, soft) => flat(problem, block, soft, &slack, &mut linear),
            (Mode::Smooth, soft) => smooth(problem, block, soft, &slack, point, &mut linear)?,
        }
    }
    Some(linear)
}

fn flat(problem: &LevelProblem, block: &ReducedBlock, soft: Option<f64>, slack: &[f64], linear: &mut Linear) {
    let mut begin = block.first;
    if let Some(weight) = soft {
        // Only the head of a soft block costs; its tail must vanish at the apex.
        let root = (2.0 * weight).sqrt();
        linear.soft.extend(problem.sets.row(begin).iter().map(|v| root * v));
        linear.soft_at.push(-root * slack[begin]);
        linear.soft_length.push(root * problem.sets.length[begin]);
        begin += 1;
    }
    for i in begin..block.first + block.len {
        let row = problem.sets.row(i);
        linear.equations.extend_from_slice(row);
        linear.target.push(slack[i]);
        linear.lengths.push(problem.sets.length[i]);
    }
}

fn smooth(
    problem: &LevelProblem,
    block: &ReducedBlock,
    soft: Option<f64>,
    slack: &[f64],
    point: &Point,
    linear: &mut Linear,
) -> Option<()> {
    let sets = &problem.sets;
    let s = &slack[block.first..block.first + block.len];
    let radius = norm(&s[1..]);
    if radius <= APEX {
        return None;
    }
    let value = radius - s[0];
    let mut gradient = sets.row(block.first).to_vec();
    let longest = largest(&sets.length[block.first..block.first + block.len]);
    for k in 1..block.len {
        let row = sets.row(block.first + k);
        axpy(-s[k] / radius, row, &mut gradient);
    }
    let multiplier = match soft {
        Some(weight) => {
            let root = (2.0 * weight).sqrt();
            linear.soft.extend(gradient.iter().map(|v| root * v));
            linear.soft_at.push(root * value);
            linear.soft_length.push(root * longest);
            2.0 * weight * value
        }
        None => {
            linear.equations.extend_from_slice(&gradient);
            linear.target.push(-value);
            linear.lengths.push(longest);
            point.z[block.first]
        }
    };
    let root = (multiplier.max(0.0) / radius).sqrt();
    if root > 0.0 {
        // Rows of (I - w w') G_bar.
        let mut along = vec![0.0; sets.d];
        for k in 1..block.len {
            axpy(s[k] / radius, sets.row(block.first + k), &mut along);
        }
        for k in 1..block.len {
            let start = linear.curvature.len();
            linear.curvature.extend(sets.row(block.first + k).iter().map(|v| root * v));
            axpy(-root * s[k] / radius, &along, &mut linear.curvature[start..]);
            linear.curvature_length.push(root * longest);
        }
    }
    Some(())
}

fn factor_equations(d: usize, linear: &Linear) -> Factor {
    let mut work = linear.equations.clone();
    let reference = reference_lengths(&linear.lengths);
    Factor::new(&mut work, d, &reference, DEPENDENT_EQUATION, "active set")
}

/// Multipliers that make the point stationary, as a correction of those it carries, so that where they are not
/// unique they stay where they were.
fn update_multipliers(problem: &LevelProblem, point: &mut Point, linear: &Linear, factor: &Factor) {
    let sets = &problem.sets;
    let slack = sets.slack(&point.u);
    let mut rest = cost_gradient(problem, &point.u);
    for (index, block) in sets.blocks.iter().enumerate() {
        let range = block.first..block.first + block.len;
        let s = &slack[range.clone()];
        let z = &mut point.z[range.clone()];
        match (point.modes[index], block.soft) {
            (Mode::Off, _) => z.fill(0.0),
            (Mode::Flat, Some(weight)) => z[0] = -2.0 * weight * s[0],
            (Mode::Flat, None) => {}
            (Mode::Smooth, soft) => {
                let radius = norm(&s[1..]);
                z[0] = soft.map_or(z[0], |weight| 2.0 * weight * (radius - s[0]));
                for k in 1..s.len() {
                    z[k] = -z[0] * s[k] / radius;
                }
            }
        }
        for (k, i) in range.enumerate() {
            axpy(point.z[block.first + k], sets.row(i), &mut rest);
        }
    }
    rest.iter_mut().for_each(|v| *v = -*v);
    factor.apply_transpose(&mut rest);
    factor.solve_upper(&mut rest);
    let mut correction = vec![0.0; linear.target.len()];
    for (j, &row) in factor.kept.iter().enumerate() {
        correction[row] = rest[j];
    }
    for (index, block) in sets.blocks.iter().enumerate() {
        let first = linear.first[index];
        match (point.modes[index], block.soft) {
            (Mode::Flat, soft) => {
                let skip = usize::from(soft.is_some());
                for k in skip..block.len {
                    point.z[block.first + k] += correction[first + k - skip];
                }
            }
            (Mode::Smooth, None) => {
                let s = &slack[block.first..block.first + block.len];
                let radius = norm(&s[1..]);
                point.z[block.first] += correction[first];
                for k in 1..block.len {
                    point.z[block.first + k] = -point.z[block.first] * s[k] / radius;
                }
            }
            _ => {}
        }
    }
}

struct Step {
    du: Vec<f64>,
    /// Smallest pivot of the cost rows along the directions the equations leave.
    cost_pivot: f64,
}

fn step(problem: &LevelProblem, point: &Point, linear: &Linear, factor: &Factor) -> Step {
    let d = problem.sets.d;
    let rank = factor.rank();
    // Q'du = (p, y): p solves the equations, y the least squares.
    let mut local = vec![0.0; d];
    for (j, &row) in factor.kept.iter().enumerate() {
        local[j] = linear.target[row];
    }
    factor.solve_lower(&mut local);
    let q = d - rank;
    let mut columns = Vec::new();
    let mut value = Vec::new();
    let mut lengths = Vec::new();
    let mut add = |row: &[f64], at: f64, length: f64| {
        let mut turned = row.to_vec();
        factor.apply_transpose(&mut turned);
        lengths.push(length);
        value.push(at + dot(&turned[..rank], &local[..rank]));
        columns.extend_from_slice(&turned[rank..]);
    };
    for (i, at) in problem.residual_at.iter().enumerate() {
        let row = problem.residual_row(i);
        add(row, at + dot(row, &point.u), problem.residual_length[i]);
    }
    for (i, &at) in linear.soft_at.iter().enumerate() {
        add(&linear.soft[i * d..(i + 1) * d], at, linear.soft_length[i]);
    }
    if d > 0 {
        linear.curvature.chunks_exact(d).zip(&linear.curvature_length).for_each(|(row, &length)| add(row, 0.0, length));
    }
    let (y, cost_pivot) = shortest_least_squares(columns, q, &lengths, &value);
    local[rank..].copy_from_slice(&y);
    factor.apply(&mut local);
    Step { du: local, cost_pivot }
}

/// Shortest y that minimises `|C y + f|`, C given by rows of length q (that is, C' by columns).
fn shortest_least_squares(mut columns: Vec<f64>, q: usize, lengths: &[f64], value: &[f64]) -> (Vec<f64>, f64) {
    let m = value.len();
    if q == 0 || m == 0 {
        return (vec![0.0; q], 1.0);
    }
    // C' P = V R: the rows of C lie in the span of the first `rank` columns of V.
    let original = columns.clone();
    let rows = Factor::new(&mut columns, q, &reference_lengths(lengths), DEPENDENT_COST, "cost rows");
    let rank = rows.rank();
    if rank == 0 {
        return (vec![0.0; q], 1.0);
    }
    // C V1, m x rank by columns, then an ordinary least-squares problem.
    let mut reduced = vec![0.0; m * rank];
    for i in 0..m {
        let mut turned = original[i * q..(i + 1) * q].to_vec();
        rows.apply_transpose(&mut turned);
        for c in 0..rank {
            reduced[c * m + i] = turned[c];
        }
    }
    let (mut y, pivot) = least_squares(&mut reduced, m, value.iter().map(|v| -v).collect());
    y.resize(q, 0.0);
    rows.apply(&mut y);
    (y, pivot)
}

enum Revision {
    Settled,
    Changed,
    Lost,
}

/// Takes violated blocks into the active set and blocks with a multiplier outside their cone out of it.
fn revise(problem: &LevelProblem, point: &mut Point) -> Revision {
    let slack = problem.sets.slack(&point.u);
    let gradient = largest(&cost_gradient(problem, &point.u));
    let negative = NEGATIVE * problem.size.max(gradient).max(largest(&point.z));
    let mut revision = Revision::Settled;
    for (index, block) in problem.sets.blocks.iter().enumerate() {
        let range = block.first..block.first + block.len;
        let s = &slack[range.clone()];
        let z = &mut point.z[range];
        let margin = VIOLATED * (1.0 + largest(s));
        let mode = point.modes[index];
        let next = match (mode, block.kind) {
            (Mode::Off, kind) if inside(kind, s) < -margin => match kind {
                Kind::SecondOrder if norm(&s[1..]) > APEX => Mode::Smooth,
                _ => Mode::Flat,
            },
            (Mode::Off, _) => Mode::Off,
            (Mode::Smooth, _) if z[0] < -negative => Mode::Off,
            (Mode::Smooth, _) if norm(&s[1..]) <= APEX || (block.soft.is_none() && s[0] < 0.0) => Mode::Flat,
            (Mode::Flat, _) if z[0] < -negative => Mode::Off,
            (Mode::Flat, Kind::SecondOrder) if norm(&z[1..]) > z[0] + negative => return Revision::Lost,
            (mode, _) => mode,
        };
        if next != mode {
            point.modes[index] = next;
            if next == Mode::Off || mode == Mode::Off {
                z.fill(0.0);
            }
            revision = Revision::Changed;
        } else if mode != Mode::Off {
            z[0] = z[0].max(norm(&z[1..]));
        }
    }
    revision
}
