//! Faces: which part of each cone a frozen level leaves.
//!
//! The optimal set of a level is `C and {A x = A x*} and {z's(x) = 0}` for any optimal multiplier z, so z says
//! what to keep of a cone: a positive multiplier of a row makes it an equality; z inside the dual cone holds
//! a second-order block at `s = 0`; z on its boundary holds it on the ray `s = lambda (1, -z_bar/z_0)`.
//! Where the multiplier vanishes and the slack is near the boundary, `maximise t, s - t e in K` over
//! the frozen set decides: if the largest t is zero, the dual of that program exposes the face.

use super::answer::{Exposed, FaceDecision, FaceKind, Options, RankDecision, SolveError};
use super::dense::{axpy, dot, largest, norm};
use super::engine::{Ended, Program, run};
use super::rank::{Factor, reference_lengths};
use super::system::{Contradiction, DEPENDENT_FACE, Kind, Part, Reduced, ReducedBlock, System, inside};
use crate::conic::{Cone, SparseRows};
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

/// Slack below which a block is asked for its interior.
const NEAR: f64 = 1e-4;
/// Independent gradients of the near blocks, at least this far from dependence, prove an interior.
const WELL_APART: f64 = 1e-2;
/// Largest t at or below this counts as zero.
const NO_INTERIOR: f64 = 1e-8;
/// Largest t below this is an interior so thin that the answer is called ill posed.
const THIN: f64 = 1e-6;
/// Part of the largest multiplier below which the interior test's multiplier exposes nothing.
const EXPOSES: f64 = 1e-5;
/// A multiplier this close to the boundary of the dual cone (relative) lies on it.
const ON_BOUNDARY: f64 = 1e-5;
/// Rounds of the interior test; each either ends it or removes a block.
const MAX_ROUNDS: usize = 64;

/// What the interior test found.
#[derive(Default)]
pub(super) struct Interior {
    /// The live blocks in the coordinates left.
    pub sets: Reduced,
    pub faces: Vec<FaceDecision>,
    pub rank: Vec<RankDecision>,
    /// A second-order block lost its interior, or nearly: the answer moves like the square root of the data.
    pub ill_posed: bool,
    /// The rows contradict each other by this much (the largest t is negative), or a row cannot hold.
    pub contradiction: Option<Contradiction>,
    pub negative: bool,
    pub cancelled: bool,
}

/// The face a multiplier exposes; `None` where it is zero within the tolerance.
pub(super) fn exposed(kind: Kind, z: &[f64], tolerance: f64, boundary: f64) -> Option<FaceKind> {
    let head = *z.first()?;
    if head <= tolerance {
        return None;
    }
    if kind != Kind::SecondOrder {
        return Some(FaceKind::Equality);
    }
    let radius = norm(&z[1..]);
    if head - radius > boundary * head {
        return Some(FaceKind::Apex);
    }
    Some(FaceKind::Ray { direction: z[1..].iter().map(|v| -v / radius).collect() })
}

/// Restricts a block to a face; returns the rows that became equalities.
pub(super) fn restrict(system: &mut System, index: usize, face: &FaceKind) -> Vec<usize> {
    let block = system.blocks[index];
    let rows = block.first..block.first + block.len;
    match face {
        FaceKind::Equality | FaceKind::Apex => {
            system.blocks[index].kind = Kind::Equality;
            for row in rows.clone() {
                system.source[row] = system.source[row].as_face();
            }
            rows.collect()
        }
        FaceKind::Ray { direction } => {
            system.blocks[index].part = Part::Retired;
            let mut ray = vec![std::f64::consts::FRAC_1_SQRT_2];
            ray.extend(direction.iter().map(|v| v * std::f64::consts::FRAC_1_SQRT_2));
            let mut work = ray.clone();
            let turn = Factor::new(&mut work, block.len, &[1.0], 0.0, "ray").orthogonal();
            let mut fixed = Vec::new();
            for c in 1..block.len {
                fixed.push(combine(system, block.first, &turn[c * block.len..(c + 1) * block.len]));
                system.close_block(1, Kind::Equality);
            }
            combine(system, block.first, &ray);
            system.close_block(1, Kind::Nonnegative);
            fixed
        }
    }
}

/// Pushes the combination of consecutive rows with the given factors.
fn combine(system: &mut System, first: usize, factors: &[f64]) -> usize {
    let mut entries = Vec::new();
    let mut rhs = 0.0;
    for (k, &factor) in factors.iter().enumerate() {
        entries.extend(system.matrix.row(first + k).map(|(j, v)| (j, factor * v)));
        rhs += factor * system.rhs[first + k];
    }
    let source = system.source[first].as_ray();
    system.push_row(entries, rhs, source);
    system.rhs.len() - 1
}

/// Finds out whether what the system describes has an interior relative to its equalities, and restricts
/// it to a face as long as it has none. Uses `system.x`, which lies in the set up to the engine's accuracy.
pub(super) fn ensure_interior(
    system: &mut System,
    options: &Options,
    cancel: Option<&Arc<AtomicBool>>,
) -> Result<Interior, SolveError> {
    let mut found = Interior::default();
    for _ in 0..MAX_ROUNDS {
        let (sets, outcome) = system.reduce();
        found.sets = sets;
        if let Err(contradiction) = outcome {
            found.contradiction = Some(contradiction);
            break;
        }
        let sets = &found.sets;
        let near: Vec<ReducedBlock> = sets.blocks.iter().copied().filter(|b| inside(b.kind, slack_of(sets, b)) < NEAR).collect();
        if near.is_empty() || direction_inside(sets, &near) {
            break;
        }
        let program = interior_program(sets, &near, true);
        let answer = run(&program, options.engine_tolerance, options.engine_iterations, cancel)?;
        if answer.ended == Ended::Cancelled {
            found.cancelled = true;
            break;
        }
        let t = answer.x.get(sets.d).copied().unwrap_or(0.0);
        found.negative |= t < -THIN;
        if !(-THIN..=NO_INTERIOR).contains(&t) {
            found.ill_posed |= t < THIN && t > 0.0;
            break;
        }
        let size = EXPOSES * largest(&answer.z);
        let mut rows = Vec::new();
        let mut at = 0;
        for block in &near {
            let z = &answer.z[at..at + block.len];
            at += block.len;
            let Some(kind) = exposed(block.kind, z, size, ON_BOUNDARY) else { continue };
            found.ill_posed |= matches!(kind, FaceKind::Ray { .. });
            rows.extend(restrict(system, block.block, &kind));
            let source = system.source[system.blocks[block.block].first];
            let exposed = Exposed::ByInteriorTest { largest: t };
            found.faces.push(FaceDecision { source, kind, exposed, multiplier: z.to_vec() });
        }
        if rows.is_empty() {
            found.ill_posed = true;
            break;
        }
        found.rank.push(system.fix(&rows, DEPENDENT_FACE, "faces without interior"));
        system.return_to_equalities();
    }
    Ok(found)
}

fn slack_of<'a>(sets: &'a Reduced, block: &ReducedBlock) -> &'a [f64] {
    &sets.at[block.first..block.first + block.len]
}

/// Cheap proof of an interior: a direction that moves every near block inwards.
fn direction_inside(sets: &Reduced, near: &[ReducedBlock]) -> bool {
    let d = sets.d;
    let mut rows: Vec<f64> = Vec::new();
    let mut wanted = Vec::new();
    let mut lengths = Vec::new();
    for block in near {
        let s = slack_of(sets, block);
        let radius = norm(&s[1..]);
        if block.kind == Kind::SecondOrder && radius > NEAR {
            let mut gradient = sets.row(block.first).to_vec();
            let longest = largest(&sets.length[block.first..block.first + block.len]);
            for k in 1..block.len {
                axpy(-s[k] / radius, sets.row(block.first + k), &mut gradient);
            }
            rows.extend_from_slice(&gradient);
            wanted.push(-longest);
            lengths.push(longest);
        } else {
            for k in 0..block.len {
                let row = sets.row(block.first + k);
                rows.extend_from_slice(row);
                wanted.push(if k == 0 { -norm(row) } else { 0.0 });
                lengths.push(sets.length[block.first + k]);
            }
        }
    }
    let factor = Factor::new(&mut rows, d, &reference_lengths(&lengths), WELL_APART, "near blocks");
    if factor.rank() == wanted.len() {
        return true;
    }
    // Not independent: the direction that the kept rows ask for may still serve the others.
    let mut v = vec![0.0; d];
    for (j, &row) in factor.kept.iter().enumerate() {
        v[j] = wanted[row];
    }
    factor.solve_lower(&mut v);
    factor.apply(&mut v);
    let length = norm(&v).max(1.0);
    [0.1, 1e-2, 1e-3].iter().any(|&alpha| {
        let u: Vec<f64> = v.iter().map(|x| alpha * x / length).collect();
        near.iter().all(|block| {
            let s: Vec<f64> = (block.first..block.first + block.len).map(|i| sets.at[i] - dot(sets.row(i), &u)).collect();
            inside(block.kind, &s) > THIN.max(1e-3 * alpha)
        })
    })
}

/// `maximise t` subject to `s(u) - t e in K` for the given blocks and `t <= 1`; `boxed` keeps |u_i| <= 1, which
/// loses nothing where u = 0 is in the set: it is convex.
pub(super) fn interior_program(sets: &Reduced, near: &[ReducedBlock], boxed: bool) -> Program {
    let d = sets.d;
    let mut rows = SparseRows::new(d + 1);
    let mut rhs = Vec::new();
    let mut cones = Vec::new();
    for block in near {
        for k in 0..block.len {
            let i = block.first + k;
            let entries = sets.row(i).iter().copied().enumerate();
            rows.push(entries.chain((k == 0).then_some((d, 1.0))));
            rhs.push(sets.at[i]);
        }
        cones.push(if block.kind == Kind::SecondOrder { Cone::SecondOrder(block.len) } else { Cone::Nonnegative(block.len) });
    }
    rows.push([(d, 1.0)]);
    rhs.push(1.0);
    if boxed {
        for j in 0..d {
            rows.push([(j, 1.0)]);
            rows.push([(j, -1.0)]);
            rhs.extend([1.0, 1.0]);
        }
    }
    cones.push(Cone::Nonnegative(1 + if boxed { 2 * d } else { 0 }));
    let mut linear = vec![0.0; d + 1];
    linear[d] = -1.0;
    Program { diagonal: vec![0.0; d + 1], linear, rows, rhs, cones }
}
