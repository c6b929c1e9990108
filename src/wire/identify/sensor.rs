//! What a wrench sensor reads, in a request.

use schemars::JsonSchema;
use serde::Deserialize;

use super::settings::positive;
use crate::identify::setup::Sensor;
use crate::spatial::{Vec3, Vec6};
use crate::wire::common::pose;
use crate::wire::gate::{At, Gate};

/// Largest mass below a sensor (kg).
const HEAVIEST: f64 = 1e4;

#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum ReadsWord {
    GroundOnRobot,
    RobotOnGround,
}

#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[schemars(inline)]
enum AxesWord {
    Sensor,
    World,
}

/// The wrench sensor over a sole.
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "Sensor")]
pub(super) struct SensorBody {
    /// `ground_on_robot` (default): standing reads an upward force. `robot_on_ground`: the reaction, with the other sign (no
    /// unit).
    reads: Option<ReadsWord>,
    /// Axes of the reading: `sensor` (default) or `world` (no unit); moments are about the sensor's origin either way.
    axes: Option<AxesWord>,
    /// Origin of the sensor in the sole frame [x, y, z] (m); zero when left out.
    position: Option<[f64; 3]>,
    /// Orientation of the sensor in the sole frame, quaternion [x, y, z, w] of unit length within 1e-6 (no unit); that of the
    /// sole when left out.
    orientation: Option<[f64; 4]>,
    /// Mass between sensor and ground, 0 to 10000 (kg); zero when left out. Its weight and inertia are taken off.
    #[schemars(extend("minimum" = 0.0, "maximum" = HEAVIEST))]
    mass_below: Option<f64>,
    /// Centre of that mass in the sole frame [x, y, z] (m); zero when left out.
    center_below: Option<[f64; 3]>,
    /// Standard deviations of the reading (N, N m): their ratio sets the weights, error bars follow from the residuals. A force
    /// counts like a moment at the sole's radius of gyration when left out.
    noise: Option<NoiseBody>,
}

/// Standard deviations of a reading, sensor axes.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(rename = "SensorNoise")]
struct NoiseBody {
    /// Force [x, y, z], more than 0 (N).
    force: [f64; 3],
    /// Moment [x, y, z], more than 0 (N m); 1 each when left out, which only a point sole may do.
    moment: Option<[f64; 3]>,
}

impl SensorBody {
    /// As the domain has it.
    pub(super) fn read(&self, gate: &mut Gate, at: At<'_>, point: bool) -> Sensor {
        Sensor {
            sign: if self.reads == Some(ReadsWord::RobotOnGround) { -1.0 } else { 1.0 },
            placement: pose(gate, at, self.position, self.orientation),
            world_axes: self.axes == Some(AxesWord::World),
            mass_below: gate.within(at.name("mass_below"), self.mass_below.unwrap_or(0.0), 0.0, HEAVIEST, "kg"),
            center_below: Vec3::from(self.center_below.unwrap_or_default()),
            noise: self.noise.map(|noise| noise.read(gate, at.name("noise"), point)),
        }
    }
}

impl NoiseBody {
    fn read(&self, gate: &mut Gate, at: At<'_>, point: bool) -> Vec6 {
        if self.moment.is_none() && !point {
            gate.missing(at.name("moment"), "the deviations of the moments");
        }
        let moment = self.moment.unwrap_or([1.0; 3]);
        let mut out = Vec6::zeros();
        for axis in 0..3 {
            out[axis] = positive(gate, at.name("force").index(axis), self.force[axis], "N");
            out[3 + axis] = positive(gate, at.name("moment").index(axis), moment[axis], "N m");
        }
        out
    }
}
