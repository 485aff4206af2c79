//! The only code that speaks SQL: readings, journal, checkpoints, outbox.
