//! Quantities at the border: text with a unit to SI and back.
//!
//! ```
//! use borewake_model::units::Dimension;
//!
//! let k = Dimension::Permeability.parse("120 mD").unwrap();
//! assert!((k / 1.1843e-13 - 1.0).abs() < 1e-4);
//! let wrong = Dimension::Pressure.parse("6.1 MPA").unwrap_err();
//! assert!(wrong.to_string().contains("did you mean MPa?"));
//! ```
//!
//! A unit is a product of symbols from one table, so `m3/(Pa s m)`, `bbl/d/psi` and `ft2/d` need no entry of
//! their own; a [`Dimension`] says which products it takes. Water's heads convert by [`WATER_WEIGHT`], the
//! conventional column, whatever the fluid of the site.

mod dimension;
mod error;
mod expression;
mod nearest;
mod show;
mod symbols;

pub use dimension::{Dimension, UnitConversion};
pub use error::UnitError;
pub use nearest::nearest;
pub use show::{UnitSystem, significant};
pub use symbols::{BARREL, DARCY, DAY, PSI, WATER_WEIGHT, YEAR};
