//! Closed forms, fluids and units against published and independently computed values.
//!
//! Each table is a file of `data/` with its source in its head.

#![allow(
    clippy::indexing_slicing,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod field;
mod fit;
mod fluid;
mod images;
mod stehfest;
mod tables;
mod units;

/// Rows of a table; a cell that holds no number is `NaN`.
fn rows<const N: usize>(text: &str) -> Vec<[f64; N]> {
    let lines = text.lines().filter(|l| !l.starts_with('#'));
    lines
        .map(|line| {
            let cells: Vec<f64> = line
                .split(',')
                .map(|cell| cell.parse().unwrap_or(f64::NAN))
                .collect();
            cells.try_into().unwrap_or_else(|_| panic!("{line}"))
        })
        .collect()
}

/// Half a unit of the last digit in which a number is printed.
fn half_unit(printed: &str) -> f64 {
    let digits = printed.split_once('.').map_or(0, |(_, after)| after.len());
    0.5 * 10f64.powi(-i32::try_from(digits).unwrap())
}
