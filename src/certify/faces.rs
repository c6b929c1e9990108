//! Was every level allowed to take for granted what it took for granted?
//!
//! A proof of optimality is worth nothing if its `system` holds more than the problem and the earlier levels
//! imply (`x = x*` would make any point optimal). For level k the following is implied:
//! - the hard rows and cones;
//! - for every earlier level j: its residuals keep their value (they are unique at its optimum), its
//!   soft limits hold with the excess they were granted (unique too);
//! - the faces its multipliers expose, because ANY optimum is complementary to them: `z > 0` turns a row into an
//!   equality, z inside the dual of a second-order cone forces s = 0, z on its boundary (not zero)
//!   forces s onto the ray `(1, -z_bar/z0)`.
//!
//! So each equality of `system` has to be a combination of implied equalities, and each cone row or block an
//! implied one, up to implied equalities and a positive factor. LEAVING implied rows out is allowed: x
//! obeys them anyway (check `hard-rows`), and an optimum of less is an optimum of all.
//! A pair of opposite rows without room between them (`least` equal to `largest`) is an equality. Any other face that
//! only a further program exposes (all multipliers zero, yet nothing strictly inside) is not justified
//! here: such a problem is ill-posed and is not certified.

use super::rows::{Block, blocks, fits, matrix_fits, norm};
use super::worst::Worst;
use super::{Check, optimality::OPTIMALITY_BOUND};
use crate::conic::{Cone, ConicRows, Hierarchy, LevelProof};

/// Share of its length below which a row counts as a combination of others.
const DEPENDENT: f64 = 1e-10;
/// Share of the largest multiplier above which one exposes a face.
const EXPOSES: f64 = 1e-12;

/// A cone row or block that holds at every earlier optimum: slacks `rhs - matrix x`, the first relieved.
struct Implied {
    cone: Cone,
    rows: Vec<Vec<f64>>,
    slack: Vec<f64>,
}

/// Every level's system against what is implied. The figure is the largest share of a row that is not.
pub fn check(hierarchy: &Hierarchy, x: &[f64], proofs: &[LevelProof]) -> Check {
    let mut worst = Worst::default();
    let n = x.len();
    let mut known = Known { given: Vec::new(), equalities: Vec::new(), cones: Vec::new() };
    let shapes = fits(&hierarchy.hard, n) && proofs.iter().all(|p| fits(&p.system, n) && p.multipliers.len() == p.system.rhs.len());
    if !shapes {
        worst.record(f64::NAN, || "rows that do not fit the unknowns".into());
        return done(worst);
    }
    known.take_hard(&hierarchy.hard, x);
    for (k, proof) in proofs.iter().enumerate() {
        known.judge(proof, x, &mut worst);
        let Some(level) = hierarchy.levels.get(k) else { break };
        let shapes = matrix_fits(&level.residuals.matrix, level.residuals.rhs.len(), n)
            && fits(&level.soft, n)
            && blocks(&level.soft).len() == proof.soft_slack.len()
            && proof.soft_multipliers.len() == level.soft.rhs.len();
        if !shapes {
            worst.record(f64::NAN, || format!("priority {}", proof.priority));
            return done(worst);
        }
        for i in 0..level.residuals.rhs.len() {
            known.equate(dense(&level.residuals.matrix, i, n));
        }
        let size = proof.multipliers.iter().chain(&proof.soft_multipliers).fold(0.0, |a: f64, b| a.max(b.abs()));
        for block in blocks(&proof.system) {
            known.expose(&proof.system, &block, &proof.multipliers, size * EXPOSES, n);
        }
        for (block, relief) in blocks(&level.soft).into_iter().zip(&proof.soft_slack) {
            known.expose(&level.soft, &block, &proof.soft_multipliers, size * EXPOSES, n);
            known.take(&level.soft, &block, x, *relief);
        }
    }
    done(worst)
}

fn done(worst: Worst) -> Check {
    worst.check("faces", "share of a row that nothing earlier implies", OPTIMALITY_BOUND)
}

fn dense(matrix: &crate::conic::SparseRows, i: usize, n: usize) -> Vec<f64> {
    let mut row = vec![0.0; n];
    for (j, v) in matrix.row(i) {
        row[j] += v;
    }
    row
}

/// What holds at every optimum of the levels so far.
struct Known {
    /// The implied equalities as they came: most rows of a system repeat one of them, and need no projection.
    given: Vec<Vec<f64>>,
    /// Orthonormal: their span.
    equalities: Vec<Vec<f64>>,
    cones: Vec<Implied>,
}

impl Known {
    fn take_hard(&mut self, hard: &ConicRows, x: &[f64]) {
        for block in blocks(hard) {
            match block.cone {
                Cone::Zero(_) => self.equate(dense(&hard.matrix, block.rows.start, x.len())),
                _ => self.take(hard, &block, x, 0.0),
            }
        }
    }

    fn take(&mut self, rows: &ConicRows, block: &Block, x: &[f64], relief: f64) {
        let mut slack: Vec<f64> = block.rows.clone().map(|i| rows.rhs[i] - rows.matrix.row_dot(i, x)).collect();
        slack[0] += relief;
        let dense = block.rows.clone().map(|i| dense(&rows.matrix, i, x.len())).collect();
        self.cones.push(Implied { cone: block.cone, rows: dense, slack });
    }

    /// What is left of a row after taking off all implied equalities; once more where little is left, against
    /// rounding.
    fn rest(&self, mut row: Vec<f64>) -> Vec<f64> {
        for _ in 0..2 {
            let before = norm(&row);
            for base in &self.equalities {
                let part: f64 = base.iter().zip(&row).map(|(a, b)| a * b).sum();
                row.iter_mut().zip(base).for_each(|(r, b)| *r -= part * b);
            }
            if norm(&row) > 0.5 * before {
                break;
            }
        }
        row
    }

    fn equate(&mut self, row: Vec<f64>) {
        let size = norm(&row);
        let mut rest = self.rest(row.clone());
        self.given.push(row);
        let left = norm(&rest);
        if left > DEPENDENT * size {
            rest.iter_mut().for_each(|r| *r /= left);
            self.equalities.push(rest);
        }
    }

    /// Equalities exposed by the multiplier of a block.
    fn expose(&mut self, rows: &ConicRows, block: &Block, z: &[f64], least: f64, n: usize) {
        let z = &z[block.rows.clone()];
        let all: Vec<Vec<f64>> = block.rows.clone().map(|i| dense(&rows.matrix, i, n)).collect();
        match block.cone {
            Cone::Zero(_) => {}
            Cone::Nonnegative(_) => {
                if z[0] > least {
                    all.into_iter().for_each(|row| self.equate(row));
                }
            }
            Cone::SecondOrder(_) => {
                let turned = norm(&z[1..]);
                if z[0] - turned > least {
                    all.into_iter().for_each(|row| self.equate(row));
                } else if z[0] > least && turned > 0.0 {
                    // s lies along u = (1, -z_bar/|z_bar|): all of it across u vanishes.
                    let ray: Vec<f64> = std::iter::once(1.0).chain(z[1..].iter().map(|v| -v / turned)).collect();
                    for (k, row) in all.iter().enumerate() {
                        let mut across = row.clone();
                        for (other, along) in all.iter().zip(&ray) {
                            across.iter_mut().zip(other).for_each(|(a, o)| *a -= ray[k] * along * o / 2.0);
                        }
                        self.equate(across);
                    }
                }
            }
        }
    }

    /// Rows of the implied cones, freed of implied equalities.
    fn bare(&self) -> Vec<Vec<Vec<f64>>> {
        self.cones.iter().map(|c| c.rows.iter().map(|r| self.rest(r.clone())).collect()).collect()
    }

    /// Two implied rows that leave an equality no room: `r x <= b` and `-r x <= -b`, up to positive factors. The
    /// figure is the larger of their distances to the row and of the room between them, infinite without such a pair.
    fn pinched(&self, bare: &[Vec<Vec<f64>>], row: &[f64]) -> f64 {
        let (mut upper, mut lower) = ((f64::INFINITY, 0.0), (f64::INFINITY, 0.0));
        for (implied, bare) in self.cones.iter().zip(bare) {
            let own: f64 = bare[0].iter().map(|b| b * b).sum();
            let cross: f64 = bare[0].iter().zip(row).map(|(b, r)| b * r).sum();
            if own == 0.0 || cross == 0.0 {
                continue;
            }
            let factor = cross / own;
            let apart: f64 = bare[0].iter().zip(row).map(|(b, r)| (factor * b - r).powi(2)).sum();
            let side = if factor > 0.0 { &mut upper } else { &mut lower };
            let distance = apart.sqrt() / norm(row);
            let room = implied.slack[0] * factor.abs();
            if distance <= OPTIMALITY_BOUND && (side.0 == f64::INFINITY || room < side.1) {
                *side = (distance, room);
            }
        }
        upper.0.max(lower.0).max((upper.1 + lower.1).abs())
    }

    /// Records how much of each row of a system is not implied.
    fn judge(&self, proof: &LevelProof, x: &[f64], worst: &mut Worst) {
        let system = &proof.system;
        // Made when first needed: most systems repeat the hard rows as they are.
        let mut freed: Option<Vec<Vec<Vec<f64>>>> = None;
        for block in blocks(system) {
            let rows: Vec<Vec<f64>> = block.rows.clone().map(|i| dense(&system.matrix, i, x.len())).collect();
            let slack: Vec<f64> =
                block.rows.clone().map(|i| system.rhs[i] - system.matrix.row_dot(i, x)).collect();
            let repeats = |c: &Implied| c.cone == block.cone && c.slack == slack && c.rows == rows;
            let given = matches!(block.cone, Cone::Zero(_)) && rows.iter().all(|row| self.given.contains(row));
            if given || self.cones.iter().any(repeats) {
                continue;
            }
            let size = rows.iter().map(|r| norm(r)).fold(0.0, f64::max);
            let rests: Vec<Vec<f64>> = rows.into_iter().map(|r| self.rest(r)).collect();
            let own = rests.iter().map(|r| norm(r)).fold(0.0, f64::max);
            let mut share = if own == 0.0 { 0.0 } else { own / size };
            if share <= OPTIMALITY_BOUND {
                worst.record(share, || place(proof, &block));
                continue;
            }
            let bare = freed.get_or_insert_with(|| self.bare());
            if !matches!(block.cone, Cone::Zero(_)) {
                let candidates = self.cones.iter().zip(bare.iter());
                let distances = candidates.map(|(implied, bare)| distance(implied, bare, &rests, &slack));
                share = share.min(distances.fold(f64::INFINITY, f64::min));
            } else {
                share = share.min(self.pinched(bare, &rests[0]));
            }
            worst.record(share, || place(proof, &block));
        }
    }
}

/// Distance between a block (its rows freed of implied equalities) and the best positive multiple of an implied
/// one (`bare`, freed likewise), relative; the slacks at x have to match as well. A single row may also be the head
/// of a second-order cone (which is nonnegative in it).
fn distance(implied: &Implied, bare: &[Vec<f64>], rests: &[Vec<f64>], slack: &[f64]) -> f64 {
    let single = rests.len() == 1;
    if !single && (bare.len() != rests.len() || !matches!(implied.cone, Cone::SecondOrder(_))) {
        return f64::INFINITY;
    }
    let pairs = || bare.iter().zip(rests).flat_map(|(b, r)| b.iter().zip(r));
    let own: f64 = pairs().map(|(b, _)| b * b).sum();
    let cross: f64 = pairs().map(|(b, r)| b * r).sum();
    let length: f64 = pairs().map(|(_, r)| r * r).sum();
    if own == 0.0 || cross <= 0.0 {
        return f64::INFINITY;
    }
    let factor = cross / own;
    let apart: f64 = pairs().map(|(b, r)| (factor * b - r).powi(2)).sum();
    let off = slack.iter().zip(&implied.slack).fold(0.0, |a: f64, (s, c)| {
        a.max((s - factor * c).abs() / s.abs().max((factor * c).abs()).max(1.0))
    });
    (apart / length).sqrt().max(off)
}

fn place(proof: &LevelProof, block: &Block) -> String {
    let name = proof.system.names.get(block.rows.start);
    let name = name.map_or(format!("row {}", block.rows.start + 1), |n| format!("{} {}", n.group, n.part));
    format!("priority {}: {name}", proof.priority)
}
