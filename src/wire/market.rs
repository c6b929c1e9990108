//! The assembled problem as text files in the Matrix Market exchange format, which general-purpose programs read.
//!
//! Source of the format: R. F. Boisvert, R. Pozo, K. Remington, "The Matrix Market Exchange Formats: Initial Design",
//! NISTIR 5935, National Institute of Standards and Technology, 1996. Sparse matrices are `coordinate`, vectors `array`;
//! indices count from 1.

use std::fmt::Write as _;

use schemars::JsonSchema;
use serde::Serialize;

use super::common::Format;
use super::number::Number;
use crate::conic::{RowName, SparseRows};
use crate::problem::question::Question;
use crate::reference::program::{Program, ProgramLevel};

/// The assembled problem as text files (`POST /v1/export`). All levels share the unknowns z and the files `A`, `b`, `G`, `h`, `q`;
/// level k makes `1/2 z'P_k z + q'z` as small as can be while `A z = b`, `h - G z` in the cones, and what the levels
/// before it own stays as they found it (see `names.json`).
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ExportAnswer")]
pub(super) struct ExportOut<'a> {
    /// Document format (no unit).
    format: Format,
    /// Version of the service that answered (no unit).
    version: &'static str,
    /// SHA-256 of the canonical request and the version: same fingerprint, same question (no unit).
    fingerprint: &'a str,
    /// Id of the model, carried loads included (no unit).
    model: &'a str,
    /// The files (no unit): `A.mtx`, `b.mtx`, `G.mtx`, `h.mtx`, `q.mtx`, one `P_priority_N.mtx` per priority,
    /// `P_tie_break.mtx`, and `names.json`. Empty where a number was not finite.
    files: Vec<FileOut>,
}

/// One file.
#[derive(Debug, Clone, Serialize, JsonSchema)]
#[schemars(rename = "ExportFile")]
struct FileOut {
    /// Its name (no unit).
    name: String,
    /// What it holds (no unit): Matrix Market exchange format, or JSON.
    text: String,
}

/// `names.json`: what rows and columns mean.
#[derive(Serialize)]
struct NamesOut<'a> {
    columns: Vec<ColumnOut<'a>>,
    equalities: Vec<RowOut<'a>>,
    inequalities: Vec<RowOut<'a>>,
    /// Rows of G in the nonnegative cone; they come first.
    nonnegative: usize,
    /// Rows of each second-order block of G after them: `s[0] >= |s[1..]|`.
    second_order: &'a [usize],
    levels: Vec<LevelOut>,
}

#[derive(Serialize)]
struct ColumnOut<'a> {
    name: &'a str,
    unit: &'a str,
    /// Physical value of a scaled 1 (in `unit`).
    scale: Number,
}

#[derive(Serialize)]
struct RowOut<'a> {
    group: &'a str,
    part: &'a str,
    unit: &'a str,
    scale: Number,
    physics: bool,
}

#[derive(Serialize)]
struct LevelOut {
    /// None for the tie-break.
    priority: Option<u32>,
    file: String,
    /// Zero-based columns that are the level's own: later levels hold them where this one left them.
    own: Vec<usize>,
}

/// The document.
pub(super) fn write(question: &Question, program: &Program, fingerprint: &str) -> Vec<u8> {
    let document = |files| ExportOut {
        format: Format::One,
        version: env!("CARGO_PKG_VERSION"),
        fingerprint,
        model: &question.model.id,
        files,
    };
    serde_json::to_vec(&document(files(program).unwrap_or_default())).unwrap_or_default()
}

/// All files; none where a number is not finite.
fn files(program: &Program) -> Option<Vec<FileOut>> {
    let n = program.columns.len();
    let mut files = vec![
        file("A.mtx", sparse("A: equalities A z = b", &program.equality)?),
        file("b.mtx", array("b", &program.equality_rhs)?),
        file("G.mtx", sparse("G: inequalities G z + s = h, s in the cones of names.json", &program.inequality)?),
        file("h.mtx", array("h", &program.inequality_rhs)?),
        file("q.mtx", array("q: linear cost, the same for every level", &vec![0.0; n])?),
    ];
    for level in &program.levels {
        files.push(file(&level_file(level), diagonal(n, &level.diagonal)?));
    }
    files.push(file("names.json", names(program)?));
    Some(files)
}

fn file(name: &str, text: String) -> FileOut {
    FileOut { name: name.to_string(), text }
}

fn level_file(level: &ProgramLevel) -> String {
    match level.priority {
        Some(priority) => format!("P_priority_{priority}.mtx"),
        None => "P_tie_break.mtx".to_string(),
    }
}

/// A sparse matrix. Numbers are written so that reading them gives the same doubles.
fn sparse(comment: &str, matrix: &SparseRows) -> Option<String> {
    let mut text = format!("%%MatrixMarket matrix coordinate real general\n% {comment}\n");
    let _ = writeln!(text, "{} {} {}", matrix.rows(), matrix.columns, matrix.value.len());
    for i in 0..matrix.rows() {
        for (j, value) in matrix.row(i) {
            let _ = writeln!(text, "{} {} {}", i + 1, j + 1, number(value)?);
        }
    }
    Some(text)
}

fn diagonal(n: usize, entries: &[(usize, f64)]) -> Option<String> {
    let mut text = String::from("%%MatrixMarket matrix coordinate real symmetric\n% P: quadratic cost 1/2 z'P z\n");
    let _ = writeln!(text, "{n} {n} {}", entries.len());
    for (i, value) in entries {
        let _ = writeln!(text, "{} {} {}", i + 1, i + 1, number(*value)?);
    }
    Some(text)
}

fn array(comment: &str, values: &[f64]) -> Option<String> {
    let mut text = format!("%%MatrixMarket matrix array real general\n% {comment}\n{} 1\n", values.len());
    for value in values {
        let _ = writeln!(text, "{}", number(*value)?);
    }
    Some(text)
}

fn number(value: f64) -> Option<String> {
    value.is_finite().then(|| format!("{value:e}"))
}

fn names(program: &Program) -> Option<String> {
    let document = NamesOut {
        columns: program
            .columns
            .iter()
            .map(|c| ColumnOut { name: &c.name, unit: c.unit, scale: Number(c.scale) })
            .collect(),
        equalities: program.equality_names.iter().map(RowOut::of).collect(),
        inequalities: program.inequality_names.iter().map(RowOut::of).collect(),
        nonnegative: program.nonnegative,
        second_order: &program.second_order,
        levels: program
            .levels
            .iter()
            .map(|level| LevelOut {
                priority: level.priority,
                file: level_file(level),
                own: level.diagonal.iter().map(|(i, _)| *i).collect(),
            })
            .collect(),
    };
    serde_json::to_string(&document).ok().map(|text| text + "\n")
}

impl<'a> RowOut<'a> {
    fn of(name: &'a RowName) -> Self {
        RowOut { group: &name.group, part: &name.part, unit: name.unit, scale: Number(name.scale), physics: name.physics }
    }
}
