//! What `check` says of the mesh: its quality, or where the ground cannot have one.

use borewake_model::ModelError;
use borewake_model::ground::mesh::Quality;
use borewake_model::reduce::Spread;
use borewake_model::units::Dimension;
use serde_json::{Value, json};

use super::{document, notes};
use crate::cli::GroundSummary;
use crate::config::Site;

/// Angles below this spoil the accuracy of a triangle \[degrees\]. Common practice, no source.
const SLIVER: f64 = 15.0;
/// Neighbouring triangles that differ by more than this, as lengths, spoil it too. Common practice, no source.
const STEEP: f64 = 4.0;

/// What the mesh of a ground is like, and what another mesh or scheme would say instead.
pub(super) fn summary(site: &Site, quality: &Quality, spread: &Spread) -> GroundSummary {
    let place = |[x, y]: [f64; 2]| {
        let show = |v| site.units.show(Dimension::Length, v);
        format!("{} east, {} north", show(x), show(y))
    };
    let layers = site.ground.layers.len();
    let mut text = format!(
        "  {} triangles, {} nodes in {}\n  least angle {:.0} degrees, at {}\n  steepest grading {:.1} from a triangle to its neighbour, at {}\n",
        quality.triangles,
        quality.quadratic_nodes,
        if layers == 1 {
            "one layer".to_owned()
        } else {
            format!("each of {layers} layers")
        },
        quality.least_angle,
        place(quality.least_angle_at),
        quality.grading,
        place(quality.grading_at),
    );
    text += &match quality.negative_conductances {
        0 => "  two-point conductances are nowhere negative\n".to_owned(),
        some => format!(
            "  {some} two-point conductances are negative, beside lines that the mesh must keep to\n"
        ),
    };
    if quality.least_angle < SLIVER || quality.grading > STEEP {
        text += "  the model is less accurate there: move lines and points that nearly touch apart, or let them meet\n";
    }
    text += &format!(
        "  responses from an hour to a year, as a share of their peak: a mesh with three quarters of the points on a ring\n  moves them by {:.1e}, linear in place of quadratic elements by {:.1e}\n",
        spread.sizes, spread.schemes,
    );
    GroundSummary {
        text,
        json: json!({ "quality": quality, "spread": spread }),
    }
}

/// What is said of a site file whose ground cannot be meshed.
pub(super) fn refused(site: &Site, why: &ModelError, json: bool) -> String {
    let path = site.path.display().to_string();
    if json {
        let place = match why {
            ModelError::Mesh { x, y, .. } => json!([x, y]),
            _ => Value::Null,
        };
        return document(&json!({
            "holds": false, "file": path, "mistakes": [], "notes": notes(site),
            "mesh": { "why": why.to_string(), "place_m": place },
        }));
    }
    format!("{path}: {why}\n\n{path} does not hold.\n")
}
