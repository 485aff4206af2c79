//! Quantities at the border: text with a unit to SI and back.
