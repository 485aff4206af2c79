//! Everything that leaves: events as CloudEvents, to files and to brokers.
//!
//! Alarms go through the outbox and leave at least once; expectations and the heartbeat are only ever the latest.

pub mod events;
pub mod http;
pub mod mqtt;
pub mod ndjson;
