//! Evidence with plots, as documents that stand alone.

pub mod document;
pub mod plan;
pub mod svg;
