//! `[edge]`, `[[barrier]]`, `[[neighbour]]`, and what of the ground is not read yet.

use borewake_model::ground::{Barrier, Edge, EdgeKind, Neighbour, Point, Zone};
use borewake_model::units::{Dimension, YEAR};

use super::super::report::Report;
use super::super::section::{At, Section};
use super::super::values::Sign;
use super::layer::LayerRead;
use super::points::{sound_name, unique};

/// The edge as written.
pub(super) struct EdgeRead {
    kind: EdgeKind,
    distance: Option<At<f64>>,
    /// Channel of the open water that drives it.
    pub(super) stage: Option<At<String>>,
}

/// Reads `[edge]`; without it the ground goes on.
pub(super) fn edge(root: &mut Section<'_>) -> EdgeRead {
    let Some(mut section) = root.table("edge") else {
        return EdgeRead {
            kind: EdgeKind::Open,
            distance: None,
            stage: None,
        };
    };
    let kinds = [
        ("open", EdgeKind::Open),
        ("closed", EdgeKind::Closed),
        ("fixed", EdgeKind::Fixed),
    ];
    let kind = section.must("kind", "kind = \"open\"", |s, k| s.word(k, &kinds));
    let kind = kind.unwrap_or(EdgeKind::Open);
    let length = |s: &mut Section<'_>, k| s.quantity(k, Dimension::Length, Sign::Positive);
    let distance = match kind {
        EdgeKind::Open => length(&mut section, "distance"),
        _ => section.must("distance", "distance = \"12 km\"", length),
    };
    let stage = section.text("stage");
    let kind = match (&stage, kind) {
        (None, _) => kind,
        (Some(_), EdgeKind::Fixed) => EdgeKind::Driven,
        (Some(at), _) => {
            let what = "only an edge of kind \"fixed\" follows a stage";
            section.wrong(
                "stage",
                at,
                what,
                "write kind = \"fixed\", or leave `stage` out",
            );
            kind
        }
    };
    section.close();
    EdgeRead {
        kind,
        distance,
        stage,
    }
}

/// The edge, with a distance that holds all wells and gauges; an open edge without one is put where the station's life
/// does not reach: 3.5 times the diffusion length of ten years, and ten times the reach of wells and gauges.
pub(super) fn edge_of(
    report: &Report<'_>,
    edge: EdgeRead,
    layers: &[LayerRead],
    zones: &[At<Zone>],
    points: &[(String, Point)],
) -> Edge {
    let (reach, farthest) = reach(points);
    if let Some(distance) = &edge.distance
        && distance.value <= reach
    {
        let what = format!("{farthest} lies {reach:.0} m from the centre of wells and gauges");
        let mend = "put the edge outside it, or move it";
        report.value(&distance.span, "edge: distance".to_owned(), what, mend);
    }
    // Along its best direction a layer conducts by the root of the ratio better than in the mean.
    let stretch = |l: &LayerRead| l.layer.anisotropy.map_or(1.0, |a| a.ratio.sqrt());
    let of_layers = layers
        .iter()
        .map(|l| stretch(l) * l.layer.transmissivity / l.layer.storativity);
    let of_zones = zones
        .iter()
        .map(|z| z.value.transmissivity / z.value.storativity);
    let eta = of_layers.chain(of_zones).fold(0.0, f64::max);
    let far = 3.5 * (eta * 10.0 * YEAR).sqrt();
    let distance = edge.distance.map_or(far.max(10.0 * reach), |d| d.value);
    Edge {
        kind: edge.kind,
        distance,
    }
}

/// Largest distance of a point from the centre of all \[m\], and whose it is.
fn reach(points: &[(String, Point)]) -> (f64, &str) {
    let centre = |axis: fn(&Point) -> f64| {
        let along = || points.iter().map(|(_, p)| axis(p));
        let low = along().fold(f64::INFINITY, f64::min);
        let high = along().fold(f64::NEG_INFINITY, f64::max);
        f64::midpoint(low, high)
    };
    let (x, y) = (centre(|p| p[0]), centre(|p| p[1]));
    let mut farthest = (0.0, "");
    for (name, p) in points {
        let distance = (p[0] - x).hypot(p[1] - y);
        if distance > farthest.0 {
            farthest = (distance, name);
        }
    }
    farthest
}

/// Reads every `[[barrier]]`.
pub(super) fn barriers(root: &mut Section<'_>) -> Vec<At<Barrier>> {
    let mut names = Vec::new();
    let mut barriers = Vec::new();
    for mut section in root.list("barrier") {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "barrier", &mut names, name);
        }
        let line = section.must(
            "line",
            "line = [[\"0 m\", \"0 m\"], [\"1 km\", \"2 km\"]]",
            |s, k| s.line(k),
        );
        let conductance = section.must("conductance", "conductance = \"0 m3/(Pa s m)\"", |s, k| {
            s.quantity(k, Dimension::Conductance, Sign::NotNegative)
        });
        if let Some(line) = &line
            && line
                .value
                .windows(2)
                .any(|pair| matches!(pair, [a, b] if a == b))
        {
            let key = section.key("line");
            let mend = "leave one of the two out";
            root.report
                .value(&line.span, key, "two places in a row are the same", mend);
        }
        section.close();
        barriers.push(At {
            span: line.as_ref().map_or_else(|| 0..0, |l| l.span.clone()),
            value: Barrier {
                name: name.map(|n| n.value).unwrap_or_default(),
                line: line.map(|l| l.value).unwrap_or_default(),
                conductance: conductance.map_or(0.0, |c| c.value),
            },
        });
    }
    barriers
}

/// The edge of what has none.
pub(super) fn no_edge() -> Edge {
    Edge {
        kind: EdgeKind::Open,
        distance: 0.0,
    }
}

/// Reads every `[[neighbour]]`.
pub(super) fn neighbours(root: &mut Section<'_>, layers: &[LayerRead]) -> Vec<At<Neighbour>> {
    let mut names = Vec::new();
    let mut neighbours = Vec::new();
    for mut section in root.list("neighbour") {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "neighbour", &mut names, name);
        }
        let at = section.must("at", "at = [\"2.4 km\", \"-0.8 km\"]", |s, k| s.point(k));
        let layer = layer(&mut section, layers);
        section.noted("usual", "a neighbour's usual rhythm is not used by this build: its regular cycles may look like changes");
        section.noted("meter", "the rate of a neighbour is not known here, so a meter is not used; `meter` belongs to a [[well]]");
        section.close();
        neighbours.push(At {
            span: at.as_ref().map_or_else(|| 0..0, |a| a.span.clone()),
            value: Neighbour {
                name: name.map(|n| n.value).unwrap_or_default(),
                at: at.map_or([0.0; 2], |a| a.value),
                layer,
            },
        });
    }
    neighbours
}

/// Reads `layer`, a name; with one layer it may be left out.
pub(super) fn layer(section: &mut Section<'_>, layers: &[LayerRead]) -> usize {
    if layers.len() < 2 && !section.has("layer") {
        section.take("layer");
        return 0;
    }
    let named = section.must(
        "layer",
        "layer = \"…\", the name of a [[layer]]",
        |s, k| s.text(k),
    );
    let Some(named) = named else {
        return 0;
    };
    let found = layers.iter().position(|l| l.layer.name == named.value);
    if found.is_none() {
        let names: Vec<&str> = layers.iter().map(|l| l.layer.name.as_str()).collect();
        section.unknown_name("layer", &named, "is no [[layer]]", &names);
    }
    found.unwrap_or(0)
}

/// Reads `layer` of a well: a name, or a list of the layers it is open to.
pub(super) fn open_layers(section: &mut Section<'_>, layers: &[LayerRead]) -> Vec<usize> {
    if !section.is_list("layer") {
        return vec![layer(section, layers)];
    }
    let names: Vec<&str> = layers.iter().map(|l| l.layer.name.as_str()).collect();
    let mut open = Vec::new();
    for named in section.texts("layer").unwrap_or_default() {
        match names.iter().position(|n| *n == named.value) {
            None => section.unknown_name("layer", &named, "is no [[layer]]", &names),
            Some(found) if open.contains(&found) => {
                let what = "the layer is named twice";
                section.wrong("layer", &named, what, "name each layer once");
            }
            Some(found) => open.push(found),
        }
    }
    if open.is_empty() {
        let span = section.value_span("layer");
        let mend = "name the layers it is open to";
        let key = section.key("layer");
        section.report.value(&span, key, "no layer is named", mend);
        open.push(0);
    }
    open
}

/// Parts of the ground that this build does not read.
pub(super) fn not_yet(root: &mut Section<'_>) {
    root.noted(
        "penetration",
        "this build holds a leak as likely anywhere inside the outline: penetrations are not used yet",
    );
}
