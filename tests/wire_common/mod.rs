//! A request that uses every kind of contact, limit and task, on the small biped of the data
//! directory. Invented numbers: what is tested with it is how requests are read.

#![allow(dead_code)]

use std::sync::Arc;

use serde_json::{Value, json};
use underfoot::model::Model;
use underfoot::wire::ModelSource;

/// No models registered.
pub struct Nothing;

impl ModelSource for Nothing {
    fn find(&self, _: &str) -> Option<Arc<Model>> {
        None
    }
}

pub const URDF: &str = include_str!("../data/biped7.urdf");

pub fn inline_model() -> Value {
    let sole = [[0.1, -0.05], [0.1, 0.05], [-0.06, 0.05], [-0.06, -0.05]];
    json!({
        "urdf": URDF,
        "soles": [
            { "name": "left", "link": "l_foot", "position": [0.03, 0.0, -0.08], "vertices": sole },
            { "name": "right", "link": "r_foot", "position": [0.03, 0.0, -0.08],
              "orientation": [0.0, 0.0, 0.0, 1.0], "vertices": sole },
            { "name": "toe", "link": "r_foot", "kind": "point", "position": [0.1, 0.0, -0.08] },
        ],
        "joints": [
            { "name": "l_ankle", "actuated": false },
            { "name": "r_knee", "rotor_inertia": 0.01, "viscous_friction": 0.1, "coulomb_friction": 0.2,
              "torque_speed": { "stall": 150.0, "no_load_speed": 20.0 },
              "position": { "lower": -0.1, "upper": 2.0 }, "speed": 12.0, "effort": 140.0 },
        ],
    })
}

pub fn model_request() -> Value {
    let mut request = inline_model();
    request["format"] = json!("underfoot/1");
    request
}

pub fn dynamics_request() -> Value {
    json!({
        "format": "underfoot/1", "model": inline_model(), "state": state(), "gravity": [0.0, 0.0, -9.81],
        "frames": ["head", "imu"], "loads": [{ "frame": "torso", "mass": 2.0 }],
    })
}

pub fn state() -> Value {
    json!({
        "base": { "position": [0.0, 0.0, 0.8], "orientation": [0.0, 0.0, 0.0, 1.0],
                  "linear_velocity": [0.1, 0.0, 0.0], "angular_velocity": [0.0, 0.2, 0.0] },
        "velocity_axes": { "linear": "world", "angular": "base" },
        "joints": [
            { "name": "r_hip", "position": 0.1, "velocity": 0.0 }, { "name": "r_knee", "position": 0.2 },
            { "name": "r_ankle", "position": -0.1 }, { "name": "l_hip", "position": 0.1 },
            { "name": "l_knee", "position": 0.2 }, { "name": "l_ankle", "position": -0.1 },
        ],
    })
}

fn contacts() -> Value {
    json!([
        { "sole": "left",
          "law": { "kind": "bonded", "stiffness": { "normal": 2e6, "tangential": 1e6 }, "damping": 2e4,
                   "per": "area" },
          "normal": [0.0, 0.0, 1.0],
          "rest": { "kind": "touchdown", "position": [0.0, 0.1, 0.0], "orientation": [0.0, 0.0, 0.0, 1.0],
                    "plane_point": [0.0, 0.0, 0.0] },
          "rest_velocity": { "linear": [0.0, 0.0, 0.01], "angular": [0.0, 0.0, 0.0] },
          "friction": { "set": "vertex", "coefficient": 0.6, "facets": 8,
                        "treatment": { "kind": "decay", "rate": 20.0 } },
          "normal_force": { "least": 5.0, "largest": 900.0, "treatment": { "kind": "hard" } },
          "wrench_rate": { "force": 2e4, "moment": 2e3,
                           "treatment": { "kind": "soft", "priority": 2, "weight": 1.0, "scale": 100.0 } } },
        { "sole": "right", "law": { "kind": "rigid", "stop": true },
          "measured_wrench": { "force": [0.0, 0.0, 130.0], "moment": [0.0, 1.0, 0.0], "axes": "sole" },
          "friction": { "set": "wrench", "coefficient": 0.6, "torsion": 0.03 } },
        { "sole": "toe", "law": { "kind": "bonded", "stiffness": 5e4, "damping": 500.0, "per": "sole" },
          "rest": { "kind": "carries", "force": [0.0, 0.0, 20.0] } },
    ])
}

fn limits() -> Value {
    json!([
        { "kind": "torque", "joints": [{ "name": "r_hip", "bound": 100.0 }, { "name": "r_knee" }] },
        { "name": "drives", "kind": "torque_speed" },
        { "kind": "coupled_torque", "bound": 150.0,
          "joints": [{ "name": "r_hip", "coefficient": 1.0 }, { "name": "r_knee", "coefficient": -1.0 }] },
        { "kind": "position", "horizon": 0.1, "joints": [{ "name": "r_knee", "lower": 0.0, "upper": 2.0 }],
          "treatment": { "kind": "soft", "priority": 1 } },
        { "kind": "velocity" },
    ])
}

fn tasks() -> Value {
    json!([
        { "name": "momentum", "kind": "momentum_second_rate", "priority": 1, "weight": 2.0, "scale": 10.0,
          "scale_angular": 1.0, "axes": ["x", "y", "z", "rx", "ry", "rz"],
          "second_rate": { "linear": [0.0, 0.0, 0.0] }, "rate": { "angular": [0.0, 0.0, 0.0] },
          "reference": { "linear": [0.0, 0.0, 0.0], "angular": [0.0, 0.0, 0.0] },
          "center": [0.0, 0.0, 0.7], "rate_gain": { "linear": 24.0, "angular": 30.0 },
          "momentum_gain": { "linear": 192.0, "angular": 200.0 }, "position_gain": 512.0 },
        { "name": "rate", "kind": "momentum_rate", "priority": 9, "rate": { "linear": [0.0, 0.0, 0.0] } },
        { "name": "com", "kind": "center_of_mass", "priority": 9, "position": [0.0, 0.0, 0.7],
          "velocity": [0.0, 0.0, 0.0], "gains": { "position": 50.0, "velocity": 14.0 } },
        { "name": "load", "kind": "wrench", "priority": 2, "sole": "left", "approach": 30.0,
          "wrench": { "force": [0.0, 0.0, 130.0], "moment": [0.0, 0.0, 0.0] } },
        { "name": "head", "kind": "frame_orientation", "priority": 3, "frame": "head",
          "orientation": [0.0, 0.0, 0.0, 1.0], "gains_angular": { "position": 100.0, "velocity": 20.0 } },
        { "name": "torso", "kind": "frame_pose", "priority": 3, "frame": "torso",
          "position": [0.0, 0.0, 0.8], "orientation": [0.0, 0.0, 0.0, 1.0],
          "gains": { "position": 100.0 }, "gains_angular": { "velocity": 20.0 } },
        { "name": "hand", "kind": "frame_position", "must_hold": true, "frame": "imu", "axes": ["z"],
          "point": [0.0, 0.0, 0.1], "acceleration": [0.0, 0.0, 0.0] },
        { "name": "posture", "kind": "posture", "priority": 4, "gains": { "position": 50.0, "velocity": 10.0 },
          "joints": [{ "name": "r_hip", "position": 0.1, "velocity": 0.0, "acceleration": 0.0 },
                     { "name": "l_hip", "position": 0.1 }] },
        { "name": "knee", "kind": "joint_acceleration", "priority": 4,
          "joints": [{ "name": "r_knee", "acceleration": 0.0 }] },
        { "name": "base", "kind": "base_acceleration", "priority": 4, "angular_acceleration": [0.0, 0.0, 0.0] },
        { "name": "smooth", "kind": "wrench_smoothness", "priority": 5, "sole": "toe" },
        { "name": "effort", "kind": "effort", "priority": 6, "joints": [{ "name": "r_hip", "torque": 1.0 }] },
    ])
}

pub fn solve_request() -> Value {
    json!({
        "format": "underfoot/1", "model": inline_model(), "state": state(),
        "gravity": [0.0, 0.0, -9.80665], "tick": { "length": 0.005, "rule": "backward_euler" },
        "contacts": contacts(), "limits": limits(), "tasks": tasks(),
        "external": [{ "frame": "torso", "point": [0.0, 0.0, 0.1], "force": [1.0, 0.0, 0.0],
                       "moment": [0.0, 0.0, 0.0] }],
        "loads": [{ "frame": "torso", "mass": 3.0, "center": [0.0, 0.0, 0.2],
                    "inertia": [[0.01, 0.0, 0.0], [0.0, 0.01, 0.0], [0.0, 0.0, 0.01]] }],
        "latency": { "delay": 0.002, "torques": [
            { "name": "r_hip", "torque": 1.0 }, { "name": "r_knee", "torque": 1.0 },
            { "name": "r_ankle", "torque": 1.0 }, { "name": "l_hip", "torque": 1.0 },
            { "name": "l_knee", "torque": 1.0 } ] },
        "include": ["problem", "dynamics", "explain", "uniqueness", "sensitivity"],
        "spread": { "covariance": [[0.04, 0.01], [0.01, 0.01]], "shared": false, "samples": 100, "seed": 7 },
    })
}

pub fn bytes(value: &Value) -> Vec<u8> {
    serde_json::to_vec(value).expect("a value can be written")
}

/// One sole, two instants, most members that a request may have.
pub fn identify_request() -> Value {
    let sample = |time: f64, height: f64| {
        json!({
            "time": time,
            "soles": [{
                "sole": "left", "force": [0.0, 1.0, 300.0], "moment": [0.1, 0.0, 0.0], "position": [0.0, 0.0, height],
                "orientation": [0.0, 0.0, 0.0, 1.0], "linear_velocity": [0.0, 0.0, -0.01], "angular_velocity": [0.0, 0.0, 0.0],
                "stands": true,
            }],
        })
    };
    json!({
        "format": "underfoot/1",
        "soles": [{
            "name": "left", "kind": "polygon", "vertices": [[-0.1, -0.05], [0.1, -0.05], [0.1, 0.05], [-0.1, 0.05]],
            "sensor": {
                "reads": "robot_on_ground", "axes": "sensor", "position": [0.0, 0.0, 0.05], "orientation": [0.0, 0.0, 0.0, 1.0],
                "mass_below": 0.5, "center_below": [0.0, 0.0, 0.02], "noise": { "force": [1.0, 1.0, 2.0], "moment": [0.1, 0.1, 0.1] },
            },
        }],
        "directions": "split",
        "unknown": ["height", "offset"],
        "guess": { "stiffness": 1e6, "damping": 1e4, "relative_deviation": 3.0 },
        "forgetting": { "time_constant": 2.0 },
        "touchdown": { "kind": "force", "on": 50.0, "off": 20.0 },
        "ground": { "normal": [0.0, 0.0, 1.0], "point": [0.0, 0.0, 0.0] },
        "gravity": [0.0, 0.0, -9.81],
        "weight": 400.0,
        "scale": true,
        "lag": { "delays": [0.0, 0.002], "time_constants": [0.0] },
        "half_window": 4,
        "longest_step": 0.2,
        "motion_noise": { "position": 1e-4, "rotation": 1e-4, "linear_velocity": 1e-3, "angular_velocity": 1e-3 },
        "still_feet": false,
        "mapping": [{ "column": "Fz [N]", "means": "left.force.z [N]" }],
        "samples": [sample(0.0, 0.0), sample(0.01, -0.001)],
    })
}
