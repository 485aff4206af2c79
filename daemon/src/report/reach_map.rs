//! Reach on the plan of the site: how large a leak must be at each place to be noticed in time, one plan a layer.

use std::fmt::Write as _;

use borewake_model::units::{Dimension, UnitSystem, significant};

use super::document::escaped;
use super::plan::{Mark, round};

const WIDTH: f64 = 640.0;
const MARGIN: f64 = 24.0;
const HEAD: f64 = 92.0;
const LEGEND: f64 = 26.0;
/// Side of a cell of the shading \[user units\].
const CELL: f64 = 6.0;
/// Most classes of the legend.
const CLASSES: usize = 7;
/// From pale (small leaks are seen) to dark (only large ones are): told apart by lightness alone.
const SHADES: [&str; CLASSES] = [
    "#eef3e6", "#cfe0cf", "#a7c9bd", "#7cacab", "#557f93", "#3b5878", "#2a3354",
];

/// What is drawn; metres east and north of the local origin.
#[derive(Debug, Clone)]
pub struct ReachMap {
    /// Heading.
    pub title: String,
    /// Time since the leak began, in words.
    pub after: String,
    /// How numbers are shown.
    pub units: UnitSystem,
    /// Centre of the array, and how far the places reach from it \[m\].
    pub centre: [f64; 2],
    /// Radius that is shaded \[m\].
    pub radius: f64,
    /// Half-width of the array; its outline is a tenth wider \[m\].
    pub half_width: f64,
    /// A name, and the size noticed at each place \[m3/s\], a layer.
    pub layers: Vec<LayerReach>,
    /// Lines that resist flow.
    pub barriers: Vec<Vec<[f64; 2]>>,
    /// What stands where, with its name and layer (a well may stand in all).
    pub marks: Vec<(Mark, String, [f64; 2], Option<usize>)>,
    /// Where a gauge is added.
    pub added: Option<([f64; 2], usize)>,
}

/// One layer.
#[derive(Debug, Clone)]
pub struct LayerReach {
    /// Its name.
    pub name: String,
    /// Places and the size noticed there \[m3/s\].
    pub places: Vec<([f64; 2], Option<f64>)>,
}

/// Draws the map, north up.
#[must_use]
pub fn draw(map: &ReachMap) -> String {
    let side = WIDTH - 2.0 * MARGIN;
    let scale = side / (2.0 * map.radius.max(1.0));
    let number = |v: f64| map.units.number(Dimension::Rate, v);
    let sizes: Vec<f64> = map
        .layers
        .iter()
        .flat_map(|l| l.places.iter().filter_map(|p| p.1))
        .map(number)
        .filter(|v| v.is_finite() && *v > 0.0)
        .collect();
    let classes = classes(&sizes);
    let panel = side + 40.0;
    let layers = f64::from(u32::try_from(map.layers.len()).unwrap_or(1));
    let rows = f64::from(u32::try_from(classes.len() + 2).unwrap_or(8));
    let height = HEAD + layers * panel + rows * LEGEND + 40.0;
    let title = escaped(&map.title);
    let mut svg = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {height:.0}\" role=\"img\" aria-label=\"{title}\" \
font-family=\"system-ui,-apple-system,'Segoe UI','DejaVu Sans',sans-serif\" font-size=\"15\" fill=\"#22302f\">\n<title>{title}</title>\n\
<rect width=\"100%\" height=\"100%\" fill=\"#fbf9f4\"/>\n\
<text x=\"{MARGIN}\" y=\"34\" font-size=\"19\" font-weight=\"600\">{title}</text>\n\
<text x=\"{MARGIN}\" y=\"60\">Smallest leak noticed within {} with 90 % probability</text>\n",
        escaped(&map.after)
    );
    for (index, layer) in map.layers.iter().enumerate() {
        let top = HEAD + panel * f64::from(u32::try_from(index).unwrap_or(0)) + 8.0;
        one(&mut svg, map, (index, layer), (top, scale), &classes);
    }
    let mut y = HEAD + layers * panel + 14.0;
    legend(&mut svg, map, &classes, &mut y);
    svg + "</svg>\n"
}

/// Upper bounds of the classes, ascending: 1, 2, 5 times powers of ten over the sizes; the last class has none.
fn classes(sizes: &[f64]) -> Vec<f64> {
    let mut sorted = sizes.to_vec();
    sorted.sort_by(f64::total_cmp);
    let (Some(&first), Some(&last)) = (sorted.first(), sorted.last()) else {
        return Vec::new();
    };
    let mut bounds = Vec::new();
    let mut power = 10_f64.powf(first.log10().floor());
    while power <= last && bounds.len() < 64 {
        bounds.extend([1.0, 2.0, 5.0].map(|m| m * power));
        power *= 10.0;
    }
    bounds.retain(|b| *b > first);
    bounds.truncate(CLASSES - 1);
    while bounds.len() > 1 && bounds.iter().rev().nth(1).is_some_and(|b| *b >= last) {
        bounds.pop();
    }
    bounds
}

fn class(bounds: &[f64], value: f64) -> usize {
    bounds
        .iter()
        .position(|b| value < *b)
        .unwrap_or(bounds.len())
}

fn one(
    svg: &mut String,
    map: &ReachMap,
    (index, layer): (usize, &LayerReach),
    (top, scale): (f64, f64),
    bounds: &[f64],
) {
    let [west, north] = [map.centre[0] - map.radius, map.centre[1] + map.radius];
    let at = |[x, y]: [f64; 2]| (MARGIN + (x - west) * scale, top + (north - y) * scale);
    let side = 2.0 * map.radius * scale;
    let back = |x: f64, y: f64| [west + x / scale, north - y / scale];
    let cells = (side / CELL).ceil();
    *svg += "<g shape-rendering=\"crispEdges\">\n";
    let mut row = 0.0;
    while row < cells {
        let mut run: Option<(f64, usize)> = None;
        let mut column = 0.0;
        while column <= cells {
            let place = back((column + 0.5) * CELL, (row + 0.5) * CELL);
            let shade = if column < cells {
                size_at(map, layer, place)
                    .map(|v| class(bounds, map.units.number(Dimension::Rate, v)))
            } else {
                None
            };
            if run.map(|r| r.1) != shade {
                if let Some((from, class)) = run {
                    let fill = SHADES.get(class).copied().unwrap_or("#2a3354");
                    let _ = write!(
                        svg,
                        "<path fill=\"{fill}\" d=\"M{:.1} {:.1}h{:.1}v{CELL}h-{:.1}z\"/>",
                        MARGIN + from * CELL,
                        top + row * CELL,
                        (column - from) * CELL,
                        (column - from) * CELL
                    );
                }
                run = shade.map(|class| (column, class));
            }
            column += 1.0;
        }
        svg.push('\n');
        row += 1.0;
    }
    *svg += "</g>\n";
    let (x, y) = at(map.centre);
    let _ = writeln!(
        svg,
        "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"{:.1}\" fill=\"none\" stroke=\"#22302f\" stroke-width=\"1.2\" stroke-dasharray=\"6 5\"/>",
        1.1 * map.half_width * scale
    );
    if map.layers.len() > 1 {
        let _ = writeln!(
            svg,
            "<text x=\"{MARGIN}\" y=\"{:.1}\" font-weight=\"600\">{}</text>",
            top + 4.0,
            escaped(&layer.name)
        );
    }
    for line in &map.barriers {
        let corners: Vec<String> = line
            .iter()
            .map(|p| {
                let (x, y) = at(*p);
                format!("{x:.1},{y:.1}")
            })
            .collect();
        let _ = writeln!(
            svg,
            "<polyline points=\"{}\" fill=\"none\" stroke=\"#22302f\" stroke-width=\"3\"/>",
            corners.join(" ")
        );
    }
    let inside = |(x, y): (f64, f64)| {
        (MARGIN..=WIDTH - MARGIN).contains(&x) && (top..=top + side).contains(&y)
    };
    for (mark, name, place, _) in map
        .marks
        .iter()
        .filter(|(_, _, _, of)| of.is_none_or(|of| of == index))
    {
        let (x, y) = at(*place);
        if !inside((x, y)) {
            continue;
        }
        let _ = match mark {
            Mark::Gauge => writeln!(
                svg,
                "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"4.5\" fill=\"#22302f\" stroke=\"#fbf9f4\" stroke-width=\"1.5\"/>"
            ),
            Mark::Well => writeln!(
                svg,
                "<rect x=\"{:.1}\" y=\"{:.1}\" width=\"15\" height=\"15\" fill=\"none\" stroke=\"#fbf9f4\" stroke-width=\"4\"/>\
<rect x=\"{:.1}\" y=\"{:.1}\" width=\"15\" height=\"15\" fill=\"none\" stroke=\"#22302f\" stroke-width=\"1.8\"/>",
                x - 7.5,
                y - 7.5,
                x - 7.5,
                y - 7.5
            ),
            Mark::Neighbour => writeln!(
                svg,
                "<rect x=\"{:.1}\" y=\"{:.1}\" width=\"15\" height=\"15\" fill=\"none\" stroke=\"#5a6663\" stroke-width=\"1.6\" stroke-dasharray=\"3 2\"/>",
                x - 7.5,
                y - 7.5
            ),
        };
        label(svg, (x, y), name);
    }
    if let Some((place, of)) = map.added
        && of == index
    {
        let (x, y) = at(place);
        let _ = writeln!(
            svg,
            "<path d=\"M{x:.1} {:.1}l9 9l-9 9l-9 -9z\" fill=\"#fbf9f4\" stroke=\"#b0321a\" stroke-width=\"2.5\"/>",
            y - 9.0
        );
        label(svg, (x, y), "gauge added");
    }
}

/// A name beside its mark, legible on any shade.
fn label(svg: &mut String, (x, y): (f64, f64), name: &str) {
    if name.is_empty() {
        return;
    }
    let (text, anchor) = if x > WIDTH - 110.0 {
        (x - 13.0, "end")
    } else {
        (x + 13.0, "start")
    };
    let _ = writeln!(
        svg,
        "<text x=\"{text:.1}\" y=\"{:.1}\" text-anchor=\"{anchor}\" paint-order=\"stroke\" stroke=\"#fbf9f4\" stroke-width=\"3.5\" stroke-linejoin=\"round\">{}</text>",
        y + 5.0,
        escaped(name)
    );
}

/// Size between places: their logarithms weighed by the fourth power of nearness. Nothing beyond the places.
fn size_at(map: &ReachMap, layer: &LayerReach, at: [f64; 2]) -> Option<f64> {
    let [x, y] = at;
    if (x - map.centre[0]).hypot(y - map.centre[1]) > map.radius {
        return None;
    }
    let (mut sum, mut weight) = (0.0, 0.0);
    for ([px, py], size) in &layer.places {
        let Some(size) = size.filter(|s| *s > 0.0) else {
            continue;
        };
        let away = (px - x).powi(2) + (py - y).powi(2);
        let near = 1.0 / (away * away).max(1e-6);
        sum += near * size.ln();
        weight += near;
    }
    (weight > 0.0).then(|| (sum / weight).exp())
}

fn legend(svg: &mut String, map: &ReachMap, bounds: &[f64], y: &mut f64) {
    let unit = map.units.unit(Dimension::Rate);
    let shown = |v: f64| significant(v, 2);
    for class in 0..=bounds.len() {
        let low = class.checked_sub(1).and_then(|i| bounds.get(i));
        let words = match (low, bounds.get(class)) {
            (None, Some(high)) => format!("below {} {unit}", shown(*high)),
            (Some(low), Some(high)) => format!("{} to {} {unit}", shown(*low), shown(*high)),
            (Some(low), None) => format!("{} {unit} and above", shown(*low)),
            (None, None) => "nothing is seen anywhere".to_owned(),
        };
        let fill = SHADES.get(class).copied().unwrap_or("#2a3354");
        let _ = writeln!(
            svg,
            "<rect x=\"{MARGIN}\" y=\"{:.1}\" width=\"34\" height=\"18\" fill=\"{fill}\" stroke=\"#5a6663\"/><text x=\"{:.1}\" y=\"{:.1}\">{words}</text>",
            *y,
            MARGIN + 46.0,
            *y + 14.0
        );
        *y += LEGEND;
    }
    let bar = round(map.radius / 2.0);
    let scale = (WIDTH - 2.0 * MARGIN) / (2.0 * map.radius.max(1.0));
    let _ = writeln!(
        svg,
        "<text x=\"{MARGIN}\" y=\"{:.1}\" font-size=\"14\">squares wells, dots gauges, dashed circle the outline; north is up</text>\
<path d=\"M{:.1} {:.1}v6h-{:.1}v-6\" fill=\"none\" stroke=\"#22302f\"/><text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"end\">{bar} m</text>",
        *y + 18.0,
        WIDTH - MARGIN,
        *y + 12.0,
        bar * scale,
        WIDTH - MARGIN,
        *y + 6.0
    );
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn classes_are_round_and_cover_the_sizes() {
        assert_eq!(classes(&[3.0, 12.0, 40.0]), [5.0, 10.0, 20.0, 50.0]);
        assert_eq!(class(&[5.0, 10.0], 4.0), 0);
        assert_eq!(class(&[5.0, 10.0], 10.0), 2);
        assert_eq!(classes(&[]), Vec::<f64>::new());
        assert!(classes(&[1e-3, 1e6]).len() < CLASSES);
    }

    #[test]
    fn names_stay_names_and_nothing_is_drawn_beyond_the_places() {
        let map = ReachMap {
            title: "Reach of <Moor>".into(),
            after: "3 d".into(),
            units: UnitSystem::Metric,
            centre: [0.0, 0.0],
            radius: 100.0,
            half_width: 60.0,
            layers: vec![LayerReach {
                name: "sand".into(),
                places: vec![([0.0, 0.0], Some(1e-4)), ([50.0, 0.0], Some(5e-4))],
            }],
            barriers: vec![vec![[-50.0, 0.0], [0.0, 50.0]]],
            marks: vec![(Mark::Gauge, "G&1".into(), [10.0, 10.0], Some(0))],
            added: Some(([20.0, 0.0], 0)),
        };
        let svg = draw(&map);
        assert!(
            svg.contains("&lt;Moor&gt;") && svg.contains("G&amp;1"),
            "{svg}"
        );
        assert!(
            svg.contains("10 m3/d") && svg.contains("gauge added"),
            "{svg}"
        );
        let layer = map.layers.first().unwrap();
        assert_eq!(size_at(&map, layer, [99.0, 99.0]), None);
        assert!((size_at(&map, layer, [0.0, 0.0]).unwrap() / 1e-4 - 1.0).abs() < 1e-6);
    }
}
