//! The whole log: rows in, a report out, in bounded memory.

use super::remarks::Remarks;
use super::report::Report;
use super::setup::{Setup, Source, Touchdown};
use super::smoother::Reading;
use super::track::Track;
use crate::dynamics::{Workspace, frame_pose, frame_twist};
use crate::model::State;
use crate::spatial::{Pose, Twist, Vec6};

/// Normal force over weight beyond which units are doubted, and the smallest.
const FORCE_RATIO: (f64, f64) = (0.02, 50.0);
/// The largest velocity that the robot's centre of mass may plausibly gain over a log (m/s): it bounds the error of the
/// mean vertical force as a measure of the weight.
const VELOCITY_GAINED: f64 = 0.5;
/// Motion per change of force below which a standing sole counts as held still by the base estimate (m/N).
const STILL: f64 = 1e-11;

/// What a row says about one sole.
#[derive(Debug, Clone, Copy)]
pub struct SoleRow {
    /// Index in the setup.
    pub sole: usize,
    /// Reading of its sensor, force first (N, N m).
    pub wrench: Vec6,
    /// Pose and, where known, twist; none where they follow from the model.
    pub motion: Option<(Pose, Option<Twist>)>,
    /// Whether it stands, where the log says so.
    pub stands: Option<bool>,
}

/// A row of the log.
#[derive(Debug, Clone)]
pub struct Row {
    /// Line, from 1.
    pub line: u64,
    /// Time (s).
    pub time: f64,
    /// Soles with a reading in this row.
    pub soles: Vec<SoleRow>,
    /// State of the robot, where poses follow from a model, and whether it holds velocities.
    pub state: Option<(State, bool)>,
}

/// Takes a log row by row. Memory does not grow with the log.
pub struct Session {
    setup: Setup,
    tracks: Vec<Track>,
    workspace: Option<Workspace>,
    /// Remarks; whoever reads the log adds those about its form.
    pub remarks: Remarks,
    rows: u64,
    skipped: u64,
    first: Option<f64>,
    last: Option<f64>,
    last_line: u64,
    impulse: f64,
    lasted: f64,
}

impl Session {
    /// Before the first row.
    pub fn new(setup: Setup) -> Self {
        let tracks = setup.soles.iter().enumerate().map(|(i, sole)| Track::new(&setup, i, sole)).collect();
        let workspace = match &setup.source {
            Source::Model(model) => Some(Workspace::new(model)),
            Source::Soles => None,
        };
        Session {
            setup,
            tracks,
            workspace,
            remarks: Remarks::default(),
            rows: 0,
            skipped: 0,
            first: None,
            last: None,
            last_line: 0,
            impulse: 0.0,
            lasted: 0.0,
        }
    }

    /// What was asked.
    pub fn setup(&self) -> &Setup {
        &self.setup
    }

    /// Rows so far.
    pub fn rows(&self) -> u64 {
        self.rows
    }

    /// A row that could not be read: whoever found out has noted why.
    pub fn skip_row(&mut self) {
        self.rows += 1;
        self.skipped += 1;
    }

    /// Takes a row. Time stamps that repeat or go back are noted and the row is left out; a gap is noted and ends every
    /// stance.
    pub fn push(&mut self, row: &Row) {
        self.rows += 1;
        if !self.in_time(row) {
            self.skipped += 1;
            return;
        }
        self.update_kinematics(row);
        for sole in &row.soles {
            let moving = row.state.as_ref().is_some_and(|state| state.1);
            let motion = sole.motion.or_else(|| self.by_model(sole.sole, moving));
            let Some((pose, twist)) = motion else { continue };
            let reading = Reading { line: row.line, time: row.time, wrench: sole.wrench, pose, twist, stands: sole.stands };
            if let Some(track) = self.tracks.get_mut(sole.sole) {
                track.push(&self.setup, reading);
            }
        }
        self.first.get_or_insert(row.time);
        self.last = Some(row.time);
        self.last_line = row.line;
    }

    fn in_time(&mut self, row: &Row) -> bool {
        let Some(last) = self.last else { return true };
        let (step, line) = (row.time - last, row.line);
        if step < 0.0 {
            self.remarks.note("time-goes-back", line, 1, || {
                format!("line {line}: time {} s follows {last} s; the row is left out", row.time)
            });
            return false;
        }
        if step == 0.0 {
            self.remarks.note("time-repeats", line, 1, || format!("line {line}: time {last} s again; the row is left out"));
            return false;
        }
        if step > self.setup.longest_step {
            self.remarks.note("time-gap", line, 0, || {
                let most = self.setup.longest_step;
                format!("line {line}: {step:.6} s without samples (more than {most} s); stances end at a gap")
            });
            self.tracks.iter_mut().for_each(|track| track.interrupt(&self.setup));
        } else {
            let up = -self.setup.gravity.normalize();
            let force: f64 = self.tracks.iter().map(|track| track.force_world.dot(&up)).sum();
            self.impulse += force * step;
            self.lasted += step;
        }
        true
    }

    fn update_kinematics(&mut self, row: &Row) {
        if let (Source::Model(model), Some(workspace), Some((state, _))) = (&self.setup.source, &mut self.workspace, &row.state) {
            workspace.update_kinematics(model, state);
        }
    }

    fn by_model(&self, sole: usize, moving: bool) -> Option<(Pose, Option<Twist>)> {
        let (Source::Model(model), Some(workspace)) = (&self.setup.source, &self.workspace) else { return None };
        let sole = model.soles.get(self.setup.soles.get(sole)?.in_model)?;
        let pose = frame_pose(model, workspace, sole.body, &sole.placement);
        let twist = moving.then(|| frame_twist(model, workspace, sole.body, &sole.placement));
        Some((pose, twist))
    }

    /// The end of the log.
    pub fn finish(mut self) -> Report {
        let setup = &self.setup;
        self.tracks.iter_mut().for_each(|track| track.interrupt(setup));
        let scale = self.scale();
        let divisor = scale.map_or(1.0, |scale| scale.0);
        let soles: Vec<_> = self.tracks.iter().filter_map(|track| track.report(&self.setup, divisor)).collect();
        self.remark_on_soles();
        Report {
            soles,
            rows: self.rows,
            skipped: self.skipped,
            span: self.first.zip(self.last),
            remarks: self.remarks.into_list(),
            scale,
        }
    }

    /// Mean vertical force over the weight, and how far the robot's own momentum may have moved it.
    fn scale(&self) -> Option<(f64, f64)> {
        let weight = self.setup.weight.filter(|_| self.setup.scale)?;
        let value = self.impulse / (self.lasted * weight);
        let gravity = self.setup.gravity.norm();
        (value.is_finite() && value > 0.0).then_some((value, VELOCITY_GAINED / (gravity * self.lasted)))
    }

    fn remark_on_soles(&mut self) {
        let on_force = matches!(self.setup.touchdown, Touchdown::Force { .. });
        for (track, sole) in self.tracks.iter().zip(&self.setup.soles) {
            let name = format!("sole {:?}: ", sole.name);
            if track.unmatched > 0 {
                let count = track.unmatched;
                self.remarks.note_about("no-motion", &name, 0, count, || {
                    format!("{count} samples left out: no motion at their time (ends of the log, next to gaps, lone samples)")
                });
            }
            if track.stood.samples == 0 {
                let (most, line) = track.largest_force;
                self.remarks.note_about("never-stands", &name, line, 0, || {
                    let why = if on_force { ": check the sensor's sign and unit, and the thresholds" } else { "" };
                    format!("it never stands; the largest normal force is {most:.1} N{why}")
                });
                continue;
            }
            let stood = track.stood;
            let changed = stood.force_change > 0.0 && stood.travel <= STILL * stood.force_change;
            if self.setup.still_feet || changed {
                self.remarks.note_about("still-feet", &name, 0, 0, || {
                    let seen = format!(
                        "while it stood its position moved by {:.2e} m in all and its normal force by {:.1} N; ", stood.travel, stood.force_change
                    );
                    let why = if self.setup.still_feet { "the base estimate took standing feet to be still, which hides the sink: " } else { "" };
                    format!("{seen}{why}estimate the base without that assumption, or the ground will come out too stiff")
                });
            }
            let blind = track.blind();
            if blind > 0 && !self.setup.unknown.offset {
                self.remarks.note_about("no-touchdown", &name, 0, 0, || {
                    format!(
                        "{blind} of its stances begin with a loaded sole, so that the place of the touchdown is unknown: add `offset` to what is unknown"
                    )
                });
            }
            if track.upside_down() > 0 {
                self.remarks.note_about("upside-down", &name, 0, 0, || {
                    "at touchdown its z axis pointed into the ground; the touchdown pose was taken for the rest pose".to_owned()
                });
            }
            if let Some(weight) = self.setup.weight {
                let ratio = stood.force / weight;
                if !(FORCE_RATIO.0..=FORCE_RATIO.1).contains(&ratio) {
                    self.remarks.note_about("unit-of-force", &name, track.largest_force.1, 0, || {
                        format!(
                            "its mean normal force is {:.4e} N, {ratio:.4} times the weight of {weight:.1} N: is the force in N? (largest on line {})",
                            stood.force, track.largest_force.1
                        )
                    });
                }
            }
        }
    }
}
