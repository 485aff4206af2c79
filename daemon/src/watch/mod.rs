//! Drives the model over stored readings: blocks, the model's thread, the ground file.

pub mod blocks;
pub mod closer;
pub mod commissioning;
pub mod compare;
pub mod ground_file;
pub mod history;
pub mod lane;
pub mod rerun;
pub mod standing;
pub mod stored;
