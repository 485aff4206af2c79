//! Density, viscosity and compressibility of water.
