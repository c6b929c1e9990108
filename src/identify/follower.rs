//! One sole, one assumed lag: from samples to stances and estimates.
//!
//! At every touchdown the estimator's covariance goes back to the prior, and the anchor of the rest pose to where the sole
//! came down: what was learnt on the last patch of ground says nothing about the next, and least of all where it begins.

use super::estimator::Estimator;
use super::parameters::Parameter;
use super::regressor::{Motion, Sole, columns};
use super::report::Moment;
use super::setup::{Forgetting, Lag, Setup, SoleSetup, Touchdown};
use super::stance::Running;
use crate::contact::{Ground, Law, Material, Patch, Rest, SoleMotion, rest};
use crate::spatial::{Mat6, Pose, Twist, Vec6, Wrench};

/// Most stances kept for one sole.
pub const MOST_STANCES: usize = 200;
/// Time constants of the slowest low-pass tried after which samples are taken in.
const SETTLING: f64 = 6.0;
/// Most points of the history.
pub const MOST_MOMENTS: usize = 400;

/// What all followers of a sole share.
#[derive(Debug, Clone)]
pub struct Frame {
    /// Area and moments.
    pub sole: Sole,
    /// What is estimated.
    pub parameters: Vec<Parameter>,
    /// Sensor axes to sole axes.
    pub sensor: Mat6,
    /// `L^-1`, with `L L'` the covariance of the wrench in sole axes.
    pub whiten: Mat6,
    /// Diagonal of L: standard deviations of a row given those before it (N, N m).
    pub noise: Vec6,
}

impl Frame {
    /// For one sole of a setup. Without a stated noise, a force counts 1 N and a moment that force at the sole's radius of
    /// gyration.
    pub fn new(setup: &Setup, sole: &SoleSetup) -> Self {
        let geometry = Sole::of(&sole.shape);
        let sensor = sole.sensor.to_sole();
        let r = geometry.radius();
        let usual = Vec6::new(1.0, 1.0, 1.0, r, r, r);
        let covariance = match sole.sensor.noise {
            None => Mat6::from_diagonal(&usual.component_mul(&usual)),
            Some(noise) => sensor * Mat6::from_diagonal(&noise.component_mul(&noise)) * sensor.transpose(),
        };
        let lower = covariance.cholesky().map_or(Mat6::from_diagonal(&usual), |c| c.l());
        let whiten = lower.try_inverse().unwrap_or(Mat6::identity());
        let parameters = super::parameters::layout(setup, geometry.point);
        Frame { sole: geometry, parameters, sensor, whiten, noise: lower.diagonal() }
    }
}

/// A sample on its way into the estimator: force and motion belong to the same instant.
#[derive(Debug, Clone, Copy)]
pub struct Matched {
    /// Time of the force (s).
    pub time: f64,
    /// Wrench of the ground on the sole, sole axes.
    pub wrench: Wrench,
    /// Motion at that instant.
    pub motion: Motion,
    /// What the log says about standing.
    pub stands: Option<bool>,
    /// Variance of the twist over that of a pose sample (1/s^2).
    pub amplification: f64,
}

/// Follows one sole under one assumed lag.
#[derive(Debug, Clone)]
pub struct Follower {
    /// The lag.
    pub lag: Lag,
    estimator: Estimator,
    running: Option<Running>,
    unloaded: Option<Pose>,
    last_time: Option<f64>,
    columns: Vec<Vec6>,
    /// Low-pass: the columns before and after the filter at the last sample.
    filter: Option<(Vec<Vec6>, Vec<Vec6>)>,
    next_given: usize,
    /// Time until the low-pass has forgotten how it started (s).
    settling: f64,
    /// Finished stances; once there are [`MOST_STANCES`], the last of all takes the last place.
    pub finished: Vec<Running>,
    /// Stances that lost their place.
    pub unlisted: u64,
    /// Sum of squared recursive residuals over all stances.
    pub squares: f64,
    /// Samples used.
    pub used: u64,
    /// Estimate over time.
    pub history: Vec<Moment>,
    stride: u64,
    /// Stances whose touchdown is not in the log: they begin with a loaded sole.
    pub blind: u64,
    /// Touchdowns at which the sole's z axis pointed into the ground.
    pub upside_down: u64,
}

impl Follower {
    /// Before the first sample.
    pub fn new(setup: &Setup, frame: &Frame, lag: Lag) -> Self {
        let prior = super::parameters::prior(setup, &frame.parameters, frame.sole.point);
        let ground = frame.parameters.iter().filter(|p| p.of_ground()).count();
        Follower {
            lag,
            estimator: Estimator::new(prior, ground),
            running: None,
            unloaded: None,
            last_time: None,
            columns: vec![Vec6::zeros(); frame.parameters.len()],
            filter: None,
            next_given: 0,
            settling: 0.0,
            finished: Vec::new(),
            unlisted: 0,
            squares: 0.0,
            used: 0,
            history: Vec::new(),
            stride: 1,
            blind: 0,
            upside_down: 0,
        }
    }

    /// The estimator, to be read between samples.
    pub fn estimator(&self) -> &Estimator {
        &self.estimator
    }

    /// True while the sole stands.
    pub fn stands(&self) -> bool {
        self.running.is_some()
    }

    /// Takes a sample of sole `index`; true where the sole stands.
    pub fn push(&mut self, setup: &Setup, index: usize, frame: &Frame, sample: &Matched) -> bool {
        let normal = &setup.plane.normal;
        let force = normal.dot(&(sample.motion.pose.rotation * sample.wrench.force));
        if !self.decide(setup, index, sample, force) {
            self.end();
            self.unloaded = Some(sample.motion.pose);
            self.last_time = Some(sample.time);
            return false;
        }
        let stood = self.running.is_some();
        if !stood {
            self.touch_down(setup, index, sample);
        }
        let Some(mut running) = self.running.take() else { return false };
        let step = self.last_time.map_or(0.0, |last| sample.time - last);
        if stood {
            self.estimator.forget(match setup.forgetting {
                Forgetting::None => 1.0,
                Forgetting::Factor(factor) => factor,
                Forgetting::TimeConstant(constant) => (-step / constant).exp(),
            });
        }
        columns(&frame.sole, &frame.parameters, normal, &running.rest, &frame.sensor, &sample.motion, &mut self.columns);
        let from_air = matches!(setup.touchdown, Touchdown::Force { .. }) && self.unloaded.is_some();
        self.low_pass(step, from_air, &frame.parameters);
        if self.settling > 0.0 {
            self.settling -= step;
        } else {
            self.take_in(frame, sample, &mut running);
        }
        running.push(normal, sample, force);
        self.last_time = Some(sample.time);
        self.used += 1;
        self.remember(sample.time, &frame.parameters);
        self.running = Some(running);
        true
    }

    /// The rows of one sample, whitened.
    fn take_in(&mut self, frame: &Frame, sample: &Matched, running: &mut Running) {
        let measured = frame.whiten * sample.wrench.to_vec6();
        for column in &mut self.columns {
            *column = frame.whiten * *column;
        }
        let mut row = [0.0; super::estimator::MOST_PARAMETERS];
        let n = self.columns.len();
        for axis in 0..frame.sole.rows() {
            for (slot, column) in row.iter_mut().zip(&self.columns) {
                *slot = column[axis];
            }
            if let Some(residual) = self.estimator.update(axis / 3, &row[..n], measured[axis]) {
                running.residual(axis, residual);
                self.squares += residual * residual;
            }
        }
    }

    /// Whether the sole stands at this sample.
    fn decide(&mut self, setup: &Setup, index: usize, sample: &Matched, force: f64) -> bool {
        match &setup.touchdown {
            Touchdown::Force { on, off } => if self.running.is_some() { force >= *off } else { force > *on },
            Touchdown::Logged => sample.stands.unwrap_or(false),
            Touchdown::Given(all) => {
                let Some(stances) = all.get(index) else { return false };
                while stances.get(self.next_given).is_some_and(|stance| sample.time > stance.1) {
                    self.next_given += 1;
                    // The next stance may begin with this very sample: it is a new one all the same.
                    self.end();
                }
                stances.get(self.next_given).is_some_and(|stance| sample.time >= stance.0)
            }
        }
    }

    /// Resets the covariance and sets the anchor.
    fn touch_down(&mut self, setup: &Setup, index: usize, sample: &Matched) {
        self.estimator.reset();
        self.filter = None;
        let by_force = matches!(setup.touchdown, Touchdown::Force { .. });
        let down = self.unloaded.filter(|_| by_force).unwrap_or(sample.motion.pose);
        self.blind += u64::from(by_force && self.unloaded.is_none());
        let anchor = self.rest_pose(setup, index, sample, &down);
        self.settling = SETTLING * setup.lags.iter().fold(0.0_f64, |most, lag| most.max(lag.time_constant));
        self.running = Some(Running::new(sample.time, anchor));
    }

    /// Tangential position and yaw of the touchdown; tilt of the ground plane, and its height where it is known.
    fn rest_pose(&mut self, setup: &Setup, index: usize, sample: &Matched, down: &Pose) -> Pose {
        let Some(sole) = setup.soles.get(index) else { return *down };
        let unused = Material { normal_stiffness: 1.0, tangential_stiffness: 1.0, normal_damping: 0.0, tangential_damping: 0.0 };
        let ground = Ground {
            law: Law::Bonded(unused),
            normal: setup.plane.normal,
            rest: Rest::Touchdown { pose: *down, plane_point: setup.plane.point.unwrap_or(down.translation) },
            rest_twist: Twist::zero(),
            measured: None,
        };
        let motion = SoleMotion { pose: sample.motion.pose, twist: sample.motion.twist };
        rest::resolve(&Patch { shape: &sole.shape, ground: &ground }, &motion).unwrap_or_else(|_| {
            self.upside_down += 1;
            *down
        })
    }

    /// The force went through a first-order low-pass; so do the columns, and the law stays exact. Between samples they are
    /// taken as straight lines: `y+ = e y + (1 - e) u + (u+ - u)(1 - (1 - e)/a)`, a = dt / T, e = exp(-a).
    fn low_pass(&mut self, step: f64, from_air: bool, parameters: &[Parameter]) {
        let constant = self.lag.time_constant;
        if constant <= 0.0 {
            return;
        }
        let (before, mut state) = self.filter.take().unwrap_or_else(|| {
            // Out of the air the filter starts from nothing; in the middle of a stance, from the present load.
            let start = if from_air { vec![Vec6::zeros(); self.columns.len()] } else { self.columns.clone() };
            (start.clone(), start)
        });
        let a = step / constant;
        let e = (-a).exp();
        let ramp = if a > 1e-6 { 1.0 - (1.0 - e) / a } else { a / 2.0 };
        for k in 0..self.columns.len() {
            state[k] = state[k] * e + before[k] * (1.0 - e) + (self.columns[k] - before[k]) * ramp;
        }
        let raw = self.columns.clone();
        for (k, parameter) in parameters.iter().enumerate() {
            if parameter.of_ground() {
                self.columns[k] = state[k];
            }
        }
        self.filter = Some((raw, state));
    }

    /// The stance is over, if there is one: lift-off, a gap, or the end of the log.
    pub fn end(&mut self) {
        if let Some(mut running) = self.running.take() {
            running.estimate = self.estimator.estimate();
            if self.finished.len() >= MOST_STANCES {
                self.finished.pop();
                self.unlisted += 1;
            }
            self.finished.push(running);
        }
    }

    /// A gap: nobody knows what happened in it.
    pub fn interrupt(&mut self) {
        self.end();
        self.unloaded = None;
        self.last_time = None;
    }

    fn remember(&mut self, time: f64, parameters: &[Parameter]) {
        if !(self.used - 1).is_multiple_of(self.stride) {
            return;
        }
        let Some(estimate) = self.estimator.estimate() else { return };
        let material = |k: &usize| parameters[*k].of_material();
        let kept: Vec<usize> = (0..parameters.len()).filter(material).collect();
        self.history.push(Moment {
            time,
            values: kept.iter().map(|k| estimate.value[*k]).collect(),
            deviations: kept.iter().map(|k| estimate.covariance[(*k, *k)].max(0.0).sqrt()).collect(),
        });
        if self.history.len() > MOST_MOMENTS {
            let mut place = 0;
            self.history.retain(|_| {
                place += 1;
                place % 2 == 1
            });
            self.stride *= 2;
        }
    }
}
