//! Did the log excite a parameter, and if not, what motion would?

use super::parameters::Parameter;
use super::regressor::Motion;
use crate::spatial::{Pose, Vec3};

/// Deviation over value up to which a parameter counts as identified.
const GOOD: f64 = 0.1;
/// And beyond which it counts as not identifiable from this log.
const USELESS: f64 = 0.5;
/// Share of the prior's deviation above which the log has hardly spoken.
const PRIOR_SHARE: f64 = 0.5;

/// How well a parameter came out.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Excitation {
    /// Deviation at most 10 % of the value.
    Identified,
    /// Deviation at most 50 % of the value.
    Weak,
    /// The log does not tell.
    NotIdentifiable,
}

/// How much the sole moved in a stance.
#[derive(Debug, Clone, Default)]
pub struct Extent {
    samples: f64,
    anchor: Option<Pose>,
    low: [f64; 4],
    high: [f64; 4],
    speed: [f64; 3],
    turn: f64,
}

/// In figures.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Moved {
    /// Range of the sole's position along the normal (m).
    pub sink_range: f64,
    /// Range in the ground plane, the larger of two axes (m).
    pub shear_range: f64,
    /// Largest turn from the first sample (rad).
    pub turn: f64,
    /// Range of the normal force (N).
    pub force_range: f64,
    /// Root mean square speed along the normal (m/s).
    pub normal_speed: f64,
    /// Root mean square speed in the plane (m/s).
    pub tangential_speed: f64,
    /// Root mean square angular speed (rad/s).
    pub angular_speed: f64,
}

impl Extent {
    /// Takes a sample of the stance.
    pub fn push(&mut self, normal: &Vec3, motion: &Motion, normal_force: f64) {
        let anchor = *self.anchor.get_or_insert(motion.pose);
        let moved = motion.pose.translation - anchor.translation;
        let along = moved.dot(normal);
        let helper = if normal.x.abs() < 0.9 { Vec3::x() } else { Vec3::y() };
        let first = (helper - normal * normal.dot(&helper)).normalize();
        let figures = [along, moved.dot(&first), moved.dot(&normal.cross(&first)), normal_force];
        for (i, figure) in figures.iter().enumerate() {
            let begin = self.samples == 0.0;
            self.low[i] = if begin { *figure } else { self.low[i].min(*figure) };
            self.high[i] = if begin { *figure } else { self.high[i].max(*figure) };
        }
        let v = motion.twist.linear;
        let down = v.dot(normal);
        self.speed[0] += down * down;
        self.speed[1] += (v - normal * down).norm_squared();
        self.speed[2] += motion.twist.angular.norm_squared();
        // |R - R'| = 2 sqrt(2) |sin(angle)|.
        let relative = motion.pose.rotation * anchor.rotation.transpose();
        let sine = (relative - relative.transpose()).norm() / 8.0_f64.sqrt();
        self.turn = self.turn.max(sine.min(1.0).asin());
        self.samples += 1.0;
    }

    /// The figures.
    pub fn moved(&self) -> Moved {
        let n = self.samples.max(1.0);
        let range = |i: usize| self.high[i] - self.low[i];
        Moved {
            sink_range: range(0),
            shear_range: range(1).max(range(2)),
            turn: self.turn,
            force_range: range(3),
            normal_speed: (self.speed[0] / n).sqrt(),
            tangential_speed: (self.speed[1] / n).sqrt(),
            angular_speed: (self.speed[2] / n).sqrt(),
        }
    }
}

/// The verdict from the deviation, the value, the prior's deviation and the size at which the parameter starts to matter.
/// Products with a rest height and the like may well be zero, so they are measured against their usual size.
pub fn verdict(parameter: Parameter, value: f64, deviation: f64, prior_deviation: f64, scale: f64) -> Excitation {
    let size = if parameter.of_material() { value.abs() } else { value.abs().max(scale) };
    if !deviation.is_finite() || deviation > PRIOR_SHARE * prior_deviation || deviation > USELESS * size {
        Excitation::NotIdentifiable
    } else if deviation > GOOD * size {
        Excitation::Weak
    } else {
        Excitation::Identified
    }
}

/// What was seen, and what motion would help.
pub fn advice(parameter: Parameter, moved: &Moved) -> String {
    use Parameter as P;
    let mm = 1e3;
    match parameter {
        P::Stiffness => format!(
            "the sole sank and rose by {:.2} mm, sheared by {:.2} mm and turned by {:.4} rad: shift weight on and off this sole, or rock it",
            moved.sink_range * mm, moved.shear_range * mm, moved.turn
        ),
        P::NormalStiffness => format!(
            "the sole sank and rose by {:.2} mm while the normal force changed by {:.1} N: shift weight on and off this sole, or rock it",
            moved.sink_range * mm, moved.force_range
        ),
        P::TangentialStiffness => format!(
            "the sole sheared by {:.2} mm: sway sideways and forwards, or turn about the normal",
            moved.shear_range * mm
        ),
        P::Damping => format!(
            "sole speed stayed at {:.2} mm/s RMS and {:.4} rad/s RMS: bounce or rock faster",
            moved.normal_speed.hypot(moved.tangential_speed) * mm, moved.angular_speed
        ),
        P::NormalDamping => format!(
            "sole speed along the normal stayed at {:.2} mm/s RMS and {:.4} rad/s RMS: bounce or rock faster",
            moved.normal_speed * mm, moved.angular_speed
        ),
        P::TangentialDamping => format!(
            "sole speed in the plane stayed at {:.2} mm/s RMS: sway faster",
            moved.tangential_speed * mm
        ),
        P::Height => format!(
            "the sole sank and rose by {:.2} mm only: unload it almost wholly and load it again, or give the ground plane",
            moved.sink_range * mm
        ),
        P::Offset(_) => format!(
            "the sole sheared by {:.2} mm only: sway both ways, or trust the touchdown",
            moved.shear_range * mm
        ),
        P::Tilt(_) => format!(
            "the sole turned by {:.4} rad only: rock it both ways, or give the ground plane",
            moved.turn
        ),
        P::ForceBias(_) | P::MomentBias(_) => {
            "a constant reading cannot be told from a rest pose that is unknown too: give the ground plane, load the sole in \
             several attitudes, or take the bias from the sole in the air"
                .to_owned()
        }
    }
}
