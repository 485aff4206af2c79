//! Logged readings: CSV files in long or wide form.
//!
//! [`reader`] merges files in time order and makes deliveries of them; [`table`] knows the two forms of a file.

pub mod reader;
mod table;

pub use reader::{LogError, LogReader};
