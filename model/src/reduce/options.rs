//! What a reduction is asked for.

use crate::ModelError;

const MINUTE: f64 = 60.0;
const YEAR: f64 = 365.25 * 86_400.0;

/// A response at time t is made of shifts up to some tens over t: with the largest shift at 1/t the error at the shortest time
/// is twenty times that at all others.
const SHIFT_ABOVE: f64 = 20.0;
/// The same towards the longest time: a shift at a few over it still serves.
const SHIFT_BELOW: f64 = 3.0;
/// What happens up to the shortest time decides the response at it, so truncation looks this much earlier.
const TRUNCATE_FROM: f64 = 15.0;
const TRUNCATE_TIMES: u32 = 80;

/// What a reduction is asked for.
#[derive(Debug, Clone, PartialEq)]
pub struct ReduceOptions {
    /// Shortest time at which responses must be right \[s\].
    pub fastest: f64,
    /// Longest time \[s\]: the station's life.
    pub slowest: f64,
    /// Error allowed at any node for a rate at a well, as a share of that response's peak. At the ports themselves it is far smaller.
    pub tolerance: f64,
    /// Modes kept at most.
    pub max_modes: usize,
    /// Real shifts, and so sparse factorisations, at most at the described parameters. Every parameter whose ratio to
    /// the first matters takes up to ten more.
    pub max_shifts: usize,
    /// Half-width of the box of parameters in which the basis must serve, as a natural logarithm: each parameter may lie within
    /// `exp(± this)` times its described value.
    pub log_range: f64,
    /// Number of log-spaced times at which the certificate compares with the full system, from `fastest` to one year
    /// (or to `slowest` if that is shorter).
    pub checked_times: usize,
    /// Number of random nodes at which it compares.
    pub checked_nodes: usize,
    /// Corners of a parameter box at which it compares too; none by default, for each corner costs as much again.
    pub corners: Option<BoxCorners>,
}

/// A box of factors on transmissivities and storativities, all layers alike.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct BoxCorners {
    /// Corners at `exp(± this)` times every transmissivity.
    pub log_transmissivity: f64,
    /// Corners at `exp(± this)` times every storativity.
    pub log_storativity: f64,
}

impl Default for ReduceOptions {
    fn default() -> Self {
        Self {
            fastest: MINUTE,
            slowest: 10.0 * YEAR,
            tolerance: 1e-4,
            max_modes: 170,
            max_shifts: 28,
            log_range: 0.5,
            checked_times: 8,
            checked_nodes: 20,
            corners: None,
        }
    }
}

impl ReduceOptions {
    pub(super) fn check(&self) -> Result<(), ModelError> {
        let refuse = |what: &str, value: f64, must: &'static str| {
            Err(ModelError::Parameter {
                what: what.into(),
                value,
                must,
            })
        };
        if !(self.fastest.is_finite() && self.fastest > 0.0) {
            return refuse(
                "shortest time of the reduction",
                self.fastest,
                "must be positive",
            );
        }
        if !(self.slowest.is_finite() && self.slowest > self.fastest) {
            return refuse(
                "longest time of the reduction",
                self.slowest,
                "must be longer than the shortest",
            );
        }
        if !(self.tolerance.is_finite() && self.tolerance > 0.0) {
            return refuse(
                "tolerance of the reduction",
                self.tolerance,
                "must be positive",
            );
        }
        if !(self.log_range.is_finite() && self.log_range >= 0.0) {
            return refuse(
                "range of parameters",
                self.log_range,
                "must not be negative",
            );
        }
        if self.max_shifts < 2 || self.max_modes < 1 || self.checked_times < 2 {
            return refuse(
                "the smallest of shifts, modes and checked times",
                0.0,
                "must be at least 2, 1 and 2",
            );
        }
        Ok(())
    }

    /// Smallest and largest real shift \[1/s\].
    pub(super) fn shift_span(&self) -> (f64, f64) {
        (
            (SHIFT_BELOW / self.slowest).min(self.fastest.recip()),
            SHIFT_ABOVE / self.fastest,
        )
    }

    /// Log-spaced times of the step responses by which the basis is truncated \[s\], each with its weight: less the further
    /// before the shortest time asked for.
    pub(super) fn truncation_times(&self) -> Vec<(f64, f64)> {
        log_spaced(self.fastest / TRUNCATE_FROM, self.slowest, TRUNCATE_TIMES)
            .into_iter()
            .map(|t| (t, (t / self.fastest).sqrt().min(1.0)))
            .collect()
    }

    /// Log-spaced times of the certificate \[s\].
    pub(super) fn checked_times(&self) -> Vec<f64> {
        let (first, last) = self.checked_span();
        log_spaced(
            first,
            last,
            u32::try_from(self.checked_times).unwrap_or(u32::MAX),
        )
    }

    /// Shortest and longest of them \[s\].
    pub(super) fn checked_span(&self) -> (f64, f64) {
        (self.fastest, self.slowest.min(YEAR.max(2.0 * self.fastest)))
    }
}

fn log_spaced(first: f64, last: f64, count: u32) -> Vec<f64> {
    (0..count)
        .map(|k| first * (last / first).powf(f64::from(k) / f64::from(count - 1)))
        .collect()
}
