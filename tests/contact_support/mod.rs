//! Shared by the contact tests: shapes, random states from a small generator, and the check values.
#![allow(dead_code)]

use underfoot::contact::{Ground, Law, Material, Patch, Rest, SoleMotion};
use underfoot::spatial::polygon::{Polygon, SoleShape};
use underfoot::spatial::{Mat3, Pose, Twist, Vec3, Vec6, Wrench, exp_so3};

pub const RECTANGLE: [[f64; 2]; 4] = [[-0.11, -0.05], [0.11, -0.05], [0.11, 0.05], [-0.11, 0.05]];
pub const HEX_SOLE: [[f64; 2]; 6] =
    [[0.14, -0.03], [0.14, 0.02], [0.10, 0.05], [-0.08, 0.04], [-0.08, -0.04], [0.08, -0.05]];

pub fn shape(vertices: &[[f64; 2]]) -> SoleShape {
    SoleShape::Polygon(Polygon::new(vertices.to_vec()).expect("a convex polygon"))
}

pub fn isotropic(stiffness: f64, damping: f64) -> Material {
    Material {
        normal_stiffness: stiffness,
        tangential_stiffness: stiffness,
        normal_damping: damping,
        tangential_damping: damping,
    }
}

pub fn checks() -> serde_json::Value {
    let text = include_str!("../data/ground_checks.json");
    serde_json::from_str(text).expect("the check values parse")
}

pub fn numbers(value: &serde_json::Value) -> Vec<f64> {
    value.as_array().expect("an array").iter().map(|x| x.as_f64().expect("a number")).collect()
}

/// A seeded generator (xorshift64*): the same states on every run.
pub struct Dice(u64);

impl Dice {
    pub fn new(seed: u64) -> Self {
        Dice(seed.wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1)
    }

    /// Uniform in -1..1.
    pub fn signed(&mut self) -> f64 {
        self.0 ^= self.0 >> 12;
        self.0 ^= self.0 << 25;
        self.0 ^= self.0 >> 27;
        let bits = self.0.wrapping_mul(0x2545_F491_4F6C_DD1D) >> 11;
        bits as f64 / (1u64 << 52) as f64 - 1.0
    }

    pub fn vector(&mut self, size: f64) -> Vec3 {
        Vec3::new(self.signed(), self.signed(), self.signed()) * size
    }

    pub fn six(&mut self, linear: f64, angular: f64) -> Vec6 {
        underfoot::spatial::stack(&self.vector(linear), &self.vector(angular))
    }

    pub fn rotation(&mut self) -> Mat3 {
        exp_so3(&self.vector(1.8))
    }

    pub fn twist(&mut self, linear: f64, angular: f64) -> Twist {
        Twist { linear: self.vector(linear), angular: self.vector(angular) }
    }

    pub fn wrench(&mut self, force: f64, moment: f64) -> Wrench {
        Wrench { force: self.vector(force), moment: self.vector(moment) }
    }

    pub fn material(&mut self) -> Material {
        Material {
            normal_stiffness: 2e6 * (1.1 + self.signed()),
            tangential_stiffness: 1e6 * (1.1 + self.signed()),
            normal_damping: 1e4 * (1.1 + self.signed()),
            tangential_damping: 2e4 * (1.1 + self.signed()),
        }
    }
}

/// A random situation: everything oblique, everything moving, deflections of some millimetres and
/// a few hundredths of a radian.
pub struct Situation {
    pub shape: SoleShape,
    pub material: Material,
    pub normal: Vec3,
    pub rest: Pose,
    pub rest_twist: Twist,
    pub motion: SoleMotion,
}

impl Situation {
    pub fn random(dice: &mut Dice, vertices: &[[f64; 2]]) -> Self {
        Situation::of(dice, shape(vertices))
    }

    pub fn of(dice: &mut Dice, shape: SoleShape) -> Self {
        let rotation = dice.rotation();
        let translation = dice.vector(1.0);
        Situation {
            shape,
            material: dice.material(),
            normal: dice.vector(1.0).normalize(),
            rest: Pose {
                rotation: exp_so3(&dice.vector(0.05)) * rotation,
                translation: translation + dice.vector(0.01),
            },
            rest_twist: dice.twist(0.3, 1.0),
            motion: SoleMotion { pose: Pose { rotation, translation }, twist: dice.twist(0.3, 1.0) },
        }
    }

    pub fn ground(&self) -> Ground {
        Ground {
            law: Law::Bonded(self.material),
            normal: self.normal,
            rest: Rest::Pose(self.rest),
            rest_twist: self.rest_twist,
            measured: None,
        }
    }

    pub fn law(&self) -> Wrench {
        self.law_at(&self.motion)
    }

    pub fn law_at(&self, motion: &SoleMotion) -> Wrench {
        underfoot::contact::law::bonded_wrench(
            &self.shape,
            &self.material,
            &self.normal,
            &self.rest,
            &self.rest_twist,
            motion,
        )
    }
}

/// Level ground at rest under a sole at rest at the origin.
pub fn level(law: Law, rest: Rest) -> (Ground, SoleMotion) {
    let ground = Ground {
        law,
        normal: Vec3::z(),
        rest,
        rest_twist: Twist::zero(),
        measured: None,
    };
    (ground, SoleMotion { pose: Pose::identity(), twist: Twist::zero() })
}

pub fn patch<'a>(shape: &'a SoleShape, ground: &'a Ground) -> Patch<'a> {
    Patch { shape, ground }
}

/// Largest entry of the difference beside the largest entry of the expected, force and moment apart.
pub fn wrench_error(got: &Wrench, expected: &Wrench) -> f64 {
    let part = |a: &Vec3, b: &Vec3| (a - b).amax() / b.amax().max(1e-300);
    part(&got.force, &expected.force).max(part(&got.moment, &expected.moment))
}
