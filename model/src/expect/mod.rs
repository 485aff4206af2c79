//! What every gauge should show: modal pressure, nuisances as columns, and the whitening filter.
//!
//! Everything a gauge can show is a signature with an amplitude and a prior. Stochastic nuisances (gauge noise and
//! wander, short-memory meter error) live in one time-invariant filter, `whitener`; nuisances with a constant
//! coefficient are `columns`, marginalised by `posterior`.

pub(crate) mod adopted;
pub(crate) mod columns;
pub(crate) mod drive;
pub(crate) mod epochs;
pub(crate) mod frame;
pub(crate) mod noise;
pub(crate) mod patched;
pub(crate) mod posterior;
pub(crate) mod riccati;
pub(crate) mod whitener;

pub use columns::Priors;
pub use noise::Noise;
pub use patched::Patched;
