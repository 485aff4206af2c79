//! What the numbers themselves may be off: reduction and discretisation, as noise of the model.

use serde::{Deserialize, Serialize};

use super::Calibration;
use crate::reduce::{Certificate, Spread};

/// Errors of the numbers behind a fitted ground, as shares of a response's peak.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Numerics {
    /// What the reduction costs at the fitted parameters and patches.
    pub fitted: Certificate,
    /// How far discretisations of the described ground differ.
    pub spread: Spread,
}

impl Numerics {
    /// Error of the response of a gauge to a well: reduction and size of the mesh together. (The other scheme is not the working
    /// one, and its difference is its own error.)
    #[must_use]
    pub fn pair(&self) -> f64 {
        self.fitted.ports + self.spread.sizes
    }

    /// Error of the response of a gauge to a source anywhere.
    #[must_use]
    pub fn anywhere(&self) -> f64 {
        self.fitted.leaks.max(self.fitted.ports) + self.spread.sizes
    }
}

impl Calibration {
    /// Makes room for the error of the numbers, so that no alarm is tighter than they are: no discrepancy learned from history, which
    /// may excite little of it, is taken to be smaller.
    pub fn allow_for(&mut self, numerics: &Numerics) {
        let (pair, anywhere) = (numerics.pair(), numerics.anywhere());
        let learned = self.discrepancy.iter_mut();
        for share in learned.chain(&mut self.priors.discrepancy) {
            *share = share.max(pair);
        }
        for share in [&mut self.priors.long, &mut self.priors.far] {
            *share = share.max(pair);
        }
        self.priors.mismatch = self.priors.mismatch.max(anywhere);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_numbers_count_with_both_their_errors() {
        let numerics = Numerics {
            fitted: Certificate {
                ports: 1e-5,
                random_nodes: 8e-5,
                leaks: 4e-4,
                box_corners: None,
                full_size: 20_000,
                modes: 170,
                shifts: 27,
                times: (60.0, 3.15e7),
            },
            spread: Spread {
                sizes: 2e-4,
                schemes: 0.02,
                unknowns: (20_000, 12_000),
            },
        };
        assert!((numerics.pair() - 2.1e-4).abs() < 1e-12);
        assert!((numerics.anywhere() - 6e-4).abs() < 1e-12);
    }
}
