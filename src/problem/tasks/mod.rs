//! One file per kind of task. Each turns a task into target rows: what is wanted, and how the
//! unknowns produce what is achieved.

mod effort;
mod frame;
mod joints;
mod momentum;
mod wrench;

use super::layout::Layout;
use super::question::{Question, Task, TaskKind};
use super::rows::Entries;
use super::scene::Scene;

/// One row of a task: `achieved = entries . x + offset`, wanted `desired`. Physical units.
#[derive(Debug, Clone, PartialEq)]
pub struct TargetRow {
    /// Column and coefficient.
    pub entries: Entries,
    /// What is achieved when the unknowns are zero.
    pub offset: f64,
    /// What is wanted.
    pub desired: f64,
    /// Row name, e.g. `x` or a joint.
    pub part: String,
    /// Unit.
    pub unit: &'static str,
    /// True where the task's `scale_angular` applies instead of `scale`.
    pub angular: bool,
}

/// Everything a task needs to see.
pub struct Context<'a> {
    /// The question.
    pub question: &'a Question,
    /// Its state worked out.
    pub scene: &'a Scene,
    /// The unknowns.
    pub layout: &'a Layout,
}

const PARTS: [&str; 6] = ["x", "y", "z", "rx", "ry", "rz"];

/// The rows of `task`.
pub fn rows(task: &Task, context: &Context) -> Vec<TargetRow> {
    match &task.kind {
        TaskKind::MomentumRate(aim) => momentum::first_rate(task, aim, context),
        TaskKind::MomentumSecondRate(aim) => momentum::second_rate(task, aim, context),
        TaskKind::CenterOfMass(aim) => momentum::center_of_mass(task, aim, context),
        TaskKind::FramePosition { frame, point, aim } => frame::position(task, *frame, point, aim, context),
        TaskKind::FrameOrientation { frame, aim } => frame::orientation(task, *frame, aim, context),
        TaskKind::FramePose { frame, point, position, orientation } => {
            let mut rows = frame::position(task, *frame, point, position, context);
            rows.extend(frame::orientation(task, *frame, orientation, context));
            rows
        }
        TaskKind::BaseAcceleration { linear, angular } => frame::base(task, linear, angular, context),
        TaskKind::Posture { joints, gains } => joints::posture(joints, gains, context),
        TaskKind::JointAcceleration(list) => joints::acceleration(list, context),
        TaskKind::Wrench { contact, value, approach } => wrench::wrench(task, *contact, value, *approach, context),
        TaskKind::WrenchSmoothness { contact } => wrench::smoothness(task, *contact, context),
        TaskKind::Effort(list) => effort::effort(list, context),
    }
}

/// Rows of a vector quantity (three linear, three angular): only the components picked by `axes`.
fn vector_rows(
    axes: &[bool; 6],
    components: impl IntoIterator<Item = usize>,
    units: [&'static str; 2],
    mut row: impl FnMut(usize) -> (Entries, f64, f64),
) -> Vec<TargetRow> {
    components
        .into_iter()
        .filter(|&k| axes[k])
        .map(|k| {
            let (entries, offset, desired) = row(k);
            TargetRow { entries, offset, desired, part: PARTS[k].into(), unit: units[usize::from(k >= 3)], angular: k >= 3 }
        })
        .collect()
}
