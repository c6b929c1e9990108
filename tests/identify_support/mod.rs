//! Made-up stances on known ground, with seeded Gaussian noise. Invented data.
#![allow(dead_code)]

use underfoot::contact::law::bonded_wrench;
use underfoot::contact::{Material, SoleMotion};
use underfoot::identify::regressor::Motion;
use underfoot::identify::setup::*;
use underfoot::identify::{Frame, Matched};
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Pose, Twist, Vec3, Wrench, exp_so3};

/// SplitMix64 (Steele, Lea & Flood 2014, quoted from memory) and the transformation of Box and Muller.
pub struct Random(pub u64);

impl Random {
    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^ (z >> 31)
    }

    pub fn uniform(&mut self) -> f64 {
        ((self.next() >> 11) as f64 + 1.0) / (1u64 << 53) as f64
    }

    pub fn normal(&mut self) -> f64 {
        let radius = (-2.0 * self.uniform().ln()).sqrt();
        radius * (std::f64::consts::TAU * self.uniform()).cos()
    }

    pub fn vector(&mut self, deviation: f64) -> Vec3 {
        Vec3::new(self.normal(), self.normal(), self.normal()) * deviation
    }
}

pub fn rectangle() -> SoleShape {
    SoleShape::Polygon(Polygon::new(vec![[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]]).unwrap())
}

pub fn isotropic(stiffness: f64, damping: f64) -> Material {
    Material { normal_stiffness: stiffness, tangential_stiffness: stiffness, normal_damping: damping, tangential_damping: damping }
}

/// One sole, isotropic ground, nothing forgotten, rest height unknown, touchdown at 40 N.
pub fn setup(shape: SoleShape) -> Setup {
    Setup {
        source: Source::Soles,
        soles: vec![SoleSetup { name: "left".into(), shape, in_model: 0, sensor: Sensor::plain() }],
        directions: Directions::Isotropic,
        unknown: Unknown { height: true, ..Unknown::default() },
        guess: None,
        forgetting: Forgetting::None,
        touchdown: Touchdown::Force { on: 40.0, off: 20.0 },
        plane: Plane { normal: Vec3::z(), point: None },
        gravity: Vec3::new(0.0, 0.0, -9.80665),
        lags: vec![Lag { delay: 0.0, time_constant: 0.0 }],
        half_window: 5,
        longest_step: 0.1,
        weight: None,
        scale: false,
        motion_noise: None,
        still_feet: false,
    }
}

/// A stance on a bed whose surface lies at `height`: the sole sinks by `sink` within some 0.1 s, then sways and rocks.
/// Pose and twist at time t after touchdown.
pub fn stance_motion(t: f64, height: f64, sink: f64) -> Motion {
    let fall = 1.0 - (-t / 0.03).exp();
    let fall_rate = (-t / 0.03).exp() / 0.03;
    let wave = |amplitude: f64, hertz: f64| {
        let w = std::f64::consts::TAU * hertz;
        (amplitude * (w * t).sin(), amplitude * w * (w * t).cos())
    };
    let (bounce, sway, roll, pitch) = (wave(0.05 * sink, 6.0), wave(0.08 * sink, 1.1), wave(0.006, 2.3), wave(0.004, 1.7));
    let turn = Vec3::new(roll.0, pitch.0, 0.0);
    let rate = underfoot::spatial::left_jacobian_so3(&turn) * Vec3::new(roll.1, pitch.1, 0.0);
    Motion {
        pose: Pose {
            rotation: exp_so3(&turn),
            translation: Vec3::new(sway.0, 0.3 * sway.0, height - sink * fall + bounce.0 * fall),
        },
        twist: Twist {
            linear: Vec3::new(sway.1, 0.3 * sway.1, -sink * fall_rate + bounce.1 * fall + bounce.0 * fall_rate),
            angular: rate,
        },
    }
}

/// The true wrench in world axes, sole resting at `height`.
pub fn wrench(shape: &SoleShape, material: &Material, motion: &Motion, height: f64) -> Wrench {
    let rest = Pose { translation: Vec3::new(0.0, 0.0, height), ..Pose::identity() };
    let state = SoleMotion { pose: motion.pose, twist: motion.twist };
    bonded_wrench(shape, material, &Vec3::z(), &rest, &Twist::zero(), &state)
}

/// A matched sample with noise on the wrench, sole axes.
pub fn sample(random: &mut Random, time: f64, motion: Motion, wrench: &Wrench, noise: (f64, f64)) -> Matched {
    let mut seen = wrench.rotated(&motion.pose.rotation.transpose());
    seen.force += random.vector(noise.0);
    seen.moment += random.vector(noise.1);
    Matched { time, wrench: seen, motion, stands: None, amplification: 0.0 }
}

pub fn frame(setup: &Setup) -> Frame {
    Frame::new(setup, &setup.soles[0])
}
