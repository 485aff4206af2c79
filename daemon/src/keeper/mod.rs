//! Processes the journal in its order: readings to limits and blocks, findings to alarms, people to both.
