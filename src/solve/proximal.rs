//! The proximal method of multipliers on one level: what carries on where Newton steps on an active set read off an interior
//! point do not settle.
//!
//! With the slacks of soft limits among the unknowns, the level is `minimise |C w + c|^2 / 2 subject to s(w) = a - G w in K`, K a
//! product of self-dual cones. One round minimises, from the anchor w_k and the multipliers z_k,
//!
//! ```text
//! phi(w) = |C w + c|^2 / 2 + sigma |P(z_k / sigma - s(w))|^2 / 2 + |w - w_k|_rho^2 / 2,    P the projection onto K,
//! ```
//!
//! and takes `z_{k+1} = sigma P(z_k / sigma - s)` (Rockafellar 1976, Mathematics of Operations Research 1:97-116, quoted from
//! memory). It needs neither unique multipliers nor a strict split into active and inactive rows: phi is strongly convex and
//! once differentiable whatever is active, and a semismooth Newton method with a line search minimises it (Qi and Sun 1993,
//! Mathematical Programming 58:353-367, from memory). P is positively homogeneous, `P(y) = P'(y) y`, so that a Newton step is the
//! least-squares problem with the rows `C`, `sqrt(sigma) P'^(1/2) G` and `sqrt(rho) I`: nothing is squared.
//!
//! What makes it quick are the coordinates. What a level wants may be far shorter in the directions that are left than in the
//! unknowns themselves, and its weak directions far weaker than its strong ones. So w is written as the cost's own residuals,
//! over their length at the start, and an orthonormal basis of what costs nothing; and every block of rows by the length it has there.

use super::dense::{axpy, dot, largest, norm};
use super::infeasible::project_dual;
use super::level::{LevelProblem, compress};
use super::rank::{Factor, least_squares, reference_lengths};
use super::system::{Kind, inside};

/// Penalty sigma of the first round; a round that gains little makes the next stiffer.
const PENALTY: f64 = 10.0;
const STIFFER: f64 = 10.0;
const LARGEST_PENALTY: f64 = 1e10;
/// Pull rho on what costs and on what does not; each round makes it looser.
const PULL: f64 = 1e-2;
const FREE_PULL: f64 = 1e-4;
const LOOSER: f64 = 0.2;
const SMALLEST_PULL: f64 = 1e-10;
/// A round that leaves more than this part of the residual makes the next one stiffer.
const SLOW: f64 = 0.1;
/// A round of more Newton steps than this has moved far along curved cones: the next ones are held back by as much.
const MANY_STEPS: usize = 8;
/// Rounds, Newton steps of one round and of all, and rounds at the limit of rounding that may pass without gain.
const MAX_ROUNDS: usize = 80;
const MAX_STEPS: usize = 60;
const MAX_ALL_STEPS: usize = 1000;
const MAX_STALLED: usize = 3;
/// Residual at which nothing more is to be gained.
const ENOUGH: f64 = 1e-15;
/// Residual below which rounding may be all that is left.
const ROUNDED: f64 = 1e-11;
/// Part of the last round's residual that a round's Newton steps go down to, and rounding, below which they do not.
const INNER: f64 = 1e-2;
const ROUNDING: f64 = 1e-15;
/// Part of its first value that the slope along a step may keep (strong Wolfe), and the tries to get there.
const LEVEL: f64 = 0.5;
const MAX_TRIES: usize = 40;
/// A cost row counts as dependent below this relative length.
const DEPENDENT: f64 = 1e-10;
/// Shortest residual taken for a unit, of the root of the problem's size.
const SHORTEST: f64 = 1e-7;

/// Where the method came to: coordinates, multipliers, and how well they are optimal.
pub(super) struct Approached {
    pub u: Vec<f64>,
    pub z: Vec<f64>,
    /// Largest residual of stationarity, feasibility and complementarity in the method's own units.
    pub residual: f64,
    /// Bound on the error of the weighted residuals, from the cost's curvature of 1 in its own residuals.
    pub bound: f64,
}

/// The level in the method's own coordinates h: what costs first (with the soft slacks), then what does not.
struct Scaled<'a> {
    problem: &'a LevelProblem,
    q: usize,
    /// Number of coordinates that cost.
    costly: usize,
    /// C by rows, and c at h = 0.
    cost: Vec<f64>,
    cost_at: Vec<f64>,
    /// G by rows, and s at h = 0.
    rows: Vec<f64>,
    slack_at: Vec<f64>,
    /// What each row was multiplied by.
    row_scale: Vec<f64>,
    /// Columns of the map from h to (u, slacks).
    map: Vec<f64>,
    /// Unit of the residuals.
    unit: f64,
}

/// One round's fixed data. What follows within it is in differences from the anchor, so that nothing is lost in rounding.
struct Round<'a> {
    /// `C h_k + c`.
    residual: Vec<f64>,
    /// `z_k / sigma - s(h_k)`.
    shifted: Vec<f64>,
    penalty: f64,
    pull: &'a [f64],
}

/// Where a round's Newton steps came to.
struct Minimised {
    dh: Vec<f64>,
    z: Vec<f64>,
    steps: usize,
}

/// How well the optimality conditions hold.
struct Residual {
    stationarity: f64,
    /// The larger of violation and complementarity.
    feasibility: f64,
    /// Bound on the square of the error of the cost's residuals.
    gap: f64,
}

/// The parts of phi at one step from the anchor.
struct Value {
    residual: Vec<f64>,
    shifted: Vec<f64>,
    projected: Vec<f64>,
    gradient: Vec<f64>,
}

/// Rounds from the given point until nothing more is gained, or until `cancelled` says so; the best point met. `None` where there
/// is nothing to work on.
pub(super) fn approach(problem: &LevelProblem, u: &[f64], z: &[f64], cancelled: &dyn Fn() -> bool) -> Option<Approached> {
    let scaled = Scaled::new(problem, u, z)?;
    let mut h = vec![0.0; scaled.q];
    let mut multipliers: Vec<f64> =
        z.iter().zip(&scaled.row_scale).map(|(z, scale)| z / scale / (scaled.unit * scaled.unit)).collect();
    scaled.project(&mut multipliers);
    let mut pull = vec![PULL; scaled.costly];
    pull.resize(scaled.q, FREE_PULL);
    let mut penalty = PENALTY;
    let mut best: Option<(f64, f64, Vec<f64>, Vec<f64>)> = None;
    let mut before = 1.0f64;
    let mut shortest = SMALLEST_PULL;
    let (mut stalled, mut all) = (0, 0);
    for _ in 0..MAX_ROUNDS {
        if cancelled() {
            break;
        }
        let goal = (INNER * before.min(1.0)).max(ROUNDING);
        let Minimised { dh, z, steps } = scaled.minimise(&scaled.round(&h, &multipliers, penalty, &pull), goal);
        all += steps;
        if steps == MAX_STEPS && best.is_some() {
            // Not at the round's minimum: its multipliers mean nothing. Once more, and from now on, on a shorter leash.
            pull.iter_mut().for_each(|p| *p = (*p / LOOSER).min(PULL));
            shortest = pull[scaled.q - 1];
            if all > MAX_ALL_STEPS {
                break;
            }
            continue;
        }
        axpy(1.0, &dh, &mut h);
        multipliers = z;
        let Residual { stationarity, feasibility, gap } = scaled.residual(&h, &multipliers, &dh);
        let residual = stationarity.max(feasibility);
        if best.as_ref().is_none_or(|b| residual < b.0) {
            best = Some((residual, gap, h.clone(), multipliers.clone()));
        }
        stalled = if residual < ROUNDED && residual > 0.5 * before { stalled + 1 } else { 0 };
        if residual <= ENOUGH || stalled > MAX_STALLED || all > MAX_ALL_STEPS || !residual.is_finite() {
            break;
        }
        // What stationarity lacks is the pull's doing; only what feasibility lacks asks for a stiffer penalty.
        if feasibility > SLOW * before {
            penalty = (penalty * STIFFER).min(LARGEST_PENALTY);
        }
        let factor = if steps > MANY_STEPS { 1.0 / LOOSER } else { LOOSER };
        pull.iter_mut().for_each(|p| *p = (*p * factor).clamp(shortest, PULL));
        before = residual;
    }
    let (residual, gap, h, multipliers) = best?;
    let mut u = u.to_vec();
    for (c, v) in h.iter().enumerate() {
        axpy(*v, &scaled.map[c * scaled.q..c * scaled.q + u.len()], &mut u);
    }
    let back = scaled.unit * scaled.unit;
    let z = multipliers.iter().zip(&scaled.row_scale).map(|(z, scale)| z * scale * back).collect();
    Some(Approached { u, z, residual, bound: scaled.unit * gap.sqrt() })
}

impl<'a> Scaled<'a> {
    fn new(problem: &'a LevelProblem, u: &[f64], z: &[f64]) -> Option<Self> {
        let sets = &problem.sets;
        let (d, slacks) = (sets.d, problem.soft_first.len());
        let q = d + slacks;
        let m = problem.residual_at.len();
        let start: Vec<f64> = (0..m).map(|i| problem.residual_at[i] + dot(problem.residual_row(i), u)).collect();
        let soft: Vec<(usize, usize, f64)> =
            sets.blocks.iter().filter_map(|b| Some((b.first, b.block, b.soft?))).collect();
        let mut length = dot(&start, &start);
        length += soft.iter().map(|&(first, _, weight)| z[first] * z[first] / (2.0 * weight)).sum::<f64>();
        let unit = length.sqrt().max(SHORTEST * problem.size.sqrt());
        if q == 0 || sets.blocks.is_empty() || !unit.is_finite() {
            return None;
        }
        let (map, costly) = coordinates(problem, &soft, q, unit);
        let mut scaled = Scaled {
            problem,
            q,
            costly,
            cost: Vec::new(),
            cost_at: Vec::new(),
            rows: Vec::with_capacity(sets.at.len() * q),
            slack_at: sets.slack(u),
            row_scale: vec![1.0; sets.at.len()],
            map,
            unit,
        };
        scaled.add_residuals(&start, costly - soft.len());
        for &(first, slack, weight) in &soft {
            let root = (2.0 * weight).sqrt();
            scaled.cost.extend((0..q).map(|c| root * scaled.map[c * q + d + slack] / unit));
            scaled.cost_at.push(z[first] / root / unit);
        }
        for block in &sets.blocks {
            let begin = scaled.rows.len();
            for i in block.first..block.first + block.len {
                let slack = block.soft.filter(|_| i == block.first).map(|_| d + block.block);
                for c in 0..q {
                    let column = &scaled.map[c * q..(c + 1) * q];
                    let value = dot(sets.row(i), &column[..d]) - slack.map_or(0.0, |t| column[t]);
                    scaled.rows.push(value);
                }
            }
            if let Some(weight) = block.soft {
                scaled.slack_at[block.first] += z[block.first] / (2.0 * weight);
            }
            let longest = scaled.rows[begin..].chunks_exact(q).map(norm).fold(0.0, f64::max);
            let scale = 1.0 / longest.max(f64::EPSILON);
            scaled.rows[begin..].iter_mut().for_each(|v| *v *= scale);
            for i in block.first..block.first + block.len {
                scaled.row_scale[i] = scale;
                scaled.slack_at[i] *= scale;
            }
        }
        Some(scaled)
    }

    /// The cost rows of the residuals, which at the start are these: turned into as many as there are coordinates that cost,
    /// which changes their sum of squares by a constant. What does not cost is left out exactly.
    fn add_residuals(&mut self, start: &[f64], costly: usize) {
        let (m, d, q) = (start.len(), self.problem.sets.d, self.q);
        let mut columns = vec![0.0; m * costly];
        for c in 0..costly {
            for i in 0..m {
                columns[c * m + i] = dot(self.problem.residual_row(i), &self.map[c * q..c * q + d]) / self.unit;
            }
        }
        let (rows, at) = compress(columns, costly, start.iter().map(|r| r / self.unit).collect());
        for row in rows.chunks_exact(costly.max(1)) {
            self.cost.extend_from_slice(row);
            self.cost.resize(self.cost.len() + q - costly, 0.0);
        }
        self.cost_at.extend(at);
    }

    fn row(&self, i: usize) -> &[f64] {
        &self.rows[i * self.q..(i + 1) * self.q]
    }

    fn cost_row(&self, i: usize) -> &[f64] {
        &self.cost[i * self.q..(i + 1) * self.q]
    }

    /// P: the cones are self-dual.
    fn project(&self, y: &mut [f64]) {
        for block in &self.problem.sets.blocks {
            project_dual(block.kind, &mut y[block.first..block.first + block.len]);
        }
    }

    fn round<'b>(&self, h: &[f64], z: &[f64], penalty: f64, pull: &'b [f64]) -> Round<'b> {
        let residual = self.cost_at.iter().enumerate().map(|(i, at)| at + dot(self.cost_row(i), h)).collect();
        let shifted =
            self.slack_at.iter().enumerate().map(|(i, at)| z[i] / penalty - (at - dot(self.row(i), h))).collect();
        Round { residual, shifted, penalty, pull }
    }

    fn value(&self, round: &Round, dh: &[f64]) -> Value {
        let residual: Vec<f64> = round.residual.iter().enumerate().map(|(i, at)| at + dot(self.cost_row(i), dh)).collect();
        let shifted: Vec<f64> = round.shifted.iter().enumerate().map(|(i, at)| at + dot(self.row(i), dh)).collect();
        let mut projected = shifted.clone();
        self.project(&mut projected);
        let mut gradient: Vec<f64> = dh.iter().zip(round.pull).map(|(v, pull)| pull * v).collect();
        for (i, r) in residual.iter().enumerate() {
            axpy(*r, self.cost_row(i), &mut gradient);
        }
        for (i, p) in projected.iter().enumerate().filter(|(_, p)| **p != 0.0) {
            axpy(round.penalty * p, self.row(i), &mut gradient);
        }
        Value { residual, shifted, projected, gradient }
    }

    /// Semismooth Newton steps on phi: the way from the anchor to its minimiser, and the new multipliers.
    fn minimise(&self, round: &Round, goal: f64) -> Minimised {
        let mut dh = vec![0.0; self.q];
        let mut value = self.value(round, &dh);
        let mut steps = 0;
        while steps < MAX_STEPS && largest(&value.gradient) > goal {
            steps += 1;
            let step = self.newton(round, &dh, &value);
            let slope = dot(&value.gradient, &step);
            if slope >= 0.0 || slope.is_nan() {
                break;
            }
            let (next, at) = self.shorten(round, &dh, &step, slope);
            // At the limit of rounding steps lead nowhere.
            if largest(&value.gradient) < ROUNDED && largest(&at.gradient) >= largest(&value.gradient) {
                break;
            }
            (dh, value) = (next, at);
        }
        let z = value.projected.iter().map(|p| round.penalty * p).collect();
        Minimised { dh, z, steps }
    }

    /// How far to go along the step: the full way, or to where the slope of phi has nearly gone. The slope is used in place of
    /// phi, whose differences are lost in rounding near the minimum; phi is convex, so that its slope only grows.
    fn shorten(&self, round: &Round, dh: &[f64], step: &[f64], slope: f64) -> (Vec<f64>, Value) {
        let (mut from, mut to, mut length) = (0.0f64, 1.0f64, 1.0f64);
        let at = |length: f64| {
            let mut next = dh.to_vec();
            axpy(length, step, &mut next);
            let value = self.value(round, &next);
            (next, value)
        };
        for _ in 0..MAX_TRIES {
            let (next, value) = at(length);
            let here = dot(&value.gradient, step);
            if here.abs() <= LEVEL * slope.abs() || (here < 0.0 && length == 1.0) {
                return (next, value);
            }
            // Blocks that bind soon make the slope jump: the secant finds the order of magnitude, the geometric mean the rest.
            if here < 0.0 {
                from = length;
            } else {
                to = length;
            }
            length = if from > 0.0 { (from * to).sqrt() } else { to * slope / (slope - here).min(-f64::MIN_POSITIVE) };
        }
        // The slope jumps within rounding: just behind the jump, where the block that binds is seen.
        at(to)
    }

    /// One Newton step, as least squares; heavy rows stand first, which is what keeps the reflections stable.
    fn newton(&self, round: &Round, dh: &[f64], value: &Value) -> Vec<f64> {
        let q = self.q;
        let mut rows: Vec<f64> = Vec::new();
        let mut at = Vec::new();
        let root = round.penalty.sqrt();
        for block in &self.problem.sets.blocks {
            let y = &value.shifted[block.first..block.first + block.len];
            self.projection_rows(block.kind, block.first, y, root, &mut rows, &mut at);
        }
        rows.extend_from_slice(&self.cost);
        at.extend_from_slice(&value.residual);
        for (j, pull) in round.pull.iter().enumerate() {
            let start = rows.len();
            rows.resize(start + q, 0.0);
            rows[start + j] = pull.sqrt();
            at.push(pull.sqrt() * dh[j]);
        }
        let m = at.len();
        let mut columns = vec![0.0; m * q];
        for i in 0..m {
            for j in 0..q {
                columns[j * m + i] = rows[i * q + j];
            }
        }
        least_squares(&mut columns, m, at.iter().map(|v| -v).collect()).0
    }

    /// Rows `sqrt(sigma) P'(y)^(1/2) G` of one block and their values.
    fn projection_rows(&self, kind: Kind, first: usize, y: &[f64], root: f64, rows: &mut Vec<f64>, at: &mut Vec<f64>) {
        let mut push = |factors: &[f64], scale: f64| {
            let start = rows.len();
            rows.resize(start + self.q, 0.0);
            for (k, f) in factors.iter().enumerate().filter(|(_, f)| **f != 0.0) {
                axpy(scale * f, self.row(first + k), &mut rows[start..]);
            }
            at.push(scale * dot(factors, y));
        };
        if kind != Kind::SecondOrder {
            if y[0] > 0.0 {
                push(&[1.0], root);
            }
            return;
        }
        let radius = norm(&y[1..]);
        let mut factors = vec![0.0; y.len()];
        if y[0] >= radius {
            for k in 0..y.len() {
                factors[k] = 1.0;
                push(&factors, root);
                factors[k] = 0.0;
            }
        } else if y[0] > -radius {
            // Eigenvalue 1 along (1, w), 0 along (1, -w), (1 + y0/r)/2 across.
            factors[0] = std::f64::consts::FRAC_1_SQRT_2;
            for k in 1..y.len() {
                factors[k] = y[k] / radius * std::f64::consts::FRAC_1_SQRT_2;
            }
            push(&factors, root);
            let across = (0.5 * (1.0 + y[0] / radius)).sqrt();
            factors[0] = 0.0;
            for k in 1..y.len() {
                for j in 1..y.len() {
                    factors[j] = f64::from(u8::from(j == k)) - y[k] * y[j] / (radius * radius);
                }
                push(&factors, root * across);
            }
        }
    }

    /// How well the optimality conditions hold at h. With unit curvature, `|dr|^2 <= gradient'(h - h*) + s'z + violation |z|`, the
    /// way to h* judged by the last one.
    fn residual(&self, h: &[f64], z: &[f64], dh: &[f64]) -> Residual {
        let mut gradient = vec![0.0; self.q];
        for (i, at) in self.cost_at.iter().enumerate() {
            axpy(at + dot(self.cost_row(i), h), self.cost_row(i), &mut gradient);
        }
        for (i, z) in z.iter().enumerate() {
            axpy(*z, self.row(i), &mut gradient);
        }
        let (mut violation, mut gap, mut total) = (0.0f64, 0.0, 0.0f64);
        for block in &self.problem.sets.blocks {
            let range = block.first..block.first + block.len;
            let s: Vec<f64> = range.clone().map(|i| self.slack_at[i] - dot(self.row(i), h)).collect();
            violation = violation.max(-inside(block.kind, &s));
            gap += dot(&s, &z[range.clone()]).abs();
            total += z[block.first];
        }
        let stationarity = largest(&gradient);
        let error = stationarity * norm(dh).max(ROUNDING) + gap + violation * total;
        Residual { stationarity, feasibility: violation.max(gap), gap: error.max(ROUNDING * ROUNDING) }
    }
}

/// Columns of the map from h to (u, slacks), and how many of them cost: the cost rows' own values first, then the slacks of
/// soft limits, then an orthogonal basis of the rest. Values are in the given unit.
fn coordinates(problem: &LevelProblem, soft: &[(usize, usize, f64)], q: usize, unit: f64) -> (Vec<f64>, usize) {
    let d = problem.sets.d;
    let mut work = problem.residual.clone();
    let factor = Factor::new(&mut work, d, &reference_lengths(&problem.residual_length), DEPENDENT, "cost rows");
    let rank = factor.rank();
    let mut map = vec![0.0; q * q];
    for j in 0..rank {
        let column = &mut map[j * q..j * q + d];
        column[j] = unit;
        factor.solve_lower(column);
        factor.apply(column);
    }
    for (j, &(_, slack, weight)) in soft.iter().enumerate() {
        map[(rank + j) * q + d + slack] = unit / (2.0 * weight).sqrt();
    }
    let costly = rank + soft.len();
    // A unit of what is free pushes as hard on the rows as a unit of what costs, where that is long.
    let free = if rank > 0 { (unit / factor.column(0)[0].abs()).max(1.0) } else { 1.0 };
    for j in rank..d {
        let column = &mut map[(soft.len() + j) * q..(soft.len() + j) * q + d];
        column[j] = free;
        factor.apply(column);
    }
    (map, costly)
}
