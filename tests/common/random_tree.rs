//! Random robots as URDF text, the same text for the same seed on every machine: branched trees with
//! fixed, revolute, continuous and prismatic joints, oblique axes and rotated inertial frames.
//! Elements come in shuffled order, so document order differs from tree order.
//!
//! Use: `#[path = "common/random_tree.rs"] mod random_tree;`

#![allow(dead_code, missing_docs)]

use std::fmt::Write;

#[path = "rng.rs"]
mod rng;

pub use rng::Rng;

fn spelled(v: [f64; 3]) -> String {
    format!("{} {} {}", v[0], v[1], v[2])
}

/// A physical inertia: a solid box of random sides, its axes turned by a random rotation so that
/// the products of inertia are there, and the inertial frame turned once more.
fn inertial(rng: &mut Rng) -> String {
    let mass = rng.uniform(0.2, 8.0);
    let sides = [rng.uniform(0.05, 0.4), rng.uniform(0.05, 0.4), rng.uniform(0.05, 0.4)];
    let square = |i: usize| sides[i] * sides[i];
    let principal = [
        mass * (square(1) + square(2)) / 12.0,
        mass * (square(0) + square(2)) / 12.0,
        mass * (square(0) + square(1)) / 12.0,
    ];
    let [roll, pitch, yaw] = rng.triple(1.5);
    let ((sr, cr), (sp, cp), (sy, cy)) = (roll.sin_cos(), pitch.sin_cos(), yaw.sin_cos());
    let r = [
        [cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr],
        [sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr],
        [-sp, cp * sr, cp * cr],
    ];
    let entry = |i: usize, j: usize| (0..3).map(|k| r[i][k] * principal[k] * r[j][k]).sum::<f64>();
    format!(
        "<inertial><origin xyz=\"{}\" rpy=\"{}\"/><mass value=\"{mass}\"/><inertia ixx=\"{}\" ixy=\"{}\" ixz=\"{}\" iyy=\"{}\" iyz=\"{}\" izz=\"{}\"/></inertial>",
        spelled(rng.triple(0.2)), spelled(rng.triple(3.0)),
        entry(0, 0), entry(0, 1), entry(0, 2), entry(1, 1), entry(1, 2), entry(2, 2)
    )
}

fn axis(rng: &mut Rng) -> [f64; 3] {
    loop {
        let v = rng.triple(1.0);
        if v.iter().map(|c| c * c).sum::<f64>() > 0.1 {
            return v;
        }
    }
}

fn joint(rng: &mut Rng, index: usize, parent: usize) -> String {
    // The first joint always moves, so that every robot has a joint.
    let kind = match if index == 1 { 0 } else { rng.below(10) } {
        0..=4 => "revolute",
        5 | 6 => "continuous",
        7 => "prismatic",
        _ => "fixed",
    };
    let mut text = format!(
        "<joint name=\"j{index}\" type=\"{kind}\"><parent link=\"l{parent}\"/><child link=\"l{index}\"/><origin xyz=\"{}\" rpy=\"{}\"/>",
        spelled(rng.triple(0.4)), spelled(rng.triple(3.0))
    );
    if kind != "fixed" {
        let _ = write!(text, "<axis xyz=\"{}\"/>", spelled(axis(rng)));
        if kind != "continuous" {
            let _ = write!(
                text, "<limit lower=\"{}\" upper=\"{}\" effort=\"{}\" velocity=\"{}\"/>",
                rng.uniform(-3.0, -0.5), rng.uniform(0.5, 3.0), rng.uniform(10.0, 200.0), rng.uniform(2.0, 20.0)
            );
        }
    }
    text.push_str("</joint>");
    text
}

/// A robot of `joints` joints (at least 1, fixed ones included), links `l0` to `l{joints}`, joints
/// `j1` to `j{joints}`; `l0` is the base. Every link but a few welded ones has mass.
pub fn random_urdf(seed: u64, joints: usize) -> String {
    let mut rng = Rng(seed ^ 0x5eed_0f00_7001_u64);
    let mut links = vec![format!("<link name=\"l0\">{}</link>", inertial(&mut rng))];
    let mut elements = Vec::new();
    for index in 1..=joints.max(1) {
        // Mostly long chains, now and then a branch further up.
        let parent = if rng.below(3) > 0 { index - 1 } else { rng.below(index) };
        let element = joint(&mut rng, index, parent);
        let weightless = element.contains("\"fixed\"") && rng.below(2) == 0;
        let body = if weightless { String::new() } else { inertial(&mut rng) };
        links.push(format!("<link name=\"l{index}\">{body}</link>"));
        elements.push(element);
    }
    rng.shuffle(&mut links);
    rng.shuffle(&mut elements);
    elements.append(&mut links);
    rng.shuffle(&mut elements);
    format!("<?xml version=\"1.0\"?>\n<robot name=\"random{seed}\">\n  {}\n</robot>\n", elements.join("\n  "))
}
