//! Statements over many rows at once. The price of a statement is the same for one row and for hundreds, so
//! rows go in a few fixed lengths, each prepared once.

use sqlx::{AssertSqlSafe, SqlSafeStr, SqlStr};

/// Rows a statement takes, longest first; the last is one, so that any count can be made up.
/// 512 rows of 10 columns stay well below SQLite's 32 766 parameters.
const LENGTHS: [usize; 4] = [512, 64, 8, 1];

/// One statement in each of the lengths.
#[derive(Debug)]
pub(super) struct ManyRows {
    shapes: Vec<(usize, SqlStr)>,
}

impl ManyRows {
    /// `head`, then a list of rows of `columns` parameters each, then `tail`. All of the text is ours:
    /// nothing from outside gets here.
    pub(super) fn new(head: &'static str, columns: usize, tail: &'static str) -> Self {
        let row = format!("({})", vec!["?"; columns].join(","));
        let shapes = LENGTHS
            .iter()
            .map(|&rows| {
                let list = vec![row.as_str(); rows].join(",");
                let sql = AssertSqlSafe(format!("{head} {list} {tail}"));
                (rows, sql.into_sql_str())
            })
            .collect();
        Self { shapes }
    }

    /// Cuts `rows` into pieces, each with the statement of its length.
    pub(super) fn pieces<'r, T>(&self, rows: &'r [T]) -> Vec<(SqlStr, &'r [T])> {
        let mut rest = rows;
        let mut pieces = Vec::new();
        for (length, sql) in &self.shapes {
            while let Some((head, tail)) = rest.split_at_checked(*length) {
                pieces.push((sql.clone(), head));
                rest = tail;
            }
        }
        pieces
    }

    #[cfg(test)]
    pub(super) fn statements(&self) -> impl Iterator<Item = SqlStr> {
        self.shapes.iter().map(|(_, sql)| sql.clone())
    }
}

#[cfg(test)]
mod tests {
    use super::ManyRows;

    #[test]
    fn pieces_cover_every_row_once_in_order() {
        let many = ManyRows::new("values", 2, "");
        for count in [0, 1, 7, 8, 65, 511, 512, 1000, 1537] {
            let rows: Vec<usize> = (0..count).collect();
            let pieces = many.pieces(&rows);
            let joined: Vec<usize> = pieces.iter().flat_map(|(_, p)| p.iter().copied()).collect();
            assert_eq!(joined, rows);
            for (sql, piece) in pieces {
                assert_eq!(sql.as_str().matches('?').count(), 2 * piece.len());
            }
        }
    }
}
