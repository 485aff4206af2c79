//! Weighing causes: signatures, evidence, the ladder of onsets and what is said of them.
//!
//! [`evidence`] holds the formulas, `bank` the signatures of sources anywhere in the ground, `ladder` the onsets
//! with their running sums, `barrier` the images, `verdict` what is made of it all, `leaks` and `between` where a leak may be,
//! `reach` how small it may be.

pub(crate) mod bank;
pub(crate) mod barrier;
pub(crate) mod between;
pub mod evidence;
pub(crate) mod ladder;
mod leaks;
pub(crate) mod reach;
pub(crate) mod scales;
pub(crate) mod verdict;
