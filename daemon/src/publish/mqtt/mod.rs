//! Publishing to a broker.
