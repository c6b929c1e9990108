//! Rigid-body terms of a tree with 30 joints on a floating base (36 degrees of freedom): mass matrix, bias, momentum.
//! `tests/bench/beside_engine.py` runs it beside a physics engine on the same tree. `cargo bench --bench dynamics -- FILE`
//! writes the tree's URDF to FILE.

#[path = "../common/random_tree.rs"]
mod random_tree;
mod timing;

use std::hint::black_box;

use timing::{interleaved, report};
use underfoot::dynamics::Workspace;
use underfoot::model::{ModelOptions, State, read_urdf};
use underfoot::spatial::{Pose, Twist, Vec3};

const SEED: u64 = 36;

fn main() {
    let urdf = (SEED..)
        .map(|seed| random_tree::random_urdf(seed, 40))
        .find(|urdf| read_urdf(urdf, &ModelOptions::default()).is_ok_and(|m| m.velocities() == 36));
    let urdf = urdf.expect("some tree of 40 joints has 30 moving ones");
    let model = read_urdf(&urdf, &ModelOptions::default()).expect("it was read before");
    if let Some(path) = std::env::args().skip(1).find(|a| !a.starts_with("--")) {
        std::fs::write(path, &urdf).expect("the file can be written");
    }
    let n = model.joints.len();
    let state = State {
        base_pose: Pose::identity(),
        base_twist: Twist { linear: Vec3::new(0.1, 0.2, 0.3), angular: Vec3::new(0.3, -0.2, 0.1) },
        position: (0..n).map(|j| 0.1 * (j as f64).sin()).collect(),
        velocity: (0..n).map(|j| (j as f64).cos()).collect(),
    };
    let gravity = Vec3::new(0.0, 0.0, -9.80665);
    let mut ws = Workspace::new(&model);
    let times = interleaved(
        2000,
        &mut [&mut || {
            // Ten at a time: one is as short as the clock is coarse.
            for _ in 0..10 {
                ws.update(black_box(&model), black_box(&state), &gravity);
            }
            ws.bias[0]
        }],
    );
    report("dynamics terms, 36 degrees of freedom", times[0] / 10.0, None);
}
