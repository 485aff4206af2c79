//! A plan of rates from CSV: long (`time,well,rate`) or wide (`time`, then a column a well).

use std::path::Path;

use borewake_model::forecast::RatePlan;
use borewake_model::units::{Dimension, UnitConversion, UnitSystem, nearest};
use thiserror::Error;

use crate::record::Stamp;

/// A plan that cannot be used.
#[derive(Debug, Error)]
pub(super) enum PlanError {
    /// The file cannot be read.
    #[error("{path}: {source}")]
    Io {
        /// The file.
        path: String,
        /// What the system said.
        source: std::io::Error,
    },
    /// Something in it is wrong.
    #[error("{path} line {line}: {what}; {mend}")]
    Wrong {
        /// The file.
        path: String,
        /// Line, from 1.
        line: usize,
        /// What is wrong.
        what: String,
        /// What to write instead.
        mend: String,
    },
}

/// What a column of a wide plan is, or the rate of a long one.
struct Column {
    well: usize,
    unit: UnitConversion,
}

/// How a plan's columns are read.
enum Form {
    Long {
        well: usize,
        rate: usize,
        unit: UnitConversion,
    },
    Wide(Vec<Option<Column>>),
}

/// Reads a plan. Rates without a unit are in the site's own; an empty cell of a wide plan changes nothing.
pub(super) fn read(
    path: &Path,
    wells: &[String],
    units: UnitSystem,
) -> Result<RatePlan, PlanError> {
    let text = std::fs::read_to_string(path).map_err(|source| PlanError::Io {
        path: path.display().to_string(),
        source,
    })?;
    parse(&path.display().to_string(), &text, wells, units)
}

fn parse(
    path: &str,
    text: &str,
    wells: &[String],
    units: UnitSystem,
) -> Result<RatePlan, PlanError> {
    let wrong = |line: usize, what: String, mend: &str| PlanError::Wrong {
        path: path.to_owned(),
        line,
        what,
        mend: mend.to_owned(),
    };
    let mut reader = csv::ReaderBuilder::new()
        .has_headers(false)
        .flexible(true)
        .trim(csv::Trim::All)
        .comment(Some(b'#'))
        .from_reader(text.as_bytes());
    let mut rows = Vec::new();
    for row in reader.records() {
        let row = row.map_err(|e| {
            let line = e.position().map_or(0, csv::Position::line);
            wrong(
                usize::try_from(line).unwrap_or(0),
                e.to_string(),
                "write plain CSV",
            )
        })?;
        let line = row.position().map_or(0, csv::Position::line);
        rows.push((usize::try_from(line).unwrap_or(0), row));
    }
    let mut rows = rows.into_iter();
    let Some((head_line, head)) = rows.next() else {
        return Err(wrong(
            1,
            "the plan is empty".to_owned(),
            "its first line is time,well,rate, or time and then a column a well",
        ));
    };
    let form = form(&head, wells, units).map_err(|(what, mend)| wrong(head_line, what, &mend))?;
    let mut plan = RatePlan {
        wells: vec![Vec::new(); wells.len()],
    };
    for (line, row) in rows {
        let time = row.get(0).unwrap_or("");
        let at = Stamp::parse(time).map_err(|_| {
            wrong(
                line,
                format!("{time:?} is no instant"),
                "write it with its zone, as 2031-03-01T00:00:00Z",
            )
        })?;
        let mut cells: Vec<(usize, &str, UnitConversion)> = Vec::new();
        match &form {
            Form::Long { well, rate, unit } => {
                let name = row.get(*well).unwrap_or("");
                let index = named(name, wells).map_err(|(what, mend)| wrong(line, what, &mend))?;
                cells.push((index, row.get(*rate).unwrap_or(""), *unit));
            }
            Form::Wide(columns) => {
                for (at, column) in columns.iter().enumerate() {
                    if let (Some(column), Some(cell)) = (column, row.get(at))
                        && !cell.is_empty()
                    {
                        cells.push((column.well, cell, column.unit));
                    }
                }
            }
        }
        for (well, cell, unit) in cells {
            let rate = value(cell, unit).ok_or_else(|| {
                wrong(
                    line,
                    format!("{cell:?} is no rate"),
                    "write a number, or one with its unit such as 350 m3/d; injection is positive",
                )
            })?;
            let Some(steps) = plan.wells.get_mut(well) else {
                continue;
            };
            if steps.last().is_some_and(|(last, _)| *last >= at.seconds()) {
                return Err(wrong(
                    line,
                    format!("{time} does not come after the well's row before"),
                    "put rows in order of time",
                ));
            }
            steps.push((at.seconds(), rate));
        }
    }
    Ok(plan)
}

type Mistake = (String, String);

fn form(head: &csv::StringRecord, wells: &[String], units: UnitSystem) -> Result<Form, Mistake> {
    let cells: Vec<(String, Option<String>)> = head.iter().map(split).collect();
    let at = |wanted: &str| {
        cells
            .iter()
            .position(|(name, _)| name.eq_ignore_ascii_case(wanted))
    };
    if at("time") != Some(0) {
        return Err((
            "the first column is not called time".to_owned(),
            "the first line is time,well,rate, or time and then a column a well".to_owned(),
        ));
    }
    let unit = |unit: &Option<String>| {
        let unit = unit.as_deref().unwrap_or(units.unit(Dimension::Rate));
        Dimension::Rate
            .conversion(unit)
            .map_err(|e| (e.to_string(), "write such as rate [m3/d]".to_owned()))
    };
    if let (Some(well), Some(rate)) = (at("well"), at("rate")) {
        let (_, of_rate) = cells.get(rate).cloned().unwrap_or_default();
        return Ok(Form::Long {
            well,
            rate,
            unit: unit(&of_rate)?,
        });
    }
    let mut columns = vec![None];
    for (name, of_column) in cells.iter().skip(1) {
        columns.push(Some(Column {
            well: named(name, wells)?,
            unit: unit(of_column)?,
        }));
    }
    Ok(Form::Wide(columns))
}

/// A heading's name and unit: `Q-1 [m3/d]`, `Q-1 (m3/d)`.
fn split(cell: &str) -> (String, Option<String>) {
    for (open, close) in [('[', ']'), ('(', ')')] {
        if let Some((name, rest)) = cell.split_once(open)
            && let Some(unit) = rest.strip_suffix(close)
        {
            return (name.trim().to_owned(), Some(unit.trim().to_owned()));
        }
    }
    (cell.to_owned(), None)
}

fn named(name: &str, wells: &[String]) -> Result<usize, Mistake> {
    if let Some(index) = wells.iter().position(|w| w == name) {
        return Ok(index);
    }
    let names: Vec<&str> = wells.iter().map(String::as_str).collect();
    let mend = match nearest(name, names.iter().copied()) {
        Some(near) => format!("did you mean {near}?"),
        None => format!("the wells are {}", names.join(", ")),
    };
    Err((format!("there is no well {name:?}"), mend))
}

/// A plain number in the column's unit, or a quantity with its own.
fn value(cell: &str, unit: UnitConversion) -> Option<f64> {
    let si = match cell.parse::<f64>() {
        Ok(number) => unit.to_si(number),
        Err(_) => Dimension::Rate.parse(cell).ok()?,
    };
    si.is_finite().then_some(si)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn wells() -> Vec<String> {
        vec!["Q-1".to_owned(), "Q-2".to_owned()]
    }

    fn plan(text: &str) -> Result<RatePlan, String> {
        parse("plan.csv", text, &wells(), UnitSystem::Metric).map_err(|e| e.to_string())
    }

    #[test]
    fn long_and_wide_say_the_same() {
        let long = plan(
            "time,well,rate\n2031-03-01T00:00:00Z,Q-1,86400\n2031-03-01T00:00:00Z,Q-2,0\n\
             2031-03-02T01:00:00+01:00,Q-1,-1 m3/s\n",
        );
        let wide = plan(
            "time,Q-1 [m3/d],Q-2 (m3/s)\n2031-03-01T00:00:00Z,86400,0\n# a remark\n2031-03-02T00:00:00Z,-86400,\n",
        );
        let first = Stamp::parse("2031-03-01T00:00:00Z").unwrap().seconds();
        let wells = vec![
            vec![(first, 1.0), (first + 86_400.0, -1.0)],
            vec![(first, 0.0)],
        ];
        assert_eq!(
            long.unwrap(),
            RatePlan {
                wells: wells.clone()
            }
        );
        assert_eq!(wide.unwrap(), RatePlan { wells });
    }

    #[test]
    fn mistakes_are_told_with_line_value_and_mend() {
        for (text, told) in [
            ("", "line 1: the plan is empty"),
            ("well,rate\n", "line 1: the first column is not called time"),
            (
                "time,Q-3\n",
                "line 1: there is no well \"Q-3\"; did you mean Q-",
            ),
            ("time,Q-1 [psi]\n", "line 1: "),
            (
                "time,Q-1\n2031-03-01,5\n",
                "line 2: \"2031-03-01\" is no instant",
            ),
            (
                "time,Q-1\n2031-03-01T00:00:00Z,much\n",
                "line 2: \"much\" is no rate",
            ),
            (
                "time,Q-1\n2031-03-01T00:00:00Z,5\n2031-03-01T00:00:00Z,6\n",
                "line 3: 2031-03-01T00:00:00Z does not come after",
            ),
        ] {
            let found = plan(text).unwrap_err();
            assert!(found.contains(told), "{found}");
        }
    }
}
