//! Evidence with plots.
