//! Sources, decoding and reading quality.
