//! The rows that hold at a level: hard rows, frozen rows, relaxed soft rows, faces; and the set they
//! describe in the coordinates that the equalities leave: `x = x0 + N u`.

use super::answer::{LevelSystem, RankDecision, RowSource};
use super::dense::{dot, norm};
use super::rank::Subspace;
use crate::conic::{Cone, ConicRows, SparseRows};

/// A row of the data counts as dependent below this relative length.
pub(super) const DEPENDENT: f64 = 1e-9;
/// A row that a computed multiplier gave (its direction carries the engine's error) counts as dependent below this.
pub(super) const DEPENDENT_FACE: f64 = 1e-7;
/// A dependent row agrees with the kept ones within this (scaled, per unit of row length).
const CONSISTENT: f64 = 1e-9;

/// What a block asks of its slack.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Kind {
    Equality,
    Nonnegative,
    SecondOrder,
}

/// Whether a block still takes part.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Part {
    Live,
    /// Holds by the equalities alone, whatever the remaining freedom does.
    Settled,
    /// Replaced by rows appended later.
    Retired,
}

/// Consecutive rows under one cone; every equality and nonnegative row is a block of its own.
#[derive(Debug, Clone, Copy)]
pub(super) struct Block {
    pub first: usize,
    pub len: usize,
    pub kind: Kind,
    pub part: Part,
}

/// A row that cannot hold: its slack is this where the equalities fix it.
#[derive(Debug, Clone, Copy)]
pub(super) struct Contradiction {
    pub block: usize,
}

/// See the file comment.
#[derive(Clone)]
pub(super) struct System {
    pub matrix: SparseRows,
    pub rhs: Vec<f64>,
    pub source: Vec<RowSource>,
    pub blocks: Vec<Block>,
    /// Rows that span the equalities, in the order of `space`.
    pub pivots: Vec<usize>,
    pub space: Subspace,
    /// A point that satisfies the pivots: the origin of u.
    pub x: Vec<f64>,
}

/// Live blocks in coordinates u: `s = at - gamma u`.
#[derive(Clone, Default)]
pub(super) struct Reduced {
    pub d: usize,
    pub blocks: Vec<ReducedBlock>,
    /// Rows by rows, d entries each.
    pub gamma: Vec<f64>,
    pub at: Vec<f64>,
    /// Length of each row over x, against which its part in u is small or not.
    pub length: Vec<f64>,
}

/// One live block.
#[derive(Debug, Clone, Copy)]
pub(super) struct ReducedBlock {
    /// Index into `System::blocks`; for a soft block of the level in hand, which of its slacks.
    pub block: usize,
    /// First row in `gamma`.
    pub first: usize,
    pub len: usize,
    pub kind: Kind,
    /// Weight of the slack where the block is soft.
    pub soft: Option<f64>,
}

impl Reduced {
    pub fn row(&self, i: usize) -> &[f64] {
        &self.gamma[i * self.d..(i + 1) * self.d]
    }

    /// `s = at - gamma u`.
    pub fn slack(&self, u: &[f64]) -> Vec<f64> {
        (0..self.at.len()).map(|i| self.at[i] - dot(self.row(i), u)).collect()
    }
}

/// Signed distance of a slack from the boundary of its cone (up to a factor of sqrt 2), negative outside.
pub(super) fn inside(kind: Kind, s: &[f64]) -> f64 {
    match (kind, s) {
        (Kind::Equality, _) | (_, []) => -super::dense::largest(s),
        (Kind::Nonnegative, _) => s.iter().fold(f64::INFINITY, |m, &v| m.min(v)),
        (Kind::SecondOrder, [head, tail @ ..]) => head - norm(tail),
    }
}

/// Blocks of a list of cones: (first row, rows, kind).
pub(super) fn blocks_of(cones: &[Cone]) -> Vec<(usize, usize, Kind)> {
    let mut blocks = Vec::new();
    let mut first = 0;
    for cone in cones {
        match *cone {
            Cone::Zero(n) => blocks.extend((first..first + n).map(|i| (i, 1, Kind::Equality))),
            Cone::Nonnegative(n) => blocks.extend((first..first + n).map(|i| (i, 1, Kind::Nonnegative))),
            Cone::SecondOrder(0) => {}
            Cone::SecondOrder(1) => blocks.push((first, 1, Kind::Nonnegative)),
            Cone::SecondOrder(n) => blocks.push((first, n, Kind::SecondOrder)),
        }
        first += cone.dimension();
    }
    blocks
}

impl System {
    /// The hard rows; the equalities among them are factorised and satisfied by the shortest x.
    pub fn new(columns: usize, hard: &ConicRows) -> (System, RankDecision, Result<(), Contradiction>) {
        let mut system = System {
            matrix: SparseRows::new(columns),
            rhs: Vec::new(),
            source: Vec::new(),
            blocks: Vec::new(),
            pivots: Vec::new(),
            space: Subspace::new(columns),
            x: vec![0.0; columns],
        };
        for (first, len, kind) in blocks_of(&hard.cones) {
            for row in first..first + len {
                system.push_row(hard.matrix.row(row), hard.rhs[row], RowSource::Hard { row });
            }
            system.blocks.push(Block { first: system.rhs.len() - len, len, kind, part: Part::Live });
        }
        let equalities: Vec<usize> = (0..system.blocks.len()).filter(|&b| system.blocks[b].kind == Kind::Equality).collect();
        let rows: Vec<usize> = equalities.iter().map(|&b| system.blocks[b].first).collect();
        let decision = system.fix(&rows, DEPENDENT, "hard equalities");
        system.return_to_equalities();
        let outcome = equalities.iter().try_for_each(|&block| {
            let row = system.blocks[block].first;
            let off = system.rhs[row] - system.matrix.row_dot(row, &system.x);
            let allowed = CONSISTENT * (system.row_length(row) + system.rhs[row].abs()).max(1e-3);
            if off.abs() > allowed { Err(Contradiction { block }) } else { Ok(()) }
        });
        (system, decision, outcome)
    }

    pub fn row_length(&self, row: usize) -> f64 {
        self.matrix.row(row).map(|(_, v)| v * v).sum::<f64>().sqrt()
    }

    pub fn push_row(&mut self, entries: impl IntoIterator<Item = (usize, f64)>, rhs: f64, source: RowSource) {
        self.matrix.push(entries);
        self.rhs.push(rhs);
        self.source.push(source);
    }

    /// Appends a block made of the rows pushed last.
    pub fn close_block(&mut self, len: usize, kind: Kind) -> usize {
        self.blocks.push(Block { first: self.rhs.len() - len, len, kind, part: Part::Live });
        self.blocks.len() - 1
    }

    /// Takes the given rows into the equalities' factorisation, as far as independent.
    pub fn fix(&mut self, rows: &[usize], threshold: f64, what: &'static str) -> RankDecision {
        let matrix = &self.matrix;
        let entries: Vec<_> = rows.iter().map(|&i| Entries::new(matrix, i)).collect();
        let (kept, decision) = self.space.append(&entries, threshold, what);
        self.pivots.extend(kept.iter().map(|&k| rows[k]));
        decision
    }

    /// Moves x by the shortest step onto the equalities.
    pub fn return_to_equalities(&mut self) {
        let mut off: Vec<f64> = self.pivots.iter().map(|&i| self.rhs[i] - self.matrix.row_dot(i, &self.x)).collect();
        self.space.add_correction(&mut off, &mut self.x);
    }

    /// The live inequality blocks in u. A block that no remaining direction moves is settled on the way;
    /// it contradicts the equalities where its slack lies outside its cone.
    pub fn reduce(&mut self) -> (Reduced, Result<(), Contradiction>) {
        let d = self.space.free();
        let mut reduced = Reduced { d, ..Reduced::default() };
        let mut outcome = Ok(());
        for index in 0..self.blocks.len() {
            let block = self.blocks[index];
            if block.part != Part::Live || block.kind == Kind::Equality {
                continue;
            }
            let (start, first) = (reduced.gamma.len(), reduced.at.len());
            reduced.gamma.resize(start + block.len * d, 0.0);
            let mut moves = false;
            for k in 0..block.len {
                let row = block.first + k;
                let out = &mut reduced.gamma[start + k * d..start + (k + 1) * d];
                self.space.project(Entries::new(&self.matrix, row), out);
                let length = self.row_length(row);
                moves |= norm(out) > DEPENDENT * length.max(1e-3);
                reduced.length.push(length);
                reduced.at.push(self.rhs[row] - self.matrix.row_dot(row, &self.x));
            }
            if !moves {
                let s = &reduced.at[first..];
                if inside(block.kind, s) < -CONSISTENT * (1.0 + super::dense::largest(s)) && outcome.is_ok() {
                    outcome = Err(Contradiction { block: index });
                }
                self.blocks[index].part = Part::Settled;
                reduced.gamma.truncate(start);
                reduced.at.truncate(first);
                reduced.length.truncate(first);
                continue;
            }
            reduced.blocks.push(ReducedBlock { block: index, first, len: block.len, kind: block.kind, soft: None });
        }
        (reduced, outcome)
    }

    /// What the answer shows: everything not retired, and where the rows went.
    pub fn snapshot(&self) -> (LevelSystem, Vec<usize>) {
        let mut shown = LevelSystem { rows: ConicRows::new(self.matrix.columns), source: Vec::new() };
        let mut origin = Vec::new();
        for block in self.blocks.iter().filter(|b| b.part != Part::Retired) {
            for row in block.first..block.first + block.len {
                shown.rows.matrix.start.push(0);
                let range = self.matrix.start[row]..self.matrix.start[row + 1];
                shown.rows.matrix.index.extend_from_slice(&self.matrix.index[range.clone()]);
                shown.rows.matrix.value.extend_from_slice(&self.matrix.value[range]);
                if let Some(last) = shown.rows.matrix.start.last_mut() {
                    *last = shown.rows.matrix.index.len();
                }
                shown.rows.rhs.push(self.rhs[row]);
                shown.source.push(self.source[row]);
                origin.push(row);
            }
            push_cone(&mut shown.rows.cones, block.kind, block.len);
        }
        (shown, origin)
    }
}

fn push_cone(cones: &mut Vec<Cone>, kind: Kind, len: usize) {
    match (kind, cones.last_mut()) {
        (Kind::Equality, Some(Cone::Zero(n))) | (Kind::Nonnegative, Some(Cone::Nonnegative(n))) => *n += len,
        (Kind::Equality, _) => cones.push(Cone::Zero(len)),
        (Kind::Nonnegative, _) => cones.push(Cone::Nonnegative(len)),
        (Kind::SecondOrder, _) => cones.push(Cone::SecondOrder(len)),
    }
}

/// Entries of one row; unlike `SparseRows::row` it can be walked again and again.
#[derive(Clone)]
pub(super) struct Entries<'a> {
    index: std::slice::Iter<'a, usize>,
    value: std::slice::Iter<'a, f64>,
}

impl<'a> Entries<'a> {
    pub fn new(rows: &'a SparseRows, i: usize) -> Self {
        let range = rows.start[i]..rows.start[i + 1];
        Entries { index: rows.index[range.clone()].iter(), value: rows.value[range].iter() }
    }
}

impl Iterator for Entries<'_> {
    type Item = (usize, f64);
    fn next(&mut self) -> Option<(usize, f64)> {
        Some((*self.index.next()?, *self.value.next()?))
    }
}
