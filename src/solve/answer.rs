//! What a solve returns, and what it asks for.
//!
//! Conventions of every multiplier in this file: the cost of a level is `sum w (a x - b)^2 +
//! sum v t^2` WITHOUT a factor 1/2, and stationarity reads
//! `2 A'W (A x - b) + S'z + T'y = 0`, where S are the rows of [`LevelOutcome::system`] with
//! `s = rhs - S x`, z in the dual cone, `s'z = 0`; T are the level's own soft rows with slacks t and
//! multipliers y in the dual cone, complementary to `rhs - T x + t e`, and `2 v t = e'y`.
//! A multiplier is thus the derivative of the cost by the right-hand side, with the sign reversed.

use crate::conic::{ConicRows, Hierarchy, RowName};

/// How a solve is to be done.
#[derive(Debug, Clone, PartialEq)]
pub struct Options {
    /// Tolerance of the interior-point engine (relative, scaled data).
    pub engine_tolerance: f64,
    /// Bound on the engine's iterations per run.
    pub engine_iterations: u32,
    /// Whether later levels first try Newton steps from the point before them, which needs no engine
    /// where the optimality conditions then hold to rounding.
    pub warm: bool,
}

impl Default for Options {
    fn default() -> Self {
        Options { engine_tolerance: 1e-10, engine_iterations: 200, warm: true }
    }
}

/// What became of the question.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Status {
    /// Every level at its optimum.
    Solved,
    /// The hard rows contradict each other; see the certificate.
    Infeasible,
    /// Answered, but the answer moves like the square root of the data: a second-order cone has no
    /// interior left over a frozen set.
    IllPosed,
    /// The engine stopped early and refinement could not confirm its point.
    Inaccurate,
    /// The caller asked to stop.
    Cancelled,
}

/// Why a hierarchy could not be read, or the engine could not be started.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SolveError {
    /// A dimension does not fit.
    #[error("{what}: expected {expected}, found {found}")]
    Dimension {
        /// Which part of the hierarchy.
        what: String,
        /// What was expected.
        expected: usize,
        /// What was found.
        found: usize,
    },
    /// A number is not usable where it stands.
    #[error("{what}, entry {index}: {value} is not {expected}")]
    Number {
        /// Which part of the hierarchy.
        what: String,
        /// Which entry.
        index: usize,
        /// The value found.
        value: f64,
        /// What was expected.
        expected: &'static str,
    },
    /// The engine refused the program.
    #[error("the engine refused the program: {detail}")]
    Engine {
        /// What it said.
        detail: String,
    },
}

/// Where a row of a level's system comes from.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RowSource {
    /// Row of `hierarchy.hard`, its cone as given.
    Hard {
        /// Row index there.
        row: usize,
    },
    /// Row of `hierarchy.hard` that a face turned into an equality.
    HardFace {
        /// Row index there.
        row: usize,
    },
    /// Residual row of an earlier level, frozen at its optimum.
    Frozen {
        /// Index into `hierarchy.levels`; `levels.len()` is the tie-break.
        level: usize,
        /// Row index in its residuals.
        row: usize,
    },
    /// Soft row of an earlier level, relaxed by its optimal slack.
    Soft {
        /// Index into `hierarchy.levels`.
        level: usize,
        /// Row index in its soft rows.
        row: usize,
    },
    /// Relaxed soft row of an earlier level that a face turned into an equality.
    SoftFace {
        /// Index into `hierarchy.levels`.
        level: usize,
        /// Row index in its soft rows.
        row: usize,
    },
    /// A combination of the rows of one second-order block, which a face restricted to one ray.
    Ray {
        /// Level whose block it is; `None` for a hard block.
        level: Option<usize>,
        /// First row of the block in the hard or soft rows.
        row: usize,
    },
}

impl RowSource {
    /// The name of the row it comes from, where it has one.
    pub fn name<'a>(&self, hierarchy: &'a Hierarchy) -> Option<&'a RowName> {
        let soft = |level: usize, row: usize| hierarchy.levels.get(level).and_then(|l| l.soft.names.get(row));
        match *self {
            RowSource::Hard { row } | RowSource::HardFace { row } | RowSource::Ray { level: None, row } => {
                hierarchy.hard.names.get(row)
            }
            RowSource::Frozen { level, row } => {
                hierarchy.levels.get(level).map_or(&hierarchy.tie_break, |l| &l.residuals).names.get(row)
            }
            RowSource::Soft { level, row } | RowSource::SoftFace { level, row } => soft(level, row),
            RowSource::Ray { level: Some(level), row } => soft(level, row),
        }
    }

    pub(super) fn as_face(self) -> RowSource {
        match self {
            RowSource::Hard { row } => RowSource::HardFace { row },
            RowSource::Soft { level, row } => RowSource::SoftFace { level, row },
            other => other,
        }
    }

    pub(super) fn as_ray(self) -> RowSource {
        match self {
            RowSource::Hard { row } | RowSource::HardFace { row } => RowSource::Ray { level: None, row },
            RowSource::Soft { level, row } | RowSource::SoftFace { level, row } => {
                RowSource::Ray { level: Some(level), row }
            }
            other => other,
        }
    }
}

/// One rank decision and the gap it rested on. Values are lengths of rows outside the span of what
/// was kept before, relative to their own length: 1 is orthogonal, 0 dependent.
#[derive(Debug, Clone, PartialEq)]
pub struct RankDecision {
    /// What was decided, in plain words.
    pub what: &'static str,
    /// Rows looked at.
    pub rows: usize,
    /// Rows kept as independent.
    pub kept: usize,
    /// Smallest value kept (1 where nothing was).
    pub smallest_kept: f64,
    /// Largest value dropped (0 where nothing was).
    pub largest_dropped: f64,
    /// The threshold between them.
    pub threshold: f64,
}

impl RankDecision {
    /// `smallest_kept / largest_dropped`; infinite where nothing was dropped, or only exact zeros.
    pub fn gap(&self) -> f64 {
        self.smallest_kept / self.largest_dropped
    }
}

/// What a face restricts a block to.
#[derive(Debug, Clone, PartialEq)]
pub enum FaceKind {
    /// A nonnegative row became an equality.
    Equality,
    /// A second-order block is held at its apex `s = 0`.
    Apex,
    /// A second-order block is held on the ray `s = lambda (1, direction)`, `lambda >= 0`.
    Ray {
        /// Unit vector.
        direction: Vec<f64>,
    },
}

/// What exposed a face.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Exposed {
    /// The level's own multiplier on the block: `z's(x)` is constant over the frozen set.
    ByMultiplier,
    /// No interior was left: the largest t with `s - t e` in the cone was this, zero within tolerance.
    ByInteriorTest {
        /// The largest t found.
        largest: f64,
    },
}

/// One cone restricted to a face.
#[derive(Debug, Clone, PartialEq)]
pub struct FaceDecision {
    /// First row of the block.
    pub source: RowSource,
    /// What it is restricted to.
    pub kind: FaceKind,
    /// What exposed it.
    pub exposed: Exposed,
    /// The exposing multiplier, one entry per row of the block.
    pub multiplier: Vec<f64>,
}

/// The constraint system a level was solved over. The `names` inside stay empty: `source` leads to them.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct LevelSystem {
    /// Rows over x.
    pub rows: ConicRows,
    /// Where each row comes from.
    pub source: Vec<RowSource>,
}

/// How well the optimality conditions hold (scaled; relative to the largest row of the cost gradient).
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Optimality {
    /// Largest entry of the stationarity residual.
    pub stationarity: f64,
    /// Largest violation of a row or cone.
    pub violation: f64,
    /// Largest `|s'z|` of a block.
    pub complementarity: f64,
}

impl Optimality {
    /// The largest of the three.
    pub fn worst(&self) -> f64 {
        self.stationarity.max(self.violation).max(self.complementarity)
    }
}

/// One level at its optimum.
#[derive(Debug, Clone, PartialEq)]
pub struct LevelOutcome {
    /// The user's priority number (0 for the tie-break).
    pub priority: u32,
    /// The point this level ended at (scaled).
    pub x: Vec<f64>,
    /// What the level was solved over.
    pub system: LevelSystem,
    /// One multiplier per row of the system. They hold at the final x of the cascade as well.
    pub multipliers: Vec<f64>,
    /// Slack of each soft row of a nonnegative cone and of each second-order block.
    pub soft_slack: Vec<f64>,
    /// One multiplier per soft row.
    pub soft_multipliers: Vec<f64>,
    /// `sum w r^2 + sum v t^2`.
    pub cost: f64,
    /// `A x - b`, unweighted.
    pub residual: Vec<f64>,
    /// Rank decisions made when the level was frozen.
    pub rank: Vec<RankDecision>,
    /// Faces fixed when the level was frozen.
    pub faces: Vec<FaceDecision>,
    /// Whether Newton refinement confirmed and sharpened the point.
    pub refined: bool,
    /// Stated bound on the error of `sqrt(w) (A x - b)` (scaled, Euclidean): an estimate from the last Newton
    /// step where refined, from the optimality residuals where not.
    pub bound: f64,
    /// How well the optimality conditions hold.
    pub optimality: Optimality,
    /// Engine iterations (0 where Newton steps alone sufficed).
    pub iterations: u32,
}

/// The freedom left after the last level, before the tie-break.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct FreeDirections {
    /// Number of free directions that move a column that counts.
    pub dimension: usize,
    /// Orthonormal (scaled columns) basis of their part in the columns that count, one entry per column
    /// of the hierarchy, zero on auxiliary columns.
    pub basis: Vec<Vec<f64>>,
    /// Dimension of the affine hull of what is left, auxiliary columns counted.
    pub hull: usize,
    /// The rank decision this rested on.
    pub rank: Option<RankDecision>,
}

/// Proof that the hard rows contradict each other: z in the dual cone, `A'z = 0` up to `spill`, `b'z < 0`.
#[derive(Debug, Clone, PartialEq)]
pub struct InfeasibilityCertificate {
    /// One multiplier per hard row, in the dual cone, largest entry 1.
    pub multipliers: Vec<f64>,
    /// `b'z`, negative.
    pub value: f64,
    /// `sum |A'z|`.
    pub spill: f64,
    /// No point with every |x_j| below this satisfies the rows: `-value / spill`.
    pub box_radius: f64,
}

/// The answer to a hierarchy.
#[derive(Debug, Clone, PartialEq)]
pub struct HierarchySolution {
    /// What became of the question.
    pub status: Status,
    /// The answer (scaled); the best point found where the status is not `Solved` or `IllPosed`.
    pub x: Vec<f64>,
    /// The levels that were solved, in order.
    pub levels: Vec<LevelOutcome>,
    /// The tie-break level, absent where the solve ended before it.
    pub tie_break: Option<LevelOutcome>,
    /// Rank of the hard equalities.
    pub hard_rank: RankDecision,
    /// Faces of the hard rows that hold before any level, because they have no interior.
    pub hard_faces: Vec<FaceDecision>,
    /// Everything that holds after the last level: what the tie-break was solved over.
    pub remaining: LevelSystem,
    /// Freedom left before the tie-break.
    pub free: FreeDirections,
    /// Present where infeasible.
    pub infeasibility: Option<InfeasibilityCertificate>,
    /// Stated bound on the error of x (scaled, Euclidean, estimated).
    pub bound: f64,
}
