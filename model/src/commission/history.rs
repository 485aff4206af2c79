//! History as one whitened regression: readings less prediction beside all columns.

#![expect(
    clippy::indexing_slicing,
    reason = "rows and columns are counted by the same code that lays them out"
)]

use nalgebra::{Cholesky, DMatrix, DVector, Dyn};

use crate::ModelError;
use crate::block::Block;
use crate::expect::columns::Columns;
use crate::expect::whitener::Whitener;
use crate::weigh::barrier::Images;

/// What a history keeps beside its columns.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Keep {
    /// Nothing.
    Columns,
    /// What undeclared barriers are made of, so that they can be looked at.
    Means,
}

/// Raw columns of the whole history.
#[derive(Debug, Clone)]
pub(crate) struct History {
    /// Readings less prediction and reference, then the columns (blocks times gauges, by 1 + columns).
    pub(crate) raw: DMatrix<f64>,
    /// Number of gauges.
    pub(crate) gauges: usize,
    /// Block, well and size of each jump of a meter's error; two columns each, at the end.
    pub(crate) renewals: Vec<(usize, usize, f64)>,
    /// Rows without a reading, and those set aside; ascending.
    pub(crate) missing: Vec<usize>,
    /// Rows set aside, with what stood there.
    pub(crate) aside: Vec<(usize, f64)>,
    /// Response of each pair in each block \[Pa\] (gauge by well, row-major by gauge; by blocks).
    pub(crate) pairs: DMatrix<f64>,
    /// Reference subtracted from each gauge \[Pa\].
    pub(crate) reference: Vec<f64>,
    /// Spread of each pair's response \[Pa\] (gauge by well, row-major by gauge).
    pub(crate) pair_spread: Vec<f64>,
    /// Signatures of undeclared barriers (rows by lines); without columns where none were asked for.
    lines: DMatrix<f64>,
    /// What lines are made of: means of the unit-port states by class, and the gauges' classes, of every block.
    seen: Vec<(Vec<DMatrix<f64>>, Vec<usize>)>,
    /// Columns at the very end that are barriers taken in.
    taken: usize,
}

impl History {
    /// Runs the columns over the history.
    ///
    /// # Errors
    /// [`ModelError`] where a block does not fit.
    pub(crate) fn run(
        columns: &mut Columns,
        history: &[Block],
        keep: Keep,
    ) -> Result<Self, ModelError> {
        let (gauges, wells) = (columns.frame.gauges, columns.frame.wells);
        let mut memory = columns.start();
        let fixed = columns.len();
        let rows = history.len() * gauges;
        let mut raw = DMatrix::zeros(rows, 1 + fixed);
        let mut missing = Vec::new();
        let mut renewals = Vec::new();
        let mut seen = Vec::new();
        let mut pairs = DMatrix::zeros(gauges * wells, history.len());
        for (index, block) in history.iter().enumerate() {
            let sampled = columns.sample(block)?;
            let step = columns.step(&mut memory, &sampled)?;
            let width = 1 + fixed + step.epochs.ncols();
            if raw.ncols() < width {
                raw = raw.resize_horizontally(width, 0.0);
            }
            renewals.extend(
                step.renewals
                    .iter()
                    .map(|&(well, size)| (index, well, size)),
            );
            let at = index * gauges;
            if keep == Keep::Means {
                seen.push((step.means.clone(), sampled.class.clone()));
            }
            raw.view_mut((at, 1), (gauges, fixed))
                .copy_from(&step.fixed);
            raw.view_mut((at, 1 + fixed), (gauges, step.epochs.ncols()))
                .copy_from(&step.epochs);
            for gauge in 0..gauges {
                match block.gauges.get(gauge).and_then(Option::as_ref) {
                    Some(read) => raw[(at + gauge, 0)] = read.mean - step.base[gauge],
                    None => missing.push(at + gauge),
                }
                for well in 0..wells {
                    pairs[(gauge * wells + well, index)] = step.pairs[(gauge, well)];
                }
            }
        }
        let width = raw.ncols() + 2 * renewals.len();
        let mut raw = raw.resize_horizontally(width, 0.0);
        let mut reference = Vec::with_capacity(gauges);
        for gauge in 0..gauges {
            let seen: Vec<f64> = (0..history.len())
                .map(|b| b * gauges + gauge)
                .filter(|row| missing.binary_search(row).is_err())
                .map(|row| raw[(row, 0)])
                .collect();
            if seen.is_empty() {
                return Err(ModelError::History(format!(
                    "gauge {gauge} has no reading in the whole history"
                )));
            }
            let middle = median(seen);
            reference.push(middle);
            let rows: Vec<usize> = (0..history.len()).map(|b| b * gauges + gauge).collect();
            for &row in &rows {
                raw[(row, 0)] -= middle;
            }
            bridge(&mut raw, &rows, &missing);
        }
        let pair_spread = pairs.row_iter().map(|r| r.variance().sqrt()).collect();
        Ok(Self {
            raw,
            gauges,
            renewals,
            missing,
            aside: Vec::new(),
            pairs,
            reference,
            pair_spread,
            lines: DMatrix::zeros(rows, 0),
            seen,
            taken: 0,
        })
    }

    /// Sets rows aside as if they had not been read, in place of those set aside before; they must be filled then.
    pub(crate) fn set_aside(&mut self, rows: &[usize]) {
        for (row, was) in std::mem::take(&mut self.aside) {
            self.raw[(row, 0)] = was;
            self.missing.retain(|&m| m != row);
        }
        for &row in rows {
            if let Err(at) = self.missing.binary_search(&row) {
                self.aside.push((row, self.raw[(row, 0)]));
                self.missing.insert(at, row);
            }
        }
    }

    /// Whether a row holds a reading that was not set aside.
    pub(crate) fn was_read(&self, row: usize) -> bool {
        self.missing.binary_search(&row).is_err()
    }

    /// Whether nothing was read at a row.
    pub(crate) fn absent(&self, row: usize) -> bool {
        !self.was_read(row) && self.aside.binary_search_by_key(&row, |a| a.0).is_err()
    }

    /// What the described ground makes felt at a row \[Pa\].
    pub(crate) fn felt(&self, row: usize) -> f64 {
        let wells = self.pairs.nrows() / self.gauges.max(1);
        let (block, gauge) = (row / self.gauges, row % self.gauges);
        (0..wells)
            .map(|well| self.pairs[(gauge * wells + well, block)])
            .sum()
    }

    /// Replaces the barriers looked at; the history must have kept its means.
    pub(crate) fn look_at(&mut self, columns: &Columns, images: &Images) {
        self.lines = DMatrix::zeros(self.raw.nrows(), images.lines());
        for (index, (means, class)) in self.seen.iter().enumerate() {
            let raw = images.raw(&columns.frame.modal, means, class);
            self.lines
                .rows_mut(index * self.gauges, self.gauges)
                .copy_from(&raw);
        }
    }

    /// Takes a barrier in as a column at the end, scaled.
    pub(crate) fn take(&mut self, line: usize, scale: f64) {
        if line < self.lines.ncols() {
            let width = self.raw.ncols();
            let raw = std::mem::replace(&mut self.raw, DMatrix::zeros(0, 0));
            self.raw = raw.resize_horizontally(width + 1, 0.0);
            self.raw
                .set_column(width, &(self.lines.column(line) * scale));
            self.taken += 1;
        }
    }

    /// Number of columns after those of the rate epochs: jumps of meters' errors, and barriers taken in.
    pub(crate) fn tail(&self) -> usize {
        2 * self.renewals.len() + self.taken
    }

    /// Whitened signatures of undeclared barriers (rows by lines).
    pub(crate) fn whiten_lines(&self, whitener: &Whitener) -> DMatrix<f64> {
        self.whitened(whitener, &self.lines, |_, _| {})
    }

    /// Whitens rows block by block; `before` may touch the filter's states ahead of each block, by order.
    fn whitened(
        &self,
        whitener: &Whitener,
        raw: &DMatrix<f64>,
        mut before: impl FnMut(usize, &mut DMatrix<f64>),
    ) -> DMatrix<f64> {
        let mut state = DMatrix::zeros(whitener.states(), raw.ncols());
        let mut rows = DMatrix::zeros(raw.nrows(), raw.ncols());
        for at in (0..raw.nrows()).step_by(self.gauges) {
            before(at / self.gauges, &mut state);
            let block = raw.rows(at, self.gauges).into_owned();
            rows.rows_mut(at, self.gauges)
                .copy_from(&whitener.step(&mut state, &block));
        }
        rows
    }

    /// Fills rows without a reading with what the coefficients say, and with what they leave of the nearest readings
    /// before and after: a jump to the bare prediction and back would pass for an event.
    pub(crate) fn fill(&mut self, coefficients: &DVector<f64>) {
        // A barrier taken in a round before may not stand here.
        let held = self.raw.ncols() - 1;
        let said = |raw: &DMatrix<f64>, row: usize| -> f64 {
            let columns = coefficients.iter().enumerate().take(held);
            columns.map(|(c, by)| raw[(row, c + 1)] * by).sum()
        };
        for index in 0..self.missing.len() {
            let row = self.missing[index];
            let seen = |row: &usize| self.missing.binary_search(row).is_err();
            let before = (0..row).rev().skip(self.gauges - 1);
            let before = before.step_by(self.gauges).find(seen);
            let after = (row..self.raw.nrows()).step_by(self.gauges).find(seen);
            let left = |at: usize| self.raw[(at, 0)] - said(&self.raw, at);
            let between = match (before, after) {
                (Some(a), Some(b)) => {
                    let share = (row - a) as f64 / (b - a) as f64;
                    left(a) + share * (left(b) - left(a))
                }
                (Some(a), None) => left(a),
                (None, Some(b)) => left(b),
                (None, None) => 0.0,
            };
            self.raw[(row, 0)] = said(&self.raw, row) + between;
        }
    }

    /// The same history with some columns only; the rest are taken off the readings as `coefficients` say.
    pub(crate) fn part(&self, kept: &[usize], coefficients: &DVector<f64>) -> Self {
        let mut rest = coefficients.clone();
        for &column in kept {
            rest[column] = 0.0;
        }
        let mut raw = DMatrix::zeros(self.raw.nrows(), 1 + kept.len());
        let said = self.raw.columns(1, rest.len()) * &rest;
        raw.set_column(0, &(self.raw.column(0) - said));
        for (at, &column) in kept.iter().enumerate() {
            raw.set_column(1 + at, &self.raw.column(1 + column));
        }
        Self {
            raw,
            gauges: self.gauges,
            renewals: self.renewals.clone(),
            missing: self.missing.clone(),
            aside: self.aside.clone(),
            pairs: DMatrix::zeros(0, 0),
            reference: self.reference.clone(),
            pair_spread: self.pair_spread.clone(),
            lines: DMatrix::zeros(self.raw.nrows(), 0),
            seen: Vec::new(),
            taken: self.taken,
        }
    }

    /// Whitens everything.
    pub(crate) fn whiten(&self, whitener: &Whitener) -> Regression {
        let rows = self.whitened(whitener, &self.raw, |index, state| {
            for (column, &(block, well, size)) in self.renewals.iter().enumerate() {
                let first = self.raw.ncols() - self.tail() + 2 * column;
                if block == index {
                    whitener.renew(state, first, well, size, true);
                }
                if block + 1 == index {
                    whitener.renew(state, first + 1, well, size, false);
                }
            }
        });
        Regression::of(rows)
    }
}

/// A whitened regression by its sums.
#[derive(Debug, Clone)]
pub(crate) struct Regression {
    /// Whitened readings, then columns.
    pub(crate) rows: DMatrix<f64>,
    /// `e'e`.
    pub(crate) square: f64,
    /// `W'e`.
    pub(crate) z: DVector<f64>,
    /// `W'W`.
    pub(crate) gram: DMatrix<f64>,
}

/// A regression solved under prior standard deviations.
#[derive(Debug, Clone)]
pub(crate) struct Solved {
    /// Posterior mean of the coefficients.
    pub(crate) mean: DVector<f64>,
    /// Their covariance.
    pub(crate) factor: Cholesky<f64, Dyn>,
    /// Log marginal likelihood of the readings, up to a constant, but for the filter's share.
    pub(crate) log_likelihood: f64,
}

impl Regression {
    /// Sums of whitened rows.
    pub(crate) fn of(rows: DMatrix<f64>) -> Self {
        let gram = rows.transpose() * &rows;
        let width = gram.ncols() - 1;
        Self {
            square: gram[(0, 0)],
            z: gram.view((1, 0), (width, 1)).column(0).into_owned(),
            gram: gram.view((1, 1), (width, width)).into_owned(),
            rows,
        }
    }

    /// Solves with prior mean `centre` and prior standard deviation `spread` of each coefficient.
    ///
    /// # Errors
    /// [`ModelError::NotPositive`] where the columns make no positive definite matrix.
    pub(crate) fn solve(
        &self,
        spread: &DVector<f64>,
        centre: &DVector<f64>,
    ) -> Result<Solved, ModelError> {
        let mut r = self.gram.clone();
        let mut z = self.z.clone();
        let (mut square, mut log_prior) = (self.square, 0.0);
        for (index, sd) in spread.iter().enumerate() {
            let precision = 1.0 / (sd * sd);
            r[(index, index)] += precision;
            z[index] += precision * centre[index];
            square += precision * centre[index] * centre[index];
            log_prior -= sd.ln();
        }
        let factor = Cholesky::new(r).ok_or(ModelError::NotPositive {
            what: "the matrix of the nuisances",
        })?;
        let mean = factor.solve(&z);
        let log_determinant: f64 = factor.l_dirty().diagonal().map(f64::ln).sum();
        let log_likelihood = -0.5 * (square - z.dot(&mean)) - log_determinant + log_prior;
        Ok(Solved {
            mean,
            factor,
            log_likelihood,
        })
    }

    /// What the coefficients leave, whitened.
    pub(crate) fn left(&self, mean: &DVector<f64>) -> DVector<f64> {
        let width = self.rows.ncols() - 1;
        self.rows.column(0) - self.rows.columns(1, width) * mean
    }
}

/// Bridges rows without a reading from the last reading before to the first after: what is left of readings less
/// prediction moves slowly, while a zero would be an outlier as large as the pressure itself.
pub(crate) fn bridge(raw: &mut DMatrix<f64>, rows: &[usize], missing: &[usize]) {
    let read = |row: &usize| missing.binary_search(row).is_err();
    let known: Vec<usize> = (0..rows.len()).filter(|&b| read(&rows[b])).collect();
    for block in (0..rows.len()).filter(|&b| !read(&rows[b])) {
        let after = known.partition_point(|&b| b < block);
        let left = after.checked_sub(1).and_then(|k| known.get(k));
        let value = match (left, known.get(after)) {
            (Some(&l), Some(&r)) => {
                let share = (block - l) as f64 / (r - l) as f64;
                raw[(rows[l], 0)] * (1.0 - share) + raw[(rows[r], 0)] * share
            }
            (Some(&one), None) | (None, Some(&one)) => raw[(rows[one], 0)],
            (None, None) => 0.0,
        };
        raw[(rows[block], 0)] = value;
    }
}

/// Median; of an even count the upper one of the middle two.
pub(crate) fn median(mut values: Vec<f64>) -> f64 {
    let middle = values.len() / 2;
    if values.is_empty() {
        return 0.0;
    }
    *values.select_nth_unstable_by(middle, f64::total_cmp).1
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_was_not_read_lies_between_its_neighbours_about_what_the_columns_say() {
        // Two gauges, four blocks; gauge 1 lacks blocks 1 and 2, gauge 0 the last. One column, coefficient 2.
        let column = [1.0, 5.0, 2.0, 6.0, 3.0, 7.0, 4.0, 8.0];
        let read = [10.0, 20.0, 11.0, 0.0, 12.0, 0.0, 0.0, 35.0];
        let mut history = History {
            raw: DMatrix::from_fn(8, 2, |r, c| if c == 0 { read[r] } else { column[r] }),
            gauges: 2,
            renewals: Vec::new(),
            missing: vec![3, 5, 6],
            aside: Vec::new(),
            pairs: DMatrix::zeros(0, 0),
            reference: vec![0.0; 2],
            pair_spread: Vec::new(),
            lines: DMatrix::zeros(8, 0),
            seen: Vec::new(),
            taken: 0,
        };
        history.fill(&DVector::from_element(1, 2.0));
        // Left of gauge 1: 20 - 10 before, 35 - 16 after; of gauge 0: 12 - 6 before.
        let filled = [(3, 12.0 + 13.0), (5, 14.0 + 16.0), (6, 8.0 + 6.0)];
        for (row, value) in filled {
            assert!((history.raw[(row, 0)] - value).abs() < 1e-12, "row {row}");
        }
    }
}
