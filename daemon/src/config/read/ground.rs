//! `[[layer]]`, `[edge]`, `[[barrier]]`, `[[neighbour]]`, and what of the ground is not read yet.

use borewake_model::ground::{Barrier, Edge, EdgeKind, Layer, Neighbour, Point};
use borewake_model::units::{Dimension, YEAR};

use super::super::report::Report;
use super::super::section::{At, Section};
use super::super::values::Sign;
use super::points::{sound_name, unique};

/// A layer with what other parts ask of it.
pub(super) struct LayerRead {
    pub(super) layer: Layer,
    top: Option<f64>,
}

/// Reads every `[[layer]]`, top first.
pub(super) fn layers(root: &mut Section<'_>) -> Vec<LayerRead> {
    let mend =
        "a [[layer]] with name, permeability, thickness, porosity, compressibility and viscosity";
    let sections = root.must("layer", mend, |r, k| Some(r.list(k)));
    let mut layers: Vec<LayerRead> = Vec::new();
    let mut names: Vec<At<String>> = Vec::new();
    for mut section in sections.unwrap_or_default() {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "layer", &mut names, name);
        }
        let (transmissivity, storativity) = conduction(&mut section);
        let top = section.quantity("top", Dimension::Length, Sign::Any);
        let above = section.quantity("leakance_up", Dimension::Leakance, Sign::NotNegative);
        if let Some(leakance) = above {
            match layers.last_mut() {
                Some(upper) => upper.layer.leakance_below = Some(leakance.value),
                None => section.wrong(
                    "leakance_up",
                    &leakance,
                    "there is no layer above the first",
                    "list layers from the top down, or leave the key out",
                ),
            }
        }
        let upper_top = layers.last().and_then(|l| l.top);
        if let (Some(upper), Some(top)) = (upper_top, &top)
            && top.value >= upper
        {
            let what = "this layer starts above the one listed before it";
            section.wrong("top", top, what, "list layers from the top down");
        }
        section.close();
        layers.push(LayerRead {
            layer: Layer {
                name: name.map(|n| n.value).unwrap_or_default(),
                transmissivity,
                storativity,
                leakance_below: None,
            },
            top: top.map(|t| t.value),
        });
    }
    layers
}

/// Transmissivity \[m3/(Pa s)\] and storativity \[m/Pa\], each stated or made of rock and fluid.
fn conduction(section: &mut Section<'_>) -> (f64, f64) {
    use Dimension as D;
    let positive = |s: &mut Section<'_>, key, dimension| {
        s.quantity(key, dimension, Sign::Positive).map(|q| q.value)
    };
    let k = positive(section, "permeability", D::Permeability);
    let h = positive(section, "thickness", D::Length);
    let phi = section.quantity("porosity", D::Ratio, Sign::Positive);
    let c = positive(section, "compressibility", D::Compressibility);
    let mu = positive(section, "viscosity", D::Viscosity);
    let t = positive(section, "transmissivity", D::Transmissivity);
    let s = positive(section, "storativity", D::Storativity);
    let ss = positive(section, "specific_storage", D::SpecificStorage);
    if let Some(phi) = &phi
        && phi.value >= 1.0
    {
        let what = "a porosity is a share of the rock, below one";
        section.wrong("porosity", phi, what, "such as 0.21 or \"21 %\"");
    }
    one_way(
        section,
        "transmissivity",
        &[
            &["transmissivity"],
            &["permeability", "thickness", "viscosity"],
        ],
    );
    one_way(
        section,
        "storativity",
        &[
            &["storativity"],
            &["specific_storage", "thickness"],
            &["porosity", "compressibility", "thickness"],
        ],
    );
    let made_t = || Some(k? * h? / mu?);
    let made_s = || Some(ss.or_else(|| Some(phi.as_ref()?.value * c?))? * h?);
    let transmissivity = t.or_else(made_t);
    let storativity = s.or_else(made_s);
    if let (Some(t), Some(s)) = (transmissivity, storativity) {
        plausible(section, t / s);
    }
    (transmissivity.unwrap_or(1.0), storativity.unwrap_or(1.0))
}

/// Reports a quantity of which no way to give it is complete, or that is given in more ways than one.
fn one_way(section: &Section<'_>, what: &str, ways: &[&[&str]]) {
    // The thickness serves several quantities: it starts no way.
    let starts = |way: &&&[&str]| way.iter().any(|k| *k != "thickness" && section.has(k));
    let quoted = |keys: Vec<&str>| {
        let keys: Vec<String> = keys.into_iter().map(|k| format!("`{k}`")).collect();
        keys.join(", ")
    };
    let started: Vec<&[&str]> = ways.iter().filter(starts).copied().collect();
    let report = section.report;
    match started.as_slice() {
        [] => {
            let ways: Vec<String> = ways.iter().map(|w| quoted(w.to_vec())).collect();
            report.missing(
                &section.span,
                section.whole(),
                format!("the {what} is not known"),
                format!("give {}", ways.join("; or ")),
            );
        }
        [way] => {
            let missing = quoted(way.iter().filter(|k| !section.has(k)).copied().collect());
            if !missing.is_empty() {
                report.missing(
                    &section.span,
                    section.whole(),
                    format!("the {what} is not known"),
                    format!("add {missing}"),
                );
            }
        }
        several => {
            let given = several.iter().flat_map(|w| w.iter().copied());
            let given: Vec<&str> = given
                .filter(|k| *k != "thickness" && section.has(k))
                .collect();
            let last = given.last().copied().unwrap_or_default();
            report.place(
                &section.key_span(last),
                section.whole(),
                format!("the {what} is given more than once: {}", quoted(given)),
                "keep one way of giving it",
            );
        }
    }
}

/// Notes a diffusivity that no ground is known to have. Compilations of confined aquifers give 0.012 to 8914 m2/s; this
/// leaves a wide margin on both sides.
fn plausible(section: &Section<'_>, diffusivity: f64) {
    if !(1e-5..1e5).contains(&diffusivity) {
        let text = format!(
            "its diffusivity comes out as {diffusivity:.2e} m2/s, which no ground is known to have: check the units"
        );
        section.report.note(&section.span, section.whole(), text);
    }
}

/// The edge as written.
pub(super) struct EdgeRead {
    kind: EdgeKind,
    distance: Option<At<f64>>,
}

/// Reads `[edge]`; without it the ground goes on.
pub(super) fn edge(root: &mut Section<'_>) -> EdgeRead {
    let Some(mut section) = root.table("edge") else {
        return EdgeRead {
            kind: EdgeKind::Open,
            distance: None,
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
    section.refused(
        "stage",
        "an edge driven by a level is not in this build",
        "leave it out; kind = \"fixed\" holds the edge at rest",
    );
    section.close();
    EdgeRead { kind, distance }
}

/// The edge, with a distance that holds all wells and gauges; an open edge without one is put where the station's life
/// does not reach: 3.5 times the diffusion length of ten years, and ten times the reach of wells and gauges.
pub(super) fn edge_of(
    report: &Report<'_>,
    edge: EdgeRead,
    layers: &[LayerRead],
    points: &[Point],
) -> Edge {
    let reach = reach(points);
    if let Some(distance) = &edge.distance
        && distance.value <= reach
    {
        let what = format!("wells and gauges lie up to {reach:.0} m from their centre");
        let mend = "put the edge outside them";
        report.value(&distance.span, "edge: distance".to_owned(), what, mend);
    }
    let eta = layers
        .iter()
        .map(|l| l.layer.transmissivity / l.layer.storativity)
        .fold(0.0, f64::max);
    let far = 3.5 * (eta * 10.0 * YEAR).sqrt();
    let distance = edge.distance.map_or(far.max(10.0 * reach), |d| d.value);
    Edge {
        kind: edge.kind,
        distance,
    }
}

/// Largest distance of a point from the centre of all \[m\].
fn reach(points: &[Point]) -> f64 {
    let centre = |axis: fn(&Point) -> f64| {
        let low = points.iter().map(axis).fold(f64::INFINITY, f64::min);
        let high = points.iter().map(axis).fold(f64::NEG_INFINITY, f64::max);
        f64::midpoint(low, high)
    };
    let (x, y) = (centre(|p| p[0]), centre(|p| p[1]));
    points
        .iter()
        .map(|p| (p[0] - x).hypot(p[1] - y))
        .fold(0.0, f64::max)
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

/// Parts of the ground that this build does not read.
pub(super) fn not_yet(root: &mut Section<'_>) {
    root.refused(
        "zone",
        "zones are not in this build, and leaving one out would make the expectation wrong without a word",
        "leave the zone out and give the layer its mean properties",
    );
    root.noted(
        "penetration",
        "this build holds a leak as likely anywhere inside the outline: penetrations are not used yet",
    );
}
