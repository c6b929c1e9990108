//! One sole: from raw readings, through smoothing and matching of force and motion, to its followers.

use std::collections::VecDeque;

use super::change::compare;
use super::follower::{Follower, Frame, Matched};
use super::noise::MotionNoise;
use super::regressor::Motion;
use super::report::SoleReport;
use super::setup::{Setup, SoleSetup};
use super::smoother::{Moving, Reading, Smoother};
use super::stance::material;
use crate::spatial::{Pose, Twist, Vec3, exp_so3, log_so3};

/// Most samples that wait for the motion that belongs to them.
const MOST_WAITING: usize = 100_000;

/// A sole's way through the log.
#[derive(Debug, Clone)]
pub struct Track {
    index: usize,
    /// What its followers share.
    pub frame: Frame,
    smoother: Smoother,
    followers: Vec<Follower>,
    motions: VecDeque<(f64, Motion)>,
    forces: VecDeque<Matched>,
    motion_noise: MotionNoise,
    last: Option<(f64, Vec3)>,
    read: u64,
    airborne: u64,
    /// Samples for which no twist or no motion at their lag could be found.
    pub unmatched: u64,
    /// Largest normal force seen (N), its line, and the line on which a sole first stood.
    pub largest_force: (f64, u64),
    /// Ranges while standing: of the position (m) and the force (N), for the check of still feet.
    pub stood: Stood,
    /// Wrench of the last sample, world axes (N): for the robot's weight.
    pub force_world: Vec3,
}

/// What happened while the sole stood.
#[derive(Debug, Clone, Copy, Default)]
pub struct Stood {
    /// Samples.
    pub samples: u64,
    /// Mean normal force (N).
    pub force: f64,
    /// Changes of the normal force from sample to sample, summed (N).
    pub force_change: f64,
    /// Changes of the position from sample to sample, summed (m).
    pub travel: f64,
}

impl Track {
    /// Before the first sample.
    pub fn new(setup: &Setup, index: usize, sole: &SoleSetup) -> Self {
        let frame = Frame::new(setup, sole);
        let followers: Vec<Follower> = setup.lags.iter().map(|lag| Follower::new(setup, &frame, *lag)).collect();
        Track {
            index,
            smoother: Smoother::new(setup.half_window, sole.sensor.mass_below > 0.0),
            followers,
            last: None,
            frame,
            motions: VecDeque::new(),
            forces: VecDeque::new(),
            motion_noise: MotionNoise::default(),
            read: 0,
            airborne: 0,
            unmatched: 0,
            largest_force: (0.0, 0),
            stood: Stood::default(),
            force_world: Vec3::zeros(),
        }
    }

    /// Takes a sample.
    pub fn push(&mut self, setup: &Setup, reading: Reading) {
        self.read += 1;
        if let Some(moving) = self.smoother.push(reading) {
            self.moving(setup, &moving);
        }
    }

    /// A gap, or the end of the log: what waits is taken in as far as it can be.
    pub fn interrupt(&mut self, setup: &Setup) {
        let lone = self.smoother.waiting() as u64;
        let mut taken = 0;
        while let Some(moving) = self.smoother.flush() {
            self.moving(setup, &moving);
            taken += 1;
        }
        self.unmatched += lone - taken.min(lone) + self.forces.len() as u64;
        self.forces.clear();
        self.motions.clear();
        self.motion_noise.interrupt();
        self.last = None;
        self.followers.iter_mut().for_each(Follower::interrupt);
    }

    fn moving(&mut self, setup: &Setup, moving: &Moving) {
        let Some(sole) = setup.soles.get(self.index) else { return };
        let (reading, motion) = (&moving.reading, moving.motion);
        let wrench = sole.sensor.ground_wrench(&reading.wrench, &motion.pose, &setup.gravity, &moving.acceleration);
        self.force_world = motion.pose.rotation * wrench.force;
        let normal_force = setup.plane.normal.dot(&self.force_world);
        if normal_force > self.largest_force.0 {
            self.largest_force = (normal_force, reading.line);
        }
        let sample = Matched {
            time: reading.time,
            wrench,
            motion,
            stands: reading.stands,
            amplification: moving.amplification,
        };
        if let [only] = setup.lags.as_slice()
            && only.delay == 0.0
        {
            self.follow(setup, &[sample]);
            return;
        }
        self.motions.push_back((reading.time, motion));
        self.forces.push_back(sample);
        self.match_up(setup);
    }

    /// Gives every force the motion at its time less the delay, for each lag in turn; forces for which some lag has no motion
    /// are left out for all, so that residuals can be compared.
    fn match_up(&mut self, setup: &Setup) {
        let least = setup.lags.iter().fold(f64::INFINITY, |least, lag| least.min(lag.delay));
        let most = setup.lags.iter().fold(f64::NEG_INFINITY, |most, lag| most.max(lag.delay));
        let newest = self.motions.back().map_or(f64::NEG_INFINITY, |m| m.0);
        while let Some(force) = self.forces.front().copied() {
            if force.time - least > newest && self.forces.len() < MOST_WAITING {
                break;
            }
            self.forces.pop_front();
            while self.motions.len() > 2 && self.motions[1].0 <= force.time - most {
                self.motions.pop_front();
            }
            let found: Option<Vec<Matched>> = setup
                .lags
                .iter()
                .map(|lag| Some(Matched { motion: self.motion_at(force.time - lag.delay)?, ..force }))
                .collect();
            match found {
                Some(samples) => self.follow(setup, &samples),
                None => self.unmatched += 1,
            }
        }
    }

    /// The motion between two samples: poses and twists on straight lines.
    fn motion_at(&self, time: f64) -> Option<Motion> {
        let after = self.motions.partition_point(|m| m.0 < time);
        let (t1, b) = self.motions.get(after)?;
        if *t1 == time {
            return Some(*b);
        }
        let (t0, a) = self.motions.get(after.checked_sub(1)?)?;
        let s = (time - t0) / (t1 - t0);
        let turn = log_so3(&(b.pose.rotation * a.pose.rotation.transpose())) * s;
        Some(Motion {
            pose: Pose {
                rotation: exp_so3(&turn) * a.pose.rotation,
                translation: a.pose.translation * (1.0 - s) + b.pose.translation * s,
            },
            twist: Twist {
                linear: a.twist.linear * (1.0 - s) + b.twist.linear * s,
                angular: a.twist.angular * (1.0 - s) + b.twist.angular * s,
            },
        })
    }

    /// Hands the sample to every follower, one matched sample each.
    fn follow(&mut self, setup: &Setup, samples: &[Matched]) {
        let mut stands = false;
        for (follower, sample) in self.followers.iter_mut().zip(samples) {
            stands |= follower.push(setup, self.index, &self.frame, sample);
        }
        match samples.first() {
            Some(sample) if stands => self.standing(setup, sample),
            _ => {
                self.airborne += 1;
                self.last = None;
                self.motion_noise.interrupt();
            }
        }
    }

    fn standing(&mut self, setup: &Setup, sample: &Matched) {
        self.motion_noise.push(&sample.motion);
        let force = setup.plane.normal.dot(&(sample.motion.pose.rotation * sample.wrench.force));
        let place = sample.motion.pose.translation;
        if let Some((last_force, last_place)) = self.last {
            self.stood.force_change += (force - last_force).abs();
            self.stood.travel += (place - last_place).norm();
        }
        self.last = Some((force, place));
        self.stood.samples += 1;
        self.stood.force += (force - self.stood.force) / self.stood.samples as f64;
    }

    /// What is to be said, after the last [`Track::interrupt`].
    pub fn report(&self, setup: &Setup, scale: f64) -> Option<SoleReport> {
        let (best, delay_between) = best(&self.followers)?;
        let follower = self.followers.get(best)?;
        let shape = !self.frame.sole.point;
        let mut motion_noise = setup.motion_noise.unwrap_or_else(|| self.motion_noise.deviations());
        let mut stances = Vec::with_capacity(follower.finished.len());
        for running in &follower.finished {
            let amplification = running.amplification().sqrt();
            if amplification > 0.0 {
                // A smoothed twist has the noise of the poses it came from.
                motion_noise[2] = motion_noise[0] * amplification;
                motion_noise[3] = motion_noise[1] * amplification;
            }
            stances.extend(running.report(&self.frame, follower.estimator().prior(), &motion_noise, scale));
        }
        let lost = (follower.finished.len() - stances.len()) as u64;
        for k in 1..stances.len() {
            let (before, now) = (material(&stances[k - 1]), material(&stances[k]));
            stances[k].change = compare((&before.0, &before.1), (&now.0, &now.1));
        }
        let mut history = follower.history.clone();
        for moment in &mut history {
            moment.values.iter_mut().chain(&mut moment.deviations).for_each(|x| *x /= scale);
        }
        Some(SoleReport {
            area: shape.then_some(self.frame.sole.area),
            stances,
            unlisted: follower.unlisted + lost,
            history,
            lag: follower.lag,
            delay_between,
            motion_noise,
            read: self.read,
            airborne: self.airborne,
        })
    }

    /// Stances whose touchdown is not in the log.
    pub fn blind(&self) -> u64 {
        self.followers.first().map_or(0, |follower| follower.blind)
    }

    /// Touchdowns at which the sole's z axis pointed into the ground.
    pub fn upside_down(&self) -> u64 {
        self.followers.first().map_or(0, |follower| follower.upside_down)
    }
}

/// The follower whose residuals are smallest, and the delay at the bottom of the parabola through it and its two
/// neighbours in delay, where they exist.
fn best(followers: &[Follower]) -> Option<(usize, Option<f64>)> {
    let best = (0..followers.len()).min_by(|a, b| followers[*a].squares.total_cmp(&followers[*b].squares))?;
    let here = &followers[best];
    let same = |f: &&Follower| f.lag.time_constant == here.lag.time_constant && f.lag.delay != here.lag.delay;
    let order = |a: &&Follower, b: &&Follower| a.lag.delay.total_cmp(&b.lag.delay);
    let before = followers.iter().filter(same).filter(|f| f.lag.delay < here.lag.delay).max_by(order);
    let after = followers.iter().filter(same).filter(|f| f.lag.delay > here.lag.delay).min_by(order);
    let (Some(before), Some(after)) = (before, after) else { return Some((best, None)) };
    let (x0, x1, x2) = (before.lag.delay, here.lag.delay, after.lag.delay);
    let (y0, y1, y2) = (before.squares, here.squares, after.squares);
    let (left, right) = ((x1 - x0) * (y1 - y2), (x1 - x2) * (y1 - y0));
    let bottom = x1 - 0.5 * ((x1 - x0) * left - (x1 - x2) * right) / (left - right);
    Some((best, bottom.is_finite().then_some(bottom)))
}
