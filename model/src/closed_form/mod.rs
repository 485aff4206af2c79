//! Line source, leaky, images, bounded circle, storage and skin: for checks and for sites too simple for a mesh.
//!
//! A history of rates, a recovery and a falloff are sums of such a response: [`superpose`].
//!
//! Every response here is the pressure \[Pa\] under a rate of one m3/s into the ground, in a ground of
//! transmissivity `T = k h / mu` \[m3/(Pa s)\] and storativity `S = phi c_t h` \[m/Pa\].

mod bessel;
mod circle;
mod error_function;
mod exponential_integral;
mod leaky;
mod line_source;
mod talbot;
mod well;

pub use bessel::{k0, k0_k1, k1, scaled_i, scaled_k};
pub use circle::{Circle, Rim, circle_step, circle_transfer};
pub use error_function::{erfc, ln_erfc};
pub use exponential_integral::e1;
pub use leaky::{leaky, leaky_well_function};
pub use line_source::{Line, Path, beside_line, line_source, superpose};
pub use talbot::{invert, invert_with_error, talbot};
pub use well::{Bore, bore_slope, bore_step, bore_transfer, rate_taken, taken};
