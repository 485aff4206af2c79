//! What every scheme must do: orders of convergence, identities between schemes, and what no ground may break.

#![allow(
    clippy::indexing_slicing,
    clippy::panic,
    clippy::unwrap_used,
    reason = "tests may fail loudly"
)]

mod identities;
mod order;
mod properties;
#[path = "../support/mod.rs"]
mod support;
mod uniform;
mod zones;
