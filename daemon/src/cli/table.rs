//! Aligned tables for people.

/// How a column stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Align {
    /// Words.
    Left,
    /// Numbers.
    Right,
}

/// A table with a heading a column.
#[derive(Debug, Clone)]
pub struct Table {
    heads: Vec<String>,
    aligns: Vec<Align>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// A table of these columns.
    #[must_use]
    pub fn new(columns: &[(&str, Align)]) -> Self {
        Self {
            heads: columns.iter().map(|(head, _)| (*head).to_owned()).collect(),
            aligns: columns.iter().map(|(_, align)| *align).collect(),
            rows: Vec::new(),
        }
    }

    /// Adds a row; cells beyond the columns are dropped, those that lack are empty.
    pub fn row(&mut self, cells: impl IntoIterator<Item = impl Into<String>>) {
        self.rows.push(cells.into_iter().map(Into::into).collect());
    }

    /// Whether there is no row.
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.rows.is_empty()
    }

    /// The text, every line ending with a line end, each starting with `indent` blanks.
    #[must_use]
    pub fn text(&self, indent: usize) -> String {
        let all = || std::iter::once(&self.heads).chain(&self.rows);
        let cell = |row: &Vec<String>, column: usize| row.get(column).cloned().unwrap_or_default();
        let width = |column: usize| {
            all()
                .map(|row| cell(row, column).chars().count())
                .max()
                .unwrap_or(0)
        };
        let widths: Vec<usize> = (0..self.heads.len()).map(width).collect();
        let mut text = String::new();
        for row in all() {
            let mut line = " ".repeat(indent);
            for (column, (width, align)) in widths.iter().zip(&self.aligns).enumerate() {
                let gap = if column == 0 { "" } else { "  " };
                let cell = cell(row, column);
                let blanks = " ".repeat(width.saturating_sub(cell.chars().count()));
                line += gap;
                match align {
                    Align::Left => line += &format!("{cell}{blanks}"),
                    Align::Right => line += &format!("{blanks}{cell}"),
                }
            }
            text += line.trim_end();
            text.push('\n');
        }
        text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_line_up() {
        let mut table = Table::new(&[("well", Align::Left), ("rate m3/d", Align::Right)]);
        table.row(["I-1", "900"]);
        table.row(["Länger", "12.5"]);
        assert_eq!(
            table.text(2),
            "  well    rate m3/d\n  I-1           900\n  Länger       12.5\n"
        );
    }
}
