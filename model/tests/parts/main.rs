//! Parts of a ground that drive it in ways of their own, against closed forms.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod layers;
mod stage;
#[path = "../support/mod.rs"]
mod support;
mod trace;
mod watched;
