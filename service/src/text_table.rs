//! Tables of text for a terminal.

use std::fmt;

/// Where the cells of a column stand.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Align {
    Left,
    Right,
}

/// A table whose columns are as wide as their widest cell.
#[derive(Debug, Clone)]
pub(crate) struct Table {
    aligns: Vec<Align>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// A table with a head.
    pub(crate) fn new(head: &[(&str, Align)]) -> Self {
        Self {
            aligns: head.iter().map(|(_, align)| *align).collect(),
            rows: vec![head.iter().map(|(title, _)| (*title).to_owned()).collect()],
        }
    }

    /// Adds a row.
    pub(crate) fn row(&mut self, cells: Vec<String>) {
        self.rows.push(cells);
    }
}

impl fmt::Display for Table {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        let widths: Vec<usize> = (0..self.aligns.len())
            .map(|column| self.rows.iter().map(|row| width(row, column)).max().unwrap_or(0))
            .collect();
        for row in &self.rows {
            let mut line = String::from(" ");
            for (column, align) in self.aligns.iter().enumerate() {
                let padding = " ".repeat(widths[column] - width(row, column));
                let cell = row.get(column).map_or("", String::as_str);
                line.push(' ');
                match align {
                    Align::Left => line.extend([cell, &padding]),
                    Align::Right => line.extend([padding.as_str(), cell]),
                }
                line.push(' ');
            }
            writeln!(f, "{}", line.trim_end())?;
        }
        Ok(())
    }
}

fn width(row: &[String], column: usize) -> usize {
    row.get(column).map_or(0, |cell| cell.chars().count())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_are_as_wide_as_their_widest_cell() {
        let mut table = Table::new(&[("name", Align::Left), ("n", Align::Right)]);
        table.row(vec!["é".into(), "100".into()]);
        assert_eq!(table.to_string(), "  name    n\n  é     100\n");
    }
}
