//! Drives the model over stored readings; re-run.
