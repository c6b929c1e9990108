//! The rigid answer beside the compliant one: what a controller that takes the floor for rigid would
//! ask for, and what the floor would make of it.

use crate::cli::report::meaning;
use crate::cli::table::{Side, Table, amount, number, push_line, push_text};
use crate::wire::view::{Parsed, View};

/// Joints shown: those whose torques differ most.
const JOINTS_SHOWN: usize = 6;

/// Appends the comparison.
///
/// # Errors
/// When the rigid answer is no document.
pub fn write(out: &mut String, compliant: View<'_>, rigid: &[u8]) -> Result<(), String> {
    let parsed = Parsed::read(rigid).ok_or("the rigid answer is no JSON document")?;
    let rigid = parsed.view();
    push_line(out, "");
    push_line(out, "THE SAME REQUEST WITH THE FLOOR TAKEN FOR RIGID");
    push_text(
        out,
        "",
        "Every contact rigid, momentum at its first rate instead of its second: the habit of most controllers. The \
         gains are the same law with the fastest derivative neglected.",
    );
    let status = rigid.at("/status").text().unwrap_or("-");
    push_line(out, &format!("Status: {status} ({})", meaning(status)));
    soles(out, compliant, rigid);
    joints(out, compliant, rigid);
    verdict(out, compliant, rigid);
    Ok(())
}

fn at_end(answer: View<'_>, name: &str) -> Option<[f64; 6]> {
    let sole = answer.at("/soles").items().find(|sole| sole.at("/name").text() == Some(name))?;
    let wrench = sole.at("/wrench");
    [wrench.at("/force").numbers(), wrench.at("/moment").numbers()].concat().try_into().ok()
}

fn present(sole: View<'_>) -> Option<[f64; 6]> {
    let wrench = sole.at("/present");
    [wrench.at("/force").numbers(), wrench.at("/moment").numbers()].concat().try_into().ok()
}

const AXES: [&str; 6] = ["fx (N)", "fy (N)", "fz (N)", "mx (N m)", "my (N m)", "mz (N m)"];

fn soles(out: &mut String, compliant: View<'_>, rigid: View<'_>) {
    let mut table = Table::new(&[
        ("sole", Side::Left),
        ("", Side::Left),
        ("now", Side::Right),
        ("compliant", Side::Right),
        ("rigid", Side::Right),
        ("jump asked by rigid", Side::Right),
    ]);
    for sole in compliant.at("/soles").items() {
        let name = sole.at("/name").text().unwrap_or("-");
        let (Some(now), Some(soft), Some(hard)) = (present(sole), at_end(compliant, name), at_end(rigid, name)) else {
            continue;
        };
        for ((axis, now), (soft, hard)) in AXES.iter().zip(now).zip(soft.iter().zip(hard)) {
            table.row([
                name.to_owned(),
                (*axis).to_owned(),
                amount(now, 2),
                amount(*soft, 2),
                amount(hard, 2),
                amount(hard - now, 2),
            ]);
        }
    }
    push_line(out, "");
    push_line(out, "Sole wrenches at the tick's end");
    table.write(out);
}

/// Names with (compliant, rigid) torque, largest difference first.
fn torques<'a>(compliant: View<'a>, rigid: View<'a>) -> Vec<(&'a str, f64, f64)> {
    let mut torques: Vec<(&str, f64, f64)> = compliant
        .at("/joints")
        .items()
        .zip(rigid.at("/joints").items())
        .filter_map(|(soft, hard)| {
            Some((soft.at("/name").text()?, soft.at("/torque").number()?, hard.at("/torque").number()?))
        })
        .collect();
    torques.sort_by(|a, b| (b.1 - b.2).abs().total_cmp(&(a.1 - a.2).abs()));
    torques
}

fn joints(out: &mut String, compliant: View<'_>, rigid: View<'_>) {
    let mut table = Table::new(&[
        ("joint", Side::Left),
        ("compliant", Side::Right),
        ("rigid", Side::Right),
        ("difference", Side::Right),
    ]);
    for (name, soft, hard) in torques(compliant, rigid).into_iter().take(JOINTS_SHOWN) {
        table.row([name.to_owned(), number(soft, 2), number(hard, 2), number(hard - soft, 2)]);
    }
    push_line(out, "");
    push_line(out, "Torques that differ most (N m)");
    table.write(out);
}

/// What the difference means, from the figures of the two answers.
fn verdict(out: &mut String, compliant: View<'_>, rigid: View<'_>) {
    let (mut soft_change, mut rigid_change) = ([0.0_f64; 2], [0.0_f64; 2]);
    let mut moved = [0.0_f64; 2];
    for sole in compliant.at("/soles").items() {
        let name = sole.at("/name").text().unwrap_or("-");
        if let (Some(now), Some(soft), Some(hard)) = (present(sole), at_end(compliant, name), at_end(rigid, name)) {
            for (axis, ((now, soft), hard)) in now.iter().zip(soft).zip(hard).enumerate() {
                let part = usize::from(axis >= 3);
                soft_change[part] = soft_change[part].max((soft - now).abs());
                rigid_change[part] = rigid_change[part].max((hard - now).abs());
            }
        }
        for (moved, part) in moved.iter_mut().zip(["/acceleration/linear", "/acceleration/angular"]) {
            *moved = sole.at(part).numbers().into_iter().fold(*moved, |most, value| most.max(value.abs()));
        }
    }
    push_line(out, "");
    let Some(&(joint, soft, hard)) = torques(compliant, rigid).first() else {
        push_text(out, "", "One of the two requests has no answer, so there are no torques to compare.");
        return;
    };
    push_text(
        out,
        "",
        &format!(
            "What that means: taken for rigid, the floor would deliver wrenches up to {} N and {} N m away from the \
             present ones at once, with the soles at rest. A floor that gives changes its wrench only as the sole \
             moves: the compliant answer changes it by up to {} N and {} N m within the tick, and for that moves the \
             soles with up to {} m/s^2 and {} rad/s^2. A controller that sent the rigid torques (off by {} N m at {}) \
             would not get the accelerations it computed.",
            number(rigid_change[0], 1),
            number(rigid_change[1], 2),
            number(soft_change[0], 1),
            number(soft_change[1], 2),
            number(moved[0], 2),
            number(moved[1], 2),
            number((hard - soft).abs(), 2),
            joint,
        ),
    );
}
