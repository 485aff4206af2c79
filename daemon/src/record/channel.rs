//! Names and kinds of channels and sources.

use std::fmt;
use std::sync::Arc;

use serde::{Deserialize, Serialize};

/// Name of a channel, as the site file spells it; cheap to clone.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct ChannelId(pub Arc<str>);

/// Name of a source, as the site file spells it; cheap to clone.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct SourceName(pub Arc<str>);

impl From<&str> for ChannelId {
    fn from(s: &str) -> Self {
        Self(s.into())
    }
}

impl From<&str> for SourceName {
    fn from(s: &str) -> Self {
        Self(s.into())
    }
}

impl fmt::Display for ChannelId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.0)
    }
}

impl fmt::Display for SourceName {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.0)
    }
}

/// What a channel measures. Values are kept in the SI unit named.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum ChannelKind {
    /// Pressure in the ground or a bore \[Pa\].
    Pressure,
    /// Rate into the ground, injection positive \[m3/s\].
    Rate,
    /// Atmospheric pressure \[Pa\].
    Barometer,
    /// Temperature \[degC\].
    Temperature,
    /// Level of a pool \[m\].
    Stage,
    /// Rain \[m/s\].
    Rain,
}

impl ChannelKind {
    /// The name used in the site file and in tables.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Pressure => "pressure",
            Self::Rate => "rate",
            Self::Barometer => "barometer",
            Self::Temperature => "temperature",
            Self::Stage => "stage",
            Self::Rain => "rain",
        }
    }
}

/// How the value of a rate channel stands to its instant.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Holds {
    /// It holds from its instant until the next.
    #[default]
    After,
    /// It is the mean since the instant before.
    Before,
}
