//! Remarks on an answer that its user should read.

use super::answer::{self, Rocking, Status, Warning};
use super::{LINEARISATION_WARNING, TICK_WARNING, UNREFINED_BOUND};
use crate::certify::Certificate;
use crate::contact::{Law, Rest, TickRule};
use crate::problem::question::{LimitKind, Question};
use crate::solve::HierarchySolution;

/// Names listed in one warning; the rest is counted.
const NAMES: usize = 12;

/// Why an answer is not called solved.
pub(super) fn of_accuracy(status: Status, solution: &HierarchySolution, certificate: Option<&Certificate>, warnings: &mut Vec<Warning>) {
    if status != Status::Inaccurate {
        return;
    }
    let unsharp = solution.levels.iter().filter(|l| !l.refined && l.bound > UNREFINED_BOUND);
    let mut reasons: Vec<String> = unsharp
        .map(|l| format!("refinement did not settle at priority {} (its residuals are good to about {:.1e}, scaled)", l.priority, l.bound))
        .collect();
    if let Some(certificate) = certificate {
        let checks = certificate.checks.iter().filter(|c| !c.passes());
        reasons.extend(checks.map(|c| format!("check `{}` reads {:.1e} against {:.0e}, worst at {}", c.name, c.value, c.bound, c.worst)));
        let levels = certificate.levels.iter().filter(|l| !l.passes());
        reasons.extend(levels.map(|l| format!("optimality of priority {} misses {:.0e}", l.priority, l.bound)));
    }
    if reasons.is_empty() {
        reasons.push("the solver could not confirm its point".into());
    }
    warnings.push(Warning { code: "inaccurate", text: format!("not called solved, because {}", listed(&reasons)) });
}

/// What the robot's description leaves out: motors without a torque limit while others have one, elements that were ignored.
pub(super) fn of_model(question: &Question, warnings: &mut Vec<Warning>) {
    let mut limited: Vec<usize> = Vec::new();
    for limit in &question.limits {
        match &limit.kind {
            LimitKind::Torque(list) => limited.extend(list.iter().map(|t| t.0)),
            LimitKind::TorqueSpeed(list) => limited.extend(list.iter().map(|t| t.0)),
            _ => {}
        }
    }
    let joints = question.model.joints.iter().enumerate();
    let free: Vec<String> =
        joints.filter(|(j, joint)| joint.actuated && !limited.contains(j)).map(|(_, joint)| joint.name.clone()).collect();
    if !limited.is_empty() && !free.is_empty() {
        let text = format!("torque limits hold for some joints, but these have none, in the request or in the description: {}", listed(&free));
        warnings.push(Warning { code: "torque-unlimited", text });
    }
    if !question.model.remarks.is_empty() {
        let text = format!("the robot's description: {}", listed(&question.model.remarks));
        warnings.push(Warning { code: "description-remarks", text });
    }
}

fn listed(names: &[String]) -> String {
    let mut text = names.iter().take(NAMES).map(String::as_str).collect::<Vec<_>>().join("; ");
    if names.len() > NAMES {
        text.push_str(&format!("; and {} more", names.len() - NAMES));
    }
    text
}

/// The tick against the bed, the bed against the weight, and where the present wrench comes from.
pub(super) fn of_ground(question: &Question, ground: &answer::GroundReport, warnings: &mut Vec<Warning>) {
    if ground.omega_max_tick > TICK_WARNING {
        // Measured on the demonstration robot, see README.
        let errors = if question.tick.rule == TickRule::Held { "a few per cent" } else { "tens of per cent" };
        warnings.push(Warning {
            code: "tick-long-for-ground",
            text: format!(
                "omega_max T = {:.2} is above {TICK_WARNING}: the bed rings at {:.0} rad/s, and the predicted change of \
                 wrench over one tick carries errors of {errors}",
                ground.omega_max_tick, ground.omega_max
            ),
        });
    }
    if let Some(Rocking { bed, weight }) = ground.rocking
        && bed < weight
    {
        warnings.push(Warning {
            code: "bed-too-soft-to-stand",
            text: format!(
                "the bed's rocking stiffness {:.1} N m/rad is below m g h = {:.1} N m/rad: standing still is unstable without feedback",
                bed, weight
            ),
        });
    }
    for contact in &question.contacts {
        let rigid = matches!(contact.ground.law, Law::Rigid { .. });
        if rigid && contact.ground.measured.is_none() && contact.wrench_rate.is_some() {
            warnings.push(Warning {
                code: "wrench-rate-unused",
                text: format!(
                    "{}: the rate of the wrench is not limited, because the present wrench on a rigid sole is only known when it is measured",
                    question.model.soles[contact.sole].name
                ),
            });
        }
    }
    let modelled_now = question.contacts.iter().any(|c| {
        matches!(c.ground.law, Law::Bonded(_)) && c.ground.measured.is_none() && !matches!(c.ground.rest, Rest::Carries(_))
    });
    if modelled_now {
        warnings.push(Warning {
            code: "present-wrench-modelled",
            text: "the present wrench of at least one sole comes from the ground model, not from a measurement: an error in stiffness \
                   or rest pose enters the answer directly"
                .into(),
        });
    }
}

/// Where the linear map and the nonlinear law part.
pub(super) fn of_linearisation(soles: &[answer::SoleAnswer], warnings: &mut Vec<Warning>) {
    for sole in soles {
        if let (Some([force, _]), Some(normal)) = (sole.linearisation_error, sole.normal_force)
            && force > LINEARISATION_WARNING * normal.abs()
        {
            warnings.push(Warning {
                code: "linearisation-error",
                text: format!(
                    "{}: at the predicted state the nonlinear law differs from the linear map by {force:.3} N, more than 1 % of the normal force {normal:.1} N",
                    sole.name
                ),
            });
        }
    }
}
