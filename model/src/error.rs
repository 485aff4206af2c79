//! What can go wrong in the model, with the numbers that say where.

use thiserror::Error;

/// An error of the model. None of them is a panic: a ground that cannot be used leaves the daemon recording.
#[derive(Debug, Clone, PartialEq, Error)]
#[non_exhaustive]
pub enum ModelError {
    /// The ground as described cannot be meshed.
    #[error("the ground cannot be meshed near x = {x:.1} m, y = {y:.1} m: {why}")]
    Mesh {
        /// East of the local origin \[m\].
        x: f64,
        /// North of the local origin \[m\].
        y: f64,
        /// What is wrong there, and the mend.
        why: String,
    },
    /// A parameter lies outside what the method can take.
    #[error("{what} is {value}, but {must}")]
    Parameter {
        /// The parameter's name as the site file spells it.
        what: String,
        /// Its value, SI.
        value: f64,
        /// What it must be.
        must: &'static str,
    },
    /// A matrix that must be positive definite is not.
    #[error("{what} is not positive definite")]
    NotPositive {
        /// Which matrix.
        what: &'static str,
    },
    /// Two things that must be of one size are not.
    #[error("{what}: {found} found where {expected} are due")]
    Size {
        /// What was counted.
        what: &'static str,
        /// How many there are.
        found: usize,
        /// How many there must be.
        expected: usize,
    },
    /// An iteration did not settle.
    #[error("{what} did not settle after {steps} steps (residual {residual:.3e})")]
    NotSettled {
        /// The iteration.
        what: &'static str,
        /// Steps made.
        steps: usize,
        /// What was left.
        residual: f64,
    },
    /// History is too short or too poor for what is asked of it.
    #[error("history cannot be used: {0}")]
    History(String),
    /// A number that must be finite is not.
    #[error("{0} is not a finite number")]
    NotFinite(&'static str),
}
