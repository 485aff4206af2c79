//! `[[zone]]`: a part of a layer with properties of its own.

use borewake_model::ground::{Point, Zone};

use super::super::section::{At, Section};
use super::ground::layer;
use super::layer::{LayerRead, Rock, plausible};
use super::points::{sound_name, unique};

/// Reads every `[[zone]]`. What a zone does not state it has from its layer.
pub(super) fn zones(root: &mut Section<'_>, layers: &[LayerRead]) -> Vec<At<Zone>> {
    let mut names = Vec::new();
    let mut zones = Vec::new();
    for mut section in root.list("zone") {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "zone", &mut names, name);
        }
        let layer = layer(&mut section, layers);
        let outline = section.must(
            "outline",
            "outline = [[\"0 m\", \"0 m\"], [\"1 km\", \"0 m\"], [\"1 km\", \"2 km\"]]",
            |s, k| s.line(k),
        );
        if let Some(outline) = &outline {
            check_outline(&section, outline);
        }
        let (transmissivity, storativity) = properties(&mut section, layers.get(layer));
        section.close();
        zones.push(At {
            span: outline.as_ref().map_or_else(|| 0..0, |o| o.span.clone()),
            value: Zone {
                name: name.map(|n| n.value).unwrap_or_default(),
                layer,
                outline: outline.map(|o| o.value).unwrap_or_default(),
                transmissivity,
                storativity,
            },
        });
    }
    zones
}

fn check_outline(section: &Section<'_>, outline: &At<Vec<Point>>) {
    let corners = outline.value.as_slice();
    let last = corners.last().copied();
    let starts = last.into_iter().chain(corners.iter().copied());
    let twice_area: f64 = starts
        .zip(corners)
        .map(|(a, b)| a[0] * b[1] - a[1] * b[0])
        .sum();
    if corners.len() < 3 || twice_area == 0.0 {
        let what = "an outline encloses an area";
        section.wrong(
            "outline",
            outline,
            what,
            "give it three corners or more, in order; the last joins the first",
        );
    } else if corners
        .windows(2)
        .any(|pair| matches!(pair, [a, b] if a == b))
    {
        let what = "two places in a row are the same";
        section.wrong("outline", outline, what, "leave one of the two out");
    }
}

/// Transmissivity \[m3/(Pa s)\] and storativity \[m/Pa\] of a zone.
fn properties(section: &mut Section<'_>, layer: Option<&LayerRead>) -> (f64, f64) {
    let keys = [
        "permeability",
        "thickness",
        "porosity",
        "compressibility",
        "viscosity",
        "transmissivity",
        "storativity",
        "specific_storage",
    ];
    let stated = Rock::stated(section);
    if !keys.iter().any(|k| section.has(k)) {
        section.report.missing(
            &section.span,
            section.whole(),
            "nothing tells it from its layer",
            "give `transmissivity`, `permeability`, `storativity` or another property of the rock",
        );
    }
    let Some(layer) = layer else {
        return (1.0, 1.0);
    };
    let rock = stated.over(&layer.rock);
    let known = |value: Option<f64>, what: &str, whole: &str| {
        value.unwrap_or_else(|| {
            section.report.missing(
                &section.span,
                section.whole(),
                format!("the {what} is not known from what zone and layer state"),
                format!("give `{whole}`"),
            );
            1.0
        })
    };
    let transmissivity = known(rock.transmissivity(), "transmissivity", "transmissivity");
    let storativity = known(rock.storativity(), "storativity", "storativity");
    plausible(section, transmissivity / storativity);
    (transmissivity, storativity)
}
