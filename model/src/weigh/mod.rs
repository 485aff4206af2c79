//! Signatures, causes, evidence, thresholds.
