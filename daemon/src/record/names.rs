//! Names of what findings know by number.

use borewake_model::finding::Subject;
use borewake_model::units::UnitSystem;
use serde::{Deserialize, Serialize};

/// The site's own names, in the ground's order, and how numbers are shown to people.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Names {
    /// The site's id.
    pub site: String,
    /// How numbers are shown.
    pub units: UnitSystem,
    /// Gauges.
    pub gauges: Vec<String>,
    /// Wells.
    pub wells: Vec<String>,
    /// Neighbours.
    pub neighbours: Vec<String>,
    /// Layers.
    pub layers: Vec<String>,
}

impl Names {
    /// Name of a gauge; its number where the ground has no such gauge.
    #[must_use]
    pub fn gauge(&self, index: usize) -> String {
        name(&self.gauges, "gauge", index)
    }

    /// Name of a layer; its number where the ground has no such layer.
    #[must_use]
    pub fn layer(&self, index: usize) -> String {
        name(&self.layers, "layer", index)
    }

    /// Name of what a finding is about; `None` for a place.
    #[must_use]
    pub fn subject(&self, subject: Subject) -> Option<String> {
        match subject {
            Subject::Place => None,
            Subject::Neighbour(i) => Some(name(&self.neighbours, "neighbour", i)),
            Subject::Gauge(i) => Some(self.gauge(i)),
            Subject::Well(i) => Some(name(&self.wells, "well", i)),
        }
    }
}

fn name(list: &[String], what: &str, index: usize) -> String {
    list.get(index)
        .cloned()
        .unwrap_or_else(|| format!("{what} {}", index.saturating_add(1)))
}
