//! Evidence with plots.

pub mod svg;
