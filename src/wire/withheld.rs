//! Why an answer is withheld: where a number is not finite, and which numbers of the request are so large that they may be
//! why.

use crate::problem::question::Question;
use crate::reference::answer::Answer;

/// Above this, in SI units, a number is far beyond any robot.
const LARGE: f64 = 1e9;
/// Members of the request that are named.
const NAMED: usize = 6;

/// The sentence. `parts`: members of the answer that hold such a number; `error`: what the writer said.
pub(super) fn reason(question: &Question, answer: &Answer, parts: &[&str], error: &str) -> String {
    let mut text = format!("the answer is withheld: {error}, in {}", parts.join(", "));
    let large = large_members(question, answer);
    if !large.is_empty() {
        let named: Vec<String> = large.iter().take(NAMED).map(|(place, value)| format!("{place} ({value})")).collect();
        let rest = if large.len() > NAMED { " and others" } else { "" };
        text.push_str(&format!("; of the request, these are too large to compute with: {}{rest}", named.join(", ")));
    }
    text
}

/// Pointers into the request, each with its largest number.
fn large_members(question: &Question, answer: &Answer) -> Vec<(String, String)> {
    let mut found = Vec::new();
    for (i, task) in answer.tasks.iter().enumerate() {
        let rows = task.rows.iter().zip(&task.units).zip(&task.desired);
        let largest = rows.max_by(|a, b| a.1.abs().total_cmp(&b.1.abs()));
        if let Some(((row, unit), desired)) = largest
            && (desired.is_nan() || desired.abs() > LARGE)
        {
            found.push((format!("/tasks/{i}"), format!("{:?} wants {desired:.1e} {unit} in {row}", task.name)));
        }
    }
    let mut add = |place: String, values: &[f64], unit: &str| {
        let largest = values.iter().fold(0.0, |most: f64, value| most.max(value.abs()));
        if largest > LARGE {
            found.push((place, format!("{largest:.1e} {unit}")));
        }
    };
    let state = &question.state;
    add("/state/base/position".into(), state.base_pose.translation.as_slice(), "m");
    add("/state/base/linear_velocity".into(), state.base_twist.linear.as_slice(), "m/s");
    add("/state/base/angular_velocity".into(), state.base_twist.angular.as_slice(), "rad/s");
    add("/state (joint positions)".into(), &state.position, "rad or m");
    add("/state (joint velocities)".into(), &state.velocity, "rad/s or m/s");
    add("/gravity".into(), question.gravity.as_slice(), "m/s^2");
    for (i, external) in question.external.iter().enumerate() {
        add(format!("/external/{i}/force"), external.wrench.force.as_slice(), "N");
        add(format!("/external/{i}/moment"), external.wrench.moment.as_slice(), "N m");
    }
    for (i, contact) in question.contacts.iter().enumerate() {
        if let Some(measured) = contact.ground.measured {
            add(format!("/contacts/{i}/measured_wrench"), measured.to_vec6().as_slice(), "N and N m");
        }
    }
    found
}
