//! The question's state worked out: dynamics, soles, and the map from acceleration to wrench.

use nalgebra::{DMatrix, DVector};

use super::coupled::CoupledRows;
use super::question::Question;
use crate::contact::{ContactError, Patch, SoleMotion, TickMap, TickRule, tick};
use crate::dynamics::{self, Workspace};
use crate::spatial::{Vec3, Vec6, Wrench};

/// One sole on the ground.
#[derive(Debug, Clone)]
pub struct SoleScene {
    /// Sole name.
    pub name: String,
    /// Pose and velocity of the sole frame.
    pub motion: SoleMotion,
    /// Jacobian, 6 x nv, linear rows first, world axes, sole-frame origin.
    pub jacobian: DMatrix<f64>,
    /// `J_dot nu`.
    pub bias_acceleration: Vec6,
    /// Wrench over the tick as a function of the sole's acceleration.
    pub map: TickMap,
}

/// The state of one question, worked out.
#[derive(Debug, Clone)]
pub struct Scene {
    /// Rigid-body terms.
    pub dynamics: Workspace,
    /// One entry per contact.
    pub soles: Vec<SoleScene>,
    /// Generalised force of the external wrenches (nv).
    pub external: nalgebra::DVector<f64>,
    /// External wrenches in the world: point, its velocity, load about the point.
    pub loads: Vec<PlacedLoad>,
    /// Under the rule `held`, the contact equality of all soft soles together; it takes the place of theirs in [`SoleScene::map`].
    /// None under other rules, and where there is neither a soft sole nor a damped joint.
    pub coupled: Option<CoupledRows>,
}

/// An external wrench in the world.
#[derive(Debug, Clone, Copy)]
pub struct PlacedLoad {
    /// Point of application (m).
    pub point: Vec3,
    /// Its velocity (m/s).
    pub velocity: Vec3,
    /// Load about the point.
    pub wrench: Wrench,
}

/// The state cannot be worked out.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SceneError {
    /// The ground under a sole.
    #[error("contact {contact} (sole {sole}): {source}")]
    Contact {
        /// Index of the contact.
        contact: usize,
        /// Sole name.
        sole: String,
        /// What is wrong.
        source: ContactError,
    },
    /// The soft soles together, under the rule `held`.
    #[error("soft soles coupled by the rule held: {0}")]
    Coupled(ContactError),
    /// The mass matrix is not positive definite, so that accelerations do not follow from wrenches.
    #[error("soft soles coupled by the rule held: the mass matrix is not positive definite")]
    NoMobility,
}

impl Scene {
    /// Works out `question`'s state (as it stands: latency has been dealt with).
    pub fn new(question: &Question) -> Result<Scene, SceneError> {
        let model = &*question.model;
        let mut ws = Workspace::new(model);
        ws.update(model, &question.state, &question.gravity);
        let mut soles = Vec::with_capacity(question.contacts.len());
        for (index, contact) in question.contacts.iter().enumerate() {
            let sole = &model.soles[contact.sole];
            let motion = SoleMotion {
                pose: dynamics::frame_pose(model, &ws, sole.body, &sole.placement),
                twist: dynamics::frame_twist(model, &ws, sole.body, &sole.placement),
            };
            let mut jacobian = DMatrix::zeros(6, model.velocities());
            dynamics::frame_jacobian(model, &ws, sole.body, &sole.placement, &mut jacobian);
            let patch = Patch { shape: &sole.shape, ground: &contact.ground };
            let map = tick::tick_map(&patch, &motion, question.tick.rule, question.tick.length, ws.mass)
                .map_err(|source| SceneError::Contact { contact: index, sole: sole.name.clone(), source })?;
            soles.push(SoleScene {
                name: sole.name.clone(),
                motion,
                jacobian,
                bias_acceleration: dynamics::frame_bias_acceleration(model, &ws, sole.body, &sole.placement),
                map,
            });
        }
        let mut external = nalgebra::DVector::zeros(model.velocities());
        let mut loads = Vec::with_capacity(question.external.len());
        for load in &question.external {
            let frame = &model.frames[load.frame];
            let at = frame.placement.compose(&crate::spatial::Pose {
                rotation: crate::spatial::Mat3::identity(),
                translation: load.point,
            });
            let point = dynamics::frame_pose(model, &ws, frame.body, &at).translation;
            let velocity = dynamics::frame_twist(model, &ws, frame.body, &at).linear;
            dynamics::external_generalised_force(model, &ws, frame.body, &point, &load.wrench, &mut external);
            loads.push(PlacedLoad { point, velocity, wrench: load.wrench });
        }
        let held = question.tick.rule == TickRule::Held;
        let coupled = if held { CoupledRows::new(question, &ws, &soles)? } else { None };
        Ok(Scene { dynamics: ws, soles, external, loads, coupled })
    }

    /// For each contact, where its rows start in [`Scene::coupled`]; none on rigid ground or without coupling.
    pub fn coupled_starts(&self) -> Vec<Option<usize>> {
        let mut next = 0;
        self.soles
            .iter()
            .map(|sole| {
                let own = (self.coupled.is_some() && !sole.map.rigid).then_some(next);
                next += own.map_or(0, |_| sole.map.dimension);
                own
            })
            .collect()
    }

    /// Wrench that acts during the tick on average, per contact, for given accelerations (nv) and tick-end wrenches.
    pub fn over_tick(&self, acceleration: &DVector<f64>, ends: &[Wrench]) -> Vec<Wrench> {
        let starts = self.coupled_starts();
        let means = self.coupled.as_ref().map(|rows| {
            let mut stacked = DVector::zeros(rows.mean_start.len());
            for ((sole, start), end) in self.soles.iter().zip(&starts).zip(ends) {
                if let Some(start) = start {
                    let end = end.to_vec6();
                    (0..sole.map.dimension).for_each(|k| stacked[start + k] = end[k]);
                }
            }
            rows.mean(acceleration, &stacked)
        });
        let soles = self.soles.iter().zip(starts).zip(ends);
        soles
            .map(|((sole, start), end)| match (start, &means) {
                (Some(start), Some(means)) => Wrench::from_vec6(&Vec6::from_fn(|k, _| {
                    if k < sole.map.dimension { means[start + k] } else { 0.0 }
                })),
                _ => sole.map.now.mixed(end, sole.map.theta),
            })
            .collect()
    }

    /// Rate of momentum under the present wrenches (N; N m about the centre of mass): `sum X w + m g`.
    pub fn momentum_rate_now(&self, gravity: &Vec3) -> [Vec3; 2] {
        let c = self.dynamics.center_of_mass;
        let mut rate = [gravity * self.dynamics.mass, Vec3::zeros()];
        let mut add = |point: &Vec3, w: &Wrench| {
            rate[0] += w.force;
            rate[1] += w.moment + (point - c).cross(&w.force);
        };
        for sole in &self.soles {
            add(&sole.motion.pose.translation, &sole.map.now);
        }
        for load in &self.loads {
            add(&load.point, &load.wrench);
        }
        rate
    }
}
