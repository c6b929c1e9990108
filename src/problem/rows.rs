//! Rows in physical units, and their way into the scaled hierarchy.

use crate::conic::{Column, Cone, ConicRows, ResidualRows, RowName};

/// One row `sum coefficient * unknown` in physical units.
pub type Entries = Vec<(usize, f64)>;

/// A row with a right side and a name: `entries . x` against `rhs`.
#[derive(Debug, Clone, PartialEq)]
pub struct PhysicalRow {
    /// Column and coefficient, physical units.
    pub entries: Entries,
    /// Right side, in the row's unit.
    pub rhs: f64,
    /// Part name within the group.
    pub part: String,
    /// Unit of the row.
    pub unit: &'static str,
}

/// Writes physical rows into scaled ones.
pub struct Scaler<'a> {
    /// Column scales.
    pub columns: &'a [Column],
}

impl Scaler<'_> {
    /// Largest scaled coefficient of the row, in the row's unit: dividing by it makes it 1.
    /// A row without coefficients gets 1.
    pub fn natural_scale(&self, row: &PhysicalRow) -> f64 {
        let largest = row.entries.iter().map(|&(c, v)| (v * self.columns[c].scale).abs()).fold(0.0, f64::max);
        if largest > 0.0 { largest } else { 1.0 }
    }

    fn scaled<'r>(&'r self, row: &'r PhysicalRow, scale: f64) -> impl Iterator<Item = (usize, f64)> + 'r {
        row.entries.iter().map(move |&(c, v)| (c, v * self.columns[c].scale / scale))
    }

    /// Adds a cone block `s = rhs - entries . x in cone`, every row divided by `scale`.
    pub fn push_cone(&self, out: &mut ConicRows, cone: Cone, group: &str, physics: bool, scale: f64, rows: &[PhysicalRow]) {
        debug_assert_eq!(cone.dimension(), rows.len());
        if rows.is_empty() {
            return;
        }
        for row in rows {
            out.matrix.push(self.scaled(row, scale));
            out.rhs.push(row.rhs / scale);
            out.names.push(RowName { group: group.into(), part: row.part.clone(), unit: row.unit, scale, physics });
        }
        out.cones.push(cone);
    }

    /// Adds rows one by one, each with its natural scale: `cone` of dimension one applied to each.
    pub fn push_each(&self, out: &mut ConicRows, equality: bool, group: &str, physics: bool, rows: &[PhysicalRow]) {
        for row in rows {
            let scale = self.natural_scale(row);
            let cone = if equality { Cone::Zero(1) } else { Cone::Nonnegative(1) };
            self.push_cone(out, cone, group, physics, scale, std::slice::from_ref(row));
        }
    }

    /// Adds a residual row with cost `weight * (residual / user_scale)^2`, physical. The row is divided by its natural
    /// scale and the weight multiplied to match.
    pub fn push_residual(&self, out: &mut ResidualRows, group: &str, weight: f64, user_scale: f64, row: &PhysicalRow) {
        let scale = self.natural_scale(row);
        out.matrix.push(self.scaled(row, scale));
        out.rhs.push(row.rhs / scale);
        let ratio = scale / user_scale;
        out.weight.push(weight * ratio * ratio);
        out.names.push(RowName { group: group.into(), part: row.part.clone(), unit: row.unit, scale, physics: false });
    }
}

/// Neighbouring blocks of the same simple cone become one, so that the engine sees few cones.
pub fn merge_cones(rows: &mut ConicRows) {
    let mut merged: Vec<Cone> = Vec::with_capacity(rows.cones.len());
    for &cone in &rows.cones {
        match (merged.last_mut(), cone) {
            (Some(Cone::Zero(n)), Cone::Zero(m)) | (Some(Cone::Nonnegative(n)), Cone::Nonnegative(m)) => *n += m,
            _ => merged.push(cone),
        }
    }
    rows.cones = merged;
}
