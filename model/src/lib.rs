//! The ground and the watch of borewake: pure, deterministic computation.
//!
//! Nothing here reads a file, a clock or a random source, so equal inputs give equal bits on one
//! processor feature set. All quantities are SI; [`units`] converts at the border.
//!
//! The path of a site through this crate: a [`ground::Ground`] is meshed and put into the weak form
//! ([`weak_form`]), which gives a sparse [`weak_form::System`]; [`reduce`] projects it on a few hundred
//! modes; [`commission`] fits its parameters to quiet history; [`expect`] steps it and states what
//! every gauge should show; [`lagged`] does so for embankments, which have no such ground; [`weigh`] weighs the causes of what they show instead;
//! [`forecast`] steps it on under planned rates.

pub mod block;
pub mod closed_form;
pub mod commission;
pub mod derivative;
pub mod error;
pub mod expect;
pub mod finding;
pub mod fluid;
pub mod forecast;
pub mod ground;
pub mod lagged;
pub mod reduce;
pub mod units;
pub mod watch;
pub mod weak_form;
pub mod weigh;

pub use error::ModelError;
