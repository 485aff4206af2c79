//! A table written row by row: as CSV, or as one JSON object a line.

use std::io::Write;

use anyhow::Result;
use serde_json::{Map, Number, Value};

/// One value of a row.
#[derive(Debug, Clone, PartialEq)]
pub(super) enum Cell {
    Text(String),
    Number(f64),
    Count(i64),
    Truth(bool),
    None,
}

impl<T: Into<Cell>> From<Option<T>> for Cell {
    fn from(value: Option<T>) -> Self {
        value.map_or(Self::None, Into::into)
    }
}

impl From<String> for Cell {
    fn from(text: String) -> Self {
        Self::Text(text)
    }
}

impl From<&str> for Cell {
    fn from(text: &str) -> Self {
        Self::Text(text.to_owned())
    }
}

impl From<f64> for Cell {
    fn from(number: f64) -> Self {
        Self::Number(number)
    }
}

impl From<i64> for Cell {
    fn from(count: i64) -> Self {
        Self::Count(count)
    }
}

impl From<u32> for Cell {
    fn from(count: u32) -> Self {
        Self::Count(count.into())
    }
}

impl From<bool> for Cell {
    fn from(truth: bool) -> Self {
        Self::Truth(truth)
    }
}

/// Where the rows go.
pub(super) enum Sheet<W: Write, const N: usize> {
    Csv(Box<csv::Writer<W>>),
    Lines(W, [&'static str; N]),
}

impl<W: Write, const N: usize> Sheet<W, N> {
    /// Begins a table with these columns; a CSV gets them as its header.
    pub(super) fn begin(out: W, columns: [&'static str; N], json: bool) -> Result<Self> {
        if json {
            return Ok(Self::Lines(out, columns));
        }
        let mut csv = csv::Writer::from_writer(out);
        csv.write_record(columns)?;
        Ok(Self::Csv(Box::new(csv)))
    }

    pub(super) fn row(&mut self, cells: [Cell; N]) -> Result<()> {
        match self {
            Self::Csv(csv) => csv.write_record(cells.into_iter().map(text))?,
            Self::Lines(out, columns) => {
                let row: Map<String, Value> = columns
                    .iter()
                    .map(|name| (*name).to_owned())
                    .zip(cells.into_iter().map(value))
                    .collect();
                serde_json::to_writer(&mut *out, &row)?;
                out.write_all(b"\n")?;
            }
        }
        Ok(())
    }

    pub(super) fn finish(&mut self) -> Result<()> {
        match self {
            Self::Csv(csv) => csv.flush()?,
            Self::Lines(out, _) => out.flush()?,
        }
        Ok(())
    }
}

/// Numbers in full, so that they read back the same.
fn text(cell: Cell) -> String {
    match cell {
        Cell::Text(text) => text,
        Cell::Number(x) if x != 0.0 && !(1e-4..1e15).contains(&x.abs()) => format!("{x:e}"),
        Cell::Number(x) => x.to_string(),
        Cell::Count(n) => n.to_string(),
        Cell::Truth(truth) => if truth { "yes" } else { "no" }.to_owned(),
        Cell::None => String::new(),
    }
}

fn value(cell: Cell) -> Value {
    match cell {
        Cell::Text(text) => Value::String(text),
        Cell::Number(x) => Number::from_f64(x).map_or(Value::Null, Value::Number),
        Cell::Count(n) => n.into(),
        Cell::Truth(truth) => truth.into(),
        Cell::None => Value::Null,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn numbers_read_back_the_same(x in prop::num::f64::NORMAL | prop::num::f64::ZERO) {
            prop_assert_eq!(text(Cell::Number(x)).parse::<f64>().unwrap(), x);
        }
    }

    #[test]
    fn both_forms_hold_the_same() {
        for (json, expected) in [
            (false, "a,b,c\n\"x,y\",1e-7,\n"),
            (true, "{\"a\":\"x,y\",\"b\":1e-7,\"c\":null}\n"),
        ] {
            let mut out = Vec::new();
            let mut sheet = Sheet::begin(&mut out, ["a", "b", "c"], json).unwrap();
            sheet.row(["x,y".into(), 1e-7.into(), Cell::None]).unwrap();
            sheet.finish().unwrap();
            drop(sheet);
            assert_eq!(String::from_utf8(out).unwrap(), expected);
        }
    }
}
