//! Samples as CSV: a header of cells `name [unit]`, then one row an instant.
//!
//! Column names: `time`; `SOLE.force.x`, `.moment.x`, `.position.x`, `.orientation.x` to `.w`, `.linear_velocity.x`,
//! `.angular_velocity.x`, `SOLE.stands` (0 or 1); with a model also `base.position.x`, `base.orientation.x`,
//! `base.linear_velocity.x`, `base.angular_velocity.x`, `joint.NAME.position`, `joint.NAME.velocity`. Cells are parted by
//! commas, decimals by points; header cells may stand in double quotes.

use super::samples::{Figures, SoleFigures, shortened};
use super::settings::Settings;
use crate::identify::remarks::Remarks;
use crate::identify::setup::Source;
use crate::model::JointKind;
use crate::spatial::polygon::SoleShape;
use crate::wire::refusal::{Fault, Refusal};
use crate::wire::strict::MAX_MAGNITUDE;

/// Most columns.
const MAX_COLUMNS: usize = 2000;
/// Figures of one sole, in this order.
const SOLE_SLOTS: usize = 20;
const STANDS: usize = 19;
/// Figures of the base.
const BASE_SLOTS: usize = 13;
/// Groups within a sole's figures: name, first slot, components, dimension.
const SOLE_GROUPS: [(&str, usize, &[&str], Dimension); 6] = [
    ("force", 0, &["x", "y", "z"], Dimension::Force),
    ("moment", 3, &["x", "y", "z"], Dimension::Moment),
    ("position", 6, &["x", "y", "z"], Dimension::Length),
    ("orientation", 9, &["x", "y", "z", "w"], Dimension::None),
    ("linear_velocity", 13, &["x", "y", "z"], Dimension::Speed),
    ("angular_velocity", 16, &["x", "y", "z"], Dimension::AngularSpeed),
];
/// The same of the base.
const BASE_GROUPS: [(&str, usize, &[&str], Dimension); 4] = [
    ("position", 0, &["x", "y", "z"], Dimension::Length),
    ("orientation", 3, &["x", "y", "z", "w"], Dimension::None),
    ("linear_velocity", 7, &["x", "y", "z"], Dimension::Speed),
    ("angular_velocity", 10, &["x", "y", "z"], Dimension::AngularSpeed),
];

/// What a column measures.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Dimension {
    Time,
    Force,
    Moment,
    Length,
    Angle,
    Speed,
    AngularSpeed,
    None,
}

impl Dimension {
    /// Units and how many SI units one of them is; the SI unit first.
    fn units(self) -> &'static [(&'static str, f64)] {
        const DEGREE: f64 = std::f64::consts::PI / 180.0;
        match self {
            Dimension::Time => &[("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("µs", 1e-6), ("ns", 1e-9)],
            Dimension::Force => &[("N", 1.0), ("kN", 1e3), ("mN", 1e-3)],
            Dimension::Moment => &[("N m", 1.0), ("Nm", 1.0), ("N*m", 1.0), ("N mm", 1e-3), ("Nmm", 1e-3), ("kN m", 1e3), ("kNm", 1e3)],
            Dimension::Length => &[("m", 1.0), ("cm", 1e-2), ("mm", 1e-3), ("um", 1e-6)],
            Dimension::Angle => &[("rad", 1.0), ("mrad", 1e-3), ("deg", DEGREE)],
            Dimension::Speed => &[("m/s", 1.0), ("cm/s", 1e-2), ("mm/s", 1e-3)],
            Dimension::AngularSpeed => &[("rad/s", 1.0), ("deg/s", DEGREE)],
            Dimension::None => &[("1", 1.0), ("", 1.0), ("-", 1.0)],
        }
    }
}

/// Where a cell goes.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Target {
    Time,
    Sole(usize, usize),
    Base(usize),
    Position(usize),
    Velocity(usize),
}

/// A column that is read.
#[derive(Debug, Clone)]
struct Column {
    place: usize,
    target: Target,
    factor: f64,
    name: String,
}

/// A header past the gate, and room for one row.
#[derive(Debug, Clone)]
pub(super) struct Table {
    columns: Vec<Column>,
    width: usize,
    with_model: bool,
    time: Option<f64>,
    soles: Vec<[Option<f64>; SOLE_SLOTS]>,
    base: [Option<f64>; BASE_SLOTS],
    positions: Vec<Option<f64>>,
    velocities: Vec<Option<f64>>,
}

impl Table {
    /// Reads the header, which stands on `line`.
    ///
    /// # Errors
    /// Columns with a wrong or no unit, named twice, or missing.
    pub(super) fn new(header: &str, line: u64, settings: &Settings, remarks: &mut Remarks) -> Result<Self, Refusal> {
        let cells = split_header(header);
        let mut faults = Vec::new();
        let mut fault = |expected: String, got: String| {
            faults.push(Fault { pointer: String::new(), expected, got, line: u32::try_from(line).ok() });
        };
        if cells.len() > MAX_COLUMNS {
            fault(format!("at most {MAX_COLUMNS} columns"), cells.len().to_string());
            return Err(unusable(faults));
        }
        let known = names(settings);
        let mut columns: Vec<Column> = Vec::new();
        for (place, cell) in cells.iter().enumerate() {
            let mapped = settings.mapping.iter().find(|(column, _)| column == cell);
            let (name, unit) = named(mapped.map_or(cell.as_str(), |(_, means)| means));
            let Some((_, target, dimension)) = known.iter().find(|(known, _, _)| known == name) else {
                let subject = format!("column {:?}: ", shortened(cell));
                remarks.note_about("column-ignored", &subject, line, 0, || "no figure of this name is read".into());
                continue;
            };
            let units = dimension.units();
            let Some((_, factor)) = units.iter().find(|(known, _)| Some(*known) == unit || (unit.is_none() && known.is_empty())) else {
                let list: Vec<&str> = units.iter().map(|(name, _)| *name).filter(|name| !name.is_empty()).collect();
                fault(
                    format!("column {name:?} with its unit, one of [{}]", list.join("], [")),
                    format!("column {} with {:?}", place + 1, shortened(cell)),
                );
                continue;
            };
            if columns.iter().any(|column| column.target == *target) {
                fault(format!("column {name:?} once"), format!("again as column {}", place + 1));
            }
            columns.push(Column { place, target: *target, factor: *factor, name: shortened(cell) });
        }
        for (column, _) in &settings.mapping {
            if !cells.contains(column) {
                fault(format!("a column {:?}, which mapping names", shortened(column)), "none".into());
            }
        }
        for (name, target, _) in &known {
            if needed(settings, target) && !columns.iter().any(|column| column.target == *target) {
                fault(format!("a column {name:?}"), "none".into());
            }
        }
        if !faults.is_empty() {
            faults.truncate(50);
            return Err(unusable(faults));
        }
        let joints = settings.joints.len();
        Ok(Table {
            columns,
            width: cells.len(),
            with_model: matches!(settings.setup.source, Source::Model(_)),
            time: None,
            soles: vec![[None; SOLE_SLOTS]; settings.setup.soles.len()],
            base: [None; BASE_SLOTS],
            positions: vec![None; joints],
            velocities: vec![None; joints],
        })
    }

    /// Reads a row; empty and unreadable cells are remarked on with their line and column. None where the time is missing.
    pub(super) fn read(&mut self, text: &str, line: u64, remarks: &mut Remarks) -> Option<Figures> {
        self.time = None;
        self.soles.fill([None; SOLE_SLOTS]);
        self.base.fill(None);
        self.positions.fill(None);
        self.velocities.fill(None);
        let mut cells = text.split(',');
        let mut next = 0;
        let mut row_width = 0;
        for column in &self.columns {
            let cell = cells.nth(column.place - next).map(str::trim);
            row_width = column.place + 1;
            next = column.place + 1;
            let value = match cell {
                None | Some("") => {
                    remarks.note_about("empty-cell", &format!("column {:?}", column.name), line, 0, || format!(": empty on line {line}"));
                    None
                }
                Some(cell) => match cell.trim_matches('"').parse::<f64>() {
                    Ok(value) if value.abs() <= MAX_MAGNITUDE => Some(value * column.factor),
                    _ => {
                        let subject = format!("column {:?}", column.name);
                        remarks.note_about("not-a-number", &subject, line, 0, || format!(": {:?} on line {line}", shortened(cell)));
                        None
                    }
                },
            };
            match column.target {
                Target::Time => self.time = value,
                Target::Sole(sole, slot) => self.soles[sole][slot] = value,
                Target::Base(slot) => self.base[slot] = value,
                Target::Position(joint) => self.positions[joint] = value,
                Target::Velocity(joint) => self.velocities[joint] = value,
            }
        }
        let width = row_width + cells.count();
        if width > self.width {
            remarks.note("long-row", line, 0, || format!("line {line}: {width} cells under {} columns", self.width));
        }
        self.figures()
    }

    fn figures(&self) -> Option<Figures> {
        let time = self.time?;
        let all = |values: &[Option<f64>]| values.iter().copied().collect::<Option<Vec<f64>>>();
        let mut soles = Vec::with_capacity(self.soles.len());
        for (sole, slots) in self.soles.iter().enumerate() {
            // An incomplete force is remarked on as an empty cell already; the sole is left out of this row.
            let Some(force) = three(slots, 0) else { continue };
            soles.push(SoleFigures {
                sole,
                force,
                moment: three(slots, 3),
                position: three(slots, 6),
                orientation: four(slots, 9, self.given(Target::Sole(sole, 9))),
                linear: three(slots, 13),
                angular: three(slots, 16),
                stands: slots[STANDS].map(|value| value != 0.0),
            });
        }
        Some(Figures {
            time,
            soles,
            base_position: three(&self.base, 0),
            base_orientation: four(&self.base, 3, self.given(Target::Base(3))),
            base_linear: three(&self.base, 7),
            base_angular: three(&self.base, 10),
            positions: all(&self.positions).filter(|_| self.with_model),
            velocities: all(&self.velocities).filter(|_| self.with_model),
        })
    }

    fn given(&self, target: Target) -> bool {
        self.columns.iter().any(|column| column.target == target)
    }
}

fn three(slots: &[Option<f64>], from: usize) -> Option<[f64; 3]> {
    Some([slots[from]?, slots[from + 1]?, slots[from + 2]?])
}

/// A quaternion; one whose cells are there but empty is no quaternion, and said to be unusable.
fn four(slots: &[Option<f64>], from: usize, given: bool) -> Option<[f64; 4]> {
    if !given {
        return None;
    }
    let mut out = [0.0; 4];
    for (slot, value) in out.iter_mut().zip(&slots[from..from + 4]) {
        *slot = value.unwrap_or(0.0);
    }
    Some(out)
}

/// Every column that can be read.
fn names(settings: &Settings) -> Vec<(String, Target, Dimension)> {
    let mut out = vec![("time".to_owned(), Target::Time, Dimension::Time)];
    for (i, sole) in settings.setup.soles.iter().enumerate() {
        for (group, first, components, dimension) in SOLE_GROUPS {
            for (k, component) in components.iter().enumerate() {
                out.push((format!("{}.{group}.{component}", sole.name), Target::Sole(i, first + k), dimension));
            }
        }
        out.push((format!("{}.stands", sole.name), Target::Sole(i, STANDS), Dimension::None));
    }
    if let Source::Model(model) = &settings.setup.source {
        for (group, first, components, dimension) in BASE_GROUPS {
            for (k, component) in components.iter().enumerate() {
                out.push((format!("base.{group}.{component}"), Target::Base(first + k), dimension));
            }
        }
        for (k, place) in settings.joints.iter().enumerate() {
            let Some(joint) = model.joints.get(*place) else { continue };
            let slides = joint.kind == JointKind::Prismatic;
            let (position, speed) =
                if slides { (Dimension::Length, Dimension::Speed) } else { (Dimension::Angle, Dimension::AngularSpeed) };
            out.push((format!("joint.{}.position", joint.name), Target::Position(k), position));
            out.push((format!("joint.{}.velocity", joint.name), Target::Velocity(k), speed));
        }
    }
    out
}

/// True for columns without which nothing can be told.
fn needed(settings: &Settings, target: &Target) -> bool {
    let with_model = matches!(settings.setup.source, Source::Model(_));
    match target {
        Target::Time => true,
        Target::Sole(sole, slot) => {
            let point = settings.setup.soles.get(*sole).is_some_and(|sole| sole.shape == SoleShape::Point);
            *slot < 3 || (*slot < 6 && !point) || ((6..9).contains(slot) && !with_model)
        }
        Target::Position(_) => true,
        Target::Base(_) | Target::Velocity(_) => false,
    }
}

/// `name [unit]` taken apart.
fn named(cell: &str) -> (&str, Option<&str>) {
    match cell.trim().strip_suffix(']').and_then(|rest| rest.rsplit_once('[')) {
        Some((name, unit)) => (name.trim(), Some(unit.trim())),
        None => (cell.trim(), None),
    }
}

/// The cells of a header; quotes guard commas.
fn split_header(text: &str) -> Vec<String> {
    let text = text.trim_start_matches('\u{feff}');
    let (mut cells, mut cell, mut quoted) = (Vec::new(), String::new(), false);
    for c in text.chars() {
        match c {
            '"' => quoted = !quoted,
            ',' if !quoted => cells.push(std::mem::take(&mut cell).trim().to_owned()),
            _ => cell.push(c),
        }
    }
    cells.push(cell.trim().to_owned());
    cells
}

fn unusable(faults: Vec<Fault>) -> Refusal {
    Refusal { code: "unusable-log", title: "The log cannot be used".to_owned(), ..Refusal::unusable(faults) }
}
