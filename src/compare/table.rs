//! One quantity of the user's beside ours, and how far apart they are: by entry, by block, by joint.
//!
//! Errors are relative, `|theirs - ours| / scale`. The scale of an entry of the mass matrix is `sqrt(M_ii M_jj)`, which its own size
//! never exceeds; of every other quantity the largest of ours among entries of the same unit, 1e-3 in SI units at least.

use nalgebra::DMatrix;

use super::Given;
use super::terms::Terms;
use crate::problem::layout::{turns, velocity_names};
use crate::problem::question::DynamicsQuestion;

/// The least scale (SI units): below it a difference is not worth a name.
const FLOOR: f64 = 1e-3;
/// Names of six rows.
const SIX: [&str; 6] = ["linear x", "linear y", "linear z", "angular x", "angular y", "angular z"];

/// Which quantity.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Quantity {
    /// Mass matrix.
    MassMatrix,
    /// Bias.
    Bias,
    /// Momentum.
    Momentum,
    /// Jacobian of a frame.
    Jacobian,
    /// `J_dot nu` of a frame.
    BiasAcceleration,
}

/// A row or column.
#[derive(Debug, Clone, PartialEq)]
pub struct Label {
    /// Its name, in our order.
    pub name: String,
    /// The block it belongs to.
    pub block: &'static str,
    /// True for turning parts, whose unit differs.
    turns: bool,
}

/// One quantity beside ours.
#[derive(Debug, Clone)]
pub struct Table {
    /// Which one.
    pub quantity: Quantity,
    /// The frame, for Jacobians and accelerations.
    pub frame: Option<String>,
    /// Rows.
    pub rows: Vec<Label>,
    /// Columns; one without a name for vectors.
    pub columns: Vec<Label>,
    /// Ours.
    pub ours: DMatrix<f64>,
    /// Theirs.
    pub theirs: DMatrix<f64>,
    scale: DMatrix<f64>,
}

/// Largest error of one block.
#[derive(Debug, Clone, PartialEq)]
pub struct Block {
    /// Block of the rows.
    pub rows: &'static str,
    /// Block of the columns; empty for vectors.
    pub columns: &'static str,
    /// Largest relative error.
    pub relative: f64,
}

impl Table {
    /// Relative error of an entry.
    pub fn error(&self, i: usize, j: usize) -> f64 {
        (self.theirs[(i, j)] - self.ours[(i, j)]).abs() / self.scale[(i, j)]
    }

    /// The entry with the largest relative error: row, column, error.
    pub fn worst(&self) -> (usize, usize, f64) {
        let mut worst = (0, 0, 0.0);
        for j in 0..self.ours.ncols() {
            for i in 0..self.ours.nrows() {
                let error = self.error(i, j);
                if error > worst.2 {
                    worst = (i, j, error);
                }
            }
        }
        worst
    }

    /// Largest error of every block, in order.
    pub fn blocks(&self) -> Vec<Block> {
        let mut blocks: Vec<Block> = Vec::new();
        for (i, row) in self.rows.iter().enumerate() {
            for (j, column) in self.columns.iter().enumerate() {
                let relative = self.error(i, j);
                match blocks.iter_mut().find(|block| block.rows == row.block && block.columns == column.block) {
                    Some(block) => block.relative = block.relative.max(relative),
                    None => blocks.push(Block { rows: row.block, columns: column.block, relative }),
                }
            }
        }
        blocks
    }

    fn new(quantity: Quantity, frame: Option<&str>, labels: (Vec<Label>, Vec<Label>), ours: DMatrix<f64>, theirs: DMatrix<f64>) -> Table {
        let (rows, columns) = labels;
        let scale = if quantity == Quantity::MassMatrix {
            let size = |i: usize| ours[(i, i)].abs().max(f64::MIN_POSITIVE).sqrt();
            DMatrix::from_fn(rows.len(), columns.len(), |i, j| size(i) * size(j))
        } else {
            let like = |i: usize, j: usize| {
                let kin = |k: usize, l: usize| rows[k].turns == rows[i].turns && columns[l].turns == columns[j].turns;
                let cells = (0..rows.len()).flat_map(|k| (0..columns.len()).map(move |l| (k, l)));
                cells.filter(|(k, l)| kin(*k, *l)).fold(FLOOR, |most, cell| most.max(ours[cell].abs()))
            };
            let mut known = [[None; 2]; 2];
            DMatrix::from_fn(rows.len(), columns.len(), |i, j| {
                *known[usize::from(rows[i].turns)][usize::from(columns[j].turns)].get_or_insert_with(|| like(i, j))
            })
        };
        Table { quantity, frame: frame.map(str::to_string), rows, columns, ours, theirs, scale }
    }
}

/// Every quantity that was given.
pub fn tables(question: &DynamicsQuestion, given: &Given, ours: &Terms) -> Vec<Table> {
    let velocities = velocity_labels(question);
    let single = || vec![Label { name: String::new(), block: "", turns: false }];
    let six = || SIX.iter().enumerate().map(|(i, name)| {
        Label { name: (*name).to_string(), block: if i < 3 { "linear" } else { "angular" }, turns: i >= 3 }
    }).collect::<Vec<_>>();
    let column = |v: &[f64]| DMatrix::from_column_slice(v.len(), 1, v);
    let mut tables = Vec::new();
    if let (Some(theirs), Some(ours)) = (&given.mass_matrix, &ours.mass_matrix) {
        let labels = (velocities.clone(), velocities.clone());
        tables.push(Table::new(Quantity::MassMatrix, None, labels, ours.clone(), theirs.clone()));
    }
    if let (Some(theirs), Some(ours)) = (&given.bias, &ours.bias) {
        let labels = (velocities.clone(), single());
        tables.push(Table::new(Quantity::Bias, None, labels, column(ours.as_slice()), column(theirs.as_slice())));
    }
    if let (Some(theirs), Some(ours)) = (&given.momentum, &ours.momentum) {
        let labels = (six(), single());
        tables.push(Table::new(Quantity::Momentum, None, labels, column(ours.as_slice()), column(theirs.as_slice())));
    }
    for frame in &given.frames {
        let name = frame_name(question, frame.index);
        let Some((jacobian, bias)) = ours.frames.get(frame.index) else { continue };
        if let (Some(theirs), Some(ours)) = (&frame.jacobian, jacobian) {
            let labels = (six(), velocities.clone());
            tables.push(Table::new(Quantity::Jacobian, Some(name), labels, ours.clone(), theirs.clone()));
        }
        if let (Some(theirs), Some(ours)) = (&frame.bias_acceleration, bias) {
            let labels = (six(), single());
            tables.push(Table::new(Quantity::BiasAcceleration, Some(name), labels, column(ours.as_slice()), column(theirs.as_slice())));
        }
    }
    tables
}

fn velocity_labels(question: &DynamicsQuestion) -> Vec<Label> {
    let model = &question.model;
    let offset = model.joint_offset();
    let block = |i: usize| match i {
        _ if i >= offset => "joints",
        0..3 => "base linear",
        _ => "base angular",
    };
    let names = velocity_names(model).into_iter().enumerate();
    names.map(|(i, name)| Label { name, block: block(i), turns: turns(model, i) }).collect()
}

fn frame_name(question: &DynamicsQuestion, index: usize) -> &str {
    let soles = &question.model.soles;
    match soles.get(index) {
        Some(sole) => &sole.name,
        None => {
            let frame = question.frames.get(index - soles.len()).and_then(|f| question.model.frames.get(*f));
            frame.map_or("", |frame| &frame.name)
        }
    }
}

/// Largest relative error of all.
pub fn largest(tables: &[Table]) -> f64 {
    tables.iter().map(|table| table.worst().2).fold(0.0, f64::max)
}

/// Largest relative error of the rows and columns of one generalised velocity.
pub fn of_velocity(tables: &[Table], name: &str) -> f64 {
    let mut most = 0.0_f64;
    for table in tables {
        for (i, row) in table.rows.iter().enumerate() {
            for (j, column) in table.columns.iter().enumerate() {
                if row.name == name || column.name == name {
                    most = most.max(table.error(i, j));
                }
            }
        }
    }
    most
}
