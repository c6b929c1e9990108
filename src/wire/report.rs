//! The parts of an answer that say how good it is and what holds it back.

use schemars::JsonSchema;
use serde::Serialize;

use super::number::Number;
use crate::certify::{Certificate, Check, LevelCheck};
use crate::reference::answer::{
    Binding, Blocking, FreeDirection, GroundReport, LevelAnswer, Margin, SoleGround,
};

/// One priority level.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "LevelAnswer")]
pub(super) struct LevelOut<'a> {
    /// Priority (no unit).
    priority: u32,
    /// Cost reached, tasks and soft limits (no unit).
    cost: Number,
    /// Rows the tasks of this level added (no unit).
    rows: usize,
    /// Independent rows among them, given all that was frozen before (no unit).
    rank: usize,
    /// Smallest pivot kept by the rank decision, relative to the largest (no unit); null where there
    /// was none.
    smallest_kept: Option<Number>,
    /// Largest pivot dropped by the rank decision, relative to the largest (no unit); null where none
    /// was dropped.
    largest_dropped: Option<Number>,
    /// Degrees of freedom left after this level (no unit).
    freedom_left: usize,
    /// Cone faces this level exposed and froze, in words (no unit).
    faces: &'a [String],
    /// True where Newton refinement on the active set was accepted (no unit).
    refined: bool,
    /// Stated bound on the scaled error of the answer after this level (no unit).
    error_bound: Number,
    /// Interior-point iterations (no unit).
    iterations: u32,
}

impl<'a> LevelOut<'a> {
    /// From the answer.
    pub(super) fn of(level: &'a LevelAnswer) -> Self {
        LevelOut {
            priority: level.priority,
            cost: Number(level.cost),
            rows: level.rows,
            rank: level.rank,
            smallest_kept: level.smallest_kept.map(Number),
            largest_dropped: level.largest_dropped.map(Number),
            freedom_left: level.freedom_left,
            faces: &level.faces,
            refined: level.refined,
            error_bound: Number(level.error_bound),
            iterations: level.iterations,
        }
    }
}

/// A limit that binds.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Binding")]
pub(super) struct BindingOut<'a> {
    /// The limit (no unit).
    limit: &'a str,
    /// The row within it (no unit).
    part: &'a str,
    /// Priority at which this multiplier was found (no unit).
    priority: u32,
    /// Change of that level's cost per unit of the limit (1 per `unit`).
    multiplier: Number,
    /// Unit of the limit (no unit).
    unit: &'a str,
}

impl<'a> BindingOut<'a> {
    /// From the answer.
    pub(super) fn of(binding: &'a Binding) -> Self {
        BindingOut {
            limit: &binding.limit,
            part: &binding.part,
            priority: binding.priority,
            multiplier: Number(binding.multiplier),
            unit: binding.unit,
        }
    }
}

/// Room left to a limit.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Margin")]
pub(super) struct MarginOut<'a> {
    /// The limit (no unit).
    limit: &'a str,
    /// The row within it (no unit).
    part: &'a str,
    /// Positive inside, negative where a soft limit is exceeded (in `unit`).
    margin: Number,
    /// Unit of the margin (no unit).
    unit: &'a str,
}

impl<'a> MarginOut<'a> {
    /// From the answer.
    pub(super) fn of(margin: &'a Margin) -> Self {
        MarginOut {
            limit: &margin.limit,
            part: &margin.part,
            margin: Number(margin.margin),
            unit: margin.unit,
        }
    }
}

/// A direction left free.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "FreeDirection")]
pub(super) struct FreeOut<'a> {
    /// Unknowns it moves, each in its own unit, largest first.
    parts: Vec<FreePartOut<'a>>,
}

/// One unknown that a free direction moves.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "FreePart")]
struct FreePartOut<'a> {
    /// Name of the unknown (no unit).
    name: &'a str,
    /// How far it moves (in `unit`).
    amount: Number,
    /// Unit of the amount (no unit).
    unit: &'a str,
}

impl<'a> FreeOut<'a> {
    /// From the answer.
    pub(super) fn of(direction: &'a FreeDirection) -> Self {
        let parts = direction.parts.iter();
        let parts = parts.map(|(name, amount, unit)| FreePartOut { name, amount: Number(*amount), unit });
        FreeOut { parts: parts.collect() }
    }
}

/// What was verified, recomputed without the solver.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Certificate")]
pub(super) struct CertificateOut<'a> {
    /// True where every figure is inside its bound (no unit).
    holds: bool,
    /// Every figure with its bound (no unit).
    checks: Vec<CheckOut<'a>>,
    /// Optimality, priority by priority (no unit).
    levels: Vec<LevelCheckOut>,
}

/// One figure of a certificate.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Check")]
struct CheckOut<'a> {
    /// Stable short name (no unit).
    name: &'a str,
    /// What value and bound are relative to (no unit).
    relative_to: &'a str,
    /// The figure (no unit).
    value: Number,
    /// The bound it has to meet (no unit).
    bound: Number,
    /// Where the largest value sits (no unit).
    worst: &'a str,
}

/// Optimality of the final answer for one priority.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "LevelCheck")]
struct LevelCheckOut {
    /// Priority (no unit).
    priority: u32,
    /// Largest entry of the stationarity residual, relative (no unit).
    stationarity: Number,
    /// Slack times multiplier, relative (no unit).
    complementarity: Number,
    /// Largest distance of a multiplier from its dual cone, relative (no unit).
    dual_violation: Number,
    /// Largest excess over a row the level had to obey, relative (no unit).
    feasibility: Number,
    /// The bound all four have to meet (no unit).
    bound: Number,
}

impl<'a> CertificateOut<'a> {
    /// From the answer.
    pub(super) fn of(certificate: &'a Certificate) -> Self {
        let check = |check: &'a Check| CheckOut {
            name: check.name,
            relative_to: check.relative_to,
            value: Number(check.value),
            bound: Number(check.bound),
            worst: &check.worst,
        };
        let level = |level: &LevelCheck| LevelCheckOut {
            priority: level.priority,
            stationarity: Number(level.stationarity),
            complementarity: Number(level.complementarity),
            dual_violation: Number(level.dual_violation),
            feasibility: Number(level.feasibility),
            bound: Number(level.bound),
        };
        CertificateOut {
            holds: certificate.holds,
            checks: certificate.checks.iter().map(check).collect(),
            levels: certificate.levels.iter().map(level).collect(),
        }
    }
}

/// What carries a proof of infeasibility.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Blocking")]
pub(super) struct BlockingOut<'a> {
    /// Limit or must-hold task (no unit).
    group: &'a str,
    /// Its share of the proof, 0 to 1 (no unit).
    share: Number,
}

impl<'a> BlockingOut<'a> {
    /// From the answer.
    pub(super) fn of(blocking: &'a Blocking) -> Self {
        BlockingOut { group: &blocking.group, share: Number(blocking.share) }
    }
}

/// Ground and tick in figures.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "GroundReport")]
pub(super) struct GroundOut<'a> {
    /// Largest eigenfrequency of the robot on its bed (rad/s); zero without soft soles, null where
    /// the answer was withheld.
    omega_max: Option<Number>,
    /// That frequency times the tick (no unit); the tick rules are rough above 0.3.
    omega_max_tick: Option<Number>,
    /// Rocking stiffness of the bed beside the weight that wants to topple (N m/rad); null without
    /// soft soles or with a rigid one.
    rocking: Option<RockingOut>,
    /// One entry per contact (s, m).
    soles: Vec<SoleGroundOut<'a>>,
}

/// Rocking stiffness against the weight that wants to topple.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Rocking")]
struct RockingOut {
    /// Least rocking stiffness of the bed about the centre of the soles (N m/rad).
    bed: Number,
    /// Mass times gravity times height of the centre of mass above the soles (N m/rad).
    weight: Number,
}

/// Ground figures of one sole.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "SoleGround")]
struct SoleGroundOut<'a> {
    /// Sole name (no unit).
    name: &'a str,
    /// Normal damping over stiffness (s); null on rigid ground or without stiffness.
    damping_time: Option<Number>,
    /// Normal tick times stiffness over damping (no unit); null on rigid ground or without damping.
    tick_stiffness_over_damping: Option<Number>,
    /// Normal sink under the present wrench, from the rest pose (m); null where it is not known.
    sink: Option<Number>,
}

impl<'a> GroundOut<'a> {
    /// From the answer.
    pub(super) fn of(ground: &'a GroundReport) -> Self {
        let sole = |sole: &'a SoleGround| SoleGroundOut {
            name: &sole.name,
            damping_time: sole.damping_time.map(Number),
            tick_stiffness_over_damping: sole.tick_stiffness_over_damping.map(Number),
            sink: sole.sink.map(Number),
        };
        GroundOut {
            omega_max: Some(Number(ground.omega_max)),
            omega_max_tick: Some(Number(ground.omega_max_tick)),
            rocking: ground
                .rocking
                .map(|rocking| RockingOut { bed: Number(rocking.bed), weight: Number(rocking.weight) }),
            soles: ground.soles.iter().map(sole).collect(),
        }
    }

    /// Where the answer is withheld.
    pub(super) fn nothing() -> Self {
        GroundOut { omega_max: None, omega_max_tick: None, rocking: None, soles: Vec::new() }
    }
}
