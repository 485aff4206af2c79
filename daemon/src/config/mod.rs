//! The site file: read, check, explain.
