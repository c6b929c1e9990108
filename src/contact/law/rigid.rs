//! The rigid law: no compliance. The sole's acceleration is prescribed and the wrench is whatever
//! the motion needs, so the tick-end wrench acts throughout (`theta = 1`).
//!
//! It is the bonded contact equality `(Z + G)^-1 [G a + w_plus - drift] = 0` as G grows without bound:
//! `a = 0`, or with `stop`, `a = -(twist - rest twist) / T`, which brings the sole to the ground's own
//! velocity within the tick.

use crate::contact::{Ground, SoleMotion, TickMap};
use crate::spatial::{Mat6, Vec6, Wrench};

/// The rigid tick map. `dimension` is 6, or 3 on a point sole, whose angular rows stay zero.
pub(in crate::contact) fn tick_map(
    ground: &Ground,
    motion: &SoleMotion,
    stop: bool,
    tick: f64,
    dimension: usize,
    row_scale: Vec6,
) -> TickMap {
    let mut acceleration_part = Mat6::zeros();
    let mut right_side = Vec6::zeros();
    let excess = motion.twist.to_vec6() - ground.rest_twist.to_vec6();
    for i in 0..dimension {
        acceleration_part[(i, i)] = 1.0;
        if stop {
            right_side[i] = -excess[i] / tick;
        }
    }
    TickMap {
        dimension,
        now: ground.measured.unwrap_or(Wrench::zero()),
        now_known: ground.measured.is_some(),
        drift: Vec6::zeros(),
        gain: Mat6::zeros(),
        theta: 1.0,
        acceleration_part,
        wrench_part: Mat6::zeros(),
        right_side,
        row_scale,
        stiffness: Mat6::zeros(),
        damping: Mat6::zeros(),
        rigid: true,
    }
}
