//! A well of its own radius with storage and skin in an endless ground (Agarwal, Al-Hussainy & Ramey 1970).

use std::f64::consts::PI;

use nalgebra::Complex;

use super::{invert, k0_k1};

/// A well as it shows in its own pressure.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Bore {
    /// Radius \[m\].
    pub radius: f64,
    /// Skin; below zero it widens the radius to `radius exp(-skin)`.
    pub skin: f64,
    /// Wellbore storage \[m3/Pa\].
    pub storage: f64,
}

/// Pressure in the bore under a rate, both as transforms: what one multiplies the rate's transform with.
#[must_use]
pub fn bore_transfer(
    bore: &Bore,
    transmissivity: f64,
    storativity: f64,
    s: Complex<f64>,
) -> Complex<f64> {
    let radius = bore.radius * (-bore.skin.min(0.0)).exp();
    let z = (s * (storativity / transmissivity)).sqrt() * radius;
    let (k0, k1) = k0_k1(z);
    let ground = (k0 / (z * k1) + bore.skin.max(0.0)) / (2.0 * PI * transmissivity);
    ground / (s * ground * bore.storage + 1.0)
}

/// Pressure in the bore \[Pa\] a time `t` \[s\] after one m3/s began to enter it; error below 1e-7 of `1/2 pi T`.
#[must_use]
pub fn bore_step(bore: &Bore, transmissivity: f64, storativity: f64, t: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    invert(t, |s| {
        bore_transfer(bore, transmissivity, storativity, s) / s
    })
}

/// Slope of [`bore_step`] in the natural logarithm of time \[Pa\]: half of `1/2 pi T` in radial flow.
#[must_use]
pub fn bore_slope(bore: &Bore, transmissivity: f64, storativity: f64, t: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    t * invert(t, |s| bore_transfer(bore, transmissivity, storativity, s))
}

/// Volume \[m3\] that a well held one Pascal above rest has taken in a time `t` \[s\], from its transfer.
///
/// Pressure under a held rate and rate under a held pressure are each other's inverse as transforms (van Everdingen &
/// Hurst 1949, Trans. AIME 186). The transfer is [`bore_transfer`] or [`super::circle_transfer`].
pub fn taken(t: f64, transfer: impl Fn(Complex<f64>) -> Complex<f64>) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    invert(t, |s| (s * s * transfer(s)).inv())
}

/// Rate \[m3/s\] into a well held one Pascal above rest, a time `t` \[s\] after; see [`taken`].
pub fn rate_taken(t: f64, transfer: impl Fn(Complex<f64>) -> Complex<f64>) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    invert(t, |s| (s * transfer(s)).inv())
}
