//! The site from above, as self-contained SVG: barriers, wells, gauges, neighbours, and the place of a finding.

use std::fmt::Write as _;

use super::document::escaped;

const WIDTH: f64 = 640.0;
const MARGIN: f64 = 70.0;

/// What stands at a place.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Mark {
    /// A well whose rate is known.
    Well,
    /// A gauge.
    Gauge,
    /// A well of somebody else's.
    Neighbour,
}

/// What is drawn; metres east and north of the local origin.
#[derive(Debug, Clone, Default)]
pub struct Plan {
    /// Lines that resist flow, with their names.
    pub barriers: Vec<(String, Vec<[f64; 2]>)>,
    /// What stands where, with its name.
    pub marks: Vec<(Mark, String, [f64; 2])>,
    /// Place of a finding and the radius that holds it with 90 % \[m\].
    pub found: Option<([f64; 2], f64)>,
}

/// Draws the plan, north up.
#[must_use]
pub fn draw(plan: &Plan) -> String {
    let mut points: Vec<[f64; 2]> = plan.marks.iter().map(|m| m.2).collect();
    if let Some(([x, y], r)) = plan.found {
        points.extend([[x - r, y - r], [x + r, y + r]]);
    }
    if points.is_empty() {
        return String::new();
    }
    let range = |of: usize| {
        let values = points.iter().filter_map(|p| p.get(of).copied());
        values.fold((f64::INFINITY, f64::NEG_INFINITY), |(a, b), v| {
            (a.min(v), b.max(v))
        })
    };
    let ((west, east), (south, north)) = (range(0), range(1));
    let wide = (east - west).max(north - south).max(1.0);
    if !wide.is_finite() {
        return String::new();
    }
    let scale = (WIDTH - 2.0 * MARGIN) / wide;
    let height = (north - south) * scale + 2.0 * MARGIN;
    let at = |[x, y]: [f64; 2]| (MARGIN + (x - west) * scale, MARGIN + (north - y) * scale);
    let mut svg = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {height:.0}\" role=\"img\" aria-label=\"Plan of the site, north up\" \
         font-family=\"sans-serif\" font-size=\"14\">\n\
         <rect width=\"100%\" height=\"100%\" fill=\"#fbf9f4\"/>\n"
    );
    for (name, line) in &plan.barriers {
        let corners: Vec<String> = line
            .iter()
            .map(|p| {
                let (x, y) = at(*p);
                format!("{x:.1},{y:.1}")
            })
            .collect();
        let _ = writeln!(
            svg,
            "<polyline points=\"{}\" fill=\"none\" stroke=\"#22302f\" stroke-width=\"3\"><title>{}</title></polyline>",
            corners.join(" "),
            escaped(name)
        );
    }
    if let Some((place, radius)) = plan.found {
        let (x, y) = at(place);
        let _ = writeln!(
            svg,
            "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"{:.1}\" fill=\"#b0321a\" fill-opacity=\"0.15\" stroke=\"#b0321a\" stroke-width=\"2\"/>\
             <path d=\"M{:.1} {y:.1}h16m-8 -8v16\" stroke=\"#b0321a\" stroke-width=\"2\"/>",
            (radius * scale).max(4.0),
            x - 8.0
        );
    }
    for (mark, name, place) in &plan.marks {
        let (x, y) = at(*place);
        let shape = match mark {
            Mark::Well => format!(
                "<rect x=\"{:.1}\" y=\"{:.1}\" width=\"13\" height=\"13\" fill=\"none\" stroke=\"#22302f\" stroke-width=\"1.6\"/>",
                x - 6.5,
                y - 6.5
            ),
            Mark::Gauge => {
                format!("<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"3.5\" fill=\"#22302f\"/>")
            }
            Mark::Neighbour => format!(
                "<rect x=\"{:.1}\" y=\"{:.1}\" width=\"13\" height=\"13\" fill=\"none\" stroke=\"#5a6663\" stroke-width=\"1.6\" stroke-dasharray=\"3 2\"/>",
                x - 6.5,
                y - 6.5
            ),
        };
        let (text, anchor) = if x > WIDTH - 2.0 * MARGIN {
            (x - 11.0, "end")
        } else {
            (x + 11.0, "start")
        };
        let _ = writeln!(
            svg,
            "{shape}<text x=\"{text:.1}\" y=\"{:.1}\" text-anchor=\"{anchor}\" fill=\"#22302f\">{}</text>",
            y + 5.0,
            escaped(name)
        );
    }
    let bar = round(wide / 4.0);
    let _ = writeln!(
        svg,
        "<path d=\"M14 {:.0}v6h{:.1}v-6\" fill=\"none\" stroke=\"#5a6663\"/><text x=\"18\" y=\"{:.0}\" fill=\"#5a6663\">{bar} m</text>\
         <path d=\"M{:.0} 40v-24m-5 8l5 -8 5 8\" fill=\"none\" stroke=\"#5a6663\"/><text x=\"{:.0}\" y=\"56\" fill=\"#5a6663\">N</text>",
        height - 18.0,
        bar * scale,
        height - 20.0,
        WIDTH - 20.0,
        WIDTH - 25.0
    );
    svg + "</svg>\n"
}

/// The largest of 1, 2, 5 times a power of ten that is no longer.
pub(super) fn round(length: f64) -> f64 {
    let power = 10_f64.powf(length.log10().floor());
    [5.0, 2.0, 1.0]
        .map(|m| m * power)
        .into_iter()
        .find(|bar| *bar <= length)
        .unwrap_or(power)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_stay_names_and_the_scale_is_round() {
        let plan = Plan {
            barriers: vec![("f<1>".into(), vec![[0.0, 0.0], [100.0, 400.0]])],
            marks: vec![
                (Mark::Gauge, "<b>&\"".into(), [0.0, 0.0]),
                (Mark::Well, "W".into(), [400.0, 100.0]),
            ],
            found: Some(([200.0, 50.0], 60.0)),
        };
        let svg = draw(&plan);
        assert!(
            svg.contains("&lt;b&gt;&amp;&quot;") && !svg.contains("<b>"),
            "{svg}"
        );
        assert!(svg.contains(">100 m<"), "{svg}");
        assert_eq!(draw(&Plan::default()), "");
    }
}
