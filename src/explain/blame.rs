//! Who can be blamed: the hard rows of a hierarchy as blocks, each physics or part of one named group; and hierarchies in
//! which groups are held, relaxed or dropped.

use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use super::ExplainError;
use crate::conic::{Cone, ConicRows, Hierarchy, Level, ResidualRows, RowName};
use crate::solve::{self, HierarchySolution, Options, Status};

/// What a block asks of its slack.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Kind {
    Equality,
    Nonnegative,
    SecondOrder,
}

/// Consecutive hard rows under one cone; equality and nonnegative rows are blocks of their own.
#[derive(Debug, Clone, Copy)]
pub(super) struct Block {
    pub first: usize,
    pub len: usize,
    pub kind: Kind,
    /// Index into `Blame::groups`; none for physics.
    pub group: Option<usize>,
}

/// What is done with a group.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Role {
    Hold,
    Relax,
    Drop,
}

/// The blocks of a list of cones: (first row, rows, kind).
pub(super) fn pieces(cones: &[Cone]) -> Vec<(usize, usize, Kind)> {
    let mut out = Vec::new();
    let mut first = 0;
    for cone in cones {
        match *cone {
            Cone::Zero(n) => out.extend((first..first + n).map(|i| (i, 1, Kind::Equality))),
            Cone::Nonnegative(n) => out.extend((first..first + n).map(|i| (i, 1, Kind::Nonnegative))),
            Cone::SecondOrder(0) => {}
            Cone::SecondOrder(1) => out.push((first, 1, Kind::Nonnegative)),
            Cone::SecondOrder(n) => out.push((first, n, Kind::SecondOrder)),
        }
        first += cone.dimension();
    }
    out
}

/// A hierarchy made from some of the hard rows, and where each of its rows came from.
pub(super) struct Program {
    pub hierarchy: Hierarchy,
    /// Hard rows held.
    pub held: Vec<usize>,
    /// Rows of the relaxed limits.
    pub soft: Vec<usize>,
    /// Rows of the relaxed must-hold tasks.
    pub residuals: Vec<usize>,
    /// What each row of the original hierarchy was multiplied by.
    pub factor: Vec<f64>,
}

/// The hard rows of a hierarchy by blame.
pub(super) struct Blame<'a> {
    pub hierarchy: &'a Hierarchy,
    pub groups: Vec<String>,
    pub blocks: Vec<Block>,
    /// Natural size of each hard row (physical): what an excess of 1 means.
    pub sizes: &'a [f64],
    pub cancel: Option<&'a Arc<AtomicBool>>,
    /// Solves done so far.
    pub solves: usize,
}

impl<'a> Blame<'a> {
    pub fn new(
        hierarchy: &'a Hierarchy,
        sizes: &'a [f64],
        cancel: Option<&'a Arc<AtomicBool>>,
    ) -> Result<Blame<'a>, ExplainError> {
        let hard = &hierarchy.hard;
        let usable = sizes.iter().filter(|s| s.is_finite() && **s > 0.0).count();
        let rows = hard.rhs.len();
        if sizes.len() != rows || usable != rows || hard.names.len() != rows {
            return Err(ExplainError::Sizes { expected: rows, found: usable });
        }
        let mut groups: Vec<String> = Vec::new();
        let blocks = pieces(&hard.cones)
            .into_iter()
            .map(|(first, len, kind)| {
                let name = &hard.names[first];
                let group = (!name.physics).then(|| match groups.iter().position(|g| *g == name.group) {
                    Some(at) => at,
                    None => {
                        groups.push(name.group.clone());
                        groups.len() - 1
                    }
                });
                Block { first, len, kind, group }
            })
            .collect();
        Ok(Blame { hierarchy, groups, blocks, sizes, cancel, solves: 0 })
    }

    fn role(&self, block: &Block, roles: &[Role]) -> Role {
        block.group.map_or(Role::Hold, |g| roles[g])
    }

    /// Blocks that `roles` relaxes, in row order: equalities among them become residuals, the others soft limits.
    pub fn relaxed<'s>(&'s self, roles: &'s [Role]) -> impl Iterator<Item = &'s Block> {
        self.blocks.iter().filter(|b| self.role(b, roles) == Role::Relax)
    }

    /// What a scaled excess of one in this row is worth relative to its natural size.
    pub fn ratio(&self, row: usize) -> f64 {
        self.hierarchy.hard.names[row].scale / self.sizes[row]
    }

    /// Factor of a block in the programs made here, so that they are the same however the rows were divided: named rows
    /// are measured in their natural size, physics rows have a largest entry of 1.
    pub fn factor(&self, block: &Block) -> f64 {
        if block.group.is_some() {
            return self.ratio(block.first);
        }
        let matrix = &self.hierarchy.hard.matrix;
        let rows = block.first..block.first + block.len;
        let largest = rows.flat_map(|row| matrix.row(row)).fold(0.0f64, |m, (_, v)| m.max(v.abs()));
        if largest > 0.0 { 1.0 / largest } else { 1.0 }
    }

    /// The hierarchy in which groups are held, dropped, or relaxed at a cost of `sum (excess / size)^2`.
    pub fn program(&self, roles: &[Role]) -> Program {
        let source = &self.hierarchy.hard;
        let columns = self.hierarchy.columns.len();
        let mut hard = ConicRows::new(columns);
        let mut level = Level {
            priority: 1,
            residuals: ResidualRows::new(columns),
            soft: ConicRows::new(columns),
            soft_weight: Vec::new(),
        };
        let (mut held, mut soft, mut residuals, mut factors) = (Vec::new(), Vec::new(), Vec::new(), Vec::new());
        for block in &self.blocks {
            let factor = self.factor(block);
            factors.extend(std::iter::repeat_n(factor, block.len));
            match (self.role(block, roles), block.kind) {
                (Role::Drop, _) => {}
                (Role::Hold, _) => {
                    copy_block(source, block, factor, &mut hard);
                    held.extend(block.first..block.first + block.len);
                }
                (Role::Relax, Kind::Equality) => {
                    let row = block.first;
                    residuals.push(row);
                    level.residuals.matrix.push(source.matrix.row(row).map(|(j, v)| (j, factor * v)));
                    level.residuals.rhs.push(factor * source.rhs[row]);
                    level.residuals.weight.push(1.0);
                    level.residuals.names.push(source.names[row].clone());
                }
                (Role::Relax, _) => {
                    copy_block(source, block, factor, &mut level.soft);
                    soft.extend(block.first..block.first + block.len);
                    level.soft_weight.push(1.0);
                }
            }
        }
        let empty = level.residuals.rhs.is_empty() && level.soft.rhs.is_empty();
        let hierarchy = Hierarchy {
            columns: self.hierarchy.columns.clone(),
            hard,
            levels: if empty { Vec::new() } else { vec![level] },
            tie_break: self.hierarchy.tie_break.clone(),
            auxiliary: self.hierarchy.auxiliary.clone(),
        };
        Program { hierarchy, held, soft, residuals, factor: factors }
    }

    /// Solves and counts.
    pub fn solve(&mut self, hierarchy: &Hierarchy) -> Result<HierarchySolution, ExplainError> {
        self.solves += 1;
        run(hierarchy, self.cancel)
    }
}

/// One solve, cancellation as an error.
pub(super) fn run(hierarchy: &Hierarchy, cancel: Option<&Arc<AtomicBool>>) -> Result<HierarchySolution, ExplainError> {
    let solution = solve::solve(hierarchy, &Options::default(), cancel)?;
    if solution.status == Status::Cancelled { Err(ExplainError::Cancelled) } else { Ok(solution) }
}

/// Appends a block, its rows multiplied by `factor`.
pub(super) fn copy_block(from: &ConicRows, block: &Block, factor: f64, to: &mut ConicRows) {
    for row in block.first..block.first + block.len {
        to.matrix.push(from.matrix.row(row).map(|(j, v)| (j, factor * v)));
        to.rhs.push(factor * from.rhs[row]);
        to.names.push(from.names.get(row).cloned().unwrap_or_else(unnamed));
    }
    let cone = match block.kind {
        Kind::Equality => Cone::Zero(block.len),
        Kind::Nonnegative => Cone::Nonnegative(block.len),
        Kind::SecondOrder => Cone::SecondOrder(block.len),
    };
    match (to.cones.last_mut(), cone) {
        (Some(Cone::Zero(n)), Cone::Zero(m)) | (Some(Cone::Nonnegative(n)), Cone::Nonnegative(m)) => *n += m,
        _ => to.cones.push(cone),
    }
}

fn unnamed() -> RowName {
    RowName { group: String::new(), part: String::new(), unit: "", scale: 1.0, physics: true }
}
