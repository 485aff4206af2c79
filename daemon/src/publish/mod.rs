//! Drains the outbox and reads the snapshot.
