//! From sole acceleration to the wrench at the tick's end.
//!
//! Over one tick T the sole acceleration a is held, and the law at the state then reached is
//! linearised about the state reached with a = 0 (the drift state):
//! ```text
//! w_plus = w_drift - G a,     G = T D + c T^2 S diag(I, J_l(T w)),
//! ```
//! J_l the left Jacobian of SO(3), because `exp(T w + c T^2 alpha)` turns the drift pose by
//! `J_l c T^2 alpha` to first order. With a measured wrench the law gives the change only:
//! `w_drift = w_measured + law(drift) - law(now)`. The ground moves on with its rest twist, and its
//! normal turns with it.

use super::law::{bonded, rigid};
use super::moments::SoleMoments;
use super::relative::Relative;
use super::rest::resolve_relative;
use super::{ContactError, Direction, Law, Material, Patch, SoleMotion, TickMap, TickRule};
use crate::spatial::polygon::SoleShape;
use crate::spatial::{Mat6, Pose, Twist, Vec3, Vec6, exp_so3, left_jacobian_so3};

impl TickRule {
    /// c: the share of `T^2 a` in the tick-end position. Under `held` the position follows from the exact motion; one half
    /// is what it would be with a constant acceleration.
    pub fn position_weight(self) -> f64 {
        match self {
            TickRule::BackwardEuler => 1.0,
            TickRule::Trapezoid | TickRule::Held => 0.5,
            TickRule::Explicit => 0.0,
        }
    }

    /// theta: the share of the tick-end wrench in the one that acts during the tick. Under `held` the average wrench is an
    /// unknown of its own, and no mix stands in for it.
    pub fn wrench_weight(self) -> f64 {
        self.position_weight()
    }
}

/// The map of one sole over one tick. Under [`TickRule::Held`] the present and the drift wrench, stiffness and damping of a soft sole are
/// what [`super::held::coupled_map`] needs; its contact equality and `theta` are not used.
///
/// `tick` is T (s), `mass` (kg) the mass that Z weighs the wrench against (the robot's), which
/// changes the scaling of the contact equality and nothing else.
///
/// # Errors
/// As [`super::rest::resolve`]; the explicit rule without damping or with `T >= 2 b/k`; a tick or
/// mass that is not positive; numbers that overflow.
pub fn tick_map(
    patch: &Patch,
    motion: &SoleMotion,
    rule: TickRule,
    tick: f64,
    mass: f64,
) -> Result<TickMap, ContactError> {
    require_positive("the tick", tick)?;
    require_positive("the mass", mass)?;
    let sole = SoleMoments::of(patch.shape);
    let radius = sole.radius();
    let (dimension, angular_scale) = match patch.shape {
        SoleShape::Polygon(_) => (6, 1.0 / radius),
        SoleShape::Point => (3, 0.0),
    };
    let row_scale = Vec6::new(1.0, 1.0, 1.0, angular_scale, angular_scale, angular_scale);
    let material = match patch.ground.law {
        Law::Bonded(material) => material,
        Law::Rigid { stop } => {
            return Ok(rigid::tick_map(patch.ground, motion, stop, tick, dimension, row_scale));
        }
    };
    if rule == TickRule::Explicit {
        accept_explicit(&material, tick)?;
    }
    let state = resolve_relative(patch, motion)?;
    let c = rule.position_weight();
    let drift_state = state.advanced(tick, c, &Vec6::zeros());
    let (stiffness, damping) = bonded::derivatives(&sole, &material, &drift_state);
    let gain = gain(&stiffness, &damping, &state, tick, c);
    let law_now = bonded::wrench(&sole, &material, &state);
    let law_drift = bonded::wrench(&sole, &material, &drift_state).to_vec6();
    let (now, drift) = match patch.ground.measured {
        None => (law_now, law_drift),
        Some(measured) => (measured, measured.to_vec6() + (law_drift - law_now.to_vec6())),
    };
    let equality = equality(&gain, &drift, mass, radius, dimension)?;
    Ok(TickMap {
        dimension,
        now,
        now_known: true,
        drift,
        gain,
        theta: rule.wrench_weight(),
        acceleration_part: equality.acceleration_part,
        wrench_part: equality.wrench_part,
        right_side: equality.right_side,
        row_scale,
        stiffness,
        damping,
        rigid: false,
    })
}

/// `G = T D + c T^2 S diag(I, J_l(T w))`, S and D at the drift state.
fn gain(stiffness: &Mat6, damping: &Mat6, state: &Relative, tick: f64, c: f64) -> Mat6 {
    let mut turned = *stiffness;
    let columns = stiffness.fixed_columns::<3>(3) * left_jacobian_so3(&(state.twist.angular * tick));
    turned.fixed_columns_mut::<3>(3).copy_from(&columns);
    damping * tick + turned * (c * tick * tick)
}

/// The contact equality, see [`TickMap`].
struct Equality {
    acceleration_part: Mat6,
    wrench_part: Mat6,
    right_side: Vec6,
}

/// `(Z + G)^-1 [G a + w_plus - drift] = 0` with `Z = m diag(1, 1, 1, r^2, r^2, r^2)`.
///
/// Lengths are measured in r while inverting: with N = diag(1, 1, 1, r, r, r) and
/// `H = N^-1 G N^-1 / m` the inverse is `N^-1 (I + H)^-1 N^-1 / m`, and H is free of units. Where H is
/// large `(I + H)^-1 H` tends to the identity, where it is zero to zero.
fn equality(
    gain: &Mat6,
    drift: &Vec6,
    mass: f64,
    radius: f64,
    dimension: usize,
) -> Result<Equality, ContactError> {
    let degenerate =
        || ContactError::Degenerate { largest_gain: gain.amax(), largest_drift: drift.amax() };
    let finite = |m: &[f64]| m.iter().all(|x| x.is_finite());
    if !finite(gain.as_slice()) || !finite(drift.as_slice()) {
        return Err(degenerate());
    }
    let lengths = Vec6::new(1.0, 1.0, 1.0, radius, radius, radius);
    let shrink = Mat6::from_diagonal(&lengths.map(|l| 1.0 / l));
    let h = shrink * gain * shrink / mass;
    let factors = (Mat6::identity() + h).full_piv_lu();
    let inverse = factors.try_inverse().ok_or_else(degenerate)?;
    let mut acceleration_part = shrink * (inverse * h) * Mat6::from_diagonal(&lengths);
    let mut wrench_part = shrink * inverse * shrink / mass;
    let mut right_side = wrench_part * drift;
    for i in dimension..6 {
        acceleration_part.fill_row(i, 0.0);
        wrench_part.fill_row(i, 0.0);
        right_side[i] = 0.0;
    }
    let parts = [acceleration_part.as_slice(), wrench_part.as_slice(), right_side.as_slice()];
    if !parts.into_iter().all(finite) {
        return Err(degenerate());
    }
    Ok(Equality { acceleration_part, wrench_part, right_side })
}

/// The explicit rule takes the tick-end wrench from the velocity alone: without damping it cannot move the
/// wrench, and from `T = 2 b/k` on the wrench it asks for lies on the wrong side.
fn accept_explicit(material: &Material, tick: f64) -> Result<(), ContactError> {
    let directions = [
        (Direction::Normal, material.normal_stiffness, material.normal_damping),
        (Direction::Tangential, material.tangential_stiffness, material.tangential_damping),
    ];
    for (direction, stiffness, damping) in directions {
        if damping <= 0.0 {
            return Err(ContactError::ExplicitNeedsDamping { direction, damping });
        }
        if tick * stiffness >= 2.0 * damping {
            let limit = 2.0 * damping / stiffness;
            return Err(ContactError::ExplicitTickTooLong { direction, tick, limit, stiffness, damping });
        }
    }
    Ok(())
}

/// Sole motion after a tick with the acceleration held: `o + T v + c T^2 a`,
/// `exp(T w + c T^2 alpha) R`, twist `+ T a`. With a = 0 it is the drift state.
pub fn advance_motion(motion: &SoleMotion, acceleration: &Vec6, tick: f64, c: f64) -> SoleMotion {
    let twist = motion.twist.to_vec6();
    let step = Twist::from_vec6(&(twist * tick + acceleration * (c * tick * tick)));
    SoleMotion {
        pose: Pose {
            rotation: exp_so3(&step.angular) * motion.pose.rotation,
            translation: motion.pose.translation + step.linear,
        },
        twist: Twist::from_vec6(&(twist + acceleration * tick)),
    }
}

/// Rest pose and ground normal after a tick of the ground's own motion (its twist stays).
pub fn advance_ground(normal: &Vec3, rest: &Pose, rest_twist: &Twist, tick: f64) -> (Pose, Vec3) {
    let turning = exp_so3(&(rest_twist.angular * tick));
    let moved = Pose {
        rotation: turning * rest.rotation,
        translation: rest.translation + rest_twist.linear * tick,
    };
    (moved, turning * normal)
}

pub(super) fn require_positive(quantity: &'static str, value: f64) -> Result<(), ContactError> {
    if value > 0.0 && value.is_finite() {
        Ok(())
    } else {
        Err(ContactError::NotPositive { quantity, value })
    }
}
