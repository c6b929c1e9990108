//! The answer to an identification.

use schemars::JsonSchema;
use serde::Serialize;

use super::ground::{GroundOut, block};
use crate::identify::excitation::Excitation;
use crate::identify::parameters::Parameter;
use crate::identify::report::{Axis, Moment, Remark, Report, SoleReport, Stance, Value};
use crate::identify::setup::Setup;
use crate::wire::common::Format;
use crate::wire::number::{Number, Numbers, Rows, Tuple};
use crate::wire::refusal::Refusal;

/// Deviations of a 95 % interval.
const NINETY_FIVE: f64 = 1.959_963_984_540_054;

/// The answer to an identification request.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifyAnswer")]
pub(in crate::wire) struct IdentifyAnswerOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Version of the service that answered (no unit).
    version: &'static str,
    /// SHA-256 of version, canonical settings and samples: same fingerprint, same question (no unit).
    fingerprint: &'a str,
    /// `identified`: stiffness and damping of every sole's last stance within 10 % (one deviation) and physical. `partly`: of
    /// some, or less well. `not_identified`: of none (no unit).
    status: &'static str,
    /// Rows of the log (no unit).
    rows: u64,
    /// Rows left out (no unit); `remarks` say why.
    skipped: u64,
    /// First and last time [begin, end] (s); null in an empty log.
    span: Option<Tuple<2>>,
    /// Scale of the force readings: reading over truth (no unit). Null unless asked for.
    scale: Option<ScaleOut>,
    /// Soles in the order of the request (s, N, m).
    soles: Vec<SoleOut<'a>>,
    /// About the log: everything that was left out or looks wrong, with lines (units in the texts).
    remarks: Vec<RemarkOut<'a>>,
}

/// Scale of the force readings.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ForceScale")]
struct ScaleOut {
    /// Reading over truth (no unit).
    value: Number,
    /// Standard deviation, from the momentum that the robot may have gained (no unit).
    deviation: Number,
}

/// Something about the log.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Remark")]
struct RemarkOut<'a> {
    /// Stable short code (no unit).
    code: &'a str,
    /// What happened the first time (units in the text).
    text: &'a str,
    /// How often (no unit).
    count: u64,
    /// The first lines it happened on, at most 20, from 1 (no unit): lines of the log, samples of a JSON array.
    lines: &'a [u64],
    /// Samples or rows left out because of it (no unit).
    skipped: u64,
}

/// All about one sole.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedSole")]
struct SoleOut<'a> {
    /// Name (no unit).
    name: &'a str,
    /// Area (m^2); null for a point.
    area: Option<Number>,
    /// Samples read (no unit).
    samples: u64,
    /// Of these in the air (no unit).
    airborne: u64,
    /// Time between motion and force that fits best, or the one given (s).
    lag: LagOut,
    /// Noise of the motion that `bias` rests on (m, rad, m/s, rad/s).
    motion_noise: MotionNoiseOut,
    /// The ground of the last stance, ready for a solve request (N/m^3, N s/m^3; N/m, N s/m); null where it cannot be told.
    ground: Option<GroundOut>,
    /// Why there is no `ground` (no unit); null where there is one.
    ground_withheld: Option<String>,
    /// Stances in order, at most 200 (s, N, m); the last one is the last of the log.
    stances: Vec<StanceOut<'a>>,
    /// Stances that are not listed: beyond 200, or their numbers overflowed (no unit).
    unlisted: u64,
    /// The estimate over time, thinned out evenly (s, N/m^3, N s/m^3).
    history: HistoryOut<'a>,
}

/// Time between motion and force.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedLag")]
struct LagOut {
    /// How much later than the motion the force is stamped (s).
    delay: Number,
    /// Time constant of the force's low-pass (s).
    time_constant: Number,
    /// The delay between those tried by a parabola through the residuals (s); null at the ends and with a single one.
    delay_between: Option<Number>,
}

/// Standard deviations of the motion.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedMotionNoise")]
struct MotionNoiseOut {
    /// Position (m).
    position: Number,
    /// Rotation (rad).
    rotation: Number,
    /// Linear velocity (m/s).
    linear_velocity: Number,
    /// Angular velocity (rad/s).
    angular_velocity: Number,
}

/// One stance.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "Stance")]
struct StanceOut<'a> {
    /// First time (s).
    begin: Number,
    /// Last time (s).
    end: Number,
    /// Samples (no unit).
    samples: u64,
    /// Mean normal force (N).
    mean_normal_force: Number,
    /// Estimates (in the `unit` of each).
    parameters: Vec<ParameterOut<'a>>,
    /// Covariance of the parameters in their order, rows (products of their units).
    covariance: Rows<'a>,
    /// Deviation of force readings over the assumed one, as residuals show it (no unit); null with too few samples.
    force_noise_ratio: Option<Number>,
    /// The same of moment readings (no unit).
    moment_noise_ratio: Option<Number>,
    /// Condition number in relative units (no unit); null where it is infinite.
    condition: Option<Number>,
    /// Recursive residuals per axis, sole axes (N, N m).
    residuals: Vec<ResidualOut>,
    /// How the sole moved (m, rad, N, m/s, rad/s).
    moved: MovedOut,
    /// Comparison with the stance before (no unit); null for the first.
    change: Option<ChangeOut>,
    /// What no ground can have (units in the text); empty where all is well.
    unphysical: &'a [String],
}

/// One estimate.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedParameter")]
struct ParameterOut<'a> {
    /// Which (no unit).
    name: String,
    /// Unit of the figures beside it (no unit).
    unit: &'static str,
    /// Estimate (in `unit`).
    value: Number,
    /// Standard deviation (in `unit`).
    deviation: Number,
    /// 95 % interval [low, high] (in `unit`).
    interval: Tuple<2>,
    /// Stiffness and damping: the same for the whole sole, times the area (N/m, N s/m); null for others and for points.
    per_sole: Option<Number>,
    /// Products with a rest pose: the height, offset (m) or tilt (rad) itself; null for others.
    rest: Option<RestOut>,
    /// Expected error from noise on the motion, estimate less truth (in `unit`); null where it cannot be told.
    bias: Option<Number>,
    /// `identified`, `weak` or `not_identifiable` (no unit).
    excitation: &'static str,
    /// What was seen and what motion would help (units in the text); null where it is identified.
    advice: Option<&'a str>,
}

/// A part of the rest pose.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "IdentifiedRest")]
struct RestOut {
    /// Above or off the anchor (m), or turned from the plane (rad).
    value: Number,
    /// Standard deviation (m, rad).
    deviation: Number,
}

/// Residuals of one axis.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "AxisResidual")]
struct ResidualOut {
    /// Axis (no unit).
    axis: &'static str,
    /// Root mean square (N for forces, N m for moments).
    rms: Number,
    /// Ljung-Box statistic over ten lags (no unit); null with fewer than 40 residuals.
    whiteness: Option<Number>,
    /// Probability of a larger one if residuals were independent (no unit): small, and the law lacks something.
    probability: Option<Number>,
    /// Autocorrelation at lag one (no unit).
    lag_one: Option<Number>,
}

/// How the sole moved in a stance.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "Moved")]
struct MovedOut {
    /// Range of the position along the normal (m).
    sink_range: Number,
    /// Range in the plane (m).
    shear_range: Number,
    /// Largest turn from the first sample (rad).
    turn: Number,
    /// Range of the normal force (N).
    force_range: Number,
    /// Root mean square speed along the normal (m/s).
    normal_speed: Number,
    /// Root mean square speed in the plane (m/s).
    tangential_speed: Number,
    /// Root mean square angular speed (rad/s).
    angular_speed: Number,
}

/// Comparison with the stance before.
#[derive(Debug, Clone, Copy, Serialize, JsonSchema)]
#[schemars(rename = "GroundChange")]
struct ChangeOut {
    /// Wald statistic of stiffness and damping (no unit).
    statistic: Number,
    /// Probability of a larger one on the same ground (no unit).
    probability: Number,
}

/// The estimate over time.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "IdentifyHistory")]
struct HistoryOut<'a> {
    /// Names of the columns (no unit).
    parameters: Vec<String>,
    /// Times (s).
    time: Vec<Number>,
    /// Estimates, a row a time (N/m^3, N s/m^3; N/m, N s/m).
    values: Vec<Numbers<'a>>,
    /// Standard deviations, a row a time (N/m^3, N s/m^3; N/m, N s/m).
    deviations: Vec<Numbers<'a>>,
}

/// Name of a parameter in documents.
pub(super) fn name(parameter: Parameter) -> String {
    const AXES: [&str; 3] = ["x", "y", "z"];
    let axis = |k: usize| AXES.get(k).copied().unwrap_or_default();
    match parameter {
        Parameter::Stiffness => "stiffness".to_owned(),
        Parameter::NormalStiffness => "normal_stiffness".to_owned(),
        Parameter::TangentialStiffness => "tangential_stiffness".to_owned(),
        Parameter::Damping => "damping".to_owned(),
        Parameter::NormalDamping => "normal_damping".to_owned(),
        Parameter::TangentialDamping => "tangential_damping".to_owned(),
        Parameter::Height => "stiffness_times_height".to_owned(),
        Parameter::Offset(k) => format!("stiffness_times_offset_{}", axis(k)),
        Parameter::Tilt(k) => format!("stiffness_times_tilt_{}", axis(k)),
        Parameter::ForceBias(k) => format!("force_bias_{}", axis(k)),
        Parameter::MomentBias(k) => format!("moment_bias_{}", axis(k)),
    }
}

fn unit(parameter: Parameter, point: bool) -> &'static str {
    use Parameter as P;
    match (parameter, point) {
        (P::Stiffness | P::NormalStiffness | P::TangentialStiffness, false) => "N/m^3",
        (P::Stiffness | P::NormalStiffness | P::TangentialStiffness, true) => "N/m",
        (P::Damping | P::NormalDamping | P::TangentialDamping, false) => "N s/m^3",
        (P::Damping | P::NormalDamping | P::TangentialDamping, true) => "N s/m",
        (P::Height | P::Offset(_), false) => "N/m^2",
        (P::Height | P::Offset(_), true) | (P::ForceBias(_), _) => "N",
        (P::Tilt(_), _) => "N rad/m^3",
        (P::MomentBias(_), _) => "N m",
    }
}

fn finite(x: f64) -> Option<Number> {
    x.is_finite().then_some(Number(x))
}

/// The document.
///
/// # Errors
/// 500 where a number is not finite, which is a defect.
pub fn write(setup: &Setup, report: &Report, fingerprint: &str) -> Result<Vec<u8>, Refusal> {
    // Matrices as rows, kept until the document is written.
    let rows: Vec<Vec<Vec<Vec<f64>>>> = report
        .soles
        .iter()
        .map(|sole| {
            let rows = |stance: &Stance| stance.covariance.row_iter().map(|row| row.iter().copied().collect()).collect();
            sole.stances.iter().map(rows).collect()
        })
        .collect();
    let document = IdentifyAnswerOut {
        format: Format::One,
        version: env!("CARGO_PKG_VERSION"),
        fingerprint,
        status: status(report),
        rows: report.rows,
        skipped: report.skipped,
        span: report.span.map(|(begin, end)| Tuple([begin, end])),
        scale: report.scale.map(|(value, deviation)| ScaleOut { value: Number(value), deviation: Number(deviation) }),
        soles: report.soles.iter().zip(&setup.soles).zip(&rows).map(|((report, sole), rows)| of_sole(&sole.name, report, rows)).collect(),
        remarks: report.remarks.iter().map(remark).collect(),
    };
    serde_json::to_vec(&document).map_err(|error| Refusal::new(500, "defect", "A defect of this service", error.to_string()))
}

fn status(report: &Report) -> &'static str {
    let good = |sole: &&SoleReport| {
        sole.stances.last().is_some_and(|stance| {
            let well = |value: &Value| !value.parameter.of_material() || value.excitation == Excitation::Identified;
            stance.unphysical.is_empty() && stance.values.iter().all(well)
        })
    };
    let told = report.soles.iter().filter(|sole| block(sole).is_ok()).count();
    match report.soles.iter().filter(good).count() {
        all if all == report.soles.len() && all > 0 => "identified",
        some if some + told > 0 => "partly",
        _ => "not_identified",
    }
}

fn remark(remark: &Remark) -> RemarkOut<'_> {
    let Remark { code, text, count, lines, skipped } = remark;
    RemarkOut { code, text, count: *count, lines, skipped: *skipped }
}

fn of_sole<'a>(name: &'a str, sole: &'a SoleReport, rows: &'a [Vec<Vec<f64>>]) -> SoleOut<'a> {
    let [position, rotation, linear, angular] = sole.motion_noise.map(Number);
    let (ground, ground_withheld) = match block(sole) {
        Ok(ground) => (Some(ground), None),
        Err(why) => (None, Some(why)),
    };
    SoleOut {
        name,
        area: sole.area.map(Number),
        samples: sole.read,
        airborne: sole.airborne,
        lag: LagOut {
            delay: Number(sole.lag.delay),
            time_constant: Number(sole.lag.time_constant),
            delay_between: sole.delay_between.map(Number),
        },
        motion_noise: MotionNoiseOut { position, rotation, linear_velocity: linear, angular_velocity: angular },
        ground,
        ground_withheld,
        stances: sole.stances.iter().zip(rows).map(|(stance, rows)| of_stance(sole.area, stance, rows)).collect(),
        unlisted: sole.unlisted,
        history: history(sole),
    }
}

fn of_stance<'a>(area: Option<f64>, stance: &'a Stance, rows: &'a [Vec<f64>]) -> StanceOut<'a> {
    let [force_noise, moment_noise] = stance.noise_ratio.map(|ratio| ratio.and_then(finite));
    let moved = stance.moved;
    StanceOut {
        begin: Number(stance.begin),
        end: Number(stance.end),
        samples: stance.samples,
        mean_normal_force: Number(stance.mean_normal_force),
        parameters: (0..stance.values.len()).map(|k| parameter(area, stance, k)).collect(),
        covariance: Rows(rows),
        force_noise_ratio: force_noise,
        moment_noise_ratio: moment_noise.filter(|_| area.is_some()),
        condition: finite(stance.condition),
        residuals: stance.axes.iter().enumerate().map(|(k, axis)| residual(k, axis)).collect(),
        moved: MovedOut {
            sink_range: Number(moved.sink_range),
            shear_range: Number(moved.shear_range),
            turn: Number(moved.turn),
            force_range: Number(moved.force_range),
            normal_speed: Number(moved.normal_speed),
            tangential_speed: Number(moved.tangential_speed),
            angular_speed: Number(moved.angular_speed),
        },
        change: stance.change.map(|change| ChangeOut {
            statistic: Number(change.statistic),
            probability: Number(change.probability),
        }),
        unphysical: &stance.unphysical,
    }
}

fn parameter<'a>(area: Option<f64>, stance: &'a Stance, k: usize) -> ParameterOut<'a> {
    let value = &stance.values[k];
    let half = NINETY_FIVE * value.deviation;
    ParameterOut {
        name: name(value.parameter),
        unit: unit(value.parameter, area.is_none()),
        value: Number(value.value),
        deviation: Number(value.deviation),
        interval: Tuple([value.value - half, value.value + half]),
        per_sole: area.filter(|_| value.parameter.of_material()).map(|area| Number(value.value * area)),
        rest: rest(stance, k),
        bias: value.bias.and_then(finite),
        excitation: match value.excitation {
            Excitation::Identified => "identified",
            Excitation::Weak => "weak",
            Excitation::NotIdentifiable => "not_identifiable",
        },
        advice: value.advice.as_deref(),
    }
}

/// A product divided by its stiffness; the deviation by the first-order rule for a quotient.
fn rest(stance: &Stance, k: usize) -> Option<RestOut> {
    use Parameter as P;
    let tangential = matches!(stance.values[k].parameter, P::Offset(_));
    if !matches!(stance.values[k].parameter, P::Height | P::Offset(_) | P::Tilt(_)) {
        return None;
    }
    let wanted = if tangential { [P::Stiffness, P::TangentialStiffness] } else { [P::Stiffness, P::NormalStiffness] };
    let s = stance.values.iter().position(|value| wanted.contains(&value.parameter))?;
    let (x, stiffness) = (stance.values[k].value, stance.values[s].value);
    let ratio = x / stiffness;
    let v = &stance.covariance;
    let variance = (v[(k, k)] - 2.0 * ratio * v[(k, s)] + ratio * ratio * v[(s, s)]) / (stiffness * stiffness);
    Some(RestOut { value: finite(ratio)?, deviation: finite(variance.max(0.0).sqrt())? })
}

fn residual(k: usize, axis: &Axis) -> ResidualOut {
    const NAMES: [&str; 6] = ["force_x", "force_y", "force_z", "moment_x", "moment_y", "moment_z"];
    ResidualOut {
        axis: NAMES.get(k).copied().unwrap_or_default(),
        rms: Number(axis.rms),
        whiteness: axis.whiteness.and_then(|verdict| finite(verdict.statistic)),
        probability: axis.whiteness.and_then(|verdict| finite(verdict.probability)),
        lag_one: axis.whiteness.and_then(|verdict| finite(verdict.lag_one)),
    }
}

fn history(sole: &SoleReport) -> HistoryOut<'_> {
    let parameters = sole.stances.last().map(|stance| {
        stance.values.iter().map(|value| value.parameter).filter(|parameter| parameter.of_material()).map(name).collect()
    });
    let rows = |pick: fn(&Moment) -> &[f64]| sole.history.iter().map(|moment| Numbers(pick(moment))).collect();
    HistoryOut {
        parameters: parameters.unwrap_or_default(),
        time: sole.history.iter().map(|moment| Number(moment.time)).collect(),
        values: rows(|moment| &moment.values),
        deviations: rows(|moment| &moment.deviations),
    }
}
