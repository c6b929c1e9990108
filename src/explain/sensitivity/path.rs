//! The cascade walked once more, with derivatives: level by level, from what each held and exposed.

use nalgebra::DVector;

use super::constraint::{Boundary, Equation};
use super::data::{Data, Source};
use super::level::{Own, Step, differentiate};
use super::{NEAR_MULTIPLIER, NEAR_SLACK, NearChange};
use crate::conic::{ConicRows, Hierarchy, RowName};
use crate::explain::blame::{Kind, pieces};
use crate::solve::{Exposed, FaceDecision, FaceKind, HierarchySolution, LevelOutcome, RowSource};

/// A multiplier of the tie-break above this part of the largest belongs to a block that binds.
const BINDS: f64 = 1e-8;
/// Rows of the data, and of faces, count as dependent below this relative length.
const DEPENDENT: f64 = 1e-7;
/// Rows that the cascade has found independent count as dependent below this.
const DEPENDENT_FROZEN: f64 = 1e-9;
/// A dual point this close (relative) to the boundary of its cone lies on it.
const ON_BOUNDARY: f64 = 1e-6;

/// What the walk found.
pub(super) struct Walked {
    /// Change of the answer (scaled), per parameter.
    pub dx: Vec<DVector<f64>>,
    /// Per parameter: some level's optimum jumps with it.
    pub jumps: Vec<bool>,
    pub near: Vec<NearChange>,
    /// Per parameter, see `Derivative::reaches`.
    pub reaches: Vec<Option<f64>>,
    pub slacks: Slacks,
    /// The worst level's gradient that its equations do not explain, relative.
    pub unexplained: f64,
}

/// Slack of every limit that does not bind, and its change per parameter.
#[derive(Default)]
pub(super) struct Slacks {
    pub slack: Vec<f64>,
    pub change: Vec<Vec<f64>>,
}

impl Slacks {
    /// The smallest relative change of the given parameters together at which a slack vanishes.
    pub fn reaches(&self, parameters: &[usize]) -> Option<f64> {
        self.slack
            .iter()
            .zip(&self.change)
            .map(|(s, change)| (s, parameters.iter().filter_map(|&p| change.get(p)).sum::<f64>()))
            .filter(|(_, rate)| rate.abs() > 1e-12)
            .map(|(s, rate)| s / rate.abs())
            .min_by(f64::total_cmp)
    }
}

struct Walk<'a> {
    data: &'a Data<'a>,
    x: &'a [f64],
    fixed: Vec<Equation>,
    /// Orthonormal basis of the gradients of `fixed`.
    basis: Vec<DVector<f64>>,
    /// Blocks that some equation holds, by source and first row.
    held: Vec<(Source, usize)>,
    near: Vec<NearChange>,
    jumps: Vec<bool>,
    unexplained: f64,
}

/// Walks the cascade; none where a cone is held at a point without direction.
pub(super) fn walk(data: &Data, solution: &HierarchySolution) -> Option<Walked> {
    let mut walk = Walk {
        data,
        x: &solution.x,
        fixed: Vec::new(),
        basis: Vec::new(),
        held: Vec::new(),
        near: Vec::new(),
        jumps: vec![false; data.parameters()],
        unexplained: 0.0,
    };
    for (first, _, kind) in pieces(&data.base.hard.cones) {
        if kind == Kind::Equality {
            walk.hold(Source::Hard, first, 1);
        }
    }
    walk.interior_faces(&solution.hard_faces)?;
    for (index, outcome) in solution.levels.iter().enumerate() {
        let exposed: Vec<(RowSource, bool)> = outcome
            .faces
            .iter()
            .filter(|f| f.exposed == Exposed::ByMultiplier)
            .map(|f| (f.source, matches!(f.kind, FaceKind::Ray { .. })))
            .collect();
        let own = walk.own(index, &exposed)?;
        let step = walk.step(index, &own);
        walk.freeze(index, &own, &step, solution);
        walk.interior_faces(&outcome.faces)?;
    }
    let last = solution.levels.len();
    let own = walk.own(last, &binding(solution.tie_break.as_ref()?))?;
    let step = walk.step(last, &own);
    walk.held.extend(own.iter().filter_map(place));
    let slacks = walk.slacks(&step.dx);
    let reaches = (0..data.parameters()).map(|p| slacks.reaches(&[p])).collect();
    Some(Walked { dx: step.dx, jumps: walk.jumps, near: walk.near, reaches, slacks, unexplained: walk.unexplained })
}

fn place(own: &Own) -> Option<(Source, usize)> {
    match own {
        Own::Flat { source, first, .. } => Some((*source, *first)),
        Own::Boundary(boundary) => Some((boundary.source, boundary.first)),
        Own::SoftRow { .. } | Own::SoftBoundary { .. } => None,
    }
}

/// Blocks with a multiplier in a level that was not frozen: (source, on the boundary of a second-order cone).
fn binding(outcome: &LevelOutcome) -> Vec<(RowSource, bool)> {
    let z = &outcome.multipliers;
    let largest = z.iter().fold(0.0f64, |m, v| m.max(v.abs()));
    let mut out = Vec::new();
    for (first, len, kind) in pieces(&outcome.system.rows.cones) {
        if kind == Kind::Equality || z[first] <= BINDS * largest {
            continue;
        }
        let tail = z[first + 1..first + len].iter().map(|v| v * v).sum::<f64>().sqrt();
        out.push((outcome.system.source[first], kind == Kind::SecondOrder && tail >= (1.0 - ON_BOUNDARY) * z[first]));
    }
    out
}

/// The block of `rows` that starts at or holds `row`, and the index of its weight among soft blocks.
fn block_of(rows: &ConicRows, row: usize) -> Option<(usize, usize, usize)> {
    pieces(&rows.cones)
        .into_iter()
        .enumerate()
        .find(|(_, (first, len, _))| (*first..first + len).contains(&row))
        .map(|(index, (first, len, _))| (index, first, len))
}

impl Walk<'_> {
    fn hold(&mut self, source: Source, first: usize, len: usize) {
        for row in first..first + len {
            self.fix(Equation::flat(self.data, source, row, self.x), DEPENDENT);
        }
        self.held.push((source, first));
    }

    /// Adds an equation where it is independent of those before it. A row that a level exposed by its multiplier is a combination
    /// of what the level froze, so it moves along with that by itself; adding it would add rounding as an equation.
    fn fix(&mut self, equation: Equation, threshold: f64) {
        let mut rest = equation.gradient(self.data);
        let length = rest.norm();
        for _ in 0..2 {
            for direction in &self.basis {
                let along = direction.dot(&rest);
                rest.axpy(-along, direction, 1.0);
            }
        }
        let left = rest.norm();
        if left > threshold * length {
            self.basis.push(rest / left);
            self.fixed.push(equation);
        }
    }

    fn rows(&self, source: Source) -> Option<&ConicRows> {
        match source {
            Source::Hard => Some(&self.data.base.hard),
            Source::Soft(k) => self.data.base.levels.get(k).map(|l| &l.soft),
            Source::Residual(_) => None,
        }
    }

    /// The blocks that level `index` holds by its own multipliers.
    fn own(&self, index: usize, exposed: &[(RowSource, bool)]) -> Option<Vec<Own>> {
        let mut out = Vec::new();
        for &(source, on_boundary) in exposed {
            let (source, row) = match source {
                RowSource::Hard { row } => (Source::Hard, row),
                RowSource::Soft { level, row } => (Source::Soft(level), row),
                // A ray's own end, a face of a face: the cone is at its apex.
                _ => return None,
            };
            let (weight, first, len) = block_of(self.rows(source)?, row)?;
            let soft = source == Source::Soft(index);
            if !on_boundary {
                let costs = usize::from(soft);
                if soft {
                    out.push(Own::SoftRow { row: first, weight });
                }
                if len > costs {
                    out.push(Own::Flat { source, first: first + costs, len: len - costs });
                }
                continue;
            }
            let boundary = Boundary::new(self.data, source, first, len, self.x)?;
            out.push(if soft {
                let excess = boundary.radius - self.data.slack(source, first, self.x);
                Own::SoftBoundary { boundary, weight, excess }
            } else {
                Own::Boundary(boundary)
            });
        }
        Some(out)
    }

    fn step(&mut self, index: usize, own: &[Own]) -> Step {
        let step = differentiate(self.data, index, &self.fixed, own, self.x);
        if step.gradient_counts {
            self.unexplained = self.unexplained.max(step.unexplained);
        }
        self.jumps.iter_mut().zip(&step.jumps).for_each(|(all, one)| *all |= one);
        let largest = step.multipliers.iter().map(|m| m.2).fold(step.gradient, f64::max);
        for &(source, first, size) in &step.multipliers {
            if size < NEAR_MULTIPLIER * largest {
                self.note(source, first, size / largest, true);
            }
        }
        step
    }

    fn note(&mut self, source: Source, row: usize, value: f64, binds: bool) {
        let name: Option<&RowName> = self.rows(source).and_then(|rows| rows.names.get(row));
        if let Some(name) = name.filter(|n| !n.physics) {
            let found = NearChange { limit: name.group.clone(), part: name.part.clone(), value, binds };
            self.near.push(found);
        }
    }

    /// What a level decided holds from here on.
    fn freeze(&mut self, index: usize, own: &[Own], step: &Step, solution: &HierarchySolution) {
        for source in &solution.remaining.source {
            if let RowSource::Frozen { level, row } = *source
                && level == index
            {
                self.fix(Equation::frozen(self.data, Source::Residual(index), row, &step.dx), DEPENDENT_FROZEN);
            }
        }
        for block in own {
            match block {
                Own::Flat { source, first, len } => self.hold(*source, *first, *len),
                Own::Boundary(boundary) => {
                    boundary.ray(&step.dx, &[]).into_iter().for_each(|e| self.fix(e, DEPENDENT));
                    self.held.push((boundary.source, boundary.first));
                }
                Own::SoftRow { row, .. } => {
                    self.fix(Equation::frozen(self.data, Source::Soft(index), *row, &step.dx), DEPENDENT);
                    self.held.push((Source::Soft(index), *row));
                }
                Own::SoftBoundary { boundary, .. } => {
                    let equation = boundary.equation();
                    let gradient = equation.gradient(self.data);
                    let excess: Vec<f64> =
                        equation.change.iter().zip(&step.dx).map(|(change, d)| change + gradient.dot(d)).collect();
                    boundary.ray(&step.dx, &excess).into_iter().for_each(|e| self.fix(e, DEPENDENT));
                    self.held.push((boundary.source, boundary.first));
                }
            }
        }
    }

    /// Faces that no multiplier exposed: sets without interior, held as they stand.
    fn interior_faces(&mut self, faces: &[FaceDecision]) -> Option<()> {
        for face in faces.iter().filter(|f| f.exposed != Exposed::ByMultiplier) {
            let (source, row) = match face.source {
                RowSource::Hard { row } | RowSource::HardFace { row } => (Source::Hard, row),
                RowSource::Soft { level, row } | RowSource::SoftFace { level, row } => (Source::Soft(level), row),
                _ => return None,
            };
            if matches!(face.kind, FaceKind::Ray { .. }) {
                return None;
            }
            let (_, first, len) = block_of(self.rows(source)?, row)?;
            self.hold(source, first, len);
            self.note(source, first, 0.0, true);
        }
        Some(())
    }

    /// Limits that do not bind: noted where they nearly do, and listed with their changes.
    fn slacks(&mut self, dx: &[DVector<f64>]) -> Slacks {
        let mut out = Slacks::default();
        let hierarchy: &Hierarchy = self.data.base;
        let sources = std::iter::once((Source::Hard, &hierarchy.hard))
            .chain(hierarchy.levels.iter().enumerate().map(|(k, l)| (Source::Soft(k), &l.soft)));
        for (source, rows) in sources {
            for (first, len, kind) in pieces(&rows.cones) {
                if kind == Kind::Equality || self.held.contains(&(source, first)) {
                    continue;
                }
                let tail: f64 = (first + 1..first + len).map(|r| self.data.slack(source, r, self.x).powi(2)).sum::<f64>().sqrt();
                let slack = self.data.slack(source, first, self.x) - tail;
                if slack < NEAR_SLACK {
                    self.note(source, first, slack, false);
                }
                let moves = |row: usize, p: usize| {
                    self.data.slack_change(p, source, row, self.x) - self.data.row(source, row).dot(&dx[p])
                };
                let change = (0..dx.len())
                    .map(|p| {
                        let along: f64 = (first + 1..first + len)
                            .map(|r| self.data.slack(source, r, self.x) * moves(r, p))
                            .sum::<f64>();
                        moves(first, p) - if tail > 0.0 { along / tail } else { 0.0 }
                    })
                    .collect();
                out.slack.push(slack.max(0.0));
                out.change.push(change);
            }
        }
        out
    }
}
