//! An audit as tables to read: drawn from the JSON document alone.

use super::table::{Side, Table, amount, number, push_line, push_text};
use crate::wire::view::{Parsed, View};

use Side::{Left, Right};

/// Rows shown of limits, torques and hypotheses.
const SHOWN: usize = 12;

/// The audit in `document` as text.
pub fn audit(document: &[u8]) -> String {
    let Some(parsed) = Parsed::read(document) else {
        return String::from("The audit is no JSON document.\n");
    };
    let audit = parsed.view();
    let mut out = String::new();
    push_line(&mut out, &format!("Verdict: {}", text(audit.at("/verdict"))));
    for judgement in audit.at("/judgements").items() {
        push_line(&mut out, "");
        push_line(&mut out, &format!("Under the tick rule {}: {}", text(judgement.at("/rule")), text(judgement.at("/verdict"))));
        for reason in judgement.at("/reasons").items() {
            let mark = if reason.at("/fails").truth() == Some(true) { "fails" } else { "open" };
            push_text(&mut out, "  ", &format!("{mark}: {}", text(reason.at("/text"))));
        }
    }
    // Tables for the request's own rule; the other judgement is in the document.
    let own = audit.at("/judgements/0");
    claimed(&mut out, own);
    limits(&mut out, own);
    own.at("/comparisons").items().for_each(|comparison| compared(&mut out, comparison));
    causes(&mut out, audit.at("/causes"));
    for warning in audit.at("/warnings").items() {
        push_text(&mut out, "", &format!("Warning: {}", text(warning)));
    }
    out
}

fn text(value: View<'_>) -> String {
    value.text().unwrap_or("-").to_owned()
}

fn cell(value: View<'_>, digits: usize) -> String {
    value.number().map_or_else(|| "-".to_owned(), |value| number(value, digits))
}

fn figure(value: View<'_>) -> f64 {
    value.number().unwrap_or(f64::NAN)
}

fn mark(value: View<'_>, word: &str) -> String {
    if value.truth() == Some(true) { word.to_owned() } else { String::new() }
}

fn section(out: &mut String, title: &str, table: &Table) {
    if !table.is_empty() {
        push_line(out, "");
        push_line(out, title);
        table.write(out);
    }
}

fn claimed(out: &mut String, judgement: View<'_>) {
    let mut rows: Vec<View<'_>> = judgement.at("/claimed").items().collect();
    let off = |row: &View<'_>| (figure(row.at("/claimed")) - figure(row.at("/implied"))).abs() / figure(row.at("/tolerance"));
    rows.sort_by(|a, b| off(b).total_cmp(&off(a)));
    let mut table =
        Table::new(&[("claimed to follow", Left), ("claimed", Right), ("implied", Right), ("tolerance", Right), ("unit", Left), ("", Left)]);
    for row in rows.into_iter().take(SHOWN) {
        table.row([
            text(row.at("/name")),
            cell(row.at("/claimed"), 4),
            cell(row.at("/implied"), 4),
            cell(row.at("/tolerance"), 4),
            text(row.at("/unit")),
            mark(row.at("/broken"), "DIFFERS"),
        ]);
    }
    section(out, "Claimed physics, largest difference first", &table);
}

fn limits(out: &mut String, judgement: View<'_>) {
    let mut rows: Vec<View<'_>> = judgement.at("/limits").items().collect();
    let room = |row: &View<'_>| figure(row.at("/margin")) / figure(row.at("/tolerance"));
    rows.sort_by(|a, b| room(a).total_cmp(&room(b)));
    let mut table = Table::new(&[("limit", Left), ("part", Left), ("margin", Right), ("unit", Left), ("holds", Left), ("", Left)]);
    for row in rows.into_iter().take(SHOWN) {
        let open = if row.at("/determined").truth() == Some(false) { "open" } else { "" };
        let broken = mark(row.at("/broken"), "BROKEN");
        table.row([
            text(row.at("/limit")),
            text(row.at("/part")),
            amount(figure(row.at("/margin")), 4),
            text(row.at("/unit")),
            text(row.at("/treatment")),
            if broken.is_empty() { open.to_owned() } else { broken },
        ]);
    }
    section(out, "Limits, least room first (margin negative where exceeded)", &table);
}

fn compared(out: &mut String, comparison: View<'_>) {
    let whose = if comparison.at("/targets").text() == Some("own") { "the controller's own targets" } else { "the request's targets" };
    let mut table =
        Table::new(&[("priority", Right), ("", Left), ("task", Left), ("residual", Right), ("best", Right), ("loss", Right), ("unit", Left)]);
    let mut task_rows = |priority: &str, outcome: &str, tasks: View<'_>| {
        for task in tasks.items() {
            for part in task.at("/parts").items() {
                table.row([
                    priority.to_owned(),
                    outcome.to_owned(),
                    text(task.at("/name")),
                    amount(figure(part.at("/norm")), 4),
                    part.at("/reference_norm").number().map_or_else(|| "-".to_owned(), |value| amount(value, 4)),
                    part.at("/loss").number().map_or_else(|| "-".to_owned(), |value| amount(value, 4)),
                    text(part.at("/unit")),
                ]);
            }
        }
    };
    task_rows("must", "hold", comparison.at("/must_hold"));
    for level in comparison.at("/levels").items() {
        task_rows(&cell(level.at("/priority"), 0), &text(level.at("/outcome")), level.at("/tasks"));
    }
    let title = format!(
        "With {whose}: {} (reference: {})", text(comparison.at("/verdict")), text(comparison.at("/reference"))
    );
    section(out, &title, &table);
    let mut rows: Vec<View<'_>> = comparison.at("/torques").items().filter(|t| t.at("/differs").truth() == Some(true)).collect();
    let off = |row: &View<'_>| figure(row.at("/determined_difference")).abs() / figure(row.at("/tolerance"));
    rows.sort_by(|a, b| off(b).total_cmp(&off(a)));
    let mut table = Table::new(&[("joint", Left), ("claimed", Right), ("reference", Right), ("determined difference", Right), ("tolerance", Right)]);
    for row in rows.into_iter().take(SHOWN) {
        table.row([
            text(row.at("/name")),
            cell(row.at("/claimed"), 4),
            cell(row.at("/reference"), 4),
            cell(row.at("/determined_difference"), 4),
            cell(row.at("/tolerance"), 4),
        ]);
    }
    section(out, "Torques that differ where the question determines them (N m; sliding joints N)", &table);
}

fn causes(out: &mut String, causes: View<'_>) {
    if causes.is_nothing() {
        return;
    }
    push_line(out, "");
    push_text(out, "", &format!("Cause (hypothesis, {} tried): {}", cell(causes.at("/tried"), 0), text(causes.at("/text"))));
    let mut table = Table::new(&[("if the controller had", Left), ("torque difference left", Right), ("in tolerances", Right)]);
    for row in causes.at("/hypotheses").items().take(SHOWN) {
        table.row([text(row.at("/text")), cell(row.at("/distance_left"), 4), cell(row.at("/in_tolerances"), 2)]);
    }
    table.row(["(nothing mistaken)".to_owned(), cell(causes.at("/distance"), 4), String::new()]);
    section(out, "Mistakes tried, nearest first (N m)", &table);
}
