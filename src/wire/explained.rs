//! Why nothing is feasible, in an answer: the proof, the least relaxation, what each limit alone would have to give, a set
//! that cannot hold together, and the answer at the least relaxation.

use schemars::JsonSchema;
use serde::Serialize;

use super::answer::{JointOut, SoleOut, StatusOut, TaskOut};
use super::number::{LinearAngularOut, Number, Numbers};
use super::report::{LevelOut, MarginOut};
use crate::explain::farkas::{Farkas, Multiplier};
use crate::explain::infeasible::{Alone, IrreducibleSet};
use crate::explain::relax::{GroupRelaxation, Relaxation, RowRelaxation};
use crate::model::Model;
use crate::reference::answer::{Explained, RelaxedAnswer};

/// Why nothing is feasible. A group is a limit or a must-hold task, by its name.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Explained")]
pub(super) struct ExplainedOut<'a> {
    /// Proof that the hard rows contradict each other, checked without the solver (no unit; bounds m/s^2, rad/s^2, N, N m);
    /// null where the solver found none.
    proof: Option<ProofOut<'a>>,
    /// Least relaxation over all groups, amounts each in its own unit; null where physics contradicts itself, for which no
    /// group is blamed.
    relaxation: Option<RelaxationOut<'a>>,
    /// What each group would have to give alone, the others held, each in its own unit.
    alone: Vec<AloneOut<'a>>,
    /// False where the bound on solves left groups out of `alone` (no unit).
    alone_complete: bool,
    /// Groups that cannot hold together with the physics (no unit).
    irreducible: IrreducibleOut<'a>,
    /// Solves the explanation took (no unit).
    solves: usize,
    /// The answer with every limit relaxed by the least relaxation (N m, rad/s^2, N and others); null where there is no
    /// relaxation or no answer at it.
    relaxed: Option<RelaxedOut<'a>>,
}

/// A proof of infeasibility. With multipliers z in the dual cones of the scaled hard rows A x <= b, a point x would need
/// b'z >= (A'z)'x: `value` is b'z, and `spill` bounds |(A'z)'x|.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "InfeasibilityProof")]
struct ProofOut<'a> {
    /// Right-hand side times multipliers, scaled rows (no unit).
    value: Number,
    /// Largest |(A'z)'x| over all x inside the bounds below, scaled rows (no unit).
    spill: Number,
    /// True where value plus spill is negative: the proof holds (no unit).
    holds: bool,
    /// Bound on every acceleration that the proof uses (m/s^2, rad/s^2).
    acceleration_bound: Number,
    /// Bound on every torque, force and moment that the proof uses (N, N m).
    force_bound: Number,
    /// Multipliers that carry the proof, of scaled rows (no unit).
    multipliers: Vec<MultiplierOut<'a>>,
    /// Every multiplier, one per row of `hard` in the assembled problem, scaled (no unit).
    projected: Numbers<'a>,
}

/// One multiplier of a proof.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ProofMultiplier")]
struct MultiplierOut<'a> {
    /// Limit, must-hold task or law (no unit).
    group: &'a str,
    /// The row within it (no unit).
    part: &'a str,
    /// True for rows of physics (no unit).
    physics: bool,
    /// Multiplier of the scaled row (no unit).
    value: Number,
}

/// The least relaxation of all groups together.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Relaxation")]
struct RelaxationOut<'a> {
    /// Sum of (amount over size) squared (no unit).
    sum: Number,
    /// No relaxation has a sum below this, by weak duality (no unit); 0 where nothing was proved.
    proved: Number,
    /// False where the solver could not confirm the optimum to rounding (no unit).
    exact: bool,
    /// Groups that give way, largest share first (shares, no unit).
    groups: Vec<GroupShareOut<'a>>,
    /// Rows that give way, largest share first, each in its own unit.
    rows: Vec<RowRelaxationOut<'a>>,
    /// How far each row of `hard` in the assembled problem gives way, scaled like the row (no unit).
    deltas: Numbers<'a>,
    /// Multipliers behind `proved`, one per row of `hard` in the assembled problem, scaled (no unit).
    multipliers: Numbers<'a>,
}

/// A group's part of a relaxation.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "GroupShare")]
struct GroupShareOut<'a> {
    /// Limit or must-hold task (no unit).
    group: &'a str,
    /// Its part of the sum, 0 to 1 (no unit).
    share: Number,
}

/// One row, or one cone, that gives way.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "RowRelaxation")]
struct RowRelaxationOut<'a> {
    /// Limit or must-hold task (no unit).
    group: &'a str,
    /// The row within it, or the first row of its cone (no unit).
    part: &'a str,
    /// How far it gives way (in `unit`): positive for limits; for must-hold tasks what the wanted value moves by.
    amount: Number,
    /// Unit of amount and size (no unit).
    unit: &'a str,
    /// Natural size of the limit, beside which the amount is judged (in `unit`).
    size: Number,
    /// Its part of the sum, 0 to 1 (no unit).
    share: Number,
}

/// What one group would have to give alone.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Alone")]
struct AloneOut<'a> {
    /// Limit or must-hold task (no unit).
    group: &'a str,
    /// Its least relaxation with everything else held, each row in its own unit; null where this group alone cannot make
    /// the request feasible.
    needs: Option<NeedsOut<'a>>,
}

/// The least relaxation of one group.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Needs")]
struct NeedsOut<'a> {
    /// Sum of (amount over size) squared (no unit).
    sum: Number,
    /// No relaxation of this group alone has a sum below this, by weak duality (no unit); 0 where nothing was proved.
    proved: Number,
    /// False where the solver could not confirm the optimum to rounding (no unit).
    exact: bool,
    /// Rows that give way, largest share first, each in its own unit.
    rows: Vec<RowRelaxationOut<'a>>,
}

/// Groups that cannot hold together with the physics, while every proper part of them can.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IrreducibleSet")]
struct IrreducibleOut<'a> {
    /// The groups (no unit). Another order of deletion may find another set.
    groups: &'a [String],
    /// False where the bound on solves was reached, so that the set may hold groups it does not need (no unit).
    complete: bool,
}

/// The answer at the least relaxation.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "RelaxedAnswer")]
struct RelaxedOut<'a> {
    /// How that solve ended (no unit); `solved`: every priority's optimality is certified over the relaxed limits.
    status: StatusOut,
    /// What every limit that gives way was granted beyond the least relaxation, relative to its natural size (no unit).
    slack: Number,
    /// Torque and acceleration of every moving joint in model order (N m, rad/s^2; N, m/s^2).
    joints: Vec<JointOut<'a>>,
    /// Acceleration of the base in `velocity_axes` (m/s^2, rad/s^2); null on a fixed base.
    base_acceleration: Option<LinearAngularOut>,
    /// One entry per contact, in request order (N, N m, m).
    soles: Vec<SoleOut<'a>>,
    /// One entry per task, in request order, each in its own unit.
    tasks: Vec<TaskOut<'a>>,
    /// One entry per priority (cost without unit).
    levels: Vec<LevelOut<'a>>,
    /// Room left to the limits as asked for, negative where they gave way, each in its own unit.
    margins: Vec<MarginOut<'a>>,
}

impl<'a> ExplainedOut<'a> {
    /// From the answer.
    pub(super) fn of(model: &'a Model, explained: &'a Explained) -> Self {
        let why = &explained.explanation;
        let IrreducibleSet { groups, complete } = &why.irreducible;
        ExplainedOut {
            proof: why.proof.as_ref().map(proof),
            relaxation: why.relaxation.as_ref().map(relaxation),
            alone: why.alone.iter().map(alone).collect(),
            alone_complete: why.alone_complete,
            irreducible: IrreducibleOut { groups, complete: *complete },
            solves: why.solves,
            relaxed: explained.relaxed.as_ref().map(|answer| relaxed(model, answer)),
        }
    }
}

fn proof<'a>(proof: &'a Farkas) -> ProofOut<'a> {
    let multiplier = |row: &'a Multiplier| MultiplierOut {
        group: &row.group,
        part: &row.part,
        physics: row.physics,
        value: Number(row.value),
    };
    ProofOut {
        value: Number(proof.value),
        spill: Number(proof.spill),
        holds: proof.holds,
        acceleration_bound: Number(proof.acceleration_bound),
        force_bound: Number(proof.force_bound),
        multipliers: proof.multipliers.iter().map(multiplier).collect(),
        projected: Numbers(&proof.projected),
    }
}

fn relaxation<'a>(relaxation: &'a Relaxation) -> RelaxationOut<'a> {
    let share = |part: &'a GroupRelaxation| GroupShareOut { group: &part.group, share: Number(part.share) };
    RelaxationOut {
        sum: Number(relaxation.sum),
        proved: Number(relaxation.proved),
        exact: relaxation.exact,
        groups: relaxation.groups.iter().map(share).collect(),
        rows: relaxation.rows.iter().map(row).collect(),
        deltas: Numbers(&relaxation.deltas),
        multipliers: Numbers(&relaxation.multipliers),
    }
}

fn row(row: &RowRelaxation) -> RowRelaxationOut<'_> {
    RowRelaxationOut {
        group: &row.group,
        part: &row.part,
        amount: Number(row.amount),
        unit: row.unit,
        size: Number(row.size),
        share: Number(row.share),
    }
}

fn alone(alone: &Alone) -> AloneOut<'_> {
    let needs = alone.needs.as_ref().map(|needs| NeedsOut {
        sum: Number(needs.sum),
        proved: Number(needs.proved),
        exact: needs.exact,
        rows: needs.rows.iter().map(row).collect(),
    });
    AloneOut { group: &alone.group, needs }
}

fn relaxed<'a>(model: &'a Model, answer: &'a RelaxedAnswer) -> RelaxedOut<'a> {
    RelaxedOut {
        status: answer.status.into(),
        slack: Number(answer.slack),
        joints: JointOut::all(model, &answer.motion),
        base_acceleration: answer.motion.base_acceleration.map(Into::into),
        soles: answer.soles.iter().map(SoleOut::of).collect(),
        tasks: answer.tasks.iter().map(TaskOut::of).collect(),
        levels: answer.levels.iter().map(LevelOut::of).collect(),
        margins: answer.margins.iter().map(MarginOut::of).collect(),
    }
}
