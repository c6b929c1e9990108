//! Twist and acceleration from poses: a local polynomial.
//!
//! Through the samples within `half` places of the present one a quadratic in time is laid by least squares, and its first
//! and second derivative at the present time are taken: with even steps the filter of Savitzky and Golay (1964, Anal.
//! Chem. 36:1627-1639; quoted from memory), with uneven ones the same fit. Rotations are fitted as rotation vectors
//! from the present orientation, `log(R_i R')`, whose derivative there is the angular velocity. Windows never reach
//! across a gap; at their ends they are one-sided.

use std::collections::VecDeque;

use super::regressor::Motion;
use crate::spatial::{Pose, Twist, Vec3, Vec6, log_so3, stack};

/// Widest half window (samples).
pub const MOST_HALF: usize = 100;

/// A sole's sample as logged.
#[derive(Debug, Clone, Copy)]
pub struct Reading {
    /// Line of the log, from 1.
    pub line: u64,
    /// Time (s).
    pub time: f64,
    /// Wrench as the sensor gives it, force first (N, N m).
    pub wrench: Vec6,
    /// Sole frame in the world.
    pub pose: Pose,
    /// Its velocity, world axes, where the log holds it.
    pub twist: Option<Twist>,
    /// Whether the sole stands, where the log says so.
    pub stands: Option<bool>,
}

/// A sample with its motion complete.
#[derive(Debug, Clone, Copy)]
pub struct Moving {
    /// The sample.
    pub reading: Reading,
    /// Pose and twist.
    pub motion: Motion,
    /// Acceleration of the sole origin, world axes (m/s^2); zero where it is not needed.
    pub acceleration: Vec3,
    /// Variance of the twist over that of a pose sample (1/s^2); zero where the twist is the log's.
    pub amplification: f64,
}

/// The samples around the present one.
#[derive(Debug, Clone)]
pub struct Smoother {
    half: usize,
    /// Accelerations are needed even where the log holds twists.
    accelerations: bool,
    window: VecDeque<Reading>,
    /// Place of the next sample to give out.
    next: usize,
}

impl Smoother {
    /// With windows of up to `2 half + 1` samples.
    pub fn new(half: usize, accelerations: bool) -> Self {
        let half = half.clamp(1, MOST_HALF);
        Smoother { half, accelerations, window: VecDeque::with_capacity(2 * half + 2), next: 0 }
    }

    /// Takes a sample; gives the one that now has its whole window, if any.
    pub fn push(&mut self, reading: Reading) -> Option<Moving> {
        if let (Some(twist), false) = (reading.twist, self.accelerations) {
            let motion = Motion { pose: reading.pose, twist };
            return Some(Moving { reading, motion, acceleration: Vec3::zeros(), amplification: 0.0 });
        }
        self.window.push_back(reading);
        if self.window.len() <= self.next + self.half {
            return None;
        }
        let out = self.fit();
        self.next += 1;
        if self.next > self.half {
            self.window.pop_front();
            self.next -= 1;
        }
        out
    }

    /// Gives a sample that waits although its window is one-sided: called until it gives none, at the end of a log
    /// and before a gap. A segment of one sample has no velocity: none is given.
    pub fn flush(&mut self) -> Option<Moving> {
        if self.next >= self.window.len() || self.window.len() < 2 {
            self.window.clear();
            self.next = 0;
            return None;
        }
        let out = self.fit();
        self.next += 1;
        out
    }

    /// Samples that wait for their window.
    pub fn waiting(&self) -> usize {
        self.window.len().saturating_sub(self.next)
    }

    fn fit(&self) -> Option<Moving> {
        let here = *self.window.get(self.next)?;
        let begin = self.next.saturating_sub(self.half);
        let end = (self.next + self.half).min(self.window.len() - 1);
        let span = (self.window[end].time - self.window[begin].time).max(f64::MIN_POSITIVE);
        let degree = (end - begin).min(2);
        let mut normal = [[0.0; 3]; 3];
        let mut right = [Vec6::zeros(); 3];
        for other in self.window.range(begin..=end) {
            let t = (other.time - here.time) / span;
            let value = match (here.twist, other.twist) {
                (Some(_), Some(twist)) => stack(&twist.linear, &twist.angular),
                _ => stack(
                    &(other.pose.translation - here.pose.translation),
                    &log_so3(&(other.pose.rotation * here.pose.rotation.transpose())),
                ),
            };
            let powers = [1.0, t, t * t];
            for i in 0..=degree {
                right[i] += value * powers[i];
                for k in 0..=degree {
                    normal[i][k] += powers[i] * powers[k];
                }
            }
        }
        let inverse = inverse(normal, degree);
        let derivative = |order: usize| (0..=degree).fold(Vec6::zeros(), |sum, k| sum + right[k] * inverse[order][k]);
        let first = derivative(1) / span;
        let (twist, acceleration, amplification) = match here.twist {
            Some(twist) => (twist, first, 0.0),
            None => {
                let second = if degree == 2 { derivative(2) * (2.0 / (span * span)) } else { Vec6::zeros() };
                (Twist::from_vec6(&first), second, inverse[1][1] / (span * span))
            }
        };
        let acceleration = if self.accelerations { acceleration.fixed_rows::<3>(0).into_owned() } else { Vec3::zeros() };
        Some(Moving { reading: here, motion: Motion { pose: here.pose, twist }, acceleration, amplification })
    }
}

/// Inverse of the leading (degree + 1) block by Gauss-Jordan; the matrix is positive definite, for times differ.
fn inverse(mut a: [[f64; 3]; 3], degree: usize) -> [[f64; 3]; 3] {
    let mut out = [[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]];
    for p in 0..=degree {
        let pivot = a[p][p];
        for k in 0..3 {
            a[p][k] /= pivot;
            out[p][k] /= pivot;
        }
        for i in 0..=degree {
            if i != p {
                let factor = a[i][p];
                for k in 0..3 {
                    a[i][k] -= factor * a[p][k];
                    out[i][k] -= factor * out[p][k];
                }
            }
        }
    }
    out
}
