//! An answer as tables to read: drawn from the JSON document alone, as any client would.

use super::table::{Side, Table, amount, number, push_line, push_text};
use crate::wire::view::{Parsed, View};

use Side::{Left, Right};

/// Tasks with more rows than this are shown by their largest residual in each unit.
const ROWS_SHOWN: usize = 6;
/// Binding limits shown.
const BINDING_SHOWN: usize = 12;
/// Groups that give way shown.
const RELAXED_SHOWN: usize = 12;
/// Free directions shown, and parts of each.
const FREE_SHOWN: usize = 3;

/// The answer in `document` as text.
pub fn answer(document: &[u8]) -> String {
    let Some(parsed) = Parsed::read(document) else {
        return String::from("The answer is no JSON document.\n");
    };
    let answer = parsed.view();
    let mut out = String::new();
    headline(&mut out, answer);
    joints(&mut out, answer);
    soles(&mut out, answer);
    tasks(&mut out, answer);
    levels(&mut out, answer);
    margins(&mut out, answer);
    binding(&mut out, answer);
    blocking(&mut out, answer);
    relaxation(&mut out, answer);
    free(&mut out, answer);
    certificate(&mut out, answer);
    ground(&mut out, answer);
    for warning in answer.at("/warnings").items() {
        push_text(&mut out, "", &format!("Warning: {}", warning.at("/text").text().unwrap_or_default()));
    }
    out
}

/// What a status means, in a sentence.
pub fn meaning(status: &str) -> &'static str {
    match status {
        "solved" => "the certificate holds",
        "infeasible" => "no answer obeys what must hold",
        "not_reachable" => "one tick cannot get there, though nothing else forbids it",
        "ill_posed" => "exact, but the answer moves like the square root of the data",
        "inaccurate" => "the certificate's bounds are missed; the figures reached are below",
        _ => "see the document",
    }
}

/// A value in a table cell; a dash where there is none.
fn cell(value: View<'_>, digits: usize) -> String {
    value.number().map_or_else(|| "-".to_owned(), |value| number(value, digits))
}

/// The same in powers of ten.
fn power(value: View<'_>) -> String {
    value.number().map_or_else(|| "-".to_owned(), |value| format!("{value:.1e}"))
}

fn scaled(value: View<'_>, factor: f64, digits: usize) -> String {
    value.number().map_or_else(|| "-".to_owned(), |value| number(factor * value, digits))
}

fn text(value: View<'_>) -> String {
    value.text().unwrap_or("-").to_owned()
}

fn section(out: &mut String, title: &str, table: &Table) {
    if !table.is_empty() {
        push_line(out, "");
        push_line(out, title);
        table.write(out);
    }
}

fn headline(out: &mut String, answer: View<'_>) {
    let status = answer.at("/status").text().unwrap_or("-");
    push_line(out, &format!("Status: {status} ({})", meaning(status)));
    let tick = answer.at("/tick");
    let by_default = tick.at("/rule_by_default").truth() == Some(true);
    let origin = if by_default { ", the default" } else { "" };
    push_line(out, &format!("Tick: {} ms, rule {}{origin}", scaled(tick.at("/length"), 1e3, 3), text(tick.at("/rule"))));
}

/// Torque limit that a torque comes closest to, as the share used: margins say how much is left
/// above and below.
fn limit_use(answer: View<'_>, joint: &str, torque: f64) -> Option<(f64, f64)> {
    let mut most: Option<(f64, f64)> = None;
    for margin in answer.at("/margins").items() {
        let unit = margin.at("/unit").text();
        let side = margin.at("/part").text().and_then(|part| part.strip_prefix(joint)).map(str::trim);
        let (Some("N m" | "N"), Some(side), Some(room)) = (unit, side, margin.at("/margin").number()) else {
            continue;
        };
        let bound = match side {
            "upper" => torque + room,
            "lower" => torque - room,
            _ => continue,
        };
        let share = torque / bound;
        if share.is_finite() && most.is_none_or(|(_, other)| share > other) {
            most = Some((bound, share));
        }
    }
    most
}

fn joints(out: &mut String, answer: View<'_>) {
    let mut table = Table::new(&[
        ("joint", Left),
        ("torque", Right),
        ("limit", Right),
        ("used", Right),
        ("acceleration", Right),
    ]);
    for joint in answer.at("/joints").items() {
        let name = text(joint.at("/name"));
        let used = joint.at("/torque").number().and_then(|torque| limit_use(answer, &name, torque));
        let (limit, used) = match used {
            Some((limit, share)) => (number(limit, 1), format!("{:.1} %", 100.0 * share)),
            None => ("-".to_owned(), "-".to_owned()),
        };
        table.row([name, cell(joint.at("/torque"), 3), limit, used, cell(joint.at("/acceleration"), 3)]);
    }
    section(out, "Joints (torque and limit N m, acceleration rad/s^2; sliding joints N, m/s^2)", &table);
}

fn soles(out: &mut String, answer: View<'_>) {
    let mut wrenches = Table::new(&[
        ("sole", Left),
        ("", Left),
        ("fx", Right),
        ("fy", Right),
        ("fz", Right),
        ("mx", Right),
        ("my", Right),
        ("mz", Right),
    ]);
    let mut contact = Table::new(&[
        ("sole", Left),
        ("normal force", Right),
        ("pressure x", Right),
        ("pressure y", Right),
        ("to edge", Right),
        ("friction used", Right),
        ("law off by", Right),
    ]);
    for sole in answer.at("/soles").items() {
        let name = text(sole.at("/name"));
        for (label, at) in [("now", "/present"), ("tick's end", "/wrench")] {
            let wrench = sole.at(at);
            if !wrench.is_nothing() {
                let numbers = [wrench.at("/force").numbers(), wrench.at("/moment").numbers()].concat();
                let numbers = numbers.into_iter().map(|value| amount(value, 2));
                wrenches.row([name.clone(), label.to_owned()].into_iter().chain(numbers));
            }
        }
        contact.row([
            name,
            cell(sole.at("/normal_force"), 2),
            scaled(sole.at("/center_of_pressure/0"), 1e3, 1),
            scaled(sole.at("/center_of_pressure/1"), 1e3, 1),
            scaled(sole.at("/edge_distance"), 1e3, 1),
            sole.at("/friction_use").number().map_or_else(|| "-".to_owned(), |used| format!("{:.1} %", 100.0 * used)),
            cell(sole.at("/linearisation_error/force"), 3),
        ]);
    }
    section(out, "Wrench of the ground on each sole, about the sole origin, world axes (N, N m)", &wrenches);
    section(out, "Contact at the tick's end (force N; centre of pressure in sole axes and distance to the edge mm)", &contact);
}

/// Row numbers to show: all of a short task, else the one with the largest residual in each unit.
fn shown_rows(units: &[&str], residual: &[f64]) -> Vec<usize> {
    if residual.len() <= ROWS_SHOWN {
        return (0..residual.len()).collect();
    }
    let mut shown: Vec<usize> = Vec::new();
    for (row, unit) in units.iter().enumerate().take(residual.len()) {
        let size = |row: usize| residual.get(row).map_or(0.0, |value| value.abs());
        match shown.iter_mut().find(|other| units.get(**other) == Some(unit)) {
            Some(other) if size(*other) < size(row) => *other = row,
            Some(_) => {}
            None => shown.push(row),
        }
    }
    shown
}

fn tasks(out: &mut String, answer: View<'_>) {
    let mut table = Table::new(&[
        ("priority", Left),
        ("task", Left),
        ("row", Left),
        ("desired", Right),
        ("achieved", Right),
        ("residual", Right),
        ("unit", Left),
    ]);
    for task in answer.at("/tasks").items() {
        let residual = task.at("/residual").numbers();
        let rows: Vec<&str> = task.at("/rows").items().filter_map(View::text).collect();
        let units: Vec<&str> = task.at("/units").items().filter_map(View::text).collect();
        let priority = task.at("/priority").number().map_or_else(|| "must hold".to_owned(), |p| number(p, 0));
        let shown = shown_rows(&units, &residual);
        for &row in &shown {
            let label = rows.get(row).copied().unwrap_or_default();
            let label = if shown.len() < residual.len() {
                format!("{label} (worst of {})", residual.len())
            } else {
                label.to_owned()
            };
            table.row([
                priority.clone(),
                text(task.at("/name")),
                label,
                cell(task.at(&format!("/desired/{row}")), 3),
                cell(task.at(&format!("/achieved/{row}")), 3),
                cell(task.at(&format!("/residual/{row}")), 3),
                units.get(row).copied().unwrap_or_default().to_owned(),
            ]);
        }
    }
    section(out, "Tasks (residual = achieved - desired)", &table);
}

fn levels(out: &mut String, answer: View<'_>) {
    let mut table = Table::new(&[
        ("priority", Left),
        ("cost", Right),
        ("rows", Right),
        ("rank", Right),
        ("freedom left", Right),
        ("refined", Left),
        ("error bound", Right),
    ]);
    for level in answer.at("/levels").items() {
        table.row([
            cell(level.at("/priority"), 0),
            power(level.at("/cost")),
            cell(level.at("/rows"), 0),
            cell(level.at("/rank"), 0),
            cell(level.at("/freedom_left"), 0),
            if level.at("/refined").truth() == Some(true) { "yes" } else { "no" }.to_owned(),
            power(level.at("/error_bound")),
        ]);
    }
    section(out, "Priorities", &table);
}

/// The least margin of each limit.
fn margins(out: &mut String, answer: View<'_>) {
    let mut least: Vec<(&str, View<'_>, f64)> = Vec::new();
    for margin in answer.at("/margins").items() {
        let (Some(limit), Some(room)) = (margin.at("/limit").text(), margin.at("/margin").number()) else { continue };
        match least.iter_mut().find(|entry| entry.0 == limit) {
            Some(entry) if room < entry.2 => (entry.1, entry.2) = (margin, room),
            Some(_) => {}
            None => least.push((limit, margin, room)),
        }
    }
    let mut table = Table::new(&[("limit", Left), ("where it is tightest", Left), ("room left", Right), ("unit", Left)]);
    for (limit, margin, room) in least {
        table.row([limit.to_owned(), text(margin.at("/part")), number(room, 3), text(margin.at("/unit"))]);
    }
    section(out, "Margins", &table);
}

fn binding(out: &mut String, answer: View<'_>) {
    let mut table = Table::new(&[("limit", Left), ("part", Left), ("priority", Right), ("multiplier", Right), ("per", Left)]);
    for binding in answer.at("/binding").items().take(BINDING_SHOWN) {
        table.row([
            text(binding.at("/limit")),
            text(binding.at("/part")),
            cell(binding.at("/priority"), 0),
            power(binding.at("/multiplier")),
            text(binding.at("/unit")),
        ]);
    }
    section(out, "Binding limits (cost per unit of the limit)", &table);
    let more = answer.at("/binding").items().count().saturating_sub(BINDING_SHOWN);
    if more > 0 {
        push_line(out, &format!("  and {more} more in the document"));
    }
}

fn percent(value: View<'_>) -> String {
    value.number().map_or_else(|| "-".to_owned(), |share| format!("{:.1} %", 100.0 * share))
}

fn blocking(out: &mut String, answer: View<'_>) {
    let mut table = Table::new(&[("what stands in the way", Left), ("share", Right)]);
    for blocking in answer.at("/blocking").items() {
        table.row([text(blocking.at("/group")), percent(blocking.at("/share"))]);
    }
    let title = match answer.at("/status").text() {
        Some("not_reachable") => "Not reachable within one tick: who carries the proof",
        _ => "Nothing feasible: who carries the proof",
    };
    section(out, title, &table);
}

/// The rows of a relaxation that belong to `group`, as their largest: where, amount with unit.
fn largest(rows: View<'_>, group: &str) -> (String, String) {
    let mut own = rows.items().filter(|row| row.at("/group").text() == Some(group));
    let Some(first) = own.next() else { return ("-".to_owned(), "-".to_owned()) };
    let part = match own.count() {
        0 => text(first.at("/part")),
        more => format!("{} (worst of {})", text(first.at("/part")), more + 1),
    };
    (part, format!("{} {}", cell(first.at("/amount"), 3), text(first.at("/unit"))))
}

/// What would have to give way: the least relaxation by group, beside what each group would need alone.
fn relaxation(out: &mut String, answer: View<'_>) {
    let explained = answer.at("/explained");
    if explained.is_nothing() {
        return;
    }
    let relaxation = explained.at("/relaxation");
    let together: Vec<(&str, View<'_>)> = relaxation
        .at("/groups")
        .items()
        .filter_map(|group| Some((group.at("/group").text()?, group.at("/share"))))
        .collect();
    let named = |group: &str| together.iter().any(|other| other.0 == group);
    let others = explained.at("/alone").items().filter(|alone| !alone.at("/needs").is_nothing());
    let others = others.filter_map(|alone| alone.at("/group").text()).filter(|group| !named(group));
    let others = others.map(|group| (group, explained.at("/none")));
    let mut table =
        Table::new(&[("gives way", Left), ("where", Left), ("amount", Right), ("share", Right), ("alone would need", Right)]);
    for (group, share) in together.iter().copied().chain(others).take(RELAXED_SHOWN) {
        let (part, amount) = largest(relaxation.at("/rows"), group);
        let alone = explained.at("/alone").items().find(|alone| alone.at("/group").text() == Some(group));
        let alone = match alone.map(|alone| alone.at("/needs")) {
            None => "-".to_owned(),
            Some(needs) if needs.is_nothing() => "not enough alone".to_owned(),
            Some(needs) => largest(needs.at("/rows"), group).1,
        };
        table.row([group.to_owned(), part, amount, percent(share), alone]);
    }
    section(out, "Least relaxation that leaves an answer (largest amount of each)", &table);
    if relaxation.is_nothing() {
        push_line(out, "");
        push_line(out, "No relaxation helps: physics itself contradicts the request");
    }
    let set: Vec<&str> = explained.at("/irreducible/groups").items().filter_map(View::text).collect();
    if !set.is_empty() {
        push_text(out, "  ", &format!("Cannot hold together: {}", set.join(", ")));
    }
}

fn free(out: &mut String, answer: View<'_>) {
    let count = answer.at("/free").items().count();
    if count > 0 {
        push_line(out, "");
        push_line(out, &format!("Left free: {count} direction(s), settled by least effort"));
    }
    for direction in answer.at("/free").items().take(FREE_SHOWN) {
        let parts: Vec<String> = direction
            .at("/parts")
            .items()
            .take(FREE_SHOWN)
            .map(|part| format!("{} {} {}", text(part.at("/name")), cell(part.at("/amount"), 3), text(part.at("/unit"))))
            .collect();
        push_line(out, &format!("  {}", parts.join(", ")));
    }
}

/// What a figure is relative to, without the fine print.
fn short(relative_to: View<'_>) -> String {
    let long = relative_to.text().unwrap_or("-");
    let end = [" (", " that "].iter().filter_map(|mark| long.find(mark)).min();
    let short = end.and_then(|end| long.get(..end)).unwrap_or(long);
    short.strip_prefix("of ").unwrap_or(short).to_owned()
}

fn certificate(out: &mut String, answer: View<'_>) {
    let mut table = Table::new(&[("check", Left), ("figure", Right), ("bound", Right), ("relative to", Left), ("worst at", Left)]);
    for check in answer.at("/certificate/checks").items() {
        table.row([
            text(check.at("/name")),
            power(check.at("/value")),
            power(check.at("/bound")),
            short(check.at("/relative_to")),
            text(check.at("/worst")),
        ]);
    }
    let mut levels = Table::new(&[
        ("optimality, priority", Left),
        ("stationarity", Right),
        ("complementarity", Right),
        ("multipliers", Right),
        ("bound", Right),
    ]);
    for level in answer.at("/certificate/levels").items() {
        levels.row([
            cell(level.at("/priority"), 0),
            power(level.at("/stationarity")),
            power(level.at("/complementarity")),
            power(level.at("/dual_violation")),
            power(level.at("/bound")),
        ]);
    }
    let holds = answer.at("/certificate/holds").truth() == Some(true);
    let title = if holds { "holds" } else { "DOES NOT HOLD" };
    section(out, &format!("Certificate, recomputed without the solver: {title}"), &table);
    if !levels.is_empty() {
        levels.write(out);
    }
}

fn ground(out: &mut String, answer: View<'_>) {
    let ground = answer.at("/ground");
    let mut table = Table::new(&[("sole", Left), ("sink mm", Right), ("b/k s", Right), ("T k/b", Right)]);
    for sole in ground.at("/soles").items() {
        table.row([
            text(sole.at("/name")),
            scaled(sole.at("/sink"), 1e3, 2),
            cell(sole.at("/damping_time"), 4),
            cell(sole.at("/tick_stiffness_over_damping"), 3),
        ]);
    }
    let fastest = cell(ground.at("/omega_max"), 1);
    let title = format!("Ground: fastest mode {fastest} rad/s, times the tick {}", cell(ground.at("/omega_max_tick"), 3));
    section(out, &title, &table);
    if !ground.at("/rocking").is_nothing() {
        push_line(
            out,
            &format!(
                "  rocking stiffness of the bed {} N m/rad, against {} N m/rad of weight",
                cell(ground.at("/rocking/bed"), 0),
                cell(ground.at("/rocking/weight"), 0)
            ),
        );
    }
}
