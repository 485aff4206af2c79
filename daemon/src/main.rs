//! The `borewake` program.

fn main() {}
