//! Parts of a ground that drive it in ways of their own, against closed forms.

#![allow(
    clippy::indexing_slicing,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod layers;
#[path = "../support/mod.rs"]
mod support;
