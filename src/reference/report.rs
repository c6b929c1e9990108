//! From the solver's scaled numbers to the answer's physical ones.

use super::Work;
use super::answer::{Binding, Blocking, FreeDirection, LevelAnswer, Motion, SoleAnswer, TaskAnswer};
use super::limits::edge_distance;
use crate::certify::{self, Certificate, Claim};
use crate::conic::LevelProof;
use crate::contact::friction::{center_of_pressure, friction_use};
use crate::problem::question::Importance;
use crate::solve::{FaceDecision, FaceKind, LevelOutcome, RowSource};
use crate::spatial::{Mat3, Vec3, Vec6, Wrench, head, tail};

/// Multipliers (scaled, relative to the largest of the level) below this do not count as binding.
const BINDING: f64 = 1e-7;
/// Shares of a proof of infeasibility below this are the engine's rounding.
const BLOCKING: f64 = 1e-6;
/// Parts of a free direction below this share of the largest are left out.
const FREE_PART: f64 = 1e-6;

/// The point found, in physical units.
pub(super) struct Found {
    /// Every unknown.
    pub x: Vec<f64>,
    /// Torque per joint, zero for passive joints.
    pub torques: Vec<f64>,
    /// Wrench at the tick's end, per contact.
    pub wrenches: Vec<Wrench>,
    /// Vertex forces, per contact.
    pub vertex_forces: Vec<Vec<Vec3>>,
    /// Average wrench over the tick, per contact.
    pub over_tick: Vec<Wrench>,
    linearisation: Vec<Option<[f64; 2]>>,
}

impl Found {
    pub fn new(work: &Work) -> Found {
        let layout = &work.assembly.layout;
        let x = layout.physical(&work.solution.x);
        let torques = layout.torque.iter().map(|column| column.map_or(0.0, |c| x[c])).collect();
        let wrenches: Vec<Wrench> = layout
            .contacts
            .iter()
            .map(|c| Wrench::from_vec6(&Vec6::from_fn(|k, _| if k < c.dimension { x[c.wrench + k] } else { 0.0 })))
            .collect();
        let vertex_forces = layout
            .contacts
            .iter()
            .map(|c| {
                let start = c.vertices.unwrap_or(0);
                (0..c.vertex_count).map(|i| Vec3::from_fn(|k, _| x[start + 3 * i + k])).collect()
            })
            .collect();
        let acceleration = nalgebra::DVector::from_column_slice(&x[..layout.velocities]);
        let over_tick = work.scene.over_tick(&acceleration, &wrenches);
        let mut found = Found { x, torques, wrenches, vertex_forces, over_tick, linearisation: Vec::new() };
        found.linearisation = found.with_claim(work, |claim| certify::linearisation_error(&work.question, claim));
        found
    }

    fn with_claim<T>(&self, work: &Work, f: impl FnOnce(&Claim) -> T) -> T {
        let wrenches: Vec<Option<Wrench>> = self.wrenches.iter().copied().map(Some).collect();
        f(&Claim {
            acceleration: &self.x[..work.assembly.layout.velocities],
            torques: &self.torques,
            wrenches: &wrenches,
            vertex_forces: &self.vertex_forces,
        })
    }

    /// The certificate of this point.
    pub fn certify(&self, work: &Work) -> Certificate {
        let proofs: Vec<LevelProof> = work.solution.levels.iter().map(proof).collect();
        self.with_claim(work, |claim| {
            certify::certify(&work.question, claim, &work.assembly.hierarchy, &work.solution.x, &proofs)
        })
    }

    /// Torques and accelerations, the base part in the user's axes.
    pub fn motion(&self, work: &Work) -> Motion {
        let question = &work.question;
        let offset = question.model.joint_offset();
        let mut acceleration = self.x[..work.assembly.layout.velocities].to_vec();
        question.velocity_axes.map(&question.model, &question.state).acceleration_from_world(&mut acceleration);
        let base = (offset == 6).then(|| {
            [Vec3::from_column_slice(&acceleration[..3]), Vec3::from_column_slice(&acceleration[3..6])]
        });
        Motion {
            torques: self.torques.clone(),
            joint_accelerations: acceleration[offset..].to_vec(),
            base_acceleration: base,
        }
    }
}

pub(super) fn proof(level: &LevelOutcome) -> LevelProof {
    LevelProof {
        priority: level.priority,
        system: level.system.rows.clone(),
        multipliers: level.multipliers.clone(),
        soft_slack: level.soft_slack.clone(),
        soft_multipliers: level.soft_multipliers.clone(),
    }
}

/// One entry per contact.
pub(super) fn soles(work: &Work, found: Option<&Found>) -> Vec<SoleAnswer> {
    (0..work.scene.soles.len()).map(|index| sole(work, found, index)).collect()
}

fn sole(work: &Work, found: Option<&Found>, index: usize) -> SoleAnswer {
    let contact = &work.question.contacts[index];
    let scene = &work.scene.soles[index];
    let rotation: &Mat3 = &scene.motion.pose.rotation;
    let normal = &contact.ground.normal;
    let wrench = found.map(|f| f.wrenches[index]);
    let in_sole = wrench.map(|w| w.rotated(&rotation.transpose()));
    let present = scene.map.now_known.then_some(scene.map.now);
    let polygon = match &work.question.model.soles[contact.sole].shape {
        crate::spatial::polygon::SoleShape::Polygon(p) => Some(p),
        crate::spatial::polygon::SoleShape::Point => None,
    };
    let center = in_sole.as_ref().filter(|_| polygon.is_some()).and_then(center_of_pressure);
    let over_tick = found.map(|f| f.over_tick[index]);
    let acceleration = found.map(|f| {
        let nu_dot = nalgebra::DVector::from_column_slice(&f.x[..work.assembly.layout.velocities]);
        let a: Vec6 = (&scene.jacobian * nu_dot + scene.bias_acceleration).fixed_rows::<6>(0).into_owned();
        [head(&a), tail(&a)]
    });
    SoleAnswer {
        contact: index,
        name: scene.name.clone(),
        wrench,
        wrench_in_sole_axes: in_sole,
        wrench_over_tick: over_tick,
        present,
        present_in_sole_axes: present.map(|w| w.rotated(&rotation.transpose())),
        normal_force: wrench.map(|w| normal.dot(&w.force)),
        center_of_pressure: center,
        friction_use: contact.friction.zip(wrench).and_then(|(f, w)| friction_use(&w.force, normal, f.coefficient)),
        edge_distance: polygon.zip(center).map(|(p, c)| edge_distance(p, &c)),
        vertex_forces: found.map(|f| f.vertex_forces[index].clone()).unwrap_or_default(),
        acceleration,
        linearisation_error: found.and_then(|f| f.linearisation[index]),
    }
}

/// One entry per task.
pub(super) fn tasks(work: &Work, found: Option<&Found>) -> Vec<TaskAnswer> {
    work.question
        .tasks
        .iter()
        .zip(&work.assembly.targets)
        .map(|(task, rows)| {
            let reach = |row: &crate::problem::tasks::TargetRow, x: &[f64]| {
                row.offset + row.entries.iter().map(|&(c, v)| v * x[c]).sum::<f64>()
            };
            let achieved: Vec<f64> =
                found.map(|f| rows.iter().map(|row| reach(row, &f.x)).collect()).unwrap_or_default();
            TaskAnswer {
                name: task.name.clone(),
                unit: rows.first().map_or("", |r| r.unit),
                priority: match task.importance {
                    Importance::MustHold => None,
                    Importance::Priority(p) => Some(p),
                },
                rows: rows.iter().map(|r| r.part.clone()).collect(),
                units: rows.iter().map(|r| r.unit).collect(),
                desired: rows.iter().map(|r| r.desired).collect(),
                residual: achieved.iter().zip(rows).map(|(a, r)| a - r.desired).collect(),
                achieved,
            }
        })
        .collect()
}

/// One entry per priority.
pub(super) fn levels(work: &Work) -> Vec<LevelAnswer> {
    let hierarchy = &work.assembly.hierarchy;
    let mut fixed = work.solution.hard_rank.kept;
    work.solution
        .levels
        .iter()
        .enumerate()
        .map(|(index, outcome)| {
            let kept: usize = outcome.rank.iter().map(|r| r.kept).sum();
            fixed += kept;
            let decision = outcome.rank.first();
            LevelAnswer {
                priority: outcome.priority,
                cost: outcome.cost * work.assembly.cost_unit[index],
                rows: hierarchy.levels[index].residuals.rhs.len(),
                rank: decision.map_or(0, |r| r.kept),
                smallest_kept: decision.filter(|r| r.kept > 0).map(|r| r.smallest_kept),
                largest_dropped: decision.filter(|r| r.kept < r.rows).map(|r| r.largest_dropped),
                freedom_left: hierarchy.columns.len().saturating_sub(fixed),
                faces: outcome.faces.iter().map(|f| face(f, work)).collect(),
                refined: outcome.refined,
                error_bound: outcome.bound,
                iterations: outcome.iterations,
            }
        })
        .collect()
}

fn face(decision: &FaceDecision, work: &Work) -> String {
    let name = decision.source.name(&work.assembly.hierarchy);
    let what = name.map_or_else(|| "a frozen row".to_string(), |n| format!("{} {}", n.group, n.part));
    match &decision.kind {
        FaceKind::Equality => format!("{what}: held at its bound"),
        FaceKind::Apex => format!("{what}: held at the apex of its cone"),
        FaceKind::Ray { .. } => format!("{what}: held on one ray of its cone"),
    }
}

/// Limits with a multiplier, level by level. The multiplier is that of the level's physical cost per physical unit.
pub(super) fn binding(work: &Work) -> Vec<Binding> {
    let hierarchy = &work.assembly.hierarchy;
    let mut out = Vec::new();
    for (index, level) in work.solution.levels.iter().enumerate() {
        let unit = work.assembly.cost_unit[index];
        let largest = level.multipliers.iter().chain(&level.soft_multipliers).fold(0.0f64, |m, z| m.max(z.abs()));
        let mut push = |name: &crate::conic::RowName, z: f64| {
            if !name.physics && z.abs() > BINDING * largest {
                out.push(Binding {
                    limit: name.group.clone(),
                    part: name.part.clone(),
                    priority: level.priority,
                    multiplier: z * unit / name.scale,
                    unit: name.unit,
                });
            }
        };
        for (source, &z) in level.system.source.iter().zip(&level.multipliers) {
            if matches!(source, RowSource::Hard { .. } | RowSource::HardFace { .. })
                && let Some(name) = source.name(hierarchy)
            {
                push(name, z);
            }
        }
        for (name, &z) in hierarchy.levels[index].soft.names.iter().zip(&level.soft_multipliers) {
            push(name, z);
        }
    }
    out
}

/// Directions left free before the tie-break.
pub(super) fn free(work: &Work) -> Vec<FreeDirection> {
    let columns = &work.assembly.hierarchy.columns;
    work.solution
        .free
        .basis
        .iter()
        .map(|direction| {
            let largest = direction.iter().fold(0.0f64, |m, v| m.max(v.abs()));
            let mut parts: Vec<(usize, f64)> =
                direction.iter().copied().enumerate().filter(|(_, v)| v.abs() > FREE_PART * largest).collect();
            parts.sort_by(|a, b| b.1.abs().total_cmp(&a.1.abs()).then(a.0.cmp(&b.0)));
            FreeDirection {
                parts: parts.iter().map(|&(i, v)| (columns[i].name.clone(), v * columns[i].scale, columns[i].unit)).collect(),
            }
        })
        .collect()
}

/// Who carries the proof of infeasibility: limits and must-hold tasks, never physics.
pub(super) fn blocking(work: &Work) -> Vec<Blocking> {
    let Some(proof) = &work.solution.infeasibility else { return Vec::new() };
    let mut shares: Vec<Blocking> = Vec::new();
    for (name, z) in work.assembly.hierarchy.hard.names.iter().zip(&proof.multipliers) {
        if name.physics || *z == 0.0 {
            continue;
        }
        match shares.iter_mut().find(|b| b.group == name.group) {
            Some(entry) => entry.share += z.abs(),
            None => shares.push(Blocking { group: name.group.clone(), share: z.abs() }),
        }
    }
    let total: f64 = shares.iter().map(|b| b.share).sum();
    shares.iter_mut().for_each(|b| b.share /= total.max(f64::MIN_POSITIVE));
    shares.retain(|b| b.share > BLOCKING);
    shares.sort_by(|a, b| b.share.total_cmp(&a.share));
    shares
}
