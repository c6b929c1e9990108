//! A stance while it runs, and what is said of it afterwards.

use nalgebra::DMatrix;

use super::estimator::{Estimate, Prior};
use super::excitation::{Excitation, Extent, advice, verdict};
use super::follower::{Frame, Matched};
use super::noise;
use super::parameters::Parameter;
use super::report::{Axis, Stance, Value};
use super::whiteness::Whiteness;
use crate::spatial::{Pose, Vec3};

/// Damping over stiffness beyond which a bed would take longer than this to come back (s): no ground does.
const LONGEST_RETURN: f64 = 10.0;

/// Sums over the samples of a stance.
#[derive(Debug, Clone)]
pub struct Running {
    /// Anchor of the rest pose.
    pub rest: Pose,
    /// What the estimator said at the end.
    pub estimate: Option<Estimate>,
    begin: f64,
    end: f64,
    samples: u64,
    extent: Extent,
    axes: [Whiteness; 6],
    force: f64,
    amplification: f64,
}

impl Running {
    /// From its first sample's time and its anchor.
    pub fn new(begin: f64, rest: Pose) -> Self {
        Running {
            rest,
            estimate: None,
            begin,
            end: begin,
            samples: 0,
            extent: Extent::default(),
            axes: Default::default(),
            force: 0.0,
            amplification: 0.0,
        }
    }

    /// Takes a sample.
    pub fn push(&mut self, normal: &Vec3, sample: &Matched, normal_force: f64) {
        self.extent.push(normal, &sample.motion, normal_force);
        self.end = sample.time;
        self.samples += 1;
        self.force += normal_force;
        self.amplification += sample.amplification;
    }

    /// Takes a whitened recursive residual.
    pub fn residual(&mut self, axis: usize, residual: f64) {
        self.axes[axis].push(residual);
    }

    /// Samples so far.
    pub fn samples(&self) -> u64 {
        self.samples
    }

    /// Mean ratio of the twist's variance to a pose sample's, where twists were smoothed from poses.
    pub fn amplification(&self) -> f64 {
        self.amplification / self.samples.max(1) as f64
    }

    /// What is to be said; `motion_noise` as [`noise::MotionNoise::deviations`], `scale` the sensor's (reading over truth).
    pub fn report(&self, frame: &Frame, prior: &Prior, motion_noise: &[f64; 4], scale: f64) -> Option<Stance> {
        let mut estimate = self.estimate.clone()?;
        let bias = self.bias(frame, prior, &estimate, motion_noise);
        estimate.value.iter_mut().for_each(|x| *x /= scale);
        estimate.covariance /= scale * scale;
        let moved = self.extent.moved();
        let values: Vec<Value> = (0..frame.parameters.len())
            .map(|k| {
                let parameter = frame.parameters[k];
                let (value, deviation) = (estimate.value[k], estimate.covariance[(k, k)].max(0.0).sqrt());
                let excitation = verdict(parameter, value, deviation, prior.deviation[k], prior.scale[k]);
                let advice = (excitation != Excitation::Identified).then(|| advice(parameter, &moved));
                let bias = bias.as_ref().map(|bias| bias[k] / scale);
                Value { parameter, value, deviation, bias, excitation, advice }
            })
            .collect();
        let rows = frame.sole.rows();
        Some(Stance {
            begin: self.begin,
            end: self.end,
            samples: self.samples,
            unphysical: unphysical(&values),
            values,
            covariance: estimate.covariance,
            noise_ratio: estimate.noise,
            condition: estimate.condition,
            axes: (0..rows)
                .map(|k| Axis { rms: self.axes[k].rms() * frame.noise[k], whiteness: self.axes[k].verdict() })
                .collect(),
            moved,
            mean_normal_force: self.force / self.samples.max(1) as f64,
            change: None,
        })
    }

    fn bias(&self, frame: &Frame, prior: &Prior, estimate: &Estimate, motion_noise: &[f64; 4]) -> Option<Vec<f64>> {
        let one = noise::information(&frame.sole, &frame.parameters, &prior.scale, &frame.noise, motion_noise);
        let information = one * estimate.weight;
        let relative: Vec<f64> = estimate.value.iter().zip(&prior.scale).map(|(x, s)| x / s).collect();
        let bias = noise::bias(&estimate.memory, &information, &relative)?;
        Some(bias.iter().zip(&prior.scale).map(|(x, s)| x * s).collect())
    }
}

/// Values that no ground can have.
fn unphysical(values: &[Value]) -> Vec<String> {
    let mut out = Vec::new();
    for value in values.iter().filter(|value| value.parameter.of_material()) {
        let name = if value.parameter.is_damping() { "damping" } else { "stiffness" };
        let clear = if value.value < -2.0 * value.deviation { "" } else { ", though within two deviations of zero" };
        if value.value < 0.0 || (value.value == 0.0 && !value.parameter.is_damping()) {
            out.push(format!("{name} of {:.4e} is not above zero{clear}: ground neither pulls a sole in nor drives it", value.value));
        }
    }
    let find = |parameter: Parameter| values.iter().find(|value| value.parameter == parameter).map(|value| value.value);
    let pairs = [
        (Parameter::Stiffness, Parameter::Damping),
        (Parameter::NormalStiffness, Parameter::NormalDamping),
        (Parameter::TangentialStiffness, Parameter::TangentialDamping),
    ];
    for (stiffness, damping) in pairs {
        if let (Some(k), Some(b)) = (find(stiffness), find(damping))
            && k > 0.0
            && b > LONGEST_RETURN * k
        {
            out.push(format!("damping over stiffness is {:.1} s: such ground would not come back", b / k));
        }
    }
    out
}

/// Values and covariance of stiffness and damping alone, in the order of the layout.
pub fn material(stance: &Stance) -> (Vec<f64>, DMatrix<f64>) {
    let kept: Vec<usize> = (0..stance.values.len()).filter(|k| stance.values[*k].parameter.of_material()).collect();
    let values = kept.iter().map(|k| stance.values[*k].value).collect();
    (values, DMatrix::from_fn(kept.len(), kept.len(), |i, k| stance.covariance[(kept[i], kept[k])]))
}
