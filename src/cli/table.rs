//! Plain tables: columns as wide as their widest cell, numbers to the right, never wider than a page.

/// Width of a page (columns).
pub const PAGE: usize = 100;
/// Between two columns.
const GAP: &str = "  ";
/// Before every line.
const INDENT: &str = "  ";

/// Amounts (N, N m) below this are rounding.
const ROUNDING: f64 = 1e-9;

/// Where a column's cells stand.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Side {
    /// Text.
    Left,
    /// Numbers.
    Right,
}

/// A table under construction.
#[derive(Debug, Clone)]
pub struct Table {
    sides: Vec<Side>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// A table with these column heads.
    pub fn new(heads: &[(&str, Side)]) -> Self {
        Table {
            sides: heads.iter().map(|head| head.1).collect(),
            rows: vec![heads.iter().map(|head| head.0.to_owned()).collect()],
        }
    }

    /// Appends a row; missing cells stay empty.
    pub fn row(&mut self, cells: impl IntoIterator<Item = String>) {
        self.rows.push(cells.into_iter().take(self.sides.len()).collect());
    }

    /// True where no row was appended.
    pub fn is_empty(&self) -> bool {
        self.rows.len() < 2
    }

    /// Appends the table to `out`, a line per row; lines are cut at the page's edge.
    pub fn write(&self, out: &mut String) {
        let width = |column: usize| {
            self.rows.iter().filter_map(|row| row.get(column)).map(|cell| cell.chars().count()).max().unwrap_or(0)
        };
        let widths: Vec<usize> = (0..self.sides.len()).map(width).collect();
        for row in &self.rows {
            let mut line = String::from(INDENT);
            for (column, (side, width)) in self.sides.iter().zip(&widths).enumerate() {
                let cell = row.get(column).map_or("", String::as_str);
                if column > 0 {
                    line.push_str(GAP);
                }
                match side {
                    Side::Left => line.push_str(&format!("{cell:<width$}")),
                    Side::Right => line.push_str(&format!("{cell:>width$}")),
                }
            }
            push_line(out, line.trim_end());
        }
    }
}

/// Appends a line, cut at the page's edge.
pub fn push_line(out: &mut String, line: &str) {
    out.extend(line.chars().take(PAGE));
    out.push('\n');
}

/// Appends text broken at spaces so that it fits the page.
pub fn push_text(out: &mut String, indent: &str, text: &str) {
    let mut line = String::from(indent);
    for word in text.split_whitespace() {
        if line.len() > indent.len() && line.chars().count() + 1 + word.chars().count() > PAGE {
            push_line(out, &line);
            line.truncate(indent.len());
        }
        if line.len() > indent.len() {
            line.push(' ');
        }
        line.push_str(word);
    }
    push_line(out, line.trim_end());
}

/// A number with `digits` digits after the point, or in powers of ten where that says nothing.
pub fn number(value: f64, digits: usize) -> String {
    let smallest = 0.5 * 10f64.powi(-i32::try_from(digits).unwrap_or(0));
    if value != 0.0 && (value.abs() < smallest || value.abs() >= 1e7) {
        format!("{value:.1e}")
    } else {
        format!("{value:.digits$}")
    }
}

/// The same for a physical amount: what is only rounding reads as zero.
pub fn amount(value: f64, digits: usize) -> String {
    number(if value.abs() < ROUNDING { 0.0 } else { value }, digits)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_line_up_and_fit_the_page() {
        let mut table = Table::new(&[("name", Side::Left), ("N", Side::Right)]);
        table.row(["a".to_owned(), number(1.25, 1)]);
        table.row(["x".repeat(200), number(-100.0, 1)]);
        let mut out = String::new();
        table.write(&mut out);
        assert!(out.lines().all(|line| line.chars().count() <= PAGE));
        let mut table = Table::new(&[("name", Side::Left), ("N", Side::Right)]);
        table.row(["knee".to_owned(), number(1.5, 1)]);
        let mut out = String::new();
        table.write(&mut out);
        assert_eq!(out, "  name    N\n  knee  1.5\n");
    }

    #[test]
    fn small_numbers_are_not_shown_as_zero() {
        assert_eq!(number(0.0, 2), "0.00");
        assert_eq!(number(0.004, 2), "4.0e-3");
        assert_eq!(number(-12.345, 2), "-12.35");
        assert_eq!(number(3.2e-12, 3), "3.2e-12");
    }

    #[test]
    fn text_is_broken_at_spaces() {
        let mut out = String::new();
        push_text(&mut out, "  ", &"word ".repeat(60));
        assert!(out.lines().count() > 1 && out.lines().all(|line| line.len() <= PAGE && line.starts_with("  word")));
    }
}
