//! Line source, leaky, images, storage and skin: for checks and for sites too simple for a mesh.
//!
//! Every response here is the pressure \[Pa\] under a rate of one m3/s into the ground, in a ground of
//! transmissivity `T = k h / mu` \[m3/(Pa s)\] and storativity `S = phi c_t h` \[m/Pa\].

mod bessel;
mod error_function;
mod exponential_integral;
mod leaky;
mod line_source;
mod talbot;
mod well;

pub use bessel::{k0, k0_k1, k1};
pub use error_function::{erfc, ln_erfc};
pub use exponential_integral::e1;
pub use leaky::{leaky, leaky_well_function};
pub use line_source::{Path, constant_head, line_source, sealed, superpose};
pub use talbot::{invert, talbot};
pub use well::{Bore, bore_step, bore_transfer};
