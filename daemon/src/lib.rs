//! The rooms of the daemon, wired one way: intake, store, watch, alarm, publish.
//!
//! Every room depends on [`record`] and not on the rooms beside it; [`cli`] wires them.

pub mod alarm;
pub mod cli;
pub mod config;
pub mod control;
pub mod intake;
pub mod keeper;
pub mod publish;
pub mod record;
pub mod report;
pub mod store;
pub mod watch;
