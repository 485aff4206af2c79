//! Evidence with plots, as documents that stand alone.

pub mod calibration;
pub mod document;
pub mod plan;
pub mod reach_map;
pub mod svg;
