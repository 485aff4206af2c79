//! The site file: what is read, and every message, word for word.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    reason = "a test says what it expects"
)]

mod grounds;
mod instruments;
mod messages;
mod reading;
mod strange;

use std::path::Path;

use borewake::config::{self, ConfigError, Mistake, Site};

/// The whole of what a site file may say.
const FULL: &str = include_str!("../sites/full.toml");

/// Reads text as the file `site.toml`.
fn read(text: &str) -> Result<Site, ConfigError> {
    config::read(text, Path::new("site.toml"))
}

/// A site that holds.
fn site(text: &str) -> Site {
    read(text).unwrap_or_else(|e| panic!("{e}"))
}

/// The mistakes of a site that does not.
fn mistakes(text: &str) -> Vec<Mistake> {
    match read(text) {
        Err(ConfigError::Wrong { mistakes, .. }) => mistakes,
        Err(other) => panic!("{other}"),
        Ok(_) => panic!("no mistake was found"),
    }
}
