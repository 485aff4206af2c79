//! Carries a modal state through a block of piecewise constant rates.

#![expect(
    clippy::indexing_slicing,
    reason = "every length is checked at the head of `advance`, before the loops that index"
)]

use nalgebra::{DMatrix, DVector};

use super::Modal;
use super::step::decay_and_gain;
use crate::ModelError;
use crate::block::RatePath;

/// Steps of up to this many different lengths are kept ready.
const KEPT: usize = 8;

/// Steps a modal state exactly along [`RatePath`]s. Holds its own scratch, so that `advance` allocates nothing.
///
/// Its result depends only on its arguments, never on what was stepped before: a step length that is
/// kept ready has the same bits as one computed anew.
#[derive(Debug, Clone)]
pub struct Propagator {
    lambda: DVector<f64>,
    ports: DMatrix<f64>,
    functionals: DMatrix<f64>,
    kept: Vec<Kept>,
    oldest: usize,
    forcing: DVector<f64>,
    cursor: Vec<usize>,
}

/// Decay and gain over one step length.
#[derive(Debug, Clone)]
struct Kept {
    dt: f64,
    decay: DVector<f64>,
    gain: DVector<f64>,
}

impl Propagator {
    /// A propagator of the wells' rates, observed at the gauges.
    #[must_use]
    pub fn new(modal: &Modal) -> Self {
        Self::with(
            modal.lambda.clone(),
            modal.wells.clone(),
            modal.gauges.clone(),
        )
    }

    /// A propagator with ports and functionals of one's own choice (modes by count; the rows are those of `lambda`).
    #[must_use]
    pub fn with(lambda: DVector<f64>, ports: DMatrix<f64>, functionals: DMatrix<f64>) -> Self {
        let (modes, count) = (lambda.len(), ports.ncols());
        let empty = Kept {
            dt: f64::NAN,
            decay: DVector::zeros(modes),
            gain: DVector::zeros(modes),
        };
        Self {
            lambda,
            ports,
            functionals,
            kept: vec![empty; KEPT],
            oldest: 0,
            forcing: DVector::zeros(modes),
            cursor: vec![0; count],
        }
    }

    /// Number of modes.
    #[must_use]
    pub fn modes(&self) -> usize {
        self.lambda.len()
    }

    /// Carries `x` from the start of a block to its end and writes what each functional shows at each instant.
    ///
    /// `rates` holds one path per port; a path that ends before the block does holds its last rate. `instants` \[s from
    /// the block's start\] ascend within `0..=length`; `out` is functionals by instants. The value at an
    /// instant includes the rates up to that very instant.
    ///
    /// # Errors
    /// [`ModelError::Size`] where counts differ, [`ModelError::NotFinite`] and [`ModelError::Parameter`] for rates and times
    /// that cannot be. The state is untouched then.
    pub fn advance(
        &mut self,
        x: &mut DVector<f64>,
        rates: &[RatePath],
        length: f64,
        instants: &[f64],
        out: &mut DMatrix<f64>,
    ) -> Result<(), ModelError> {
        self.check(x, rates, length, instants, out)?;
        self.cursor.fill(0);
        let (mut t, mut shown, mut changed) = (0.0, 0, true);
        loop {
            while shown < instants.len() && instants[shown] <= t {
                for g in 0..self.functionals.ncols() {
                    out[(g, shown)] = self.functionals.column(g).dot(x);
                }
                shown += 1;
            }
            if t >= length {
                return Ok(());
            }
            let mut end = instants.get(shown).map_or(length, |i| i.min(length));
            for (path, cursor) in rates.iter().zip(&mut self.cursor) {
                while *cursor + 1 < path.pieces.len() && path.pieces[*cursor].0 <= t {
                    *cursor += 1;
                    changed = true;
                }
                let until = path.pieces[*cursor].0;
                if until > t && until < end {
                    end = until;
                }
            }
            if changed {
                self.force(rates);
                changed = false;
            }
            self.step(x, end - t);
            t = end;
        }
    }

    fn force(&mut self, rates: &[RatePath]) {
        self.forcing.fill(0.0);
        for (j, (path, &cursor)) in rates.iter().zip(&self.cursor).enumerate() {
            self.forcing
                .axpy(path.pieces[cursor].1, &self.ports.column(j), 1.0);
        }
    }

    fn step(&mut self, x: &mut DVector<f64>, dt: f64) {
        let at = match self.kept.iter().position(|k| k.dt == dt) {
            Some(at) => at,
            None => {
                let at = self.oldest;
                self.oldest = (at + 1) % KEPT;
                let kept = &mut self.kept[at];
                kept.dt = dt;
                for k in 0..self.lambda.len() {
                    (kept.decay[k], kept.gain[k]) = decay_and_gain(self.lambda[k], dt);
                }
                at
            }
        };
        let kept = &self.kept[at];
        let steps = kept.decay.iter().zip(kept.gain.iter());
        for ((x, f), (decay, gain)) in x.iter_mut().zip(self.forcing.iter()).zip(steps) {
            *x = decay * *x + gain * f;
        }
    }

    fn check(
        &self,
        x: &DVector<f64>,
        rates: &[RatePath],
        length: f64,
        instants: &[f64],
        out: &DMatrix<f64>,
    ) -> Result<(), ModelError> {
        let sizes = [
            ("modes of the state", x.len(), self.lambda.len()),
            ("modes of the ports", self.ports.nrows(), self.lambda.len()),
            (
                "modes of the functionals",
                self.functionals.nrows(),
                self.lambda.len(),
            ),
            ("rate paths", rates.len(), self.ports.ncols()),
            ("rows of the output", out.nrows(), self.functionals.ncols()),
            ("columns of the output", out.ncols(), instants.len()),
        ];
        for (what, found, expected) in sizes {
            if found != expected {
                return Err(ModelError::Size {
                    what,
                    found,
                    expected,
                });
            }
        }
        if !(length.is_finite() && length > 0.0) {
            return Err(ModelError::Parameter {
                what: "length of a block".into(),
                value: length,
                must: "must be positive",
            });
        }
        let mut before = 0.0;
        for &instant in instants {
            if !(before..=length).contains(&instant) {
                return Err(ModelError::Parameter {
                    what: "instant within a block".into(),
                    value: instant,
                    must: "must not lie before its predecessor, nor outside the block",
                });
            }
            before = instant;
        }
        for path in rates {
            if path.pieces.is_empty() {
                return Err(ModelError::Size {
                    what: "pieces of a rate path",
                    found: 0,
                    expected: 1,
                });
            }
            let mut before = 0.0;
            for &(until, rate) in &path.pieces {
                if !rate.is_finite() {
                    return Err(ModelError::NotFinite("a rate"));
                }
                if until.is_nan() || until < before {
                    return Err(ModelError::Parameter {
                        what: "end of a piece of a rate path".into(),
                        value: until,
                        must: "must not lie before its predecessor",
                    });
                }
                before = until;
            }
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::block::RateKnown;
    use proptest::prelude::*;

    fn path(pieces: &[(f64, f64)]) -> RatePath {
        RatePath {
            pieces: pieces.to_vec(),
            known: RateKnown::Read,
        }
    }

    fn two_modes() -> Propagator {
        Propagator::with(
            DVector::from_vec(vec![0.0, 2e-3]),
            DMatrix::from_row_slice(2, 2, &[1.0, 0.5, -0.3, 2.0]),
            DMatrix::from_row_slice(2, 1, &[1.0, 1.0]),
        )
    }

    /// The state at t by superposition of the steps of every rate, without any stepping.
    fn superposed(p: &Propagator, rates: &[RatePath], t: f64) -> f64 {
        let response = |j: usize, t: f64| -> f64 {
            (0..2)
                .map(|k| {
                    let gain = decay_and_gain(p.lambda[k], t.max(0.0)).1;
                    p.functionals[(k, 0)] * p.ports[(k, j)] * gain
                })
                .sum()
        };
        let mut sum = 0.0;
        for (j, path) in rates.iter().enumerate() {
            let (mut from, mut last) = (0.0, 0.0);
            for &(until, rate) in &path.pieces {
                sum += (rate - last) * response(j, t - from);
                (from, last) = (until, rate);
            }
        }
        sum
    }

    proptest! {
        #[test]
        fn a_block_of_changing_rates_equals_the_superposition_of_their_steps(
            cuts in prop::collection::vec(1.0..3599.0_f64, 0..6),
            q in prop::collection::vec(-3.0..3.0_f64, 14),
            mut instants in prop::collection::vec(0.0..3600.0_f64, 1..6),
        ) {
            let mut cuts = cuts;
            cuts.sort_by(f64::total_cmp);
            instants.sort_by(f64::total_cmp);
            let mut pieces: Vec<_> = cuts.iter().enumerate().map(|(i, &c)| (c, q[i])).collect();
            pieces.push((3600.0, q[6]));
            let rates = [path(&pieces), path(&[(1800.0, q[7]), (3600.0, q[8])])];
            let mut p = two_modes();
            let mut x = DVector::zeros(2);
            let mut out = DMatrix::zeros(1, instants.len());
            p.advance(&mut x, &rates, 3600.0, &instants, &mut out).unwrap();
            for (k, &t) in instants.iter().enumerate() {
                prop_assert!((out[(0, k)] - superposed(&p, &rates, t)).abs() < 1e-8);
            }
        }
    }

    #[test]
    fn an_instant_at_a_change_of_rate_sees_the_rate_before_and_not_the_one_after() {
        let mut p = two_modes();
        let mut out = DMatrix::zeros(1, 2);
        let rates = [
            path(&[(600.0, 1.0), (1200.0, 50.0)]),
            path(&[(1200.0, 0.0)]),
        ];
        let mut x = DVector::zeros(2);
        p.advance(&mut x, &rates, 1200.0, &[0.0, 600.0], &mut out)
            .unwrap();
        assert_eq!(out[(0, 0)], 0.0);
        let gain = decay_and_gain(2e-3, 600.0).1;
        assert!((out[(0, 1)] - (600.0 - 0.3 * gain)).abs() < 1e-12);
    }

    #[test]
    fn what_was_stepped_before_leaves_no_trace() {
        let rates = [
            path(&[(900.0, 1.0), (3600.0, 0.2)]),
            path(&[(3600.0, -1.0)]),
        ];
        let (mut fresh, mut used) = (two_modes(), two_modes());
        let mut out = DMatrix::zeros(1, 1);
        for k in 1..30 {
            let mut x = DVector::zeros(2);
            used.advance(&mut x, &rates, 3600.0, &[f64::from(k) * 100.0], &mut out)
                .unwrap();
        }
        let (mut a, mut b) = (DVector::from_element(2, 0.5), DVector::from_element(2, 0.5));
        fresh
            .advance(&mut a, &rates, 3600.0, &[700.0], &mut out)
            .unwrap();
        used.advance(&mut b, &rates, 3600.0, &[700.0], &mut out)
            .unwrap();
        assert_eq!(a, b);
    }

    #[test]
    fn what_cannot_be_stepped_is_refused_and_leaves_the_state_alone() {
        let mut p = two_modes();
        let mut x = DVector::from_element(2, 0.5);
        let mut out = DMatrix::zeros(1, 1);
        let held = path(&[(600.0, 1.0)]);
        let bad: [(Vec<RatePath>, f64, f64); 6] = [
            (vec![held.clone()], 600.0, 0.0),
            (vec![held.clone(), path(&[])], 600.0, 0.0),
            (vec![held.clone(), path(&[(600.0, f64::NAN)])], 600.0, 0.0),
            (
                vec![held.clone(), path(&[(600.0, 1.0), (1.0, 1.0)])],
                600.0,
                0.0,
            ),
            (vec![held.clone(), held.clone()], 0.0, 0.0),
            (vec![held.clone(), held.clone()], 600.0, 601.0),
        ];
        for (rates, length, instant) in bad {
            assert!(
                p.advance(&mut x, &rates, length, &[instant], &mut out)
                    .is_err()
            );
            assert_eq!(x, DVector::from_element(2, 0.5));
        }
    }
}
