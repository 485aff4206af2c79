//! Quantities at the border: text with a unit to SI and back.

/// How numbers are shown to people.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum UnitSystem {
    /// kPa, m, m3/d.
    #[default]
    Metric,
    /// psi, ft, bbl/d.
    Field,
    /// Metres of water, m, m3/d.
    Head,
}
