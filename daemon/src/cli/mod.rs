//! One file a verb.
