//! Life cycle and limits.
